"""Outcomes made by hand, for tests of what is written: numbers are arbitrary, only their form matters."""

from __future__ import annotations

import numpy as np

from fhiro2.catalogue import DERIVED
from fhiro2.flags import Evidence, Flag, Turn, TurnKind
from fhiro2.judge.turn import cited
from fhiro2.model import (
    MINUTE,
    READING,
    AnchorTable,
    Caution,
    Column,
    Names,
    Origins,
    Outcome,
    Patient,
    Timelines,
    Why,
)
from fhiro2.write import Run

START = 1_709_251_200_000_000  # 2024-03-01T00:00:00Z
RUN = Run(recorded="2024-03-02T08:00:00.000Z", pack_hash="ab" * 32, software_version="0.1.0")
NEEDS = ("hb", "pao2", "sao2", "co")
READINGS_AN_ANCHOR = 6


def column(size: int, **given: object) -> Column:
    """A column that is known nowhere, but for what is given."""
    number = np.full(size, np.nan)
    content: dict[str, object] = {
        "value": number,
        "low": number,
        "high": number,
        "uncertainty": number,
        "cautions": np.zeros(size, np.uint64),
        "why": np.full(size, Why.NEVER_RECORDED, np.int8),
        "source": np.full(size, -1, np.int64),
        "runner_up": np.full(size, -1, np.int64),
    }
    return Column(**{**content, **given})  # type: ignore[arg-type]


def outcome(patients: int, anchors: int, seed: int = 1) -> Outcome:
    """A batch with ``anchors`` arterial and as many flow anchors a patient, in every form that can be written.

    Each anchor has a gas (Observation with components pO2 and sO2), a haemoglobin, an older one, a cardiac output and
    a reading that nothing uses; every fifth Observation has no version.
    """
    random = np.random.default_rng(seed)
    readings = np.zeros(patients * anchors * READINGS_AN_ANCHOR, READING)
    number = np.arange(len(readings))
    place, role = number // READINGS_AN_ANCHOR, number % READINGS_AN_ANCHOR
    readings["patient"] = readings["subject"] = place // anchors
    time = START + (place % anchors) * 60 * MINUTE + random.integers(0, 2, len(place)) * 250_000
    readings["effective"] = time - np.choose(role, [0, 0, 12, 90, -4, 0]) * MINUTE
    readings["effective"][role == 1] = readings["effective"][np.flatnonzero(role == 1) - 1]
    readings["known"] = readings["effective"] + 7 * MINUTE + 123_456
    readings["encounter"] = np.where(place % 3 == 0, -1, readings["patient"])
    readings["origin"] = np.where(role == 1, number - 1, number)
    readings["part"] = np.where(role < 2, role, -1)
    origins = Origins(
        ids=[f"o{n}" for n in number.tolist()],
        versions=["" if n % 5 == 0 else "3" for n in number.tolist()],
        hashes={n: f"{n:064x}" for n in range(0, len(number), 5)},
    )
    names = Names(
        subjects=[f"Patient/p{n}" for n in range(patients)], encounters=[f"Encounter/e{n}" for n in range(patients)]
    )
    people = [Patient(f"north\nPatient/p{n}", "north", f"Patient/p{n}") for n in range(patients)]
    first = np.flatnonzero(role == 0)
    tables = {
        "arterial": _table("arterial", readings, first, first, random),
        "cardiac-output": _table("cardiac-output", readings, first + 4, first, random),
    }
    timelines = Timelines(readings, people, [() for _ in people], names, origins)
    return Outcome(timelines, tables, [_flag(timelines, row) for row in first[::anchors].tolist()])


def _table(
    kind: str, readings: np.ndarray, reading: np.ndarray, first: np.ndarray, random: np.random.Generator
) -> AnchorTable:
    table = AnchorTable(
        kind, reading, readings["patient"][reading], readings["effective"][reading], readings["known"][reading]
    )
    size = len(reading)
    known = np.zeros(size, np.int8)
    table.columns = {
        "pao2": column(size, why=known, source=first),
        "sao2": column(size, why=known, source=first + 1),
        "hb": column(size, why=known, source=first + 2, runner_up=np.where(first % 4 == 0, first + 3, -1)),
        "co": column(size, why=known, source=first + 4),
    }
    bits = np.array(
        [0, Caution.CONTEXT_UNKNOWN, Caution.EARLIER_HAEMOGLOBIN | Caution.NOT_STEADY | Caution.CENTRAL_NOT_MIXED]
    )
    for row in DERIVED if kind == "arterial" else DERIVED[5:7]:
        value = random.uniform(-1, 300, size)
        form = random.integers(0, 9, size)
        low, high = (
            np.where(form < 6, value, np.where(form == 6, 12.34, np.where(form == 7, 0.0, -4.56))),
            value.copy(),
        )
        high[form >= 6] = np.where(form == 6, np.inf, 301.23)[form >= 6]
        table.columns[row.code] = column(
            size,
            value=np.where(form < 6, value, np.nan),
            low=low,
            high=high,
            uncertainty=np.where(form < 6, random.uniform(0, 9, size), np.nan),
            cautions=bits[random.integers(0, 3, size)].astype(np.uint64),
            why=np.where(random.random(size) < 0.9, Why.KNOWN, Why.INPUT_MISSING).astype(np.int8),
            inputs=NEEDS,
            used=np.where(random.random(size) < 0.8, 0b1111, 0b0111),
            constants=np.full(size, random.integers(0, 6)),
        )
    return table


def _flag(timelines: Timelines, row: int) -> Flag:
    patient = int(timelines.readings["patient"][row])
    raised = int(timelines.readings["effective"][row])
    anchor = cited(timelines, row)
    turn = Turn(
        kind=TurnKind.RAISED,
        at=raised,
        anchor=anchor,
        probability=0.97,
        message="PaO2 7.1 kPa < 8.0 kPa & falling",
        evidence=(
            Evidence("pao2", 53.25, 2.2, "mm[Hg]", 0, anchor),
            Evidence("hb", 8.1, 0.2, "g/dL", 12 * MINUTE, cited(timelines, row + 2)),
            Evidence("oxygen-delivery", 412.0, 50.0, "mL/min", 0, cited(timelines, row, "oxygen-delivery")),
        ),
        axes=(("gas", "met", "PaO2"), ("carrier", "not assessable", "not known: carboxyhaemoglobin")),
    )
    closed = Turn(TurnKind.CLEARED, raised + 95 * MINUTE, cited(timelines, row), None, "", ())
    return Flag(
        rule="low-arterial-oxygen",
        rule_version=2,
        title="Low arterial oxygen",
        severity=("info", "warning", "critical")[patient % 3],
        patient=timelines.patients[patient].key,
        cautions=("not an alarm", "local policy decides"),
        turns=(turn, closed) if patient % 2 else (turn,),
    )

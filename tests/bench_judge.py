"""What judging costs beside one comparison: run with ``python tests/bench_judge.py [ANCHORS]``.

The shipped rules judge made-up arterial anchors, one in fifty with something amiss, on one core. What counts are the
ratios to one NumPy comparison of one column of the same anchors.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Callable
from typing import get_args

import numpy as np

from fhiro2.judge import chain_of, judge, read_pack
from fhiro2.judge.finding import finding, positive
from fhiro2.model import DAY, MINUTE, READING, AnchorTable, Column, Floats, Names, Origins, Patient, Timelines, Why
from fhiro2.packaged import rules_folder
from fhiro2.settings import ContextFact

PER_PATIENT = 100
START = 1_772_344_800_000_000  # 2026-03-01T06:00:00Z
USUAL = {
    "pao2": (90.0, 50.0), "sao2": (0.97, 0.85), "hb": (12.0, 6.0), "oxygen-extraction-ratio": (0.28, 0.5),
    "lactate": (1.2, 5.0), "temp": (37.0, 37.0), "fcohb": (0.01, 0.2), "fmethb": (0.01, 0.08),
    "alveolar-arterial-gradient": (20.0, -30.0), "saturation-gap-measured": (0.5, -12.0), "pf-ratio": (400.0, 150.0),
    "peep": (5.0, 10.0), "ci": (3.0, 1.7), "oxygen-extraction-excess": (-0.03, 0.25),
}  # fmt: skip
"""Canonical values: usual, and in the anchors with something amiss."""


def anchors(size: int, seed: int = 1) -> tuple[Timelines, AnchorTable]:
    """Adults with ``PER_PATIENT`` arterial anchors each, half an hour apart."""
    chance = np.random.default_rng(seed)
    rows = np.arange(size)
    patient, place = np.divmod(rows, PER_PATIENT)
    effective = START + 30 * MINUTE * place
    readings = np.zeros(size, READING)
    readings["patient"], readings["effective"], readings["origin"] = patient, effective, rows
    readings["part"] = -1
    people = [Patient(f"p{n}", "made-up", f"Patient/p{n}", START - 22_000 * DAY) for n in range(int(patient[-1]) + 1)]
    amiss = chance.random(size) < 1 / 50
    columns = {}
    for name, (usual, fallen) in USUAL.items():
        value = np.where(amiss, fallen, usual) * (1 + 0.01 * chance.standard_normal(size))
        doubt, none = 0.02 * np.abs(value), np.zeros(size, np.uint64)
        known = np.full(size, Why.KNOWN, np.int8)
        columns[name] = Column(value, value, value, doubt, none, known, rows, np.full(size, -1))
    origins = Origins([f"o{row}" for row in rows], ["1"] * size)
    timelines = Timelines(readings, people, [()] * len(people), Names(subjects=[""]), origins)
    facts = {fact: np.full(size, -1, np.int8) for fact in get_args(ContextFact)}
    return timelines, AnchorTable("arterial", rows, readings["patient"].copy(), effective, effective, columns, facts)


def least_time(work: Callable[[], object], times: int = 3) -> float:
    """Seconds of the fastest of some runs."""
    found = []
    for _ in range(times):
        begin = time.perf_counter()
        work()
        found.append(time.perf_counter() - begin)
    return min(found)


def main(size: int) -> None:
    """Print each stage as a ratio to one comparison."""
    timelines, table = anchors(size)
    pack = read_pack(rules_folder())
    chain = chain_of(pack.rules)
    column = table.columns["pao2"].value
    one = least_time(lambda: column < 60.0, 20)

    def findings() -> dict[str, Floats]:
        return {rule.id: positive(finding(rule, timelines, table), rule.severity) for rule in pack.rules}

    found = findings()
    stages: dict[str, Callable[[], object]] = {
        "findings of all rules": findings,
        "chaining to flags": lambda: chain.raising(found),
        "judging, all of it": lambda: judge(pack, timelines, {"arterial": table}, {}),
    }
    share = np.mean([~np.isnan(values) for values in found.values()])
    sys.stdout.write(f"{size} anchors, {len(pack.rules)} rules, {share:.1%} of findings positive\n")
    sys.stdout.write(f"one comparison: {1e9 * one / size:.2f} ns an anchor; evaluators: {chain.evaluators}\n")
    for name, work in stages.items():
        sys.stdout.write(f"{name:24} {least_time(work) / one:8.0f} comparisons\n")


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 1_000_000)

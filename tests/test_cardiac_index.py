"""The cardiac index beside an arterial sample: measured, else computed at the paired cardiac output; and as evidence.

Numbers: 70 kg and 170 cm are 1.81 m2 (Du Bois 1916, from memory), so 5 L/min are 5 / 1.81 = 2.8 L/min/m2.
"""

from __future__ import annotations

import hashlib
import json
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from fhiro2.assess import assess
from fhiro2.derive import add_derived
from fhiro2.judge import Pack, read_pack
from fhiro2.model import MINUTE, AnchorTable, Caution, Why
from fhiro2.pair import tables
from fhiro2.settings import Settings
from fhiro2.write import Run
from fhiro2.write.ndjson import NdjsonSink
from tests.feeds import NOON, Paired, at, component, observation, pair, panel, patient

Resource = dict[str, Any]
RUN = Run("2026-03-05T00:00:00.000Z", "0" * 64, "test")
ADULT = patient(birthDate="1960-02-01")
GAS = observation("gas")
HEIGHT = observation("height", "8302-2", 170, "cm", -86_400)
BODY = [observation("weight", "29463-7", 70, "kg", -3_600), HEIGHT]


def flow(minutes: float, litres: float = 5, **more: Any) -> Resource:
    return observation("co", "8737-9", litres, "L/min", 60 * minutes, "vital-signs", **more)


def measured(minutes: float, index: float = 2.5) -> Resource:
    return observation("ci", "75919-1", index, "L/min/m2", 60 * minutes, "vital-signs")


def made(*resources: Resource) -> Paired:
    return pair(GAS, *resources, ADULT)


def derived(found: Paired) -> list[str]:
    codes = found.column("ci").derived
    assert codes is not None
    return codes.tolist()


def test_a_measured_index_is_taken_before_a_nearer_computed_one() -> None:
    found = made(*BODY, flow(0), measured(-15))
    assert (found.value("ci"), found.sources("ci"), derived(found)) == (2.5, ["ci"], [""])


@pytest.mark.parametrize("others", [[], [measured(-16)]], ids=["none measured", "measured too long before"])
def test_without_one_the_index_at_the_paired_cardiac_output_is_taken(others: list[Resource]) -> None:
    found = made(*BODY, flow(10), *others)
    assert (found.value("ci"), found.sources("ci"), derived(found)) == (2.8, ["co"], ["cardiac-index"])
    there, here = found.column("cardiac-index", "cardiac-output"), found.column("ci")
    for part in ("value", "low", "high", "uncertainty", "cautions", "why"):
        assert getattr(here, part).tolist() == getattr(there, part).tolist(), part


def test_the_body_is_the_one_at_the_cardiac_output_not_at_the_sample() -> None:
    """90 kg at the sample would be 0.007184 x 90^0.425 x 170^0.725 = 2.01 m2 and so 2.5 L/min/m2."""
    found = made(*BODY, flow(-10), observation("later", "29463-7", 90, "kg", -300))
    assert found.sources("weight") == ["later"]
    assert found.value("ci") == found.value("cardiac-index", "cardiac-output") == 2.8


@pytest.mark.parametrize(
    ("parts", "why"),
    [
        ([], Why.NEVER_RECORDED),
        ([*BODY], Why.NEVER_RECORDED),
        ([*BODY, flow(16)], Why.OUTSIDE_WINDOW),
        ([*BODY, measured(16)], Why.OUTSIDE_WINDOW),
        ([*BODY, observation("ci", "75919-1", None, dataAbsentReason={"text": "off"}), flow(16)], Why.STATED_ABSENT),
        ([flow(0), HEIGHT], Why.INPUT_MISSING),
        ([flow(0), measured(16)], Why.INPUT_MISSING),
        ([*BODY, flow(0, 0.45)], Why.OUT_OF_RANGE),
    ],
    ids=["nothing", "no flow", "flow too late", "index too late", "absent", "no weight", "no body", "too low a flow"],
)
def test_what_is_not_there_stays_missing_and_says_why(parts: list[Resource], why: Why) -> None:
    found = made(*parts)
    assert found.why("ci") is why
    assert (np.isnan(found.value("ci")), found.sources("ci"), derived(found)) == (True, [""], [""])


def test_no_index_is_computed_for_a_child() -> None:
    found = pair(GAS, *BODY, flow(0), patient(birthDate="2012-02-01"))
    assert found.why("ci") is Why.AGE_EXCLUDES


def test_doubts_of_the_cardiac_output_go_with_it() -> None:
    unknown = observation("co", "8741-1", 5, "L/min", 0, "vital-signs")
    assert made(*BODY, unknown).cautions("ci") & Caution.CARDIAC_OUTPUT_METHOD_UNKNOWN


@pytest.mark.parametrize(("minutes", "late"), [(60, False), (61, True)])
def test_a_cardiac_output_known_an_hour_after_the_sample_is_late(minutes: int, late: bool) -> None:
    known_at_once = {"meta": {"versionId": "1", "lastUpdated": at()}}
    parts = [one | known_at_once for one in (GAS, *BODY)]
    output = flow(0, meta={"versionId": "1", "lastUpdated": at(minutes * 60)})
    assert bool(pair(*parts, output, ADULT).cautions("ci") & Caution.LATE_EVIDENCE) is late


def test_a_cut_between_sample_and_cardiac_output_changes_nothing() -> None:
    found = made(*BODY, flow(10))
    noon = int(NOON.timestamp()) * 1_000_000
    cut: dict[str, AnchorTable] = tables(replace(found.timelines, stop=noon + MINUTE), Settings())
    add_derived(cut, found.timelines, Settings())
    assert len(cut["cardiac-output"].reading) == 0
    assert cut["arterial"].columns["ci"].value.tolist() == [2.8]


# --- as evidence -------------------------------------------------------------------------------------------------

RULE = """
id: low-cardiac-index
version: 1
title: Low cardiac index
axis: flow
severity: warning
state: live
owner: nobody
review_by: 2099-01-01
intent: Made for this test.
at: arterial
scope: {age_years: {least: 18}}
raise: {quantity: ci, below: 3.0, unit: L/min/m2}
clear: {quantity: ci, at_least: 3.2, unit: L/min/m2}
message: "Cardiac index {ci}"
cautions: ["not an alarm; local policy and licensed practice decide"]
sources: [{text: "made for this test", year: 2026, kind: common practice}]
cases:
  - name: low
    given: [{ci: {value: 2, unit: L/min/m2, uncertainty: 0.2}, after_minutes: 0, age_years: 60}]
    expect: flag
    message: "Cardiac index 2.0 L/min/m2"
  - name: high
    given: [{ci: {value: 4, unit: L/min/m2, uncertainty: 0.2}, after_minutes: 0, age_years: 60}]
    expect: none
  - {name: not known, given: [{after_minutes: 0, age_years: 60}], expect: unknown}
"""
MERGED = patient("p2", link=[{"other": {"reference": "Patient/p1"}, "type": "replaced-by"}])


@pytest.fixture(scope="module")
def pack(tmp_path_factory: pytest.TempPathFactory) -> Pack:
    folder = tmp_path_factory.mktemp("rules")
    (folder / "low-cardiac-index.yaml").write_text(RULE, encoding="utf-8")
    return read_pack(folder)


def written(found: Paired, pack: Pack, folder: Path) -> dict[str, list[bytes]]:
    """The lines of each file by name."""
    outcome, _ = assess(found.timelines, Settings(), pack)
    with NdjsonSink(folder, RUN) as sink:
        sink.write(outcome)
    names = ("observations", "flags", "provenance")
    return {name: (folder / f"{name}.ndjson").read_bytes().splitlines() for name in names}


def references(flag: Resource) -> list[str]:
    return [part["valueReference"]["reference"] for part in flag["extension"] if "valueReference" in part]


@pytest.mark.parametrize(
    "output",
    [
        flow(-5),
        panel("monitor", component("8867-4", 70, "/min"), component("8737-9", 5, "L/min"), seconds=-300),
        flow(-5, subject={"reference": "Patient/p2"}),
    ],
    ids=["an Observation", "a component", "of a patient merged later"],
)
def test_a_flag_refers_to_the_computed_index_that_was_written(output: Resource, pack: Pack, tmp_path: Path) -> None:
    lines = written(made(*BODY, output, MERGED), pack, tmp_path)
    (flag,) = map(json.loads, lines["flags"])
    indices = {
        f"Observation/{json.loads(line)['id']}": hashlib.sha256(line).hexdigest()
        for line in lines["observations"]
        if json.loads(line)["code"]["coding"][-1]["code"] == "cardiac-index"
    }
    ((reference, content_hash),) = indices.items()
    assert references(flag) == ["Observation/gas/_history/1", reference]
    origin = next(one for one in map(json.loads, lines["provenance"]) if one["target"][0]["reference"][:5] == "Flag/")
    what = [entity["what"] for entity in origin["entity"]]
    assert [one["reference"] for one in what] == references(flag)
    assert what[-1]["identifier"]["value"] == content_hash
    assert "cardiac index: 2.8 ± " in flag["text"]["div"]
    assert "L/min/m², 5 min before" in flag["text"]["div"]


def test_a_flag_refers_to_the_measured_index_as_it_was_read(pack: Pack, tmp_path: Path) -> None:
    (line,) = written(made(*BODY, flow(-5), measured(3)), pack, tmp_path)["flags"]
    assert references(json.loads(line)) == ["Observation/gas/_history/1", "Observation/ci/_history/1"]

"""The judges of written resources must themselves go red where R4 says so, and only there.

The cases follow from the R4 4.0.1 definitions: cardinalities, required bindings, constraints, primitive patterns.
"""

from __future__ import annotations

import copy
import json
from pathlib import Path
from typing import Any

import pytest

from fhiro2.write.ndjson import NdjsonSink
from tests.outcomes import RUN, outcome
from tests.validators import JUDGES, by_constraints, by_schema, by_structure, problems

CODE = {"coding": [{"system": "http://loinc.org", "code": "2703-7"}]}
OBSERVATION: dict[str, Any] = {
    "resourceType": "Observation",
    "id": "a",
    "status": "final",
    "code": CODE,
    "subject": {"reference": "Patient/p"},
    "effectiveDateTime": "2024-03-01T10:00:00Z",
    "valueQuantity": {"value": 95.0, "unit": "mmHg", "system": "http://unitsofmeasure.org", "code": "mm[Hg]"},
}
FLAG: dict[str, Any] = {
    "resourceType": "Flag",
    "status": "active",
    "text": {"status": "generated", "div": '<div xmlns="http://www.w3.org/1999/xhtml"><p>low</p></div>'},
    "code": {"text": "low oxygen"},
    "subject": {"reference": "Patient/p"},
    "period": {"start": "2024-03-01T10:00:00Z", "end": "2024-03-01T11:00:00Z"},
}
PROVENANCE: dict[str, Any] = {
    "resourceType": "Provenance",
    "target": [{"reference": "Observation/a"}],
    "recorded": "2024-03-01T10:00:00Z",
    "agent": [{"who": {"reference": "Device/d"}}],
    "entity": [{"role": "source", "what": {"reference": "Observation/b"}}],
}
DEVICE: dict[str, Any] = {
    "resourceType": "Device",
    "deviceName": [{"name": "x", "type": "user-friendly-name"}],
    "version": [{"value": "1"}],
}
RANGE = {"low": {"value": 1.0, "code": "1", "system": "http://unitsofmeasure.org"}, "high": {"value": 2.0}}


def changed(resource: dict[str, Any], **elements: Any) -> dict[str, Any]:
    """A copy with elements set, or left out where None."""
    found = {**copy.deepcopy(resource), **elements}
    return {key: value for key, value in found.items() if value is not None}


GOOD = {
    "observation": OBSERVATION,
    "range": changed(OBSERVATION, valueQuantity=None, valueRange=RANGE),
    "comparator": changed(OBSERVATION, valueQuantity={**OBSERVATION["valueQuantity"], "comparator": ">="}),
    "absent": changed(OBSERVATION, valueQuantity=None, dataAbsentReason={"text": "not done"}),
    "flag": FLAG,
    "provenance": PROVENANCE,
    "device": DEVICE,
}
QUANTITY = OBSERVATION["valueQuantity"]
DIV = '<div xmlns="http://www.w3.org/1999/xhtml">'
# Each case with a judge that must see it.
BAD = {
    "no status": (changed(OBSERVATION, status=None), by_structure),
    "no code": (changed(OBSERVATION, code=None), by_structure),
    "status finished": (changed(OBSERVATION, status="finished"), by_schema),
    "status finished, as a binding": (changed(OBSERVATION, status="finished"), by_constraints),
    "obs-6": (changed(OBSERVATION, dataAbsentReason={"text": "not done"}), by_constraints),
    "obs-7": (changed(OBSERVATION, component=[{"code": CODE, "valueString": "x"}]), by_constraints),
    "obs-3": (changed(OBSERVATION, referenceRange=[{"age": {"low": {"value": 1}}}]), by_constraints),
    "qty-3": (changed(OBSERVATION, valueQuantity={"value": 95, "code": "mm[Hg]"}), by_constraints),
    "rng-2": (
        changed(
            OBSERVATION,
            valueQuantity=None,
            valueRange={"low": {**QUANTITY, "value": 9}, "high": {**QUANTITY, "value": 3}},
        ),
        by_constraints,
    ),
    "ext-1": (changed(OBSERVATION, extension=[{"url": "http://fhiro2.example.org/x"}]), by_constraints),
    "ref-1": (changed(OBSERVATION, subject={"reference": "#gone"}), by_constraints),
    "comparator": (changed(OBSERVATION, valueQuantity={**QUANTITY, "comparator": "~"}), by_constraints),
    "two values": (changed(OBSERVATION, valueString="x"), by_structure),
    "unknown element": (changed(OBSERVATION, severity="high"), by_schema),
    "value as text": (changed(OBSERVATION, valueQuantity={**QUANTITY, "value": "95"}), by_schema),
    "time without zone": (changed(OBSERVATION, effectiveDateTime="2024-03-01T10:00:00"), by_schema),
    "month 13": (changed(OBSERVATION, effectiveDateTime="2024-13-01T10:00:00Z"), by_schema),
    "id with a space": (changed(OBSERVATION, id="a b"), by_schema),
    "flag without subject": (changed(FLAG, subject=None), by_structure),
    "flag status on": (changed(FLAG, status="on"), by_schema),
    "per-1": (changed(FLAG, period={"start": "2024-03-02T00:00:00Z", "end": "2024-03-01T00:00:00Z"}), by_constraints),
    "script": (
        changed(FLAG, text={"status": "generated", "div": f"{DIV}<script>x</script></div>"}),
        by_constraints,
    ),
    "empty narrative": (changed(FLAG, text={"status": "generated", "div": f"{DIV}<p> </p></div>"}), by_constraints),
    "narrative status": (changed(FLAG, text={"status": "made", "div": f"{DIV}x</div>"}), by_constraints),
    "provenance without agent": (changed(PROVENANCE, agent=None), by_structure),
    "provenance without recorded": (changed(PROVENANCE, recorded=None), by_structure),
    "entity role": (
        changed(PROVENANCE, entity=[{"role": "input", "what": {"reference": "Observation/b"}}]),
        by_constraints,
    ),
    "device name type": (changed(DEVICE, deviceName=[{"name": "x", "type": "nickname"}]), by_schema),
}


@pytest.mark.parametrize("name", GOOD)
def test_good_resources_pass_every_judge(name: str) -> None:
    assert [text for judge in JUDGES for text in judge(GOOD[name])] == []


@pytest.mark.parametrize("name", BAD)
def test_bad_resources_are_seen_by_the_judge_in_charge(name: str) -> None:
    resource, judge = BAD[name]
    assert judge(resource) != []


def test_a_folder_with_one_bad_line_is_named_with_its_place(tmp_path: Path) -> None:
    lines = [json.dumps(OBSERVATION), json.dumps(BAD["obs-6"][0])]
    (tmp_path / "observations.ndjson").write_text("\n".join(lines) + "\n", encoding="utf-8")
    found = problems(tmp_path)
    assert found
    assert all(text.startswith("observations.ndjson:2: ") for text in found)


def test_all_that_the_sink_writes_passes_every_judge(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    with NdjsonSink(tmp_path, RUN) as sink:
        sink.write(outcome(patients=4, anchors=4))
    assert sink.derived > 200
    assert sink.flags == 4
    assert problems(tmp_path) == []
    assert capsys.readouterr().out == ""

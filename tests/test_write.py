"""What is written: the content of each resource, the same bytes however it is cut, and nothing left half-done.

Expected texts follow from the R4 definitions and from the inputs stated in each test, not from the program's output.
"""

from __future__ import annotations

import dataclasses
import hashlib
import json
import re
import uuid
from decimal import Decimal
from pathlib import Path
from typing import Any
from xml.etree import ElementTree

import numpy as np
import pytest
from fhir.resources.R4B import get_fhir_model_class
from hypothesis import given
from hypothesis import strategies as st

import fhiro2.write.values
from fhiro2.catalogue import BASES, DERIVED
from fhiro2.errors import StopError
from fhiro2.fhir.resources import date_times, instants, shape, text_slot
from fhiro2.flags import Turn, TurnKind
from fhiro2.model import (
    CAUTION_TEXT,
    HOUR,
    MINUTE,
    READING,
    AnchorTable,
    Caution,
    Names,
    Origins,
    Outcome,
    Patient,
    Timelines,
    Why,
)
from fhiro2.write.flag import LONGEST_TEXT, inert
from fhiro2.write.identity import NAMESPACE, SOFTWARE_REFERENCE, named
from fhiro2.write.ndjson import FILES, NdjsonSink
from fhiro2.write.values import age_text
from tests.outcomes import NEEDS, RUN, START, column, outcome

BASE = "http://fhiro2.example.org/fhir"
LOINC = "http://loinc.org"


def written(found: Outcome, folder: Path) -> dict[str, list[bytes]]:
    """The lines of each file that the sink makes of one outcome."""
    with NdjsonSink(folder, RUN) as sink:
        sink.write(found)
    return {name: (folder / name).read_bytes().splitlines() for name in FILES}


def one_value(**given: object) -> Outcome:
    """One arterial content at one gas: haemoglobin 12 min before, pO2 and sO2 parts of the anchor, flow after it."""
    readings = np.zeros(5, READING)
    readings["effective"] = START + np.array([0, 0, -12, -90, 4]) * MINUTE
    readings["known"] = START + np.array([5, 5, 2, 3, 9]) * MINUTE
    readings["origin"] = [0, 0, 1, 2, 3]
    readings["part"] = [0, 1, -1, -1, -1]
    origins = Origins(["gas", "blood", "older", "flow"], ["7", "", "1", "2"], {1: "cd" * 32})
    names = Names(subjects=["Patient/p"], encounters=["Encounter/e"])
    timelines = Timelines(readings, [Patient("north\nPatient/p", "north", "Patient/p")], [()], names, origins)
    known = np.zeros(1, np.int8)
    table = AnchorTable("arterial", np.array([0]), np.array([0]), np.array([START]), np.array([START + 5 * MINUTE]))
    table.columns = {
        "pao2": column(1, why=known, source=np.array([0])),
        "sao2": column(1, why=known, source=np.array([1])),
        "hb": column(1, why=known, source=np.array([2]), runner_up=np.array([3])),
        "co": column(1, why=known, source=np.array([4])),
    }
    content: dict[str, object] = {
        "value": np.array([19.0]),
        "low": np.array([19.0]),
        "high": np.array([19.0]),
        "uncertainty": np.array([0.456]),
        "cautions": np.array([Caution.CENTRAL_NOT_MIXED | Caution.UNIT_SPELLING], np.uint64),
        "why": known,
        "inputs": NEEDS,
        "used": np.array([0b1111]),
        "constants": np.array([1]),
    }
    table.columns["oxygen-content-arterial"] = column(1, **{**content, **given})
    return Outcome(timelines, {"arterial": table}, [])


def observation(found: Outcome, folder: Path) -> dict[str, Any]:
    (line,) = written(found, folder)["observations.ndjson"]
    result: dict[str, Any] = json.loads(line)
    return result


def value_id(anchor: str, code: str) -> str:
    """By the standard library, from the parts that the design names."""
    space = uuid.uuid5(uuid.NAMESPACE_URL, BASE)
    return str(uuid.uuid5(space, f"north\nPatient/p\n{anchor}\n{code}"))


# --- ids and texts -----------------------------------------------------------------------------------------------


@given(st.text())
def test_ids_are_version_5_uuids(name: str) -> None:
    """Source: uuid.uuid5 of the standard library."""
    try:
        expected = str(uuid.uuid5(NAMESPACE, name))
    except UnicodeEncodeError:
        return
    assert named(name) == expected


def test_times_are_utc_in_the_precision_they_have() -> None:
    """Source: Unix time 1709251200 is 2024-03-01T00:00:00Z, by definition of the epoch (date -u -d @1709251200)."""
    times = np.array([START, START + 250_000, START + 250_999])
    assert date_times(times) == ["2024-03-01T00:00:00Z", "2024-03-01T00:00:00.250Z", "2024-03-01T00:00:00.250Z"]
    assert instants(times)[0] == "2024-03-01T00:00:00.000Z"


@pytest.mark.parametrize(
    ("age", "words"),
    [
        (0, "at the draw"),
        (12 * MINUTE, "12 min before"),
        (-4 * MINUTE, "4 min after"),
        (20_000_000, "less than 1 min before"),
        (7 * HOUR, "7 h before"),
        (72 * HOUR, "3 d before"),
    ],
)
def test_ages_in_words(age: int, words: str) -> None:
    assert age_text(age) == words


@pytest.mark.parametrize("slots", [["slot-b-end", "slot-a-end"], ["slot-c-end"]])
def test_a_shape_whose_slots_are_not_where_they_are_said_to_be_is_refused(slots: list[str]) -> None:
    with pytest.raises(ValueError, match="must occur once"):
        shape("Reference", {"reference": text_slot("a"), "display": text_slot("b")}, slots)


def test_a_slot_that_occurs_twice_is_refused() -> None:
    with pytest.raises(ValueError, match="must occur once"):
        shape("Reference", {"reference": text_slot("a"), "display": text_slot("a")}, [text_slot("a")])


def test_a_shape_filled_with_too_few_texts_is_refused() -> None:
    with pytest.raises(ValueError, match="size"):
        shape("Reference", {"reference": text_slot("a")}, [text_slot("a")]).filled(())


# --- one value ---------------------------------------------------------------------------------------------------


def test_a_value_says_what_it_is_of_whom_and_when(tmp_path: Path) -> None:
    found = observation(one_value(), tmp_path)
    identity = value_id("gas#0", "oxygen-content-arterial")
    assert found["id"] == identity
    assert found["identifier"] == [{"system": f"{BASE}/identifier/value", "value": identity}]
    assert found["status"] == "final"
    assert [coding["code"] for entry in found["category"] for coding in entry["coding"]] == [
        "laboratory",
        "derived-oxygen-transport",
    ]
    assert found["code"]["coding"] == [
        {"system": LOINC, "code": "59274-1", "display": "Oxygen content in Arterial blood by calculation"},
        {
            "system": f"{BASE}/CodeSystem/derived-value",
            "code": "oxygen-content-arterial",
            "display": "Arterial oxygen content",
        },
    ]
    assert found["subject"] == {"reference": "Patient/p"}
    assert found["encounter"] == {"reference": "Encounter/e"}
    assert found["effectiveDateTime"] == "2024-03-01T00:00:00Z"
    assert found["device"] == {"reference": SOFTWARE_REFERENCE}
    assert found["method"]["coding"] == [
        {"system": f"{BASE}/CodeSystem/formula", "version": "1", "code": "oxygen-content"}
    ]
    assert {entry["url"]: entry.get("valueString") for entry in found["extension"]} == {
        f"{BASE}/StructureDefinition/standard-uncertainty": None,
        f"{BASE}/StructureDefinition/constants": BASES[1],
    }


def test_a_value_became_known_with_the_last_of_what_it_needed(tmp_path: Path) -> None:
    """The flow was known last, 9 min after the draw; without it the gas, after 5 min."""
    assert observation(one_value(), tmp_path)["issued"] == "2024-03-01T00:09:00.000Z"
    assert observation(one_value(used=np.array([0b0111])), tmp_path)["issued"] == "2024-03-01T00:05:00.000Z"


def test_a_number_keeps_its_declared_decimals(tmp_path: Path) -> None:
    (line,) = written(one_value(), tmp_path)["observations.ndjson"]
    assert b'"valueQuantity":{"value":19.0,"unit":"mL/dL","system":"http://unitsofmeasure.org","code":"mL/dL"}' in line
    assert b'"valueDecimal":0.46' in line


def test_inputs_are_named_once_an_observation_the_anchor_first(tmp_path: Path) -> None:
    found = observation(one_value(), tmp_path)
    assert found["derivedFrom"] == [
        {"reference": "Observation/gas/_history/7", "display": "pao2, at the draw, sao2, at the draw"},
        {"reference": "Observation/blood", "display": "hb, 12 min before; next nearest Observation/older"},
        {"reference": "Observation/flow/_history/2", "display": "co, 4 min after"},
    ]


def test_a_missing_input_is_not_named(tmp_path: Path) -> None:
    found = observation(one_value(used=np.array([0b0111])), tmp_path)
    assert [entry["reference"] for entry in found["derivedFrom"]] == [
        "Observation/gas/_history/7",
        "Observation/blood",
    ]


def test_an_anchor_that_is_no_input_is_named_as_the_anchor(tmp_path: Path) -> None:
    found = observation(one_value(inputs=("hb",)), tmp_path)
    assert found["derivedFrom"][0] == {"reference": "Observation/gas/_history/7", "display": "anchor"}


def test_each_caution_is_a_note_in_the_order_of_its_bit(tmp_path: Path) -> None:
    found = observation(one_value(), tmp_path)
    assert [note["text"] for note in found["note"]] == [
        CAUTION_TEXT[Caution.UNIT_SPELLING],
        CAUTION_TEXT[Caution.CENTRAL_NOT_MIXED],
    ]
    assert "note" not in observation(one_value(cautions=np.zeros(1, np.uint64)), tmp_path)


@pytest.mark.parametrize(
    ("low", "high", "expected"),
    [
        (12.34, np.inf, {"comparator": ">=", "value": 12.3}),
        (0.0, 12.34, {"comparator": "<=", "value": 12.4}),
        (-np.inf, 12.34, {"comparator": "<=", "value": 12.4}),
        (2.3, np.inf, {"comparator": ">=", "value": 2.3}),
    ],
)
def test_a_bound_is_written_with_a_comparator_and_rounded_outwards(
    low: float, high: float, expected: dict[str, object], tmp_path: Path
) -> None:
    found = one_value(value=np.array([np.nan]), low=np.array([low]), high=np.array([high]))
    quantity = observation(found, tmp_path)["valueQuantity"]
    assert {key: quantity[key] for key in expected} == expected


def test_two_bounds_are_a_range(tmp_path: Path) -> None:
    bounds = one_value(value=np.array([np.nan]), low=np.array([1.26]), high=np.array([3.21]))
    found = observation(bounds, tmp_path)
    assert "valueQuantity" not in found
    assert (found["valueRange"]["low"]["value"], found["valueRange"]["high"]["value"]) == (1.2, 3.3)
    assert found["valueRange"]["low"]["code"] == found["valueRange"]["high"]["code"] == "mL/dL"


def test_a_value_below_zero_that_rounds_to_zero_is_zero(tmp_path: Path) -> None:
    (line,) = written(one_value(value=np.array([-0.01]), low=np.array([-0.01]), high=np.array([-0.01])), tmp_path)[
        "observations.ndjson"
    ]
    assert b'"value":0.0,' in line


@pytest.mark.parametrize(("low", "high"), [(np.nan, np.nan), (-np.inf, np.inf)])
def test_a_known_value_without_a_number_stops_the_run(low: float, high: float, tmp_path: Path) -> None:
    with pytest.raises(StopError, match="oxygen-content-arterial"):
        observation(one_value(value=np.array([np.nan]), low=np.array([low]), high=np.array([high])), tmp_path)
    assert list(tmp_path.iterdir()) == []


def test_what_is_not_computable_is_not_written(tmp_path: Path) -> None:
    found = written(one_value(why=np.array([Why.INPUT_MISSING])), tmp_path)
    assert found["observations.ndjson"] == found["provenance.ndjson"] == []


def test_a_batch_without_patients_writes_only_the_device(tmp_path: Path) -> None:
    timelines = Timelines(np.zeros(0, READING), [], [], Names(), Origins())
    found = written(Outcome(timelines, {}, []), tmp_path)
    assert {name: len(lines) for name, lines in found.items() if lines} == {"devices.ndjson": 1}


def test_a_hostile_reference_stays_a_text(tmp_path: Path) -> None:
    hostile = 'Patient/"},"status":"%s%d\n\x1b[31m\u202e\u200b'
    found = one_value()
    found.timelines.patients[0].reference = hostile
    assert observation(found, tmp_path)["subject"] == {"reference": hostile}


def test_a_merge_mints_no_id(tmp_path: Path) -> None:
    found = one_value()
    found.timelines.patients[0] = Patient("north\nPatient/root", "north", "Patient/root")
    result = observation(found, tmp_path)
    assert result["id"] == value_id("gas#0", "oxygen-content-arterial")
    assert result["subject"] == {"reference": "Patient/root"}


def test_provenance_says_by_what_from_what_and_of_which_content(tmp_path: Path) -> None:
    lines = written(one_value(), tmp_path)
    (line,) = lines["observations.ndjson"]
    (text,) = lines["provenance.ndjson"]
    found = json.loads(text)
    target = value_id("gas#0", "oxygen-content-arterial")
    space = uuid.uuid5(uuid.NAMESPACE_URL, BASE)
    assert found["id"] == str(uuid.uuid5(space, f"{target}\n{hashlib.sha256(line).hexdigest()}"))
    assert found["target"] == [{"reference": f"Observation/{target}"}]
    assert found["occurredDateTime"] == "2024-03-01T00:00:00Z"
    assert found["policy"] == [f"{BASE}/CodeSystem/formula/oxygen-content/1", f"urn:sha256:{RUN.pack_hash}"]
    assert found["activity"]["coding"][0]["code"] == "CREATE"
    assert found["agent"][0]["type"]["coding"][0]["code"] == "assembler"
    assert found["agent"][0]["who"]["reference"] == SOFTWARE_REFERENCE
    assert [entry["role"] for entry in found["entity"]] == ["source"] * 3
    assert [entry["what"] for entry in found["entity"]] == [
        {"reference": "Observation/gas/_history/7"},
        {
            "reference": "Observation/blood",
            "identifier": {"system": f"{BASE}/identifier/content-sha256", "value": "cd" * 32},
        },
        {"reference": "Observation/flow/_history/2"},
    ]


def test_the_software_is_a_device_with_its_version(tmp_path: Path) -> None:
    (line,) = written(one_value(), tmp_path)["devices.ndjson"]
    found = json.loads(line)
    assert f"Device/{found['id']}" == SOFTWARE_REFERENCE
    assert found["version"] == [{"value": RUN.software_version}]


# --- many values -------------------------------------------------------------------------------------------------


def comparable(text: str | bytes) -> Any:
    """JSON with the order of keys, numbers as decimals and times without the zeros behind their last digit."""

    def pairs(found: list[tuple[str, Any]]) -> list[tuple[str, Any]]:
        return [
            (key, re.sub(r"(\.\d*?)0*Z$", r"\1Z", value).replace(".Z", "Z") if isinstance(value, str) else value)
            for key, value in found
        ]

    return json.loads(text, object_pairs_hook=pairs, parse_float=Decimal, parse_int=Decimal)


def test_every_line_is_what_r4b_itself_would_write(tmp_path: Path) -> None:
    lines = [line for found in written(outcome(6, 8), tmp_path).values() for line in found]
    assert len(lines) > 1_500
    for line in lines:
        model = get_fhir_model_class(json.loads(line)["resourceType"])
        assert comparable(model.model_validate_json(line).model_dump_json()) == comparable(line)


def test_lines_are_ordered_by_patient_time_anchor_and_code(tmp_path: Path) -> None:
    found = [json.loads(line) for line in written(outcome(11, 4), tmp_path)["observations.ndjson"]]
    codes = [row.code for row in DERIVED]
    keys = [
        (
            int(entry["subject"]["reference"].removeprefix("Patient/p")),
            entry["effectiveDateTime"].removesuffix("Z"),
            codes.index(entry["code"]["coding"][-1]["code"]),
        )
        for entry in found
        if entry["derivedFrom"][0]["display"].startswith("pao2")
    ]
    assert len(keys) > 500
    assert keys == sorted(keys)
    patients = [int(entry["subject"]["reference"].removeprefix("Patient/p")) for entry in found]
    assert patients == sorted(patients)


def test_every_known_value_is_written_once(tmp_path: Path) -> None:
    found = outcome(5, 6)
    known = sum(
        int(table.columns[row.code].known().sum())
        for table in found.tables.values()
        for row in DERIVED
        if row.code in table.columns
    )
    with NdjsonSink(tmp_path, RUN) as sink:
        sink.write(found)
    lines = (tmp_path / "observations.ndjson").read_bytes().splitlines()
    assert sink.derived == len(lines) == len({json.loads(line)["id"] for line in lines}) == known
    targets = [
        json.loads(line)["target"][0]["reference"]
        for line in (tmp_path / "provenance.ndjson").read_bytes().splitlines()
    ]
    assert sorted(t for t in targets if t.startswith("Observation/")) == sorted(
        f"Observation/{json.loads(line)['id']}" for line in lines
    )
    assert sink.flags == 5


def test_the_bytes_do_not_depend_on_how_many_anchors_are_rendered_at_once(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    whole = written(outcome(9, 4), tmp_path)
    monkeypatch.setattr(fhiro2.write.values, "ANCHORS_AT_ONCE", 3)
    assert written(outcome(9, 4), tmp_path) == whole


def test_another_run_changes_nothing_but_what_it_stamps(tmp_path: Path) -> None:
    first = written(outcome(3, 3), tmp_path)
    run = dataclasses.replace(RUN, recorded="2025-01-01T00:00:00.500Z", pack_hash="ff" * 32)
    with NdjsonSink(tmp_path, run) as sink:
        sink.write(outcome(3, 3))
    second = {name: (tmp_path / name).read_bytes().splitlines() for name in FILES}
    assert second["observations.ndjson"] == first["observations.ndjson"]
    assert second["flags.ndjson"] == first["flags.ndjson"]
    stamped = [
        {key: value for key, value in json.loads(line).items() if key not in ("recorded", "policy")}
        for line in [*first["provenance.ndjson"], *second["provenance.ndjson"]]
    ]
    half = len(first["provenance.ndjson"])
    assert stamped[:half] == stamped[half:]


# --- files -------------------------------------------------------------------------------------------------------


def test_files_have_their_names_only_when_all_is_written(tmp_path: Path) -> None:
    folder = tmp_path / "new" / "out"
    with NdjsonSink(folder, RUN) as sink:
        sink.write(one_value())
        assert all(path.suffix == ".partial" for path in folder.iterdir())
    assert sorted(path.name for path in folder.iterdir()) == sorted(FILES)


def test_an_error_leaves_the_files_of_the_run_before(tmp_path: Path) -> None:
    before = written(one_value(), tmp_path)

    def fail() -> None:
        with NdjsonSink(tmp_path, RUN) as sink:
            sink.write(outcome(2, 2))
            raise RuntimeError("cut")

    with pytest.raises(RuntimeError, match="cut"):
        fail()
    assert sorted(path.name for path in tmp_path.iterdir()) == sorted(FILES)
    assert {name: (tmp_path / name).read_bytes().splitlines() for name in FILES} == before


# --- flags -------------------------------------------------------------------------------------------------------


def flag(folder: Path, patient: int = 0, **given: object) -> tuple[dict[str, Any], dict[str, Any], Outcome]:
    """The Flag of one patient, its Provenance, and the outcome."""
    found = outcome(3, 2)
    found.flags = [dataclasses.replace(found.flags[patient], **given)]  # type: ignore[arg-type]
    lines = written(found, folder)
    (line,) = lines["flags.ndjson"]
    return json.loads(line), json.loads(lines["provenance.ndjson"][-1]), found


def turns(**given: object) -> tuple[Turn, ...]:
    """The turn that raised the flag of the first patient, with what is given changed."""
    return (dataclasses.replace(outcome(3, 2).flags[0].turns[0], **given),)  # type: ignore[arg-type]


def paragraphs(resource: dict[str, Any]) -> list[str]:
    """The texts that a reader of the narrative sees; a text that became markup would not be among them."""
    root = ElementTree.fromstring(resource["text"]["div"])  # noqa: S314 - our own output
    space = "{http://www.w3.org/1999/xhtml}"
    return [element.text or "" for element in root.iter() if element.tag in (f"{space}p", f"{space}li")]


def test_a_flag_says_what_how_urgent_since_when_and_from_what(tmp_path: Path) -> None:
    found, origin, batch = flag(tmp_path)
    space = uuid.uuid5(uuid.NAMESPACE_URL, BASE)
    raised = batch.flags[0]
    stem = f"north\nPatient/p0\n{raised.anchor.anchor_id}\n"
    delivery = f"Observation/{uuid.uuid5(space, stem + 'oxygen-delivery')}"
    assert found["id"] == str(uuid.uuid5(space, stem + "low-arterial-oxygen"))
    assert found["identifier"] == [{"system": f"{BASE}/identifier/flag", "value": found["id"]}]
    assert found["status"] == "active"
    assert found["code"]["text"] == "Low arterial oxygen"
    assert found["code"]["coding"][0]["system"] == f"{BASE}/CodeSystem/rule"
    assert found["subject"] == {"reference": "Patient/p0"}
    assert found["period"] == {"start": date_times(np.array([raised.raised]))[0]}
    assert found["author"] == {"reference": SOFTWARE_REFERENCE}
    details = [entry["valueReference"]["reference"] for entry in found["extension"][:-1]]
    assert details == ["Observation/o0", "Observation/o2/_history/3", delivery]
    assert found["extension"][-1]["valueCodeableConcept"]["coding"][0]["code"] == "PL"
    assert origin["target"] == [{"reference": f"Flag/{found['id']}"}]
    assert origin["policy"][0] == f"{BASE}/CodeSystem/rule/low-arterial-oxygen/2"
    assert [entry["what"]["reference"] for entry in origin["entity"]] == details


def test_the_provenance_of_a_flag_names_the_content_of_the_values_it_rests_on(tmp_path: Path) -> None:
    _, origin, _ = flag(tmp_path)
    hashes = {
        f"Observation/{json.loads(line)['id']}": hashlib.sha256(line).hexdigest()
        for line in (tmp_path / "observations.ndjson").read_bytes().splitlines()
    }
    what = origin["entity"][-1]["what"]
    assert what["identifier"]["value"] == hashes[what["reference"]]


@pytest.mark.parametrize(("severity", "code"), [("info", "PL"), ("warning", "PM"), ("critical", "PH")])
def test_severity_is_the_priority_of_the_flag(severity: str, code: str, tmp_path: Path) -> None:
    found, _, _ = flag(tmp_path, severity=severity)
    assert found["extension"][-1]["valueCodeableConcept"]["coding"][0]["code"] == code


def test_a_cleared_flag_is_inactive_and_has_an_end(tmp_path: Path) -> None:
    found, _, _ = flag(tmp_path, turns=turns(at=START) + turns(kind=TurnKind.CLEARED, at=START + HOUR, message=""))
    assert found["status"] == "inactive"
    assert found["period"] == {"start": "2024-03-01T00:00:00Z", "end": "2024-03-01T01:00:00Z"}


def test_the_narrative_shows_message_probability_evidence_and_cautions(tmp_path: Path) -> None:
    found, _, _ = flag(tmp_path)
    shown = paragraphs(found)
    assert "PaO2 7.1 kPa < 8.0 kPa & falling" in shown
    assert "Probability that the limit is truly crossed: 0.97" in shown
    assert "haemoglobin: 8.1 ± 0.20 g/dL, 12 min before" in shown
    assert "not an alarm" in shown


@pytest.mark.parametrize(
    ("probability", "words"), [(0.999, "more than 0.99"), (0.5, "0.50"), (0.001, "less than 0.01")]
)
def test_a_probability_is_never_shown_as_certain(probability: float, words: str, tmp_path: Path) -> None:
    found, _, _ = flag(tmp_path, turns=turns(probability=probability))
    assert any(text.endswith(f"crossed: {words}") for text in paragraphs(found))


def test_evidence_known_only_as_a_bound_says_so(tmp_path: Path) -> None:
    bound = dataclasses.replace(turns()[0].evidence[0], value=None, uncertainty=None)
    found, _, _ = flag(tmp_path, turns=turns(evidence=(bound,)))
    assert "PaO2: known only as a bound, at the draw" in paragraphs(found)


def test_hostile_texts_are_shown_inert(tmp_path: Path) -> None:
    hostile = "<script>x</script>\u202e\u200b\x1b[31m\x00\nnext"
    found, _, _ = flag(tmp_path, turns=turns(message=hostile), title=hostile, cautions=(hostile,))
    clean = "<script>x</script>\ufffd\ufffd\ufffd[31m\ufffd next"
    assert paragraphs(found)[0] == paragraphs(found)[-1] == clean
    assert found["code"]["text"] == clean


def test_a_long_text_is_cut_with_a_mark() -> None:
    assert inert("x" * LONGEST_TEXT) == "x" * LONGEST_TEXT
    cut = inert("x" * 10_000)
    assert len(cut) == LONGEST_TEXT
    assert cut.endswith("…")


def test_every_turn_is_told_with_its_evidence_and_its_sources(tmp_path: Path) -> None:
    raised = turns(at=START)[0]
    older = dataclasses.replace(
        raised.evidence[1], value=7.5, cited=dataclasses.replace(raised.anchor, observation="x1")
    )
    worse = turns(kind=TurnKind.WORSENED, at=START + HOUR, message="PaO2 4.9 kPa", evidence=(older,), probability=0.6)
    closed = turns(kind=TurnKind.CLEARED, at=START + 2 * HOUR, message="", evidence=raised.evidence[:1])
    found, origin, _ = flag(tmp_path, turns=(raised, *worse, *closed), severity="critical")
    shown = paragraphs(found)
    assert shown[:2] == ["PaO2 4.9 kPa", "Probability that the limit is truly crossed: 0.60"]
    at = shown.index("Course")
    assert shown[at + 1 : at + 4] == [
        "raised 01-Mar-2024 00:00 UTC", "worsened 01-Mar-2024 01:00 UTC", "cleared 01-Mar-2024 02:00 UTC"
    ]  # fmt: skip
    assert shown[shown.index("Evidence") + 1] == "haemoglobin: 7.5 ± 0.20 g/dL, 12 min before"
    assert shown[shown.index("Evidence when raised") + 2] == "haemoglobin: 8.1 ± 0.20 g/dL, 12 min before"
    assert shown[shown.index("Evidence when cleared") + 1] == "PaO2: 53.2 ± 2.20 mmHg, at the draw"
    assert shown[shown.index("Oxygen chain") + 1] == "gas: met (PaO2)"
    assert "Observation/x1" in [entry["what"]["reference"] for entry in origin["entity"]]
    assert found["status"] == "inactive"


def test_flags_are_ordered_by_patient_then_time(tmp_path: Path) -> None:
    found = outcome(4, 2)
    first = found.flags[0]
    later = tuple(dataclasses.replace(turn, at=turn.at + HOUR) for turn in first.turns)
    late = dataclasses.replace(first, turns=later, rule="later")
    found.flags = [*found.flags[::-1], late]
    lines = written(found, tmp_path)["flags.ndjson"]
    keys = [
        (json.loads(line)["subject"]["reference"], json.loads(line)["code"]["coding"][0]["code"]) for line in lines
    ]
    rule = "low-arterial-oxygen"
    assert keys == [("Patient/p0", rule), ("Patient/p0", "later")] + [(f"Patient/p{n}", rule) for n in (1, 2, 3)]

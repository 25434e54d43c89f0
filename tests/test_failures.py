"""Bad content, row by row of the catalogue of failures (C01 to C43): each test is named after the row it proves.

Expected buckets, reasons and cautions are what the catalogue requires. Every refused resource is followed by a good
one, which must come through.
"""

from __future__ import annotations

import gzip
import json
import re
import tracemalloc
from itertools import permutations
from pathlib import Path
from typing import Any

import pytest

from fhiro2.bulk.intake import take_in
from fhiro2.errors import Bucket, Reason
from fhiro2.model import Caution, Specimen, Why
from fhiro2.read.ndjson import NdjsonSource
from fhiro2.settings import NO_MAPPING, Settings
from tests.feeds import (
    GOOD,
    KNOWN,
    LOINC,
    at,
    component,
    concept,
    fate,
    kept,
    line,
    mapping,
    observation,
    pair,
    panel,
    patient,
    quantity,
    reading,
    refusal,
    seen,
    specimen,
    take,
)

OUT_OF_SCOPE, USED = Bucket.OUT_OF_SCOPE, Bucket.USED


def valued(code: str, value: float, unit: str | None) -> dict[str, Any]:
    return observation("tested", code, value, unit)


def with_token(token: bytes) -> bytes:
    """An oxygen pressure whose number is written as ``token``."""
    return line(observation(value=90)).replace(b'"value":90', b'"value":' + token)


def ids(*resources: dict[str, Any] | bytes) -> set[str]:
    return {one.resource for one in seen(take(*resources))}


# --- form of the bytes -------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "content", [b"{", b"not json", b'{"resourceType":"Observation",', b'{"resourceType":"Patient"']
)
def test_c01_malformed_json_is_quarantined_and_the_next_line_read(content: bytes) -> None:
    assert refusal(content) is Reason.JSON


def test_c02_a_broken_last_line_of_a_closed_file_is_truncated(tmp_path: Path) -> None:
    (tmp_path / "feed.ndjson").write_bytes(line(GOOD) + b"\n" + line(observation())[:-20])
    intake = take_in([NdjsonSource("feed", [tmp_path])], Settings(), NO_MAPPING)
    assert intake.account.reasons == {(Bucket.QUARANTINED, Reason.TRUNCATED): 1}
    assert intake.account.buckets[USED] == 1


@pytest.mark.parametrize("kind", ["Observation", "Patient"])
def test_c03_a_line_of_fifty_megabytes_is_passed_over_in_little_memory(tmp_path: Path, kind: str) -> None:
    with (tmp_path / "feed.ndjson").open("wb") as stream:
        stream.write(b'{"resourceType":"' + kind.encode() + b'","id":"big","note":"')
        stream.seek(50_000_000, 1)
        stream.write(b'"}\n' + line(GOOD) + b"\n")
    tracemalloc.start()
    try:
        intake = take_in([NdjsonSource("feed", [tmp_path])], Settings(), NO_MAPPING)
        _, most = tracemalloc.get_traced_memory()
    finally:
        tracemalloc.stop()
    assert intake.account.reasons == {(Bucket.QUARANTINED, Reason.SIZE): 1}
    assert intake.account.buckets[USED] == 1
    assert most < 25_000_000


@pytest.mark.parametrize("filling", [b"\0" * 1_000_000, b" " * 999_999 + b"\n"], ids=["one line", "many lines"])
def test_c04_a_gzip_bomb_stops_at_the_cap(tmp_path: Path, filling: bytes) -> None:
    bomb = tmp_path / "feed.ndjson.gz"
    with gzip.open(bomb, "wb") as stream:
        stream.write(line(GOOD) + b"\n")
        for _ in range(100):
            stream.write(filling)
        stream.write(b"\n" + line(observation("beyond")) + b"\n")
    assert bomb.stat().st_size < 100_000_000 / 900
    intake = take_in([NdjsonSource("feed", [bomb])], Settings(), NO_MAPPING)
    assert intake.account.reasons == {(Bucket.QUARANTINED, Reason.SIZE): 1}
    assert [one.resource for one in seen(intake)] == ["good"]


# --- numbers -----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("token", [b"NaN", b"Infinity", b"-Infinity", b'"NaN"', b'"7.4"', b"true"])
def test_c05_what_is_no_number_is_quarantined(token: bytes) -> None:
    assert refusal(with_token(token)) is Reason.NUMBER


@pytest.mark.parametrize("text", ["NaN", "ERR", "----", "clotted", " Clotted ", "no result"])
def test_c05_an_analyser_error_is_a_stated_absence(text: str) -> None:
    found = pair(observation("gas"), observation("tested", "2019-8", None, valueString=text))
    assert found.why("paco2") is Why.STATED_ABSENT


@pytest.mark.parametrize("token", [b"1e308", b"1e400", b"-5", b"0", b"9" * 5000, b"1e-400"])
def test_c06_a_pressure_out_of_range_is_quarantined(token: bytes) -> None:
    assert refusal(with_token(token)) is Reason.RANGE


@pytest.mark.parametrize(
    ("code", "value", "unit"),
    [
        ("3151-8", 0, "L/min"),
        ("76248-4", 0, "cm[H2O]"),
        ("60985-9", 0, "mm[Hg]"),
        ("2030-5", 0, "%"),
        ("2615-3", 0, "%"),
        ("1925-7", 0, "mmol/L"),
        ("1925-7", -12, "mmol/L"),
        ("60985-9", -3, "mm[Hg]"),
        ("1863-0", -2, "mmol/L"),
    ],
)
def test_c06_nought_and_less_are_values_where_they_can_be(code: str, value: float, unit: str) -> None:
    assert reading(valued(code, value, unit)).value == pytest.approx(value / (100 if unit == "%" else 1))


@pytest.mark.parametrize(
    ("comparator", "value", "low", "high"),
    [("<", 20, 0, 20), ("<=", 20, 0, 20), (">=", 500, 500, float("inf")), (">", 500, 500, float("inf"))],
)
def test_c07_a_comparator_becomes_a_bound(comparator: str, value: float, low: float, high: float) -> None:
    found = reading(observation(valueQuantity=quantity(value, comparator=comparator)))
    assert (found.low, found.high) == (low, high)
    assert found.value != found.value
    assert found.cautions == Caution.INTERVAL


def test_c07_a_bound_stays_a_bound_in_what_is_derived() -> None:
    """Content rises with the saturation, so from at most 75 % it is at most that of 75 % (definition of a bound)."""
    hb, bound = observation("hb", "718-7", 15, "g/dL"), quantity(75, "%", comparator="<")
    gas = (observation("po2", value=60), hb)
    found = pair(*gas, observation("so2", "2708-6", None, valueQuantity=bound)).column("oxygen-content-arterial")
    sharp = pair(*gas, observation("so2", "2708-6", 75, "%")).value("oxygen-content-arterial")
    assert found.value[0] != found.value[0]
    assert found.low[0] < found.high[0] == sharp


@pytest.mark.parametrize("more", [{"valueQuantity": quantity(20, comparator="ad")}, {"valueString": "<20"}])
def test_c07_a_comparator_that_is_no_bound_or_stands_in_text_is_quarantined(more: dict[str, Any]) -> None:
    assert refusal(observation(value=None) | more) is Reason.COMPARATOR


@pytest.mark.parametrize("text", ["7,35", "7.35", "7,35 (arterial)"])
def test_c08_a_number_in_text_is_never_read(text: str) -> None:
    assert refusal(observation("tested", "2744-1", None, valueString=text)) is Reason.NUMBER


@pytest.mark.parametrize(
    "stated",
    [
        {"value": 13.3},
        {"value": 13.3, "unit": ""},
        {"value": 13.3, "unit": "kPa", "system": "http://unitsofmeasure.org", "code": "mm[Hg]"},
        {"value": 13.3, "unit": "furlong"},
        {"value": 13.3, "system": "urn:example:units", "code": "kPa"},
        {"value": 13.3, "unit": "g/dL", "system": "http://unitsofmeasure.org", "code": "g/dL"},
    ],
)
def test_c09_a_missing_contradicting_or_unknown_unit_is_quarantined(stated: dict[str, Any]) -> None:
    assert refusal(observation(valueQuantity=stated)) is Reason.UNIT


def pressures(first: int, then: int) -> list[dict[str, Any]]:
    """A day's oxygen pressures, so many in kPa, then so many in mm[Hg]."""
    units = ["kPa"] * first + ["mm[Hg]"] * then
    return [
        observation(
            f"gas-{number:02d}",
            value=12 if unit == "kPa" else 90,
            unit=unit,
            seconds=600 * number,
            meta={"versionId": "1", "lastUpdated": at(600 * number)},
        )
        for number, unit in enumerate(units)
    ]


def test_c10_a_source_that_changes_its_unit_is_noticed() -> None:
    sent = pressures(12, 20)
    expected = ["feed: 2703-7 switched from kPa to mm[Hg] after 12 results"]
    assert take(*sent).account.notices == expected
    assert take(*reversed(sent)).account.notices == expected


def test_c10_a_few_results_in_another_unit_are_no_change() -> None:
    few = pressures(12, 4)
    back = [{**one, "id": f"back-{one['id']}", "meta": {"lastUpdated": at(86400)}} for one in pressures(12, 0)]
    assert take(*few).account.notices == []
    assert take(*few, *back).account.notices == []


def test_c10_units_of_one_size_are_one_unit() -> None:
    sent = [
        observation(f"hco3-{number:02d}", "1960-4", 24, "mmol/L" if number < 10 else "meq/L", seconds=number)
        for number in range(20)
    ]
    assert take(*sent).account.notices == []


def test_c11_swapped_oxygen_and_carbon_dioxide_are_marked_and_not_used() -> None:
    """pH 7.40 and bicarbonate 24 mmol/L belong to a pCO2 of 39 mm[Hg] (Henderson-Hasselbalch, pK 6.1, 0.0307)."""
    rest = (
        observation("ph", "2744-1", 7.40, "[pH]"),
        observation("hco3", "1960-4", 24, "mmol/L"),
        observation("fio2", "3150-0", 21, "%"),
    )
    swapped = pair(observation("po2", value=40), observation("pco2", "2019-8", 95), *rest)
    right = pair(observation("po2", value=95), observation("pco2", "2019-8", 40), *rest)
    for name in ("pao2", "paco2"):
        assert swapped.cautions(name) & Caution.SUSPECT_SWAP
        assert swapped.why(name) is Why.SUSPECT_SAMPLE
        assert not right.cautions(name) & Caution.SUSPECT_SWAP
    assert swapped.why("pf-ratio") is swapped.why("alveolar-oxygen-pressure") is Why.SUSPECT_SAMPLE
    assert right.why("pf-ratio") is Why.KNOWN


def test_c12_acidity_by_its_own_code_and_unit_only() -> None:
    assert refusal(valued("2744-1", 74, "[pH]")) is Reason.RANGE
    assert refusal(valued("2744-1", 40, "nmol/L")) is Reason.UNIT


@pytest.mark.parametrize(
    ("value", "unit", "fraction"),
    [
        (1, "1", 1.0), (0.21, "1", 0.21), (0.205, "1", 0.205), (20.9, "%", 0.209), (21, "%", 0.21), (60, "%", 0.60),
        (20.5, "%", 0.205), (100, "%", 1.0),
    ],
)  # fmt: skip
def test_c13_inspired_oxygen_is_read_by_its_unit(value: float, unit: str, fraction: float) -> None:
    found = reading(valued("3150-0", value, unit))
    assert found.value == pytest.approx(fraction)
    assert not found.cautions


@pytest.mark.parametrize(("value", "unit"), [(100.5, "%"), (103, "%"), (1.02, "1")])
def test_c13_a_little_above_all_is_clipped_with_a_caution(value: float, unit: str) -> None:
    found = reading(valued("3150-0", value, unit))
    assert (found.value, found.cautions) == (1.0, Caution.CLIPPED_TO_FULL)


@pytest.mark.parametrize(
    ("value", "unit", "reason"),
    [
        (2, "1", Reason.RANGE), (15, "1", Reason.RANGE), (21, "1", Reason.RANGE), (60, "1", Reason.RANGE),
        (1000, "1", Reason.RANGE), (1000, "%", Reason.RANGE), (103.5, "%", Reason.RANGE), (0.21, "%", Reason.RANGE),
        (0.18, "1", Reason.RANGE), (15, "%", Reason.RANGE), (20.4, "%", Reason.RANGE),
        (2, "L/min", Reason.UNIT), (1, None, Reason.AMBIGUOUS), (60, None, Reason.AMBIGUOUS),
    ],
)  # fmt: skip
def test_c13_other_inspired_oxygen_is_quarantined(value: float, unit: str | None, reason: Reason) -> None:
    assert refusal(valued("3150-0", value, unit)) is reason


@pytest.mark.parametrize(("value", "unit"), [(0.97, "%"), (97, "1"), (105, "%"), (102.5, "%")])
def test_c14_a_saturation_of_another_scale_is_quarantined(value: float, unit: str) -> None:
    assert refusal(valued("2708-6", value, unit)) is Reason.RANGE


@pytest.mark.parametrize("value", [100.1, 102])
def test_c14_a_saturation_just_above_all_is_clipped_with_a_caution(value: float) -> None:
    found = reading(valued("2708-6", value, "%"))
    assert found.value == 1.0
    assert found.cautions & Caution.CLIPPED_TO_FULL


@pytest.mark.parametrize(("oxygenated", "agrees"), [(80, False), (92, False), (94.1, True)])
def test_c15_fractions_that_do_not_add_up_give_no_content(oxygenated: float, agrees: bool) -> None:
    """FO2Hb = sO2 x (1 - COHb - MetHb) = 0.97 x 0.97 = 94.1 % by definition."""
    found = pair(
        observation("po2"),
        observation("hb", "718-7", 15, "g/dL"),
        observation("so2", "2708-6", 97, "%"),
        observation("fo2hb", "2714-4", oxygenated, "%"),
        observation("cohb", "2030-5", 2, "%"),
        observation("methb", "2615-3", 1, "%"),
    )
    assert bool(found.cautions("fo2hba") & Caution.FRACTIONS_DISAGREE) is not agrees
    assert found.why("oxygen-content-arterial") is (Why.KNOWN if agrees else Why.SUSPECT_SAMPLE)


@pytest.mark.parametrize(("oxygenated", "agrees"), [(97, True), (98, False)])
def test_c15_fractions_beyond_the_whole_give_no_content(oxygenated: float, agrees: bool) -> None:
    """Without sO2: FO2Hb + COHb + MetHb can be no more than 100 %, and 2 points of rounding (failure catalogue)."""
    found = pair(
        observation("po2"),
        observation("hb", "718-7", 15, "g/dL"),
        observation("fo2hb", "2714-4", oxygenated, "%"),
        observation("cohb", "2030-5", 3, "%"),
        observation("methb", "2615-3", 2, "%"),
    )
    assert found.why("oxygen-content-arterial") is (Why.KNOWN if agrees else Why.SUSPECT_SAMPLE)


@pytest.mark.parametrize(("value", "unit"), [(150, "g/L"), (15, "g/dL"), (9.309, "mmol/L")])
def test_c16_haemoglobin_is_read_by_its_unit(value: float, unit: str) -> None:
    """0.6206 mmol/L for 1 g/dL (Jordan and Kratz; iqtig.org): 15 g/dL are 9.309 mmol/L."""
    assert reading(valued("718-7", value, unit)).value == pytest.approx(15, rel=1e-6)


def test_c16_haemoglobin_without_unit_is_quarantined() -> None:
    assert refusal(valued("718-7", 15, None)) is Reason.UNIT


def test_c17_a_value_with_a_reason_for_its_absence_is_quarantined() -> None:
    absent = concept(("http://terminology.hl7.org/CodeSystem/data-absent-reason", "unknown"))
    assert refusal(observation(dataAbsentReason=absent)) is Reason.INVARIANT


@pytest.mark.parametrize("code", ["unknown", "not-performed", None])
def test_c17_neither_value_nor_more_is_an_absence(code: str | None) -> None:
    absent = code and concept(("http://terminology.hl7.org/CodeSystem/data-absent-reason", code))
    found = pair(observation("gas"), observation("tested", "2019-8", None, dataAbsentReason=absent))
    assert found.why("paco2") is Why.STATED_ABSENT


# --- codes and structure -----------------------------------------------------------------------------------------


def test_c18_codes_of_different_blood_are_quarantined() -> None:
    assert refusal({**observation(), "code": concept("2703-7", "2705-2")}) is Reason.CONFLICT


@pytest.mark.parametrize(
    "code",
    [
        concept(("urn:example:other", "2703-7")),
        concept(("http://loinc.org/", "2703-7")),
        concept(" 2703-7"),
        concept("2703-7 "),
        concept(("HTTP://LOINC.ORG", "2703-7")),
        {"text": "Oxygen [Partial pressure] in Arterial blood"},
        {"coding": [{"display": "Oxygen [Partial pressure] in Arterial blood"}]},
        {"coding": [{"code": "2703-7"}]},
    ],
)
def test_c19_a_code_in_any_other_writing_is_unmapped(code: dict[str, Any]) -> None:
    assert fate({**observation(), "code": code}) == (OUT_OF_SCOPE, Reason.UNMAPPED_CODE)


def test_c20_a_component_twice_with_two_values_is_refused_alone() -> None:
    intake = take(
        panel("tested", component("2703-7", 90, "mm[Hg]"), component("2703-7", 80, "mm[Hg]"),
              component("2019-8", 40, "mm[Hg]"))
    )  # fmt: skip
    assert [(one.quantity, one.value) for one in seen(intake)] == [("pco2", 40)]
    assert intake.account.parts == {Reason.CONFLICT: 2}
    assert intake.account.buckets == {USED: 1}


MRN = "urn:example:mrn"


@pytest.mark.parametrize(
    "subject",
    [
        None,
        {},
        {"display": "bed 4"},
        {"reference": "urn:uuid:0b6d6f0c-5a0e-4b1e-8f3a-000000000001"},
        {"reference": "https://other.example.org/fhir/Patient/p1"},
        {"reference": "#nobody"},
        {"reference": "Patient/"},
        {"reference": "javascript:alert(1)"},
        {"identifier": {"system": MRN, "value": "unheard of"}},
    ],
)
def test_c21_a_subject_of_unknown_form_is_quarantined(subject: dict[str, Any] | None) -> None:
    assert refusal(observation(subject=subject)) is Reason.SUBJECT


def test_c21_a_subject_of_known_form_is_resolved() -> None:
    known = patient("p7", identifier=[{"system": MRN, "value": "700"}])
    identifier = {"system": MRN, "value": "700"}
    contained = {"resourceType": "Patient", "id": "inside", "identifier": [identifier]}
    for subject in (
        {"identifier": identifier},
        {"reference": "#inside"},
        {"reference": "Patient/p7"},
        {"reference": "Patient/p7/_history/3"},
    ):
        assert reading(known, observation(subject=subject, contained=[contained])).patient == "feed|Patient/p7"


@pytest.mark.parametrize("subject", ["Group/g1", "Device/d1", "Location/l1"])
def test_c22_what_is_no_patient_is_no_subject(subject: str) -> None:
    assert refusal(observation(subject={"reference": subject})) is Reason.SUBJECT


def test_c23_a_dangling_specimen_is_unknown_and_a_contained_one_is_read() -> None:
    dangling = observation("tested", "11556-8", specimen={"reference": "Specimen/nowhere"})
    contained = observation(
        "tested", "11556-8", specimen={"reference": "#s"}, contained=[{**specimen("s"), "meta": None}]
    )
    assert reading(dangling).specimen is Specimen.UNKNOWN
    assert reading(contained).specimen is Specimen.ARTERIAL


# --- time --------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "time",
    [
        {},
        {"effectiveTiming": {"event": [at()]}},
        {"effectivePeriod": {"end": at()}},
        {"effectiveDateTime": "2026-03-01"},
        {"effectiveDateTime": "2026"},
        {"effectiveDateTime": "0001-01-01T00:00:00Z"},
        {"effectiveDateTime": "1900-01-01T00:00:00Z"},
        {"effectiveDateTime": "2099-01-01T00:00:00Z"},
    ],
)
def test_c24_a_time_that_cannot_be_paired_is_quarantined(time: dict[str, Any]) -> None:
    assert refusal(observation(effectiveDateTime=None) | time) is Reason.TIME


def test_c24_an_open_period_counts_by_its_start() -> None:
    period = {"start": at(60)}
    found = pair(observation(effectiveDateTime=None, effectivePeriod=period))
    assert (
        found.tables["arterial"].effective.tolist()
        == pair(observation(seconds=60)).tables["arterial"].effective.tolist()
    )
    assert found.cautions("pao2") & Caution.OPEN_PERIOD


def instant(text: str, settings: Settings | None = None) -> int:
    intake = take(observation(effectiveDateTime=text), settings=settings)
    [effective] = intake.readings["effective"].tolist()
    return int(effective)


def test_c25_offsets_and_leap_seconds_are_exact() -> None:
    assert instant("2026-03-01T22:00:00+14:00") == instant("2026-03-01T08:00:00-00:00") == instant(at(-4 * 3600))
    assert instant("2026-02-28T23:59:60Z") == instant("2026-03-01T00:00:00Z")


@pytest.mark.parametrize("text", ["2026-03-01T12:00:00", "2026-03-01T24:00:00Z", "2026-03-01T12:00:00+14:30"])
def test_c25_a_time_without_place_is_quarantined(text: str) -> None:
    assert refusal(observation(effectiveDateTime=text)) is Reason.TIME


def test_c25_a_declared_zone_places_local_time_with_a_caution() -> None:
    berlin = Settings(zone="Europe/Berlin")
    assert instant("2026-03-01T13:00:00", berlin) == instant(at())
    local = observation(effectiveDateTime="2026-03-01T13:00:00")
    assert reading(local, settings=berlin).cautions & Caution.TIME_ZONE_DECLARED


def test_c26_the_night_the_clocks_change() -> None:
    """EU Directive 2000/84/EC: 25 October 2026, 03:00 summer time is 02:00 again; 29 March, 02:00 becomes 03:00."""
    berlin = Settings(zone="Europe/Berlin")
    autumn: dict[str, Any] = {"meta": {"versionId": "1", "lastUpdated": "2026-10-26T00:00:00Z"}}
    twice = observation(effectiveDateTime="2026-10-25T02:30:00", **autumn)
    assert reading(twice, settings=berlin).cautions & Caution.TIME_AMBIGUOUS
    plain = observation(effectiveDateTime="2026-10-25T02:30:00+01:00", **autumn)
    assert not reading(plain, settings=berlin).cautions
    spring: dict[str, Any] = {"meta": {"versionId": "1", "lastUpdated": "2026-03-30T00:00:00Z"}}
    never = observation(effectiveDateTime="2026-03-29T02:30:00", **spring)
    assert fate(never, settings=berlin) == (Bucket.QUARANTINED, Reason.TIME)


def known_at(seconds: float) -> dict[str, Any]:
    return {"meta": {"versionId": "1", "lastUpdated": at(seconds)}}


@pytest.mark.parametrize(("minutes", "late"), [(90, True), (61, True), (60, False), (5, False)])
def test_c27_evidence_that_became_known_late_says_so(minutes: int, late: bool) -> None:
    fio2 = observation("fio2", "3150-0", 40, "%", seconds=-600, **known_at(60 * minutes))
    found = pair(observation("gas", **known_at(0)), fio2)
    assert found.value("fio2") == 0.40
    assert bool(found.cautions("pf-ratio") & Caution.LATE_EVIDENCE) is late


def test_c27_a_result_posted_six_hours_late_is_used_at_its_own_time() -> None:
    found = pair(observation("gas", **known_at(6 * 3600)), observation("fio2", "3150-0", 40, "%", **known_at(0)))
    assert found.value("pf-ratio") == 225
    assert found.tables["arterial"].known[0] - found.tables["arterial"].effective[0] == 6 * 3600 * 1_000_000


def test_c28_issued_before_it_was_taken_is_marked() -> None:
    assert reading(observation(issued=at(-60))).cautions & Caution.TIME_ORDER
    assert not reading(observation(issued=at(60))).cautions


@pytest.mark.parametrize(("received", "marked"), [(at(-60), True), (at(60), False), ("2026-03-01", False)])
def test_c28_a_specimen_received_before_it_was_collected_is_marked(received: str, marked: bool) -> None:
    drawn = specimen("s", receivedTime=received, collection={"collectedDateTime": at()})
    found = reading(drawn, observation(specimen={"reference": "Specimen/s"}))
    assert bool(found.cautions & Caution.TIME_ORDER) is marked


# --- versions, patients, sources ---------------------------------------------------------------------------------


def version(number: int, status: str, value: float = 90, **more: Any) -> dict[str, Any]:
    return observation(
        value=value, status=status, meta={"versionId": str(number), "lastUpdated": at(number)}, seconds=-60, **more
    )


LIFE = [version(1, "preliminary", 80), version(2, "final", 85), version(3, "corrected", 90)]


@pytest.mark.parametrize("last", [[], [version(4, "entered-in-error")]], ids=["corrected", "withdrawn"])
def test_c29_the_last_word_holds_in_any_order_and_re_sent(last: list[dict[str, Any]]) -> None:
    life = LIFE + last
    for order in permutations(life):
        intake = take(*order, order[0])
        assert [one.value for one in seen(intake)] == ([] if last else [90])
        assert intake.account.buckets[Bucket.REPEATED] == len(life)
        assert intake.account.buckets[OUT_OF_SCOPE if last else USED] == 1


def test_c30_one_version_with_two_contents_is_quarantined_whole() -> None:
    intake = take(version(1, "final", 80), version(1, "final", 90), version(1, "final", 80), GOOD)
    assert intake.account.reasons[Bucket.QUARANTINED, Reason.VERSION] == 3
    assert [one.resource for one in seen(intake)] == ["good"]


def test_c31_the_latest_update_wins_then_the_greater_version() -> None:
    def sent(value: float, number: str, seconds: float) -> dict[str, Any]:
        return observation(value=value, meta={"versionId": number, "lastUpdated": at(seconds)})

    for earlier, later in (
        (sent(80, "7", 0), sent(90, "3", 60)),
        (sent(80, "9", 0), sent(90, "10", 0)),
        (sent(80, "b", 0), sent(90, "a", 1)),
    ):
        for order in ((earlier, later), (later, earlier)):
            assert [one.value for one in seen(take(*order))] == [90]


def test_c32_one_id_on_two_servers_is_two_resources(tmp_path: Path) -> None:
    sources = []
    for name, value in (("north", 80), ("south", 90)):
        (tmp_path / name).mkdir()
        (tmp_path / name / "feed.ndjson").write_bytes(line(observation(value=value)) + b"\n")
        sources.append(NdjsonSource(name, [tmp_path / name]))
    found = seen(take_in(sources, Settings(), NO_MAPPING))
    assert {(one.patient, one.value) for one in found} == {("north|Patient/p1", 80), ("south|Patient/p1", 90)}


def test_c33_a_correction_of_the_subject_moves_the_value() -> None:
    moved = version(2, "corrected", subject={"reference": "Patient/p2"})
    for order in ((version(1, "final"), moved), (moved, version(1, "final"))):
        assert [one.patient for one in seen(take(*order))] == ["feed|Patient/p2"]


def test_c34_a_merge_re_homes_and_an_un_merge_takes_it_back() -> None:
    value = observation(subject={"reference": "Patient/old"})
    merged = patient("old", link=[{"other": {"reference": "Patient/new"}, "type": "replaced-by"}])
    again = patient("old", meta={"versionId": "2", "lastUpdated": "2026-03-04T00:00:00Z"})
    assert [one.key for one in pair(value, merged, patient("new")).timelines.patients] == ["feed|Patient/new"]
    assert [one.key for one in pair(value, again, merged, patient("new")).timelines.patients] == ["feed|Patient/old"]


TEST_DATA = {"security": [{"system": "http://terminology.hl7.org/CodeSystem/v3-ActReason", "code": "HTEST"}]}


@pytest.mark.parametrize("with_patient", [True, False])
def test_c35_a_patient_on_the_list_is_excluded_and_counted(with_patient: bool) -> None:
    given = mapping(excluded_patients=["p1"])
    intake = take(*([patient("p1")] if with_patient else []), observation(), given=given)
    assert intake.account.reasons == {(OUT_OF_SCOPE, Reason.EXCLUDED_PATIENT): 1 + with_patient}


def test_c35_a_patient_excluded_by_identifier_is_excluded_however_named() -> None:
    canary = patient("p1", identifier=[{"system": MRN, "value": "000"}])
    by_identifier = observation("second", subject={"identifier": {"system": MRN, "value": "000"}})
    intake = take(canary, observation(), by_identifier, given=mapping(excluded_patients=["000"]))
    assert intake.account.reasons == {(OUT_OF_SCOPE, Reason.EXCLUDED_PATIENT): 3}


def test_c35_what_is_labelled_as_test_data_is_excluded_and_counted() -> None:
    """HTEST, "test health data", of HL7 v3-ActReason as a security label (FHIR R4, security labels)."""
    labelled = take(patient("p1", meta=TEST_DATA), observation())
    assert labelled.account.reasons == {(OUT_OF_SCOPE, Reason.EXCLUDED_PATIENT): 2}
    assert fate(observation(meta={**TEST_DATA, "lastUpdated": KNOWN})) == (OUT_OF_SCOPE, Reason.EXCLUDED_PATIENT)


def test_c35_a_number_that_two_patients_have_names_neither() -> None:
    both = [patient(name, identifier=[{"system": MRN, "value": "9"}]) for name in ("p1", "p2")]
    assert refusal(observation(subject={"identifier": {"system": MRN, "value": "9"}}), *both) is Reason.SUBJECT


def gas(name: str, seconds: float, po2: float = 90, pco2: float = 40, **more: Any) -> list[dict[str, Any]]:
    return [
        observation(f"{name}-po2", value=po2, seconds=seconds, **more),
        observation(f"{name}-pco2", "2019-8", pco2, seconds=seconds, **more),
        observation(f"{name}-ph", "2744-1", 7.4, "[pH]", seconds=seconds, **more),
    ]


def test_c36_a_gas_filed_by_device_laboratory_and_chart_is_one_fact() -> None:
    found = pair(*gas("analyser", 0), *gas("laboratory", 180), *gas("chart", 420))
    assert found.anchors() == ["analyser-po2"]
    assert len(pair(*gas("first", 0), *gas("second", 180, 75, 50)).anchors()) == 2


@pytest.mark.parametrize(
    "value",
    [
        {"valueSampledData": {"origin": {"value": 0}, "period": 1, "dimensions": 1, "data": "1 2"}},
        {"valueRatio": {"numerator": {"value": 1}, "denominator": {"value": 2}}},
        {"valueRange": {"low": {"value": 80}, "high": {"value": 90}}},
        {"valueCodeableConcept": {"text": "high"}},
        {"valueBoolean": True},
        {"valueInteger": 90},
        {"valueString": "high"},
        {"valueDateTime": at()},
    ],
)
def test_c37_another_type_of_value_is_quarantined(value: dict[str, Any]) -> None:
    assert refusal(observation(value=None) | value) is Reason.TYPE


# --- hostile content ---------------------------------------------------------------------------------------------

HOSTILE = ["<script>alert(1)</script>", "\u202eevil", "\u200b", "\U0001f635", "x" * 10_000, '=HYPERLINK("http://x")']


@pytest.mark.parametrize("text", HOSTILE)
def test_c38_hostile_words_are_not_taken_up(text: str) -> None:
    code = {"coding": [{"system": LOINC, "code": "2703-7", "display": text}], "text": text}
    intake = take(
        observation(subject={"reference": "Patient/p1", "display": text}, note=[{"text": text}]) | {"code": code}
    )
    names = intake.rows.names
    assert [one.value for one in seen(intake)] == [90]
    assert all(text not in name for part in (names.subjects, names.samples, names.devices) for name in part)


@pytest.mark.parametrize("text", [*HOSTILE, "\x1b[31mred", "one\ntwo"])
def test_c38_what_is_kept_of_hostile_words_is_inert_and_short(text: str) -> None:
    """The raw resource is kept whole; the words about it are cut, with a mark."""
    [only] = kept(observation(valueQuantity={"value": 9, "unit": text}), GOOD).splitlines()
    assert only.isascii()
    assert all(byte >= 0x20 for byte in only)
    detail = json.loads(only)["detail"]
    assert len(detail) <= 201
    assert not re.search(r"[\x00-\x1f]", detail)


def test_c38_a_long_detail_is_cut_with_a_mark() -> None:
    [only] = kept(observation(valueQuantity=quantity(9, "x" * 10_000))).splitlines()
    assert json.loads(only)["detail"].endswith("…")


@pytest.mark.parametrize("name", ["one\ntwo", "\x1b[31mred", "a" * 65, "a b", ""])
def test_c39_an_id_with_control_signs_is_quarantined(name: str) -> None:
    assert refusal(observation(name)) is Reason.INVARIANT
    assert refusal(observation(subject={"reference": f"Patient/{name}"})) is Reason.SUBJECT


@pytest.mark.parametrize("extension", [[{"url": "urn:example:negated", "valueBoolean": True}], []])
def test_c40_an_unknown_modifier_stops_processing(extension: list[Any]) -> None:
    assert refusal(observation(modifierExtension=extension)) is Reason.MODIFIER


def test_c40_a_component_with_a_modifier_is_refused_alone() -> None:
    modifier = [{"url": "urn:example:negated", "valueBoolean": True}]
    intake = take(
        panel("tested", component("2703-7", 90, "mm[Hg]", modifierExtension=modifier),
              component("2019-8", 40, "mm[Hg]"))
    )  # fmt: skip
    assert [one.quantity for one in seen(intake)] == ["pco2"]
    assert intake.account.parts == {Reason.MODIFIER: 1}


@pytest.mark.parametrize("contained", [False, True])
def test_c40_context_with_a_modifier_is_not_used(contained: bool) -> None:
    doubtful = specimen("s", modifierExtension=[{"url": "urn:example:negated", "valueBoolean": True}])
    if contained:
        value = observation(code="11556-8", specimen={"reference": "#s"}, contained=[doubtful])
        assert refusal(value) is Reason.MODIFIER
    else:
        value = observation(code="11556-8", specimen={"reference": "Specimen/s"})
        intake = take(doubtful, value)
        assert intake.account.reasons == {(Bucket.QUARANTINED, Reason.MODIFIER): 1}
        assert [one.specimen for one in seen(intake)] == [Specimen.UNKNOWN]


@pytest.mark.parametrize(
    "resource",
    [
        observation(implicitRules="urn:example:rules"),
        observation(triggeredBy=[{"type": "reflex"}]),
        observation(valueQuantity={"value": 12, "units": "kPa", "system": "http://unitsofmeasure.org", "code": "kPa"}),
        patient("p9", implicitRules="urn:example:rules"),
    ],
)
def test_c41_what_is_of_another_version_of_the_standard_is_quarantined(resource: dict[str, Any]) -> None:
    assert refusal(resource) is Reason.VERSION


# --- artefacts ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("value", [0, 127])
def test_c42_impossible_pulse_oximetry_is_quarantined(value: float) -> None:
    assert refusal(observation("tested", "59408-5", value, "%", category="vital-signs")) is Reason.RANGE


def test_c42_room_air_in_the_syringe_is_marked() -> None:
    """On room air the alveolar equation allows no 150 mm[Hg] (features: drifting to 150 mm[Hg], low pCO2)."""
    air = observation("fio2", "3150-0", 21, "%")
    assert pair(*gas("bubble", 0, 145, 24), air).cautions("pao2") & Caution.SUSPECT_BUBBLE
    assert not pair(*gas("plain", 0, 95, 38), air).cautions("pao2") & Caution.SUSPECT_BUBBLE


def test_c42_a_monitor_channel_is_no_anchor_of_blood() -> None:
    """A flushed line at 300 mm[Hg] or one low SpO2 leads no table that speaks of blood."""
    found = pair(
        observation("flush", "76215-3", 300, category="vital-signs"),
        observation("spo2", "59408-5", 60, "%", category="vital-signs"),
    )
    assert [kind for kind in ("arterial", "mixed-venous", "central-venous") if found.anchors(kind)] == []


@pytest.mark.parametrize(("second", "apart"), [(110, True), (64, True), (95, False)])
def test_c43_two_gases_of_one_minute_that_disagree_are_both_kept_and_marked(second: float, apart: bool) -> None:
    def drawn(name: str) -> dict[str, Any]:
        return {"specimen": {"reference": f"Specimen/{name}"}}

    found = pair(*gas("one", 0, 84, **drawn("a")), *gas("two", 30, second, 60, **drawn("b")))
    assert found.anchors() == ["one-po2", "two-po2"]
    marked = [bool(bits & int(Caution.DISCORDANT)) for bits in found.column("pao2").cautions.tolist()]
    assert marked == [apart, apart]


def test_every_row_of_the_catalogue_has_its_test() -> None:
    rows = {int(found[1]) for name in globals() if (found := re.match(r"test_c(\d\d)_", name))}
    assert rows == set(range(1, 44))

"""Pairing: partners inside their windows and not a second outside, one sample by name or time, ranks, repeats.

The windows are those declared in ``settings.Windows``; the minutes are written out here again on purpose.
"""

from __future__ import annotations

from typing import Any

import pytest

from fhiro2.model import Caution, Why
from fhiro2.settings import Settings, Windows
from tests.feeds import SITE, Paired, at, component, concept, mapping, observation, pair, panel, specimen

Resource = dict[str, Any]
MINUTE, HOUR, DAY = 60, 3600, 86400
GAS = observation("gas")


def monitor(name: str, code: str, value: float, unit: str, seconds: float, **more: Any) -> Resource:
    return observation(name, code, value, unit, seconds, "vital-signs", **more)


def beside(partner: Resource, *more: Resource) -> Paired:
    return pair(GAS, partner, *more)


# --- windows -----------------------------------------------------------------------------------------------------

EITHER_WAY = {
    "co": ("8737-9", 5.0, "L/min", 15 * MINUTE),
    "ci": ("75919-1", 2.5, "L/min/m2", 15 * MINUTE),
    "temp": ("8329-5", 37.0, "Cel", HOUR),
    "spo2": ("59408-5", 97.0, "%", 2 * MINUTE),
}
BEFORE_ONLY = {
    "fio2": ("3150-0", 40.0, "%", HOUR),
    "peep": ("76248-4", 8.0, "cm[H2O]", HOUR),
    "pb": ("76268-2", 98.0, "kPa", DAY),
    "weight": ("29463-7", 70.0, "kg", 7 * DAY),
    "height": ("8302-2", 175.0, "cm", 365 * DAY),
    "hb": ("718-7", 10.0, "g/dL", 4 * HOUR),
}


@pytest.mark.parametrize("name", EITHER_WAY)
@pytest.mark.parametrize("side", [-1, 1])
@pytest.mark.parametrize(("beyond", "found"), [(-1, True), (0, True), (1, False)])
def test_windows_that_reach_both_ways(name: str, side: int, beyond: int, found: bool) -> None:
    code, value, unit, window = EITHER_WAY[name]
    made = beside(monitor("partner", code, value, unit, side * (window + beyond)))
    assert made.sources(name) == (["partner"] if found else [""])
    assert made.why(name) is (Why.KNOWN if found else Why.OUTSIDE_WINDOW)


@pytest.mark.parametrize("name", BEFORE_ONLY)
@pytest.mark.parametrize(("beyond", "found"), [(-1, True), (0, True), (1, False)])
def test_windows_that_reach_back(name: str, beyond: int, found: bool) -> None:
    code, value, unit, window = BEFORE_ONLY[name]
    made = beside(monitor("partner", code, value, unit, -(window + beyond)))
    assert made.why(name) is (Why.KNOWN if found else Why.OUTSIDE_WINDOW)


@pytest.mark.parametrize("name", BEFORE_ONLY)
def test_windows_that_reach_back_do_not_reach_forward(name: str) -> None:
    code, value, unit, _ = BEFORE_ONLY[name]
    made = beside(monitor("partner", code, value, unit, MINUTE + 1))
    assert made.why(name) is Why.OUTSIDE_WINDOW


@pytest.mark.parametrize("name", [*EITHER_WAY, *BEFORE_ONLY])
def test_what_nobody_recorded_says_so(name: str) -> None:
    assert pair(GAS).why(name) is Why.NEVER_RECORDED


@pytest.mark.parametrize("name", [*EITHER_WAY, *BEFORE_ONLY])
def test_another_patient_is_no_partner(name: str) -> None:
    code, value, unit, _ = (EITHER_WAY | BEFORE_ONLY)[name]
    other = monitor("partner", code, value, unit, 0, subject={"reference": "Patient/p2"})
    assert beside(other).why(name) is Why.NEVER_RECORDED


@pytest.mark.parametrize("side", [-1, 1])
@pytest.mark.parametrize(("beyond", "found"), [(-1, True), (0, True), (1, False)])
@pytest.mark.parametrize(("code", "column"), [("19211-2", "pvo2"), ("97549-0", "scvo2")])
def test_arterial_and_venous_samples_pair_within_ten_minutes(
    code: str, column: str, side: int, beyond: int, found: bool
) -> None:
    value, unit = (40.0, "mm[Hg]") if column == "pvo2" else (70.0, "%")
    made = beside(observation("venous", code, value, unit, side * (10 * MINUTE + beyond)))
    assert made.sources(column) == (["venous"] if found else [""])
    assert made.why(column) is (Why.KNOWN if found else Why.OUTSIDE_WINDOW)


def test_the_nearest_venous_sample_is_taken() -> None:
    near, far = (observation(str(minutes), "19211-2", 40 + minutes, seconds=minutes * MINUTE) for minutes in (3, -8))
    assert beside(near, far).sources("pvo2") == ["3"]


def test_at_one_distance_the_earlier_partner_is_taken() -> None:
    made = beside(*[monitor(f"co{side}", "8737-9", 5 + side, "L/min", side * MINUTE) for side in (1, -1)])
    assert made.sources("co") == ["co-1"]
    assert made.runners_up("co") == ["co1"]


def test_a_site_can_set_its_windows() -> None:
    partner = monitor("co", "8737-9", 5, "L/min", 20 * MINUTE)
    assert pair(GAS, partner).why("co") is Why.OUTSIDE_WINDOW
    assert pair(GAS, partner, settings=Settings(windows=Windows(cardiac_output=20))).sources("co") == ["co"]


# --- how sure a partner is -----------------------------------------------------------------------------------------


@pytest.mark.parametrize(("code", "share"), [("8737-9", 0.10), ("8735-3", 0.175), ("8741-1", 0.20)])
def test_cardiac_output_is_as_sure_as_its_method(code: str, share: float) -> None:
    """Thermodilution 10 % (Stetz 1982), Doppler 15 to 20 %, method unknown 20 % (common practice)."""
    column = beside(monitor("co", code, 5, "L/min", 0)).column("co")
    assert column.uncertainty.tolist() == [pytest.approx(5 * share)]


def test_an_earlier_haemoglobin_is_less_sure() -> None:
    """2 % at once, growing to 10 % after a day (judgement of this project): 4 h add a sixth of 9.8 %."""
    column = beside(observation("hb", "718-7", 10, "g/dL", -4 * HOUR)).column("hb")
    assert column.uncertainty.tolist() == [pytest.approx(10 * (0.02**2 + (0.098 / 6) ** 2) ** 0.5)]


@pytest.mark.parametrize(
    ("start", "end", "why"),
    [(-HOUR, -HOUR, Why.BEFORE_TRANSFUSION), (-3 * HOUR, -3 * HOUR, Why.KNOWN), (60, 120, Why.KNOWN)],
    ids=["between", "before both", "after the gas"],
)
def test_a_haemoglobin_from_before_a_transfusion_is_not_taken(start: int, end: int, why: Why) -> None:
    site = mapping(facts=[{"system": SITE, "code": "RBC", "fact": "transfusion-or-bleed"}])
    transfusion = {
        "resourceType": "Procedure",
        "id": "t",
        "status": "completed",
        "code": concept((SITE, "RBC")),
        "subject": {"reference": "Patient/p1"},
        "performedPeriod": {"start": at(start), "end": at(end)},
    }
    made = pair(GAS, observation("hb", "718-7", 10, "g/dL", -2 * HOUR), transfusion, given=site)
    assert made.why("hb") is why
    saturation = observation("so2", "2708-6", 92, "%")
    content = pair(GAS, saturation, observation("hb", "718-7", 10, "g/dL", -2 * HOUR), transfusion, given=site)
    assert content.why("oxygen-content-arterial") is why


# --- inspired oxygen in force ------------------------------------------------------------------------------------


@pytest.mark.parametrize(("alive", "found"), [(HOUR, True), (HOUR + 1, False), (None, False)])
def test_inspired_oxygen_stays_in_force_while_the_ventilator_lives(alive: int | None, found: bool) -> None:
    fio2 = monitor("fio2", "3150-0", 40, "%", -3 * HOUR)
    ventilator = [] if alive is None else [monitor("peep", "76248-4", 8, "cm[H2O]", -alive)]
    assert beside(fio2, *ventilator).sources("fio2") == (["fio2"] if found else [""])


@pytest.mark.parametrize(("alive", "found"), [(HOUR, True), (HOUR + 1, False)])
def test_end_expiratory_pressure_stays_in_force_likewise(alive: int, found: bool) -> None:
    peep = monitor("peep", "76248-4", 8, "cm[H2O]", -3 * HOUR)
    assert beside(peep, monitor("rate", "19834-1", 14, "/min", -alive)).sources("peep") == (
        ["peep"] if found else [""]
    )


@pytest.mark.parametrize(("beyond", "found"), [(0, True), (1, False)])
def test_inspired_oxygen_of_a_ventilator_ends_after_four_hours(beyond: int, found: bool) -> None:
    fio2 = monitor("fio2", "3150-0", 40, "%", -(4 * HOUR + beyond))
    made = beside(fio2, monitor("rate", "19834-1", 14, "/min", -MINUTE))
    assert made.sources("fio2") == (["fio2"] if found else [""])


def test_the_last_inspired_oxygen_is_in_force_and_the_one_before_is_kept() -> None:
    older, newer = (monitor(f"fio2-{minutes}", "3150-0", minutes, "%", -minutes * MINUTE) for minutes in (50, 30))
    made = beside(older, newer)
    assert (made.sources("fio2"), made.runners_up("fio2")) == (["fio2-30"], ["fio2-50"])


@pytest.mark.parametrize(
    ("steps", "steady"),
    [
        ([(40, 30), (60, 19)], False),
        ([(40, 30), (60, 20)], True),
        ([(40, 30), (40, 5)], True),
        ([(40, 30), (40.4, 5)], True),
        ([(40, 30), (41, 5)], False),
        ([(60, 30), (40, 10), (40, 5)], False),
        ([(40, 5)], True),
    ],
)
def test_a_change_less_than_twenty_minutes_before_is_not_steady(
    steps: list[tuple[float, float]], steady: bool
) -> None:
    made = beside(*[monitor(f"fio2-{ago}", "3150-0", value, "%", -ago * MINUTE) for value, ago in steps])
    assert bool(made.cautions("fio2") & Caution.NOT_STEADY) is not steady
    assert bool(made.cautions("pf-ratio") & Caution.NOT_STEADY) is not steady


def test_pulse_oximetry_takes_the_inspired_oxygen_in_force() -> None:
    made = pair(
        monitor("spo2", "59408-5", 92, "%", 0),
        monitor("fio2", "3150-0", 40, "%", -HOUR),
        monitor("later", "3150-0", 60, "%", 1),
    )
    assert made.value("sf-ratio", "pulse-oximetry") == 230  # 92 / 0.40, definition


# --- one sample --------------------------------------------------------------------------------------------------


def sampled(name: str, **more: Any) -> list[Resource]:
    """A gas, and its carbon dioxide that was entered five minutes later."""
    return [observation("gas", **more), observation("pco2", "2019-8", 40, seconds=5 * MINUTE, **more)]


SPECIMEN: Resource = {"specimen": {"reference": "Specimen/s"}}
ACCESSION: Resource = {"accessionIdentifier": {"system": "urn:example:lab", "value": "7"}}


def test_one_specimen_is_one_sample() -> None:
    assert pair(*sampled("specimen", **SPECIMEN)).sources("paco2") == ["pco2"]


def test_one_accession_is_one_sample() -> None:
    gas, pco2 = sampled("accession", **SPECIMEN)
    other = {**pco2, "specimen": {"reference": "Specimen/t"}}
    assert pair(gas, other, specimen("s", **ACCESSION), specimen("t", **ACCESSION)).sources("paco2") == ["pco2"]
    assert pair(gas, other, specimen("s"), specimen("t")).why("paco2") is Why.OUTSIDE_WINDOW


def test_members_of_one_panel_are_one_sample() -> None:
    members = [{"reference": f"Observation/{name}"} for name in ("gas", "pco2")]
    group = observation("group", "24336-0", None, hasMember=members)
    assert pair(group, *sampled("panel")).sources("paco2") == ["pco2"]
    assert pair(*sampled("panel")).why("paco2") is Why.OUTSIDE_WINDOW


def test_components_of_one_panel_are_one_sample() -> None:
    made = pair(
        panel("one", component("2703-7", 90, "mm[Hg]"), component("2019-8", 40, "mm[Hg]")),
        panel("two", component("2703-7", 70, "mm[Hg]"), component("2019-8", 50, "mm[Hg]"), seconds=30),
    )
    assert made.anchors() == ["one", "two"]
    assert made.column("paco2").value.tolist() == [40, 50]


@pytest.mark.parametrize("side", [-1, 1])
@pytest.mark.parametrize(("beyond", "found"), [(-1, True), (0, True), (1, False)])
def test_without_a_name_one_sample_is_one_minute(side: int, beyond: int, found: bool) -> None:
    made = beside(observation("pco2", "2019-8", 40, seconds=side * (MINUTE + beyond)))
    assert made.why("paco2") is (Why.KNOWN if found else Why.OUTSIDE_WINDOW)


def test_a_value_of_another_named_sample_is_not_taken() -> None:
    made = pair(
        observation("one", **SPECIMEN),
        observation("two", value=70, seconds=30, specimen={"reference": "Specimen/t"}),
        observation("pco2", "2019-8", 40, seconds=15, specimen={"reference": "Specimen/t"}),
    )
    assert made.sources("paco2") == ["", "pco2"]


def test_venous_blood_gives_no_arterial_value() -> None:
    assert beside(observation("pco2", "2021-4", 46)).why("paco2") is not Why.KNOWN


def test_two_candidates_of_one_minute_give_neither() -> None:
    made = beside(*[observation(f"pco2-{value}", "2019-8", value, seconds=value) for value in (40, 50)])
    assert made.why("paco2") is Why.TWO_CANDIDATES
    assert made.sources("paco2") == [""]
    same = beside(*[observation(f"pco2-{place}", "2019-8", 40, seconds=place) for place in (10, 20)])
    assert same.sources("paco2") == ["pco2-10"]


def test_two_haemoglobins_that_disagree_are_not_replaced_by_an_earlier_one() -> None:
    pairs = [observation(f"hb-{value}", "718-7", value, "g/dL", seconds=value) for value in (8, 11)]
    made = beside(*pairs, observation("earlier", "718-7", 9, "g/dL", seconds=-HOUR))
    assert made.why("hb") is Why.TWO_CANDIDATES


def test_one_value_between_two_samples_goes_to_neither() -> None:
    made = pair(
        observation("one"),
        observation("two", value=70, seconds=50),
        observation("pco2", "2019-8", 40, seconds=25),
    )
    assert made.column("paco2").why.tolist() == [Why.TWO_CANDIDATES, Why.TWO_CANDIDATES]


@pytest.mark.parametrize(("device", "found"), [("Device/a", True), ("Device/b", False), (None, True)])
def test_another_analyser_contradicts(device: str | None, found: bool) -> None:
    stated: Resource = {"device": None if device is None else {"reference": device}}
    made = pair(observation("gas", device={"reference": "Device/a"}), observation("pco2", "2019-8", 40, **stated))
    assert (made.why("paco2") is Why.KNOWN) is found


def test_a_corrected_value_is_no_partner() -> None:
    assert beside(observation("pco2", "32771-8", 40)).why("paco2") is not Why.KNOWN


def test_a_stated_absence_is_told_from_silence() -> None:
    absent = observation("pco2", "2019-8", None, dataAbsentReason={"text": "clotted"})
    assert beside(absent).why("paco2") is Why.STATED_ABSENT
    assert pair(GAS).why("paco2") is Why.NEVER_RECORDED


def test_a_measured_saturation_leads_where_no_pressure_is() -> None:
    assert pair(observation("so2", "2708-6", 97, "%")).anchors() == ["so2"]
    assert pair(observation("so2", "2708-6", 97, "%"), GAS).anchors() == ["gas"]
    assert pair(observation("so2", "51733-4", 97, "%")).anchors() == []


# --- rank --------------------------------------------------------------------------------------------------------


def test_a_measured_haemoglobin_comes_before_a_nearer_estimate() -> None:
    measured = observation("measured", "718-7", 10, "g/dL", seconds=-2 * HOUR)
    estimated = observation("estimated", "20509-6", 10.4, "g/dL", seconds=-HOUR)
    made = beside(measured, estimated)
    assert (made.sources("hb"), made.runners_up("hb")) == (["measured"], ["estimated"])
    assert made.cautions("hb") == Caution.EARLIER_HAEMOGLOBIN
    alone = beside(estimated)
    assert alone.sources("hb") == ["estimated"]
    assert alone.cautions("hb") == Caution.EARLIER_HAEMOGLOBIN | Caution.CALCULATED_HAEMOGLOBIN


def test_a_haemoglobin_by_oximetry_comes_before_a_nearer_one_of_the_laboratory() -> None:
    oximetry = observation("oximetry", "14775-1", 10, "g/dL", seconds=-2 * HOUR)
    laboratory = observation("laboratory", "718-7", 10.4, "g/dL", seconds=-HOUR)
    made = beside(oximetry, laboratory)
    assert (made.sources("hb"), made.runners_up("hb")) == (["oximetry"], ["laboratory"])


@pytest.mark.parametrize("named", [SPECIMEN, {}], ids=["by name", "by time"])
def test_of_one_sample_the_measured_value_is_taken_and_the_estimate_kept(named: dict[str, Any]) -> None:
    made = pair(
        observation("gas", **named),
        observation("estimated", "20509-6", 10.4, "g/dL", **named),
        observation("measured", "718-7", 10, "g/dL", seconds=5, **named),
    )
    assert (made.sources("hb"), made.runners_up("hb")) == (["measured"], ["estimated"])
    assert not made.cautions("hb")


def test_a_calculated_saturation_is_never_taken_for_a_measured_one() -> None:
    made = beside(observation("curve", "51733-4", 97, "%"))
    assert made.why("sao2") is Why.NOT_COMPUTED_FROM_CALCULATED
    assert made.sources("sao2") == [""]


def test_the_samples_own_haemoglobin_needs_no_caution() -> None:
    made = beside(
        observation("own", "718-7", 9, "g/dL", seconds=30), observation("earlier", "718-7", 10, "g/dL", seconds=-60.5)
    )
    assert made.sources("hb") == ["own"]
    assert not made.cautions("hb")


# --- repeats and discord -----------------------------------------------------------------------------------------


def filed(name: str, seconds: float, po2: float = 90, pco2: float = 40, **more: Any) -> list[Resource]:
    return [
        observation(f"{name}-po2", value=po2, seconds=seconds, **more),
        observation(f"{name}-pco2", "2019-8", pco2, seconds=seconds, **more),
    ]


@pytest.mark.parametrize(
    ("second", "anchors"),
    [
        (filed("chart", 7 * MINUTE), 1),
        (filed("chart", 10 * MINUTE), 1),
        (filed("chart", 10 * MINUTE + 1), 2),
        (filed("chart", 3 * MINUTE, po2=90.04), 1),
        (filed("chart", 3 * MINUTE, po2=90.2), 2),
        (filed("chart", 3 * MINUTE)[:1], 2),
        (filed("chart", 3 * MINUTE, subject={"reference": "Patient/p2"}), 2),
    ],
    ids=["7 min", "10 min", "later", "rounding", "another value", "one analyte alone", "another patient"],
)
def test_one_gas_filed_again_is_one_anchor(second: list[Resource], anchors: int) -> None:
    assert len(pair(*filed("analyser", 0), *second).anchors()) == anchors


def test_analyser_laboratory_and_chart_are_one_anchor_in_both_units() -> None:
    """13.3 kPa are 99.76 mm[Hg] (UCUM: 1 kPa = 7.500637554 mm[Hg]); the chart rounds to 99.8."""
    laboratory = [
        observation("laboratory-po2", value=13.3, unit="kPa", seconds=180),
        observation("laboratory-pco2", "2019-8", 5.333, "kPa", seconds=180),
    ]
    made = pair(*filed("analyser", 0, po2=99.8), *laboratory, *filed("chart", 420, po2=99.8))
    assert made.anchors() == ["analyser-po2"]
    assert made.runners_up("pao2") == ["laboratory-po2"]


@pytest.mark.parametrize(
    ("seconds", "second", "discordant"),
    [(30, 60, True), (60, 60, True), (61, 60, False), (30, 118, True), (30, 80, False), (30, 69.3, False)],
)
def test_two_gases_of_one_minute_that_lie_apart_are_marked(seconds: int, second: float, discordant: bool) -> None:
    made = pair(
        observation("one", specimen={"reference": "Specimen/s"}),
        observation("two", value=second, seconds=seconds, specimen={"reference": "Specimen/t"}),
    )
    marked = [bool(bits & int(Caution.DISCORDANT)) for bits in made.column("pao2").cautions.tolist()]
    assert marked == [discordant, discordant]


# --- late evidence, limits of a batch ----------------------------------------------------------------------------


@pytest.mark.parametrize(("minutes", "late"), [(60, False), (61, True)])
def test_a_partner_known_an_hour_after_the_gas_is_late(minutes: int, late: bool) -> None:
    gas = observation("gas", meta={"versionId": "1", "lastUpdated": at()})
    partner = observation("pco2", "2019-8", 40, meta={"versionId": "1", "lastUpdated": at(minutes * MINUTE)})
    assert bool(pair(gas, partner).cautions("paco2") & Caution.LATE_EVIDENCE) is late


def test_no_gas_gives_empty_tables() -> None:
    made = pair(monitor("hr", "8867-4", 70, "/min", 0))
    assert {kind: len(table.reading) for kind, table in made.tables.items()} == dict.fromkeys(made.tables, 0)

"""The traps of the code systems (terminology base, section 1, traps 1 to 17): each test is named after its trap.

What the codes mean is LOINC's own wording, or that of the guides named in ``codes.csv``.
"""

from __future__ import annotations

import re
from typing import Any

import pytest

from fhiro2.codes import code_table
from fhiro2.errors import Bucket, Reason
from fhiro2.model import Caution, Kind, Specimen, Why
from tests.feeds import (
    LOINC,
    MDC,
    Seen,
    component,
    concept,
    fate,
    mapping,
    observation,
    pair,
    panel,
    quantity,
    reading,
    refusal,
    seen,
    take,
)

CONTENT = "oxygen-content-arterial"


def coded(*codes: str | tuple[str, str], value: float = 97, unit: str = "%", **more: Any) -> dict[str, Any]:
    return {**observation("tested", value=value, unit=unit, **more), "code": concept(*codes)}


def valued(code: str, value: float, unit: str | None, **more: Any) -> Seen:
    return reading(observation("tested", code, value, unit, **more))


# --- 1: one code for two instruments -----------------------------------------------------------------------------


@pytest.mark.parametrize(
    "codes", [("59408-5", "2708-6"), ("2708-6", "59408-5"), ("2708-6", (MDC, "150456")), ((MDC, "150456"),)]
)
@pytest.mark.parametrize("category", ["vital-signs", "laboratory", None])
def test_t01_the_more_specific_code_makes_it_pulse_oximetry(codes: tuple[Any, ...], category: str | None) -> None:
    found = reading(coded(*codes, category=category))
    assert (found.quantity, found.specimen) == ("spo2", Specimen.NONE)


@pytest.mark.parametrize(
    "more", [{"category": "laboratory"}, {"category": None, "specimen": {"reference": "Specimen/s"}}]
)
def test_t01_alone_it_is_blood_where_a_laboratory_says_so(more: dict[str, Any]) -> None:
    found = reading(coded("2708-6", **more))
    assert (found.quantity, found.specimen) == ("so2", Specimen.ARTERIAL)
    assert found.cautions & Caution.METHOD_NOT_STATED


def test_t01_beside_an_oxygen_pressure_it_is_blood() -> None:
    gas = panel("tested", component("2708-6", 97, "%"), component("2703-7", 90, "mm[Hg]"), category=None)
    assert {one.quantity for one in seen(take(gas))} == {"so2", "po2"}


def test_t01_alone_as_a_vital_sign_it_is_pulse_oximetry_with_a_caution() -> None:
    found = reading(coded("2708-6", category="vital-signs"))
    assert (found.quantity, found.specimen) == ("spo2", Specimen.NONE)
    assert found.cautions == Caution.METHOD_NOT_STATED


def test_t01_alone_with_nothing_said_it_is_not_guessed() -> None:
    assert refusal(coded("2708-6", category=None)) is Reason.AMBIGUOUS


# --- 2 and 3: saturations ----------------------------------------------------------------------------------------


def test_t02_saturation_and_oxyhaemoglobin_fraction_are_two_quantities() -> None:
    assert valued("2708-6", 97, "%").quantity == "so2"
    assert valued("2714-4", 97, "%").quantity == "fo2hb"
    assert refusal(coded("2708-6", "2714-4")) is Reason.CONFLICT


def test_t02_only_the_saturation_needs_carbon_monoxide_taken_off() -> None:
    """sO2 98 % with COHb 30 %, MetHb 0: FO2Hb = 0.98 x 0.70 = 68.6 % (LOINC 24336-0); Hb 15, 90 mm[Hg]."""
    blood = (observation("po2"), observation("hb", "718-7", 15, "g/dL"))
    carbon = (observation("cohb", "2030-5", 30, "%"), observation("methb", "2615-3", 0, "%"))
    by_saturation = pair(*blood, *carbon, observation("so2", "2708-6", 98, "%"))
    by_fraction = pair(*blood, observation("fo2hb", "2714-4", 68.6, "%"))
    bound = 1.39 * 15 * 0.686
    for found in (by_saturation, by_fraction):
        assert found.value(CONTENT) == pytest.approx(bound + 0.0225 * 0.133322 * 90, abs=0.05)


@pytest.mark.parametrize("code", ["51733-4", "71843-7", "2713-6"])
def test_t03_a_calculated_saturation_gives_no_content(code: str) -> None:
    saturation = observation("tested", code, 0.97, "1")
    assert reading(saturation).kind is Kind.CALCULATED
    found = pair(observation("po2"), observation("hb", "718-7", 15, "g/dL"), saturation)
    assert found.why("sao2") is not Why.KNOWN
    assert found.why(CONTENT) is not Why.KNOWN
    if code != "2713-6":  # blood of unknown kind is no arterial blood in the first place
        assert found.why(CONTENT) is Why.NOT_COMPUTED_FROM_CALCULATED


@pytest.mark.parametrize("code", ["51731-8", "51732-6", "74105-8"])
def test_t03_the_other_calculated_saturations_are_known_as_such(code: str) -> None:
    assert valued(code, 70, "%").kind is Kind.CALCULATED


# --- 4 and 5: content and venous blood ---------------------------------------------------------------------------


@pytest.mark.parametrize("code", ["59274-1", "60841-4", "64798-2", "64799-0", "57800-5"])
def test_t04_contents_by_calculation_are_read_in_their_unit(code: str) -> None:
    found = valued(code, 20, "mL/dL")
    assert (found.quantity, found.value, found.kind) == ("cto2", 20, Kind.CALCULATED)


@pytest.mark.parametrize("code", ["19218-7", "19219-5", "19220-3", "19221-1", "34163-6"])
def test_t04_the_substance_codes_are_read_by_unit(code: str) -> None:
    """22.39 mL of oxygen are one mmol (real gas, from memory): 8.932 mmol/L are 20 mL/dL."""
    assert valued(code, 20, "mL/dL").value == 20
    assert valued(code, 8.932, "mmol/L").value == pytest.approx(20, abs=0.01)
    assert refusal(observation("tested", code, 20, None)) is Reason.UNIT


def test_t05_mixed_and_central_venous_blood_are_kept_apart() -> None:
    assert valued("19224-5", 70, "%").specimen is Specimen.MIXED_VENOUS
    assert valued("97549-0", 70, "%").specimen is Specimen.CENTRAL_VENOUS
    assert refusal(coded("19224-5", "97549-0", value=70)) is Reason.CONFLICT
    found = pair(observation("a"), observation("v", "97549-0", 70, "%"), observation("hb", "718-7", 15, "g/dL"))
    assert found.anchors("central-venous") == ["v"]
    assert found.anchors("mixed-venous") == []
    assert found.why("oxygen-content-difference") is not Why.KNOWN


def test_t05_mixed_venous_by_code_alone_carries_a_caution() -> None:
    assert valued("19224-5", 70, "%").cautions & Caution.MIXED_VENOUS_UNPROVEN
    site = mapping(specimens=[{"system": "urn:example:site", "code": "pa", "specimen": "mixed_venous"}])
    proven = observation("tested", "19224-5", 70, "%", bodySite=concept(("urn:example:site", "pa")))
    assert not reading(proven, given=site).cautions & Caution.MIXED_VENOUS_UNPROVEN


def test_t05_a_site_can_say_that_its_mixed_code_means_central() -> None:
    site = mapping(codes=[{"system": LOINC, "code": "19224-5", "loinc": "97549-0"}])
    assert reading(coded("19224-5", value=70), given=site).specimen is Specimen.CENTRAL_VENOUS


# --- 6 and 7: temperature, bare fractions ------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("code", "value", "unit"), [("19255-9", 80, "mm[Hg]"), ("32771-8", 35, "mm[Hg]"), ("33254-4", 7.45, "[pH]")]
)
def test_t06_a_temperature_corrected_value_is_marked(code: str, value: float, unit: str) -> None:
    assert valued(code, value, unit).corrected


def test_t06_corrected_and_37_degree_values_never_meet() -> None:
    corrected = (observation("tcpo2", "19255-9", 80), observation("tcpco2", "32771-8", 35))
    assert pair(*corrected).anchors() == []
    found = pair(observation("po2"), *corrected, observation("fio2", "3150-0", 21, "%"))
    assert found.anchors() == ["po2"]
    assert found.why("paco2") is not Why.KNOWN
    assert found.why("alveolar-oxygen-pressure") is Why.INPUT_MISSING
    assert refusal(coded("2703-7", "19255-9", value=90, unit="mm[Hg]")) is Reason.CONFLICT


@pytest.mark.parametrize("code", ["71852-8", "71853-6", "71839-5", "71889-0", "71882-5", "71835-3", "71833-8"])
def test_t07_a_bare_fraction_needs_no_unit_and_is_no_percentage(code: str) -> None:
    assert valued(code, 0.45, None).value == 0.45
    assert valued(code, 45, "%").value == pytest.approx(0.45)
    assert refusal(observation("tested", code, 45, None)) is Reason.RANGE


@pytest.mark.parametrize(("code", "value"), [("2708-6", 97), ("2708-6", 0.97), ("4544-3", 45), ("4544-3", 0.45)])
def test_t07_other_codes_without_unit_are_quarantined_unless_a_site_signs(code: str, value: float) -> None:
    bare = observation("tested", code, value, None)
    assert refusal(bare) is Reason.UNIT
    signed = {"loinc": code, "unit": "%" if value > 1 else "1"}
    found = reading(bare, given=mapping(default_units=[{"source": "feed", **signed}]))
    assert found.value == pytest.approx(value / 100 if value > 1 else value)
    assert found.cautions & Caution.SITE_DEFAULT_UNIT
    assert refusal(bare, given=mapping(default_units=[{"source": "elsewhere", **signed}])) is Reason.UNIT


# --- 8 to 12: what a code does not say ---------------------------------------------------------------------------


@pytest.mark.parametrize("words", ["Hematocrit of Blood", "Hematocrit [Volume Fraction] of Blood by calculation", ""])
def test_t08_a_code_is_known_by_its_number_whatever_its_name(words: str) -> None:
    code = {"coding": [{"system": LOINC, "version": "2.40", "code": "20570-8", "display": words}]}
    found = reading({**observation("tested", value=45, unit="%"), "code": code})
    assert (found.quantity, found.kind) == ("hct", Kind.CALCULATED)


@pytest.mark.parametrize("code", ["110885-1", "109484-6"])
def test_t09_an_order_is_no_result(code: str) -> None:
    assert fate(observation("tested", code)) == (Bucket.OUT_OF_SCOPE, Reason.ORDER_ONLY)


@pytest.mark.parametrize("code", ["1924-0", "30318-0"])
def test_t10_a_base_deficit_is_a_negative_excess(code: str) -> None:
    found = valued(code, 8, "mmol/L")
    assert (found.quantity, found.value) == ("be_actual", -8)
    assert found.cautions & Caution.SIGN_FLIPPED
    bound = reading(observation("tested", code, None, valueQuantity=quantity(8, "mmol/L", comparator=">")))
    assert (bound.low, bound.high) == (float("-inf"), -8)


@pytest.mark.parametrize(
    ("code", "value", "unit", "expected"),
    [
        ("76534-7", 120, "mm[Hg]", 120),
        ("76535-4", 80, "mm[Hg]", 80),
        ("76536-2", 93, "mm[Hg]", 93),
        ("8791-6", 40, "mL/m2", 40),
        ("8837-7", 2000, "dyn.s.m2/cm5", 2000),
        ("8837-7", 2000, "dyn.s/cm5/m2", 2000),
    ],
)
def test_t11_example_units_of_the_code_system_are_no_rule(code: str, value: float, unit: str, expected: float) -> None:
    assert valued(code, value, unit).value == expected


def test_t11_a_cuff_pressure_in_centimetres_of_water_is_refused() -> None:
    assert refusal(observation("tested", "76534-7", 120, "cm[H2O]")) is Reason.UNIT


def test_t12_inspiratory_mean_pressure_is_not_mean_airway_pressure() -> None:
    assert valued("60952-9", 20, "cm[H2O]").quantity == "paw_mean_insp"
    assert {valued(code, 12, "cm[H2O]").quantity for code in ("60949-5", "76530-5")} == {"paw_mean"}


# --- 13 to 17: misuse --------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("code", "consumption"), [("8737-9", Why.KNOWN), ("8741-1", Why.CARDIAC_OUTPUT_METHOD)])
def test_t13_only_a_cardiac_output_of_known_method_gives_consumption(code: str, consumption: Why) -> None:
    found = pair(
        observation("pao2"),
        observation("sao2", "2708-6", 98, "%"),
        observation("hb", "718-7", 12, "g/dL"),
        observation("pvo2", "19211-2", 40),
        observation("svo2", "19224-5", 70, "%"),
        observation("co", code, 5, "L/min"),
    )
    assert found.why("oxygen-consumption") is consumption
    assert found.why("oxygen-delivery") is Why.KNOWN


def test_t13_the_code_of_a_fick_output_is_not_read() -> None:
    assert (LOINC, "8736-1") not in code_table()
    assert fate(observation("tested", "8736-1", 5, "L/min")) == (Bucket.OUT_OF_SCOPE, Reason.UNMAPPED_CODE)


def test_t14_a_code_for_fraction_or_pressure_is_read_by_its_unit() -> None:
    assert valued("62274-6", 40, "%").quantity == "fio2"
    assert refusal(observation("tested", "62274-6", 40, "kPa")) is Reason.UNIT


def test_t15_inspired_oxygen_and_flow_inside_pulse_oximetry_are_taken_out() -> None:
    """US Core pulse oximetry: 3150-0 and 3151-8 as components; room air is a flow of 0 L/min."""
    whole = {
        **coded("59408-5", "2708-6", value=94, category="vital-signs"),
        "component": [component("3150-0", 21, "%"), component("3151-8", 0, "L/min")],
    }
    found = seen(take(whole))
    assert [(one.quantity, one.part) for one in found] == [("spo2", -1), ("fio2", 0), ("o2_flow", 1)]
    assert [one.value for one in found] == pytest.approx([0.94, 0.21, 0])


@pytest.mark.parametrize(
    ("code", "value", "unit"), [("60842-2", 35, "mL/kg/min"), ("60842-2", 35, "mL/(kg.min)"), ("20562-5", 5, "L/min")]
)
def test_t16_a_quantity_of_another_dimension_is_quarantined(code: str, value: float, unit: str) -> None:
    assert refusal(observation("tested", code, value, unit)) is Reason.UNIT


@pytest.mark.parametrize(
    ("code", "value", "unit"), [("3150-0", 4, "L/min"), ("3151-8", 40, "%"), ("3151-8", 0.4, "1")]
)
def test_t17_swapped_codes_of_fraction_and_flow_are_quarantined(code: str, value: float, unit: str) -> None:
    assert refusal(observation("tested", code, value, unit)) is Reason.UNIT


def test_every_trap_has_its_test() -> None:
    traps = {int(found[1]) for name in globals() if (found := re.match(r"test_t(\d\d)_", name))}
    assert traps == set(range(1, 18))

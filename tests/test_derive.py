"""Derived values at anchors: what guards them, what cautions they carry, which basis they have, how bounds travel.

Limits are those of the validity table that the project adopted (design proposals); numbers are by definition, written
out beside each check.
"""

from __future__ import annotations

from typing import Any

import pytest

from fhiro2.model import Caution, Why
from fhiro2.settings import Settings
from tests.feeds import SITE, Paired, concept, mapping, observation, pair, patient

Resource = dict[str, Any]
MINUTE = 60
ADULT = patient(birthDate="1960-02-01")
CONTENT, DIFFERENCE, EXTRACTION = "oxygen-content-arterial", "oxygen-content-difference", "oxygen-extraction-ratio"
DELIVERY, UPTAKE, EXCESS = "oxygen-delivery", "oxygen-consumption", "oxygen-extraction-excess"
PREDICTED, GAP, PULSE_GAP = "saturation-predicted", "saturation-gap-measured", "saturation-gap-pulse"


def arterial(**changes: Resource | None) -> list[Resource]:
    """Hb 15 g/dL, measured saturation 96 %, 90 mm[Hg]; a part given as None is left out."""
    parts: dict[str, Resource | None] = {
        "po2": observation("po2", value=90),
        "so2": observation("so2", "2708-6", 92, "%"),
        "hb": observation("hb", "14775-1", 15, "g/dL"),
        **changes,
    }
    return [part for part in parts.values() if part is not None]


def venous(saturation: float = 70, **changes: Resource | None) -> list[Resource]:
    parts: dict[str, Resource | None] = {
        "vpo2": observation("vpo2", "19211-2", 38, "mm[Hg]", MINUTE),
        "vso2": observation("vso2", "19224-5", saturation, "%", MINUTE),
        **changes,
    }
    return [part for part in parts.values() if part is not None]


FLOW = observation("co", "8737-9", 5, "L/min", category="vital-signs")


def made(*resources: Resource, **how: Any) -> Paired:
    return pair(*resources, ADULT, **how)


def fact(code: str, fact: str, refuted: bool = False) -> tuple[Resource, Any]:
    site = mapping(facts=[{"system": SITE, "code": code, "fact": fact}])
    stated = {
        "resourceType": "Condition",
        "id": code,
        "code": concept((SITE, code)),
        "subject": {"reference": "Patient/p1"},
        "verificationStatus": concept(("urn:v", "refuted" if refuted else "confirmed")),
    }
    return stated, site


# --- basis -------------------------------------------------------------------------------------------------------


def test_saturation_alone_pairs_with_the_smaller_constant_and_a_caution() -> None:
    """1.34 x 15 x 0.92 + 0.0225 x 0.133322 x 90 = 18.49 + 0.27 = 18.8 mL/dL."""
    found = made(*arterial())
    assert found.value(CONTENT) == 18.8
    assert found.cautions(CONTENT) & Caution.INACTIVE_HAEMOGLOBIN_UNKNOWN


def test_fractions_pair_with_the_larger_constant() -> None:
    """1.39 x 15 x 0.92 x (1 - 0.02 - 0.01) + 0.27 = 18.61 + 0.27 = 18.9 mL/dL."""
    cohb, methb = observation("cohb", "2030-5", 2, "%"), observation("methb", "2615-3", 1, "%")
    found = made(*arterial(cohb=cohb, methb=methb))
    assert found.value(CONTENT) == 18.9
    assert not found.cautions(CONTENT) & Caution.INACTIVE_HAEMOGLOBIN_UNKNOWN


def test_oxyhaemoglobin_fraction_is_used_as_it_is() -> None:
    """1.39 x 15 x 0.90 + 0.27 = 18.77 + 0.27 = 19.0 mL/dL."""
    found = made(*arterial(so2=None, fo2hb=observation("fo2hb", "2714-4", 90, "%")))
    assert found.value(CONTENT) == 19.0
    assert found.column(CONTENT).constants.tolist() == [1]  # type: ignore[union-attr]


def test_a_pair_on_two_bases_is_refused() -> None:
    only_fraction = arterial(so2=None, fo2hb=observation("fo2hb", "2714-4", 90, "%"))
    found = made(*only_fraction, *venous())
    assert found.why(EXTRACTION) is Why.DIFFERENT_BASIS
    assert found.why(CONTENT) is Why.KNOWN


def test_one_set_of_fractions_serves_both_sides() -> None:
    """1 - (1.39 x 15 x 0.7 x 0.9 + 0.114) / (1.39 x 15 x 0.92 x 0.9 + 0.270) = 1 - 13.25 / 17.53 = 0.24."""
    cohb, methb = observation("cohb", "2030-5", 10, "%"), observation("methb", "2615-3", 0, "%")
    assert made(*arterial(cohb=cohb, methb=methb), *venous()).value(EXTRACTION) == 0.24


# --- what a pair needs -------------------------------------------------------------------------------------------


def test_a_pair_gives_difference_extraction_and_with_flow_uptake() -> None:
    """Contents 18.76 and 14.18 mL/dL: difference 4.6, extraction 0.24, delivery 938, uptake 229 mL/min at 5 L/min."""
    found = made(*arterial(), *venous(), FLOW)
    assert (found.value(DIFFERENCE), found.value(EXTRACTION)) == (4.6, 0.24)
    assert found.value(DELIVERY) == pytest.approx(938, abs=1)
    assert found.value(UPTAKE) == pytest.approx(229, abs=1)
    assert found.cautions(EXTRACTION) & Caution.CONTEXT_UNKNOWN


@pytest.mark.parametrize(("saturation", "why"), [(92.5, Why.KNOWN), (97, Why.NO_POSITIVE_DIFFERENCE)])
def test_without_a_positive_difference_nothing_follows(saturation: float, why: Why) -> None:
    found = made(*arterial(), *venous(saturation), FLOW)
    assert found.why(EXTRACTION) is why
    assert found.why(UPTAKE) is found.why(EXCESS) is (Why.UNCERTAIN_DIFFERENCE if why is Why.KNOWN else why)


def test_a_difference_within_its_doubt_gives_a_bound_and_no_uptake() -> None:
    found = made(*arterial(), *venous(91), FLOW)
    column = found.column(EXTRACTION)
    assert column.low.tolist() == [0.0]
    assert 0 < column.high[0] < 0.1
    assert found.cautions(EXTRACTION) & Caution.LOW_DIFFERENCE
    assert found.why(UPTAKE) is found.why(EXCESS) is Why.UNCERTAIN_DIFFERENCE
    assert found.why(DELIVERY) is Why.KNOWN


@pytest.mark.parametrize(("haemoglobin", "apart"), [(14.2, False), (13.9, True)])
def test_haemoglobins_more_than_six_percent_apart_are_no_pair(haemoglobin: float, apart: bool) -> None:
    other = observation("vhb", "76768-1", haemoglobin, "g/dL", MINUTE)
    found = made(*arterial(), *venous(vhb=other))
    assert found.why(DIFFERENCE) is (Why.HAEMOGLOBINS_APART if apart else Why.KNOWN)


@pytest.mark.parametrize("name", ["ecmo", "intracardiac-shunt"])
def test_support_and_lesions_exclude_what_they_distort(name: str) -> None:
    stated, site = fact("X", name)
    found = made(*arterial(), *venous(), FLOW, stated, given=site)
    assert found.why(EXTRACTION) is found.why(UPTAKE) is found.why(EXCESS) is Why.CONTEXT_EXCLUDES
    assert found.why(CONTENT) is found.why(DELIVERY) is Why.KNOWN


def test_a_fact_stated_not_to_be_is_no_unknown() -> None:
    ecmo, _ = fact("E", "ecmo", refuted=True)
    shunt, _ = fact("S", "intracardiac-shunt", refuted=True)
    site = mapping(
        facts=[
            {"system": SITE, "code": "E", "fact": "ecmo"},
            {"system": SITE, "code": "S", "fact": "intracardiac-shunt"},
        ]
    )
    found = made(*arterial(), *venous(), ecmo, shunt, given=site)
    assert not found.cautions(EXTRACTION) & Caution.CONTEXT_UNKNOWN
    assert made(*arterial(), *venous(), ecmo, given=site).cautions(EXTRACTION) & Caution.CONTEXT_UNKNOWN


def test_cardiac_output_of_unknown_method_gives_delivery_and_no_uptake() -> None:
    flow = observation("co", "8741-1", 5, "L/min", category="vital-signs")
    found = made(*arterial(), *venous(), flow)
    assert found.why(UPTAKE) is Why.CARDIAC_OUTPUT_METHOD
    assert found.cautions(DELIVERY) & Caution.CARDIAC_OUTPUT_METHOD_UNKNOWN


def test_central_venous_blood_has_its_own_values_and_never_mixed_ones() -> None:
    central = [
        observation("cso2", "97549-0", 75, "%", MINUTE),
        observation("cpo2", "11556-8", 40, "mm[Hg]", MINUTE, specimen={"reference": "Specimen/c"}),
        {
            "resourceType": "Specimen",
            "id": "c",
            "collection": {"bodySite": concept((SITE, "cvc"))},
            "subject": {"reference": "Patient/p1"},
        },
    ]
    site = mapping(specimens=[{"system": SITE, "code": "cvc", "specimen": "central_venous"}])
    found = made(*arterial(), *central, FLOW, given=site)
    assert found.why(EXTRACTION) is found.why(UPTAKE) is found.why(EXCESS) is Why.INPUT_MISSING
    assert found.cautions(f"{EXTRACTION}-central") & Caution.CENTRAL_NOT_MIXED


def test_the_same_haemoglobin_counts_once_in_the_doubt_of_an_extraction() -> None:
    """u(Sa) = u(Sv) = 0.01: about hypot(0.65 / 0.92^2, 1 / 0.92) x 0.01 = 0.0133; Hb and constants nearly cancel."""
    column = made(
        *arterial(
            po2=observation("po2", value=80), so2=observation("so2", "2708-6", 92, "%"),
            hb=observation("hb", "14775-1", 10, "g/dL"),
        ),
        *venous(65),
    ).column(EXTRACTION)  # fmt: skip
    assert column.uncertainty[0] == pytest.approx(0.0133, abs=0.0003)


# --- extraction against what is expected -------------------------------------------------------------------------


def gas(pressure: float, unit: str = "mm[Hg]", **changes: Resource | None) -> list[Resource]:
    """A sample at 37 Cel, pH 7.40 and 5.33 kPa of carbon dioxide, where the curve has its standard p50."""
    parts: dict[str, Resource | None] = {
        "po2": observation("po2", value=pressure, unit=unit),
        "ph": observation("ph", "2744-1", 7.40, "[pH]"),
        "pco2": observation("pco2", "2019-8", 5.33, "kPa"),
        **changes,
    }
    return [part for part in parts.values() if part is not None]


@pytest.mark.parametrize(("haemoglobin", "excess"), [((6.5, "g/dL"), 0.05), ((65, "g/L"), 0.05), ((14, "g/dL"), 0.31)])
@pytest.mark.parametrize("pressure", [(95, "mm[Hg]"), (12.67, "kPa")])
def test_one_venous_saturation_is_an_excess_at_one_haemoglobin_and_not_at_another(
    haemoglobin: tuple[float, str], excess: float, pressure: tuple[float, str]
) -> None:
    """98 and 45 %. Hb 6.5: (8.821 - 4.034) / 8.821 - 130 / (30 x 8.821) = 0.543 - 0.491 = 0.05 (definition).

    Hb 14: (18.67 - 8.556) / 18.67 - 130 / (30 x 18.67) = 0.542 - 0.232 = 0.31.
    """
    found = made(
        *arterial(
            po2=observation("po2", "2703-7", *pressure),
            so2=observation("so2", "2708-6", 98, "%"),
            hb=observation("hb", "14775-1", *haemoglobin),
        ),
        *venous(45),
    )
    assert found.value(EXCESS) == excess
    assert found.cautions(EXCESS) == found.cautions(EXTRACTION)
    assert found.cautions(EXCESS) & Caution.CONTEXT_UNKNOWN


def test_the_doubt_of_an_excess_counts_the_arterial_content_once() -> None:
    """Excess = 1 - (Cv + 4.333) / Ca: with Hb 10, 92 and 65 % it is -0.047, and by Sa, Sv and Hb (u 0.01, 0.01, 0.2):

    Ca = 1.34 x 9.2 + 0.24 = 12.57, Cv = 8.71 + 0.11 = 8.82; d/dSa = 13.4 x 13.16 / 12.57^2 = 1.116,
    d/dSv = -13.4 / 12.57 = -1.066, d/dHb = -(0.871 x 12.57 - 1.233 x 13.16) / 12.57^2 = 0.0334; so 0.0168, and the
    binding constant (u 0.0144) adds what Hb would at 10 x 0.0144 / 1.34: 0.0036. Together 0.0172.
    """
    column = made(
        *arterial(
            po2=observation("po2", value=80), so2=observation("so2", "2708-6", 92, "%"),
            hb=observation("hb", "14775-1", 10, "g/dL"),
        ),
        *venous(65),
    ).column(EXCESS)  # fmt: skip
    assert column.value[0] == pytest.approx(-0.05, abs=0.001)
    assert column.uncertainty[0] == pytest.approx(0.0172, abs=0.0002)


@pytest.mark.parametrize("born", [{"birthDate": "2008-03-02"}, {}])
def test_what_is_expected_holds_for_adults(born: dict[str, str]) -> None:
    found = pair(*arterial(), *venous(), patient(**born))
    assert found.why(EXCESS) is Why.AGE_EXCLUDES
    assert found.why(EXTRACTION) is Why.KNOWN


# --- ranges and ages ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("flow", "why"), [(0.45, Why.OUT_OF_RANGE), (0.5, Why.KNOWN), (20.5, Why.OUT_OF_RANGE)])
def test_flows_outside_the_range_are_not_computed_from(flow: float, why: Why) -> None:
    assert made(*arterial(), observation("co", "8737-9", flow, "L/min")).why(DELIVERY) is why


@pytest.mark.parametrize(("born", "why"), [("2008-03-02", Why.AGE_EXCLUDES), ("2008-02-28", Why.KNOWN)])
def test_body_surface_is_for_adults(born: str, why: Why) -> None:
    body = [observation("w", "29463-7", 70, "kg"), observation("h", "8302-2", 170, "cm")]
    found = pair(*body, patient(birthDate=born))
    assert found.why("body-surface-area", "body") is why
    assert pair(*body).why("body-surface-area", "body") is Why.AGE_EXCLUDES


def test_body_surface_by_du_bois() -> None:
    """0.007184 x 70^0.425 x 170^0.725 = 1.81 m2 (Du Bois 1916, from memory)."""
    found = made(observation("w", "29463-7", 70, "kg"), observation("h", "8302-2", 170, "cm"))
    assert found.value("body-surface-area", "body") == 1.81


# --- gas exchange ------------------------------------------------------------------------------------------------

AIR = observation("fio2", "3150-0", 40, "%")
CARBON = observation("pco2", "2019-8", 40, "mm[Hg]")


def test_alveolar_pressure_and_gradient_with_assumed_pressure() -> None:
    """0.4 x (760 - 47.12) - 40 x (0.4 + 0.6 / 0.8) = 285.2 - 46.0 = 239 mm[Hg]; gradient 239.2 - 90 = 149."""
    found = made(*arterial(), AIR, CARBON)
    assert (found.value("alveolar-oxygen-pressure"), found.value("alveolar-arterial-gradient")) == (239, 149)
    assert found.value("pf-ratio") == 225
    assert found.cautions("alveolar-oxygen-pressure") == Caution.PRESSURE_ASSUMED | Caution.QUOTIENT_ASSUMED


def test_the_site_s_pressure_and_a_measured_one_come_before_sea_level() -> None:
    """At 80 kPa = 600 mm[Hg]: 0.4 x (600.05 - 47.12) - 46.0 = 175 mm[Hg]."""
    high = Settings(station_pressure_kpa=80.0)
    assert made(*arterial(), AIR, CARBON, settings=high).value("alveolar-oxygen-pressure") == 175
    measured = observation("pb", "76268-2", 80, "kPa")
    found = made(*arterial(), AIR, CARBON, measured)
    assert found.value("alveolar-oxygen-pressure") == 175
    assert not found.cautions("alveolar-oxygen-pressure") & Caution.PRESSURE_ASSUMED
    assert found.cautions("pf-ratio") & Caution.LOW_BAROMETER


def test_a_negative_gradient_is_a_doubt_of_the_data() -> None:
    found = made(*arterial(po2=observation("po2", value=300)), AIR, CARBON)
    assert found.value("alveolar-arterial-gradient") < -5
    assert found.cautions("alveolar-arterial-gradient") & Caution.NEGATIVE_GRADIENT


def test_assumptions_can_be_switched_off() -> None:
    strict = Settings(assume_respiratory_quotient=False, assume_dpg=False)
    found = made(*arterial(), AIR, CARBON, settings=strict)
    assert found.why("alveolar-oxygen-pressure") is found.why("saturation-predicted") is Why.INPUT_MISSING


@pytest.mark.parametrize(("saturation", "why"), [(97, Why.KNOWN), (98, Why.SATURATION_TOO_HIGH)])
def test_pulse_ratio_up_to_97_percent(saturation: float, why: Why) -> None:
    """S/F at 97 % and 40 % is 97 / 0.4 = 242."""
    pulse = observation("spo2", "59408-5", saturation, "%", category="vital-signs")
    found = made(pulse, AIR)
    assert found.why("sf-ratio", "pulse-oximetry") is why
    if why is Why.KNOWN:
        assert found.value("sf-ratio", "pulse-oximetry") == 242


def test_a_sample_that_may_be_venous_gives_no_gas_exchange_or_delivery() -> None:
    doubtful = arterial(po2=observation("po2", value=40), so2=observation("so2", "2708-6", 70, "%"))
    pulse = observation("spo2", "59408-5", 97, "%", category="vital-signs")
    found = made(*doubtful, AIR, CARBON, pulse, FLOW)
    for code in ("alveolar-arterial-gradient", "pf-ratio", DELIVERY):
        assert found.why(code) is Why.SUSPECT_SAMPLE
    assert found.cautions("pao2") & Caution.SUSPECT_VENOUS
    assert made(*doubtful, AIR, CARBON, FLOW).why("pf-ratio") is Why.KNOWN


def test_predicted_saturation_at_standard_conditions() -> None:
    """P50 of standard adult blood is 3.578 kPa = 26.84 mm[Hg] (Siggaard-Andersen 1990): half saturated there."""
    parts = [
        observation("po2", value=26.84), observation("ph", "2744-1", 7.40, "[pH]"),
        observation("pco2", "2019-8", 5.33, "kPa"),
    ]  # fmt: skip
    found = made(*parts)
    assert found.value("saturation-predicted") == pytest.approx(50, abs=0.1)
    assert found.cautions("saturation-predicted") & Caution.SHIFT_ASSUMED


def test_an_infant_s_saturation_is_not_predicted() -> None:
    found = pair(observation("po2"), patient(birthDate="2026-01-10"))
    assert found.why("saturation-predicted") is Why.AGE_EXCLUDES


# --- saturation against its prediction ---------------------------------------------------------------------------


def saturated(percent: float) -> Resource:
    return observation("so2", "2708-6", percent, "%")


def pulse(percent: float, seconds: float = 0) -> Resource:
    return observation("spo2", "59408-5", percent, "%", seconds, category="vital-signs")


@pytest.mark.parametrize("pressure", [(3.578, "kPa"), (26.84, "mm[Hg]")])
def test_gaps_are_what_was_measured_less_what_the_curve_says(pressure: tuple[float, str]) -> None:
    """Half saturated at the standard p50, 3.578 kPa (Siggaard-Andersen 1990): 42 - 50 = -8, 45 - 50 = -5 points."""
    found = made(*gas(*pressure), saturated(42), pulse(45))
    assert found.value(GAP) == pytest.approx(-8, abs=0.1)
    assert found.value(PULSE_GAP) == pytest.approx(-5, abs=0.1)
    assert found.cautions(GAP) & Caution.SHIFT_ASSUMED


@pytest.mark.parametrize(("code", "doubt"), [(GAP, 1.0), (PULSE_GAP, 4.0)])
def test_the_doubt_of_a_gap_is_that_of_both_its_sides(code: str, doubt: float) -> None:
    """They share no input: u^2 = u^2(measured) + u^2(predicted) (JCGM 100:2008, eq. 10); 1 point, SpO2 4 points."""
    found = made(*gas(60), saturated(80), pulse(82))
    predicted = float(found.column(PREDICTED).uncertainty[0])
    assert predicted > 0.5
    assert found.column(code).uncertainty[0] == pytest.approx((doubt**2 + predicted**2) ** 0.5, rel=1e-9)


@pytest.mark.parametrize(
    "only",
    [observation("curve", "51733-4", 80, "%"), saturated(50)],
    ids=["calculated by its code", "as the curve says"],
)
def test_a_calculated_saturation_has_no_gap(only: Resource) -> None:
    found = made(*gas(26.84), only, pulse(60))
    assert found.why(GAP) is Why.NOT_COMPUTED_FROM_CALCULATED
    assert found.why(PULSE_GAP) is Why.KNOWN


@pytest.mark.parametrize(
    ("parts", "gap", "pulse_gap"),
    [
        ([*gas(701), saturated(90), pulse(90)], Why.OUT_OF_RANGE, Why.OUT_OF_RANGE),
        ([*gas(700), saturated(90), pulse(90)], Why.KNOWN, Why.KNOWN),
        ([saturated(90), pulse(90)], Why.INPUT_MISSING, Why.INPUT_MISSING),
        ([*gas(90), pulse(90)], Why.INPUT_MISSING, Why.KNOWN),
        ([*gas(90), saturated(90)], Why.KNOWN, Why.INPUT_MISSING),
        ([*gas(90), pulse(90, 120)], Why.INPUT_MISSING, Why.KNOWN),
        ([*gas(90), pulse(90, 121)], Why.INPUT_MISSING, Why.INPUT_MISSING),
        ([*gas(40), saturated(70), pulse(97)], Why.SUSPECT_SAMPLE, Why.SUSPECT_SAMPLE),
    ],
    ids=["too high", "just not", "no pressure", "SpO2 alone", "no SpO2", "near", "not near", "perhaps venous"],
)
def test_what_a_gap_needs(parts: list[Resource], gap: Why, pulse_gap: Why) -> None:
    found = made(*parts)
    assert (found.why(GAP), found.why(PULSE_GAP)) == (gap, pulse_gap)


def test_a_saturation_whose_sample_does_not_add_up_has_no_gap() -> None:
    fractions = [
        observation("fo2hb", "2714-4", 80, "%"), observation("cohb", "2030-5", 2, "%"),
        observation("methb", "2615-3", 1, "%"),
    ]  # fmt: skip
    found = made(*gas(90), saturated(90), *fractions, pulse(90))
    assert found.why(GAP) is Why.SUSPECT_SAMPLE
    assert found.why(PULSE_GAP) is Why.KNOWN


def test_without_a_prediction_there_is_no_gap() -> None:
    found = made(*gas(90), saturated(90), pulse(90), settings=Settings(assume_dpg=False))
    assert found.why(GAP) is found.why(PULSE_GAP) is Why.INPUT_MISSING
    infant = pair(*gas(90), saturated(90), pulse(90), patient(birthDate="2026-01-10"))
    assert infant.why(GAP) is infant.why(PULSE_GAP) is Why.AGE_EXCLUDES


# --- bounds ------------------------------------------------------------------------------------------------------


def bound(name: str, code: str, value: float, unit: str, comparator: str) -> Resource:
    made_up = observation(name, code, value, unit)
    made_up["valueQuantity"]["comparator"] = comparator
    return made_up


def test_a_bound_travels_through_the_formula() -> None:
    """PaO2 > 500 mm[Hg] at 40 %: P/F is at least 500 / 0.4 = 1250; below 50: between 0 and 125."""
    column = made(bound("po2", "2703-7", 500, "mm[Hg]", ">"), AIR).column("pf-ratio")
    assert (column.low[0], column.high[0]) == (1250, float("inf"))
    column = made(bound("po2", "2703-7", 50, "mm[Hg]", "<"), AIR).column("pf-ratio")
    assert (column.low[0], column.high[0]) == (0, 125)


def test_a_bound_of_the_measured_saturation_bounds_the_gap() -> None:
    """Below 42 % at the standard p50, where 50 % are predicted: between -50 and -8 points."""
    column = made(*gas(26.84), bound("so2", "2708-6", 42, "%", "<")).column(GAP)
    assert column.low[0] == pytest.approx(-50, abs=0.1)
    assert column.high[0] == pytest.approx(-8, abs=0.1)


def test_too_many_bounds_give_no_value() -> None:
    parts = [
        bound("po2", "2703-7", 90, "mm[Hg]", ">"), bound("so2", "2708-6", 92, "%", ">"),
        bound("hb", "14775-1", 15, "g/dL", "<"), bound("cohb", "2030-5", 2, "%", "<"),
        bound("methb", "2615-3", 1, "%", "<"), bound("vpo2", "19211-2", 38, "mm[Hg]", "<"),
        bound("vso2", "19224-5", 70, "%", "<"),
    ]  # fmt: skip
    assert made(*parts).why(EXTRACTION) is Why.UNBOUNDED

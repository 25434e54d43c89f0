"""The formulas as physiology wants them: directions, inverses, and second computations by general libraries."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from iapws import IAPWS97
from scipy.optimize import brentq
from scipy.stats import norm
from uncertainties import ufloat

from fhiro2 import normal
from fhiro2.derive import alveolar, dissociation, oxygen_content, transport, uncertainty
from fhiro2.derive.constants import BINDING_OXYHAEMOGLOBIN, BINDING_TOTAL, KILOPASCAL_PER_MMHG, SOLUBILITY

SOLUBILITY_0_0031 = 0.0031 / KILOPASCAL_PER_MMHG.value
"""The older 0.0031 mL/dL/mm[Hg], which the worked figures use, in the unit of ``content``."""


def number(low, high):
    return st.floats(low, high, allow_nan=False)


PO2 = number(5, 150)
SHIFTS = st.tuples(number(6.9, 7.7), number(15, 100), number(30, 42), number(2, 8))
FRACTIONS = st.tuples(number(0, 0.5), number(0, 0.3), number(0, 1))
STANDARD = (7.40, 40.0, 37.0, 5.0, 0.0, 0.0, 0.0)


def standard_with(**changes):
    names = ("ph", "pco2", "temperature", "dpg", "cohb", "methb", "hbf")
    return tuple(changes.get(name, value) for name, value in zip(names, STANDARD, strict=True))


# The dissociation curve


@given(PO2, SHIFTS, FRACTIONS)
def test_curve_and_inverse_are_a_pair(po2, shifts, fractions):
    saturation = dissociation.saturation(po2, *shifts, *fractions)
    assert dissociation.pressure(saturation, *shifts, *fractions) == pytest.approx(po2, rel=1e-9)


@given(number(0.05, 0.99), SHIFTS, FRACTIONS)
def test_inverse_and_curve_are_a_pair(saturation, shifts, fractions):
    po2 = dissociation.pressure(saturation, *shifts, *fractions)
    assert dissociation.saturation(po2, *shifts, *fractions) == pytest.approx(saturation, abs=1e-12)


@given(PO2, number(1.001, 3), SHIFTS, FRACTIONS)
def test_saturation_rises_with_pressure_and_stays_a_fraction(po2, times, shifts, fractions):
    lower = dissociation.saturation(po2, *shifts, *fractions)
    higher = dissociation.saturation(po2 * times, *shifts, *fractions)
    assert 0 < lower < higher < 1


@given(PO2, number(0.01, 1))
@pytest.mark.parametrize(
    ("name", "standard", "direction", "reach"),
    [
        ("ph", 7.40, +1, 0.4),
        ("pco2", 40.0, -1, 40.0),
        ("temperature", 37.0, -1, 5.0),
        ("dpg", 5.0, -1, 3.0),
        ("hbf", 0.0, +1, 1.0),
        ("methb", 0.0, +1, 0.3),
    ],
)
def test_shifts_go_the_known_way(name, standard, direction, reach, po2, part):
    """Right by acid, carbon dioxide, warmth and DPG; left by fetal haemoglobin and methaemoglobin (textbook)."""
    moved = dissociation.saturation(po2, *standard_with(**{name: standard + reach * part}))
    assert direction * (moved - dissociation.saturation(po2, *STANDARD)) > 0


@given(number(0, 0.5), number(0.01, 0.2))
def test_carbon_monoxide_lowers_p50(cohb, more):
    first = dissociation.pressure(0.5, *standard_with(cohb=cohb))
    second = dissociation.pressure(0.5, *standard_with(cohb=cohb + more))
    assert second < first


@given(number(0.05, 0.4), number(0.01, 0.3), number(10, 60))
def test_carbon_monoxide_counts_against_active_haemoglobin_only(cohb, methb, po2):
    """Second computation with SciPy; trap: a public copy computes FCOHb/1 - FMetHb for FCOHb/(1 - FMetHb)."""
    share = cohb / (1 - methb)

    def imbalance(oxygen):
        combined = oxygen + share * (1 - oxygen)
        both = po2 * combined / (combined - share)
        return combined - dissociation.saturation(both, *standard_with(methb=methb))

    expected = brentq(imbalance, 1e-6, 1 - 1e-12, xtol=1e-13)
    ours = dissociation.saturation(po2, *standard_with(cohb=cohb, methb=methb))
    assert ours == pytest.approx(expected, abs=1e-9)


def test_arrays_give_what_single_rows_give_also_where_only_some_hold_carbon_monoxide():
    po2, cohb = np.array([30.0, 60.0, 90.0]), np.array([0.0, 0.2, 0.0])
    together = dissociation.saturation(po2, *standard_with(cohb=cohb))
    alone = [float(dissociation.saturation(p, *standard_with(cohb=c))) for p, c in zip(po2, cohb, strict=True)]
    assert together.tolist() == alone


def test_no_value_where_an_input_is_unknown_or_impossible():
    unknown = dissociation.saturation(np.array([np.nan, 0.0, -5.0, 90.0]), *STANDARD)
    assert np.isnan(unknown).tolist() == [True, True, True, False]
    for position in range(len(STANDARD)):
        shifts = [np.nan if number == position else value for number, value in enumerate(STANDARD)]
        assert np.isnan(dissociation.saturation(60.0, *shifts))
        assert np.isnan(dissociation.pressure(0.5, *shifts))
    assert np.isnan(dissociation.pressure(np.array([0.0, 1.0, np.nan]), *STANDARD)).all()
    assert np.isnan(dissociation.ellis(np.array([0.0, 1.0, np.nan]))).all()


@given(number(1, 600))
def test_ellis_is_the_exact_inverse_of_severinghaus(po2):
    """The paper's own eq. 2 is not: it returns 7.918 kPa for 8.000."""
    assert dissociation.ellis(dissociation.severinghaus(po2)) == pytest.approx(po2, rel=1e-9)


# Content and transport


@given(number(2, 20), number(0.1, 0.9), number(0, 0.4), number(20, 400), number(1.01, 1.1))
def test_content_rises_with_haemoglobin_saturation_and_pressure(hb, saturation, inactive, po2, times):
    def carried(hb, saturation, inactive, po2):
        return oxygen_content.content(BINDING_OXYHAEMOGLOBIN.value, hb, saturation, inactive, SOLUBILITY.value, po2)

    base = carried(hb, saturation, inactive, po2)
    assert carried(hb * times, saturation, inactive, po2) > base
    assert carried(hb, saturation * times, inactive, po2) > base
    assert carried(hb, saturation, inactive, po2 * times) > base
    assert carried(hb, saturation, inactive + 0.05, po2) < base


@given(number(2, 20), number(0.1, 1), number(0, 0.4), number(20, 400))
def test_inactive_haemoglobin_is_taken_off_once(hb, functional, inactive, po2):
    """Functional saturation with COHb + MetHb is the same blood as its oxyhaemoglobin fraction alone (definition)."""
    binding = BINDING_OXYHAEMOGLOBIN.value
    by_parts = oxygen_content.content(binding, hb, functional, inactive, SOLUBILITY.value, po2)
    by_fraction = oxygen_content.content(binding, hb, functional * (1 - inactive), 0, SOLUBILITY.value, po2)
    assert by_parts == pytest.approx(by_fraction, rel=1e-12)


def test_the_lower_binding_constant_already_holds_the_deduction():
    """1.34/1.39 = 0.964: a deduction of 3.6 % (common practice)."""
    assert BINDING_TOTAL.value / BINDING_OXYHAEMOGLOBIN.value == pytest.approx(0.964, abs=0.0005)


def test_the_solubility_is_not_the_other_convention():
    """0.0225 mL/dL/kPa is 0.0030 mL/dL/mm[Hg]; 0.0031 goes with 0.02325 (definition of the unit)."""
    assert SOLUBILITY.value * KILOPASCAL_PER_MMHG.value == pytest.approx(0.0030, abs=0.00005)


@given(number(0.5, 20), number(5, 25), number(0.1, 0.9))
def test_consumption_is_extraction_of_delivery(cardiac_output, arterial, part):
    venous = arterial * part
    delivered = transport.delivery(cardiac_output, arterial)
    consumed = transport.consumption(cardiac_output, arterial - venous)
    assert consumed == pytest.approx(delivered * transport.extraction_ratio(arterial, venous), rel=1e-12)


@given(number(5, 25))
def test_ordinary_flow_and_consumption_are_no_excess_at_any_content(arterial):
    """130 mL/min/m2 taken from 3.0 L/min/m2 leave 130 / (10 x 3.0) = 4.333 mL/dL less in venous blood (Fick)."""
    assert transport.extraction_excess(arterial, arterial - 130 / 30) == pytest.approx(0, abs=1e-12)


@pytest.mark.parametrize(("hb", "expected"), [(6.5, 0.49), (10, 0.32), (14, 0.23)])
def test_what_extraction_low_haemoglobin_alone_explains(hb, expected):
    """Worked figures, rounded: 1.34 mL/g, 95 mm[Hg], saturation 0.9739 there by Severinghaus 1979, eq. 1."""
    arterial = oxygen_content.content(1.34, hb, 0.9739, 0, SOLUBILITY_0_0031, 95)
    everything = transport.extraction_excess(arterial, 0 * arterial)
    assert 1 - everything == pytest.approx(expected, abs=0.005)


# Gas exchange


@pytest.mark.parametrize("temperature", np.arange(25.0, 41.5, 0.5))
def test_water_vapour_against_the_steam_tables(temperature):
    steam_table = IAPWS97(T=temperature + 273.15, x=0).P * 1000 / 0.1333224
    assert alveolar.water_vapour(temperature) == pytest.approx(steam_table, abs=0.03)


@given(number(0.21, 0.9), number(500, 780), number(20, 80), number(0.7, 0.99), number(30, 41), number(30, 500))
def test_gradient_moves_with_its_inputs(fio2, barometric, paco2, quotient, temperature, pao2):
    base = alveolar.gradient(fio2, barometric, paco2, quotient, temperature, pao2)
    assert alveolar.gradient(fio2 + 0.05, barometric, paco2, quotient, temperature, pao2) > base
    assert alveolar.gradient(fio2, barometric + 10, paco2, quotient, temperature, pao2) > base
    assert alveolar.gradient(fio2, barometric, paco2 + 5, quotient, temperature, pao2) < base
    assert alveolar.gradient(fio2, barometric, paco2, quotient + 0.01, temperature, pao2) > base
    assert alveolar.gradient(fio2, barometric, paco2, quotient, temperature + 1, pao2) < base
    assert alveolar.gradient(fio2, barometric, paco2, quotient, temperature, pao2 + 5) == pytest.approx(base - 5)


@given(number(0, 8), number(0.01, 1))
def test_pressure_falls_with_altitude(altitude, higher):
    assert alveolar.pressure_at_altitude(altitude + higher) < alveolar.pressure_at_altitude(altitude)


# Uncertainty. Second computation: the uncertainties package, exact derivatives on the equations written out again.

HB, SAO2, SVO2 = ufloat(10, 0.2), ufloat(0.95, 0.01), ufloat(0.65, 0.015)
PAO2, PVO2, FLOW = ufloat(80, 3), ufloat(36, 1.5), ufloat(5, 0.5)
CAO2 = 1.34 * HB * SAO2 + 0.0031 * PAO2
CVO2 = 1.34 * HB * SVO2 + 0.0031 * PVO2
INPUTS = (HB, SAO2, SVO2, PAO2, PVO2, FLOW)


def carried(hb, saturation, po2):
    return oxygen_content.content(1.34, hb, saturation, 0, SOLUBILITY_0_0031, po2)


def arterial(hb, sao2, svo2, pao2, pvo2, flow):
    return carried(hb, sao2, pao2)


def venous(hb, sao2, svo2, pao2, pvo2, flow):
    return carried(hb, svo2, pvo2)


def delivery(*inputs):
    return transport.delivery(inputs[-1], arterial(*inputs))


def consumption(*inputs):
    return transport.consumption(inputs[-1], arterial(*inputs) - venous(*inputs))


def extraction(*inputs):
    return transport.extraction_ratio(arterial(*inputs), venous(*inputs))


@pytest.mark.parametrize(
    ("formula", "second", "value", "doubt", "rounding"),
    [
        (arterial, CAO2, 12.98, 0.29, 0.005),
        (venous, CVO2, 8.82, 0.27, 0.005),
        (delivery, 10 * FLOW * CAO2, 649, 66, 0.5),
        (consumption, 10 * FLOW * (CAO2 - CVO2), 208, 24, 0.5),
        (extraction, (CAO2 - CVO2) / CAO2, 0.320, 0.017, 0.0005),
    ],
)
def test_uncertainty_of_oxygen_transport(formula, second, value, doubt, rounding):
    """Worked figures: Monte Carlo of 2 million draws, rounded; beside them the package's exact derivatives."""
    values = [x.nominal_value for x in INPUTS]
    ours = uncertainty.propagate(formula, values, [x.std_dev for x in INPUTS])
    assert formula(*values) == pytest.approx(second.nominal_value, rel=1e-12)
    assert ours == pytest.approx(second.std_dev, rel=2e-3)
    assert formula(*values) == pytest.approx(value, abs=rounding)
    assert ours == pytest.approx(doubt, abs=rounding)


def test_a_shared_haemoglobin_is_counted_once():
    """Contents taken as independent would give 0.0254 instead of 0.017 (Monte Carlo, 2 million draws)."""
    values, doubts = [x.nominal_value for x in INPUTS], [x.std_dev for x in INPUTS]
    contents = [float(arterial(*values)), float(venous(*values))]
    apart = [float(uncertainty.propagate(side, values, doubts)) for side in (arterial, venous)]
    assert uncertainty.propagate(transport.extraction_ratio, contents, apart) == pytest.approx(0.0254, abs=0.0003)
    assert uncertainty.propagate(extraction, values, doubts) == pytest.approx(0.017, abs=0.0003)


def test_uncertainty_of_the_gradient():
    """149 +- 15 mm[Hg] at FiO2 0.40 +- 0.02, of which FiO2 alone is 14.5 (Monte Carlo; package beside it)."""
    fio2, barometric, paco2 = ufloat(0.40, 0.02), ufloat(760, 3), ufloat(40, 1.5)
    quotient, pao2 = ufloat(0.8, 0.05), ufloat(90, 4)
    second = fio2 * (barometric - 47.12) - paco2 * (fio2 + (1 - fio2) / quotient) - pao2
    values, doubts = [0.40, 760, 40, 0.8, 37.0, 90], [0.02, 3, 1.5, 0.05, 0.0, 4]
    ours = uncertainty.propagate(alveolar.gradient, values, doubts)
    assert alveolar.gradient(*values) == pytest.approx(149, abs=0.5)
    assert ours == pytest.approx(15, abs=0.5)
    assert ours == pytest.approx(second.std_dev, rel=2e-3)
    alone = uncertainty.propagate(alveolar.gradient, values, [0.02, 0, 0, 0, 0, 0])
    assert alone == pytest.approx(14.5, abs=0.2)


def test_uncertainty_by_rows_and_unknown_where_a_part_is_unknown():
    ours = uncertainty.propagate(
        alveolar.ratio,
        [np.array([80.0, 80.0, np.nan]), np.array([0.5, 0.5, 0.5])],
        [np.array([3.0, np.nan, 3.0]), np.array([0.0, 0.0, 0.0])],
    )
    assert ours[0] == pytest.approx(6.0)  # definition: 3 / 0.5
    assert np.isnan(ours[1:]).all()


# Bounds


@given(number(2, 20), number(0, 3), number(0.3, 0.7), number(0, 0.3), number(30, 90), number(0, 50))
def test_interval_of_a_rising_formula_runs_from_all_lows_to_all_highs(
    hb, hb_width, saturation, saturation_width, po2, po2_width
):
    lows = [np.array([hb]), np.array([saturation]), np.array([po2])]
    highs = [np.array([hb + hb_width]), np.array([saturation + saturation_width]), np.array([po2 + po2_width])]
    low, high = uncertainty.interval(carried, lows, highs)
    assert low == carried(*lows)
    assert high == carried(*highs)


def test_interval_of_a_difference_crosses_the_bounds():
    """1 to 2 less 10 to 20 lies between -19 and -8 (arithmetic)."""
    low, high = uncertainty.interval(
        lambda a, b: a - b,
        [np.array([1.0, 5.0]), np.array([10.0, 1.0])],
        [np.array([2.0, 5.0]), np.array([20.0, 1.0])],
    )
    assert low.tolist() == [-19.0, 4.0]
    assert high.tolist() == [-8.0, 4.0]


def test_interval_is_unknown_with_five_bounds_or_an_unknown_input():
    lows = [np.array([0.0, 0.0, np.nan])] + [np.zeros(3)] * 4
    highs = [np.ones(3)] * 4 + [np.array([0.0, 1.0, 0.0])]
    low, high = uncertainty.interval(lambda *inputs: sum(inputs), lows, highs)
    assert (low[0], high[0]) == (0.0, 4.0)
    assert np.isnan(low[1:]).all()
    assert np.isnan(high[1:]).all()


def test_interval_open_above_stays_open():
    low, high = uncertainty.interval(
        alveolar.ratio, [np.array([500.0]), np.array([0.5])], [np.array([np.inf]), np.array([0.5])]
    )
    assert (low[0], high[0]) == (1000.0, np.inf)


# Probability


@given(number(-50, 50), number(0.01, 20), number(-50, 50))
def test_probability_against_another_library(value, doubt, limit):
    ours = normal.probability_below(value, doubt, limit)
    assert ours == pytest.approx(norm.cdf(limit, loc=value, scale=doubt), abs=1e-7)
    assert 0 <= ours <= 1


def test_probability_is_a_half_at_the_limit_and_sure_without_doubt():
    ours = normal.probability_below(
        np.array([8.0, 8.0, 7.0, 9.0, np.nan, 8.0]), np.array([0.5, 0.0, 0.0, 0.0, 0.5, np.nan]), 8.0
    )
    assert ours[:4].tolist() == [0.5, 0.5, 1.0, 0.0]
    assert np.isnan(ours[4:]).all()

"""Units: the closed table against two independent sources, what real feeds write, and all that must be refused.

Oracle: pint with ucumvert, which reads the UCUM essence 2.2 (2024-06-17). Pint takes the millimetre of mercury from
the density of mercury, 2.9 ppm above UCUM's, hence the tolerance of 1e-5.
"""

from __future__ import annotations

from decimal import Decimal
from functools import cache
from itertools import permutations
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st
from ucumvert import PintUcumRegistry

from fhiro2.errors import Reason, SkipError
from fhiro2.units import UCUM, UNITS, Scale, read_unit, scale, substance_scale

PAIRS = [(one, other) for one, other in permutations(UNITS, 2) if UNITS[one].dimension == UNITS[other].dimension]
ANNOTATIONS = {"{ratio}", "{score}"}  # the oracle reads a bare annotation as a token without a size
UNREADABLE = {"[pH]"}  # the oracle's grammar knows it, its registry does not
GRAM_PERCENT = "g%"  # the oracle reads gram times percent; UCUM essence defines it as 1 g/dl
INDEX_MISNOMER = "dyn.s/cm5/m2"  # LOINC's example unit for an index, which in truth multiplies by the area
NOT_COMPARED = ANNOTATIONS | UNREADABLE | {GRAM_PERCENT, INDEX_MISNOMER}

PRESSURE = ("mm[Hg]", "kPa")
FRACTION = ("%", "1")
ACIDITY = ("[pH]", "1")
TEMPERATURE = ("Cel", "[degF]")
HAEMOGLOBIN = ("g/dL", "g/L", "mmol/L")


@cache
def registry() -> Any:
    return PintUcumRegistry()


def by_oracle(value: float, start: str, end: str) -> float:
    units = registry()
    converted = units.Quantity(value, units.from_ucum(start).units).to(units.from_ucum(end).units)
    return float(converted.magnitude)


def refused(system: str | None, code: str | None, unit: str | None, allowed: tuple[str, ...], absent: str = "") -> str:
    with pytest.raises(SkipError) as caught:
        read_unit(system, code, unit, allowed, absent)
    assert caught.value.reason is Reason.UNIT
    return caught.value.detail


@pytest.mark.parametrize(("start", "end"), [pair for pair in PAIRS if NOT_COMPARED.isdisjoint(pair)])
def test_every_conversion_agrees_with_the_oracle(start: str, end: str) -> None:
    found = scale(start, end)
    for value in (-40.0, 0.0, 1.0, 37.5, 1234.5):
        assert value * found.factor + found.offset == pytest.approx(by_oracle(value, start, end), rel=1e-5, abs=1e-9)


def test_the_oracle_reads_every_unit_but_the_named_ones() -> None:
    unread = {code for code in UNITS if not hasattr(_read(code), "units")}
    assert unread == ANNOTATIONS | UNREADABLE


def _read(code: str) -> Any:
    try:
        return registry().from_ucum(code)
    except Exception as error:  # noqa: BLE001  (whatever the oracle raises is its answer)
        return error


def test_the_oracle_misreads_gram_percent_and_denies_the_misnomer() -> None:
    from_ucum = registry().from_ucum
    assert from_ucum(GRAM_PERCENT).dimensionality == from_ucum("g").dimensionality
    assert from_ucum(INDEX_MISNOMER).dimensionality != from_ucum("dyn.s.m2/cm5").dimensionality


def test_units_of_two_dimensions_never_meet() -> None:
    for start, end in permutations(UNITS, 2):
        if UNITS[start].dimension != UNITS[end].dimension:
            with pytest.raises(SkipError) as caught:
                scale(start, end)
            assert caught.value.reason is Reason.UNIT


@pytest.mark.parametrize("pair", [("mmHg", "kPa"), ("kPa", "mmHg"), ("", "1"), ("kpa", "kPa")])
def test_scale_refuses_codes_outside_the_table(pair: tuple[str, str]) -> None:
    with pytest.raises(SkipError, match="not in the table of units") as caught:
        scale(*pair)
    assert caught.value.reason is Reason.UNIT


@pytest.mark.parametrize(
    ("start", "end", "factor"),
    [  # definitions in the UCUM essence 2.2; degrees below
        ("m[Hg]", "kPa", "133.3220"),
        ("mm[Hg]", "kPa", "0.1333220"),
        ("cm[H2O]", "kPa", "0.0980665"),
        ("atm", "kPa", "101.325"),
        ("bar", "kPa", "100"),
        ("mbar", "hPa", "1"),
        ("mbar", "kPa", "0.1"),
        ("[wood'U]", "dyn.s/cm5", "79.9932"),  # mm[Hg].min/L: 133.322 Pa x 60 s / 0.001 m3, 1e5 dyn.s/cm5 a Pa.s/m3
        ("meq/L", "mmol/L", "1"),
        ("g%", "g/dL", "1"),
        ("%{vol}", "%", "1"),
        ("%", "1", "0.01"),
        ("mL/dL", "mL/L", "10"),
        ("[lb_av]", "kg", "0.45359237"),  # 7000 grains of 64.79891 mg
        ("[in_i]", "cm", "2.54"),
        ("a", "d", "365.25"),  # the Julian year
    ],
)
def test_factors_are_the_defined_ones_exactly(start: str, end: str, factor: str) -> None:
    assert UNITS[start].factor / UNITS[end].factor == Decimal(factor)
    assert scale(start, end).factor == float(factor)


@pytest.mark.parametrize(
    ("start", "end", "factor"),
    [("kPa", "mm[Hg]", 7.500637554), ("cm[H2O]", "mm[Hg]", 0.73556127), ("atm", "mm[Hg]", 760.0021)],
)
def test_reciprocal_pressures(start: str, end: str, factor: float) -> None:
    """Computed by hand from the same definitions: an atmosphere is not 760 of UCUM's millimetres of mercury."""
    assert scale(start, end).factor == pytest.approx(factor, rel=1e-8)


@pytest.mark.parametrize(
    ("start", "value", "celsius"),
    [  # defining points: ice, body, steam, the crossing of the scales, absolute zero
        ("[degF]", 32.0, 0.0),
        ("[degF]", 98.6, 37.0),
        ("[degF]", 212.0, 100.0),
        ("[degF]", -40.0, -40.0),
        ("K", 273.15, 0.0),
        ("K", 0.0, -273.15),
    ],
)
def test_temperatures_by_their_fixed_points(start: str, value: float, celsius: float) -> None:
    found = scale(start, "Cel")
    assert value * found.factor + found.offset == pytest.approx(celsius, abs=1e-9)


@given(st.sampled_from(PAIRS), st.floats(-1e6, 1e6))
def test_there_and_back_again(pair: tuple[str, str], value: float) -> None:
    there, back = scale(*pair), scale(*reversed(pair))
    middle = value * there.factor + there.offset
    assert middle * back.factor + back.offset == pytest.approx(value, rel=1e-12, abs=1e-9)


@pytest.mark.parametrize(
    ("quantity", "start", "end", "factor", "tolerance"),
    [
        # IQTIG specification and Jordan & Kratz: 1 g/dL is 0.6206 mmol/L of monomer
        ("hb", "mmol/L", "g/dL", 1 / 0.6206, 1e-12),
        # molar masses from standard atomic weights: lactic acid C3H6O3, glucose C6H12O6
        ("lactate", "mg/dL", "mmol/L", 10 / (3 * 12.011 + 6 * 1.008 + 3 * 15.999), 1e-4),
        ("glucose", "mg/dL", "mmol/L", 10 / (6 * 12.011 + 12 * 1.008 + 6 * 15.999), 1e-4),
        # density of oxygen gas at 0 Cel and one atmosphere 1.429 g/L (tables of constants, from memory)
        ("cto2", "mmol/L", "mL/dL", 2 * 15.999 / 1.429 / 10, 3e-4),
        ("cto2", "mol/L", "mL/dL", 2 * 15.999 / 1.429 * 100, 3e-4),
        ("cto2_cath", "mmol/L", "mL/dL", 2 * 15.999 / 1.429 / 10, 3e-4),
        ("cto2_cath", "mol/L", "mL/dL", 2 * 15.999 / 1.429 * 100, 3e-4),
        ("ph", "1", "[pH]", 1.0, 0.0),
        ("gcs", "1", "{score}", 1.0, 0.0),
        ("hb", "g/L", "g/dL", 0.1, 1e-12),
    ],
)
def test_amounts_of_substance(quantity: str, start: str, end: str, factor: float, tolerance: float) -> None:
    found = substance_scale(quantity, start, end)
    assert found.factor == pytest.approx(factor, rel=tolerance)
    assert found.offset == 0.0


@pytest.mark.parametrize(
    ("quantity", "start", "end"),
    [("glucose", "mmol/L", "g/dL"), ("albumin", "mmol/L", "g/L"), ("po2", "1", "[pH]"), ("lactate", "g/dL", "mmol/L")],
)
def test_a_molar_mass_serves_its_own_substance_only(quantity: str, start: str, end: str) -> None:
    with pytest.raises(SkipError) as caught:
        substance_scale(quantity, start, end)
    assert caught.value.reason is Reason.UNIT


SPELLINGS: list[tuple[tuple[str, ...], str, tuple[str, ...]]] = [
    (("mmHg", "mm Hg", "MMHG", "mmHG", "mm(hg)", "torr", "Torr"), "mm[Hg]", PRESSURE),
    (("KPA", "kpa", "k Pa"), "kPa", PRESSURE),
    (("cmH2O", "cm H2O", "cmH20", "CMH2O"), "cm[H2O]", ("cm[H2O]", "mbar", "hPa", "kPa")),
    (("gm/dl", "gm/dL", "gm%", "g%", "g/100mL", "G/DL", "g/dl"), "g/dL", HAEMOGLOBIN),
    (("g/l", "G/L"), "g/L", HAEMOGLOBIN),
    (("mEq/L", "MEQ/L", "meq/l"), "meq/L", ("meq/L",)),
    (("mmol/l", "MMOL/L"), "mmol/L", ("mmol/L", "mg/dL")),
    (("mg/dl", "MG/DL"), "mg/dL", ("mmol/L", "mg/dL")),
    (("Liters/min", "Litres/min", "l/min", "LPM", "lpm", "LITER/MIN"), "L/min", ("L/min", "mL/min")),
    (("ml/min", "ML/MIN"), "mL/min", ("L/min", "mL/min")),
    (("l/min/m^2", "l/min/m2", "L/min/m\N{SUPERSCRIPT TWO}", "l/min/m\N{SUPERSCRIPT TWO}"), "L/min/m2", ("L/min/m2",)),
    (("bpm", "BPM", "rpm", "breaths/min", "beats/min", "BR/MIN"), "/min", ("/min",)),
    (("deg C", "degC", "\N{DEGREE SIGN}C", "\N{DEGREE SIGN} C", "C", "c"), "Cel", TEMPERATURE),
    (("deg F", "degF", "\N{DEGREE SIGN}F", "F"), "[degF]", TEMPERATURE),
    (("Vol%", "vol %", "mL/100mL", "ml/dl", "cc/dL"), "mL/dL", ("mL/dL", "mmol/L", "mol/L")),
    (("percent", "Percent", "% sat", "%SAT"), "%", FRACTION),
    (("units", "pH units", "pH", "{pH}"), "[pH]", ACIDITY),
    (("lb", "lbs", "LBS"), "[lb_av]", ("kg", "g", "[lb_av]")),
    (("in", "IN"), "[in_i]", ("cm", "m", "[in_i]")),
    (("ml", "ML"), "mL", ("mL", "L")),
    (("l",), "L", ("mL", "L")),
]
SPELT = [(text, meant, allowed) for texts, meant, allowed in SPELLINGS for text in texts]


@pytest.mark.parametrize(("text", "meant", "allowed"), SPELT)
def test_a_legacy_spelling_is_read_wherever_it_stands(text: str, meant: str, allowed: tuple[str, ...]) -> None:
    assert read_unit(None, None, text, allowed, "") == (meant, True)
    assert read_unit(None, text, None, allowed, "") == (meant, True)
    assert read_unit("", text, text, allowed, "") == (meant, True)
    assert read_unit(UCUM, meant, text, allowed, "") == (meant, False)


@pytest.mark.parametrize(
    ("text", "allowed"),
    [
        ("C", PRESSURE),  # coulomb, were it UCUM
        ("C", ("mL", "L")),
        ("F", FRACTION),  # farad
        ("in", FRACTION),
        ("units", FRACTION),
        ("units", HAEMOGLOBIN),
        ("bpm", TEMPERATURE),
        ("vol%", FRACTION),
        ("torr", ("cm[H2O]", "mbar")),
        ("l", ("L/min",)),
        ("lpm", ("L/min/m2",)),
    ],
)
def test_a_spelling_means_nothing_to_a_quantity_without_its_unit(text: str, allowed: tuple[str, ...]) -> None:
    refused(None, None, text, allowed)
    refused(None, text, None, allowed)
    refused(UCUM, text, None, allowed)


@pytest.mark.parametrize("code", PRESSURE)
def test_a_coded_unit_is_no_legacy(code: str) -> None:
    assert read_unit(UCUM, code, None, PRESSURE, "") == (code, False)
    assert read_unit(UCUM, code, "mm of mercury as we write it", ("mm[Hg]", "kPa"), "") == (code, False)


def test_a_unit_without_system_is_text() -> None:
    assert read_unit(None, "kPa", None, PRESSURE, "") == ("kPa", True)
    assert read_unit(None, None, "kPa", PRESSURE, "") == ("kPa", True)
    assert read_unit(UCUM, None, "kPa", PRESSURE, "") == ("kPa", True)
    assert read_unit(UCUM, "mmHg", "mmHg", PRESSURE, "") == ("mm[Hg]", True)


@pytest.mark.parametrize(
    ("code", "allowed", "meant"),
    [
        ("L/(min.m2)", ("L/min/m2", "mL/min/m2"), "L/min/m2"),
        ("{breaths}/min", ("/min",), "/min"),
        ("{beats}/min", ("/min",), "/min"),
        ("1/min", ("/min",), "/min"),
        ("hPa", ("cm[H2O]", "mbar"), "mbar"),
        ("meq/L", ("mmol/L",), "mmol/L"),
        ("g%", HAEMOGLOBIN, "g/dL"),
        ("{ratio}", FRACTION, "1"),
    ],
)
def test_another_code_of_the_same_size_is_the_allowed_one(code: str, allowed: tuple[str, ...], meant: str) -> None:
    assert read_unit(UCUM, code, None, allowed, "") == (meant, False)


NOTHING = (None, "", " ", "NU", "None", "none", "n/a", "N/A")


@pytest.mark.parametrize("text", NOTHING)
@pytest.mark.parametrize("code", NOTHING)
def test_no_unit_is_refused_or_means_what_the_code_says(code: str | None, text: str | None) -> None:
    assert refused(None, code, text, PRESSURE) == "no unit"
    assert refused(UCUM, code, text, FRACTION) == "no unit"
    assert read_unit(None, code, text, ACIDITY, "[pH]") == ("[pH]", False)


@pytest.mark.parametrize(
    ("code", "text", "allowed"),
    [
        ("mm[Hg]", "kPa", PRESSURE),
        ("kPa", "mm[Hg]", PRESSURE),
        ("kPa", "mm Hg", PRESSURE),
        ("kPa", "cmH2O", PRESSURE),
        ("%", "1", FRACTION),
        ("1", "%", FRACTION),
        ("1", "percent", FRACTION),
        ("g/dL", "g/l", HAEMOGLOBIN),
        ("g/dL", "mmol/L", HAEMOGLOBIN),
        ("Cel", "F", TEMPERATURE),
        ("[degF]", "C", TEMPERATURE),
        ("L/min", "mL/min", ("L/min", "mL/min")),
        ("L/min", "%", ("L/min",)),
        ("cm", "in", ("cm", "[in_i]")),
    ],
)
def test_a_text_that_contradicts_the_code_is_refused(code: str, text: str, allowed: tuple[str, ...]) -> None:
    assert "contradicts" in refused(UCUM, code, text, allowed)
    assert "contradicts" in refused(None, code, text, allowed)


@pytest.mark.parametrize(
    ("code", "text", "allowed"),
    [
        ("mm[Hg]", "mmHg", PRESSURE),
        ("mmol/L", "mEq/L", ("mmol/L", "meq/L")),
        ("1", "units", ACIDITY),
        ("[pH]", "1", ACIDITY),
        ("{score}", "1", ("{score}", "1")),
        ("/min", "breaths per minute", ("/min",)),
    ],
)
def test_a_text_that_says_the_same_or_nothing_known_is_fine(code: str, text: str, allowed: tuple[str, ...]) -> None:
    assert read_unit(UCUM, code, text, allowed, "") == (code, False)


@pytest.mark.parametrize("text", ["Geen", "mmHG/lsb.", "+PEEP", "cmH20/l/s", "mm", "MM[HG]", "kPa\N{MICRO SIGN}", "0"])
def test_unknown_units_are_refused(text: str) -> None:
    refused(UCUM, text, None, PRESSURE)
    refused(None, text, None, PRESSURE)
    refused(None, None, text, PRESSURE)


@pytest.mark.parametrize("system", ["http://snomed.info/sct", "urn:iso:std:iso:11073:10101", "UCUM", UCUM + "/"])
def test_a_code_of_a_foreign_system_is_refused_even_where_it_looks_right(system: str) -> None:
    assert "other than UCUM" in refused(system, "kPa", "kPa", PRESSURE)


@pytest.mark.parametrize(
    ("code", "allowed"),
    [("L/min", FRACTION), ("mm[Hg]", ("%", "1", "%{vol}")), ("L/min", ("mL",)), ("%", HAEMOGLOBIN), ("Hz", ("/min",))],
)
def test_a_known_unit_that_the_quantity_does_not_have_is_refused(code: str, allowed: tuple[str, ...]) -> None:
    refused(UCUM, code, None, allowed)
    refused(None, None, code, allowed)


@given(
    st.text(max_size=12) | st.sampled_from(sorted(UNITS)),
    st.sampled_from([PRESSURE, FRACTION, ACIDITY, TEMPERATURE, HAEMOGLOBIN, ("/min",), ("L/min/m2",)]),
    st.sampled_from([None, "", UCUM]),
)
def test_what_is_read_is_an_allowed_unit_of_the_same_size(
    text: str, allowed: tuple[str, ...], system: str | None
) -> None:
    try:
        found, _ = read_unit(system, text, None, allowed, "")
    except SkipError:
        return
    assert found in allowed
    assert text not in UNITS or scale(text, found) == Scale(1.0, 0.0, legacy=False)

"""Units: our own closed table of UCUM codes with exact factors, and the spellings that real feeds send.

The closed list is the safety control: what is not in it is refused, and nothing is ever read from the size of a
number. Factors: UCUM essence 2.2 (2024-06-17), https://ucum.org.
"""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass
from decimal import Decimal

from fhiro2.errors import Reason, SkipError

UCUM = "http://unitsofmeasure.org"

HAEMOGLOBIN_MMOL_PER_G_PER_DL = Decimal("0.6206")
"""mmol/L of haemoglobin monomer per g/dL (Jordan & Kratz; IQTIG specification). Never the tetramer."""
LACTATE_MG_PER_DL_PER_MMOL_PER_L = Decimal("9.008")
"""Molar mass of lactic acid 90.08 g/mol (from memory)."""
GLUCOSE_MG_PER_DL_PER_MMOL_PER_L = Decimal("18.016")
"""Molar mass of glucose 180.16 g/mol (from memory)."""
OXYGEN_ML_PER_MMOL = Decimal("22.39")
"""Molar volume of oxygen at 0 Cel and 101.325 kPa, real gas (from memory; ideal gas 22.414)."""


@dataclass(frozen=True)
class Unit:
    """A unit: its value in the dimension's base is ``(value + offset) * factor``."""

    code: str
    dimension: str
    factor: Decimal
    offset: Decimal = Decimal(0)


@dataclass(frozen=True)
class Scale:
    """A conversion: ``value * factor + offset``."""

    factor: float
    offset: float
    legacy: bool


def _units() -> dict[str, Unit]:
    rows = {
        "pressure": {  # base kPa
            "kPa": "1", "Pa": "0.001", "hPa": "0.1", "mbar": "0.1", "bar": "100", "mm[Hg]": "0.133322",
            "m[Hg]": "133.322", "cm[H2O]": "0.0980665", "atm": "101.325",
        },
        "fraction": {"1": "1", "%": "0.01", "{ratio}": "1", "%{vol}": "0.01"},
        "acidity": {"[pH]": "1"},
        "score": {"{score}": "1"},
        "mass concentration": {"g/L": "1", "g/dL": "10", "mg/dL": "0.01", "mg/L": "0.001", "g%": "10"},
        "substance concentration": {
            "mmol/L": "1", "mol/L": "1000", "umol/L": "0.001", "nmol/L": "0.000001", "meq/L": "1",
        },
        "volume concentration": {"mL/dL": "1", "mL/L": "0.1"},
        "volume": {"mL": "1", "L": "1000", "dL": "100"},
        "flow": {"L/min": "1", "mL/min": "0.001", "L/s": "60", "L/h": "0.01666666666666666666666666667"},
        "flow by area": {
            "L/min/m2": "1", "L/(min.m2)": "1", "mL/min/m2": "0.001", "mL/(min.m2)": "0.001",
        },
        "volume by area": {"mL/m2": "1", "L/m2": "1000"},
        "frequency": {"/min": "1", "{breaths}/min": "1", "{beats}/min": "1", "Hz": "60", "1/min": "1"},
        "resistance": {"dyn.s/cm5": "1", "[wood'U]": "79.9932"},
        "resistance by area": {"dyn.s.m2/cm5": "1", "dyn.s/cm5/m2": "1"},
        "mass": {"kg": "1", "g": "0.001", "[lb_av]": "0.45359237"},
        "length": {"cm": "1", "m": "100", "[in_i]": "2.54", "mm": "0.1"},
        "area": {"m2": "1"},
        "time": {"min": "1", "s": "0.01666666666666666666666666667", "h": "60", "d": "1440", "a": "525960"},
    }  # fmt: skip
    table = {
        code: Unit(code, dimension, Decimal(factor))
        for dimension, codes in rows.items()
        for code, factor in codes.items()
    }
    table["Cel"] = Unit("Cel", "temperature", Decimal(1))
    table["K"] = Unit("K", "temperature", Decimal(1), Decimal("-273.15"))
    table["[degF]"] = Unit("[degF]", "temperature", Decimal(5) / Decimal(9), Decimal(-32))
    return table


UNITS: dict[str, Unit] = _units()

_LEGACY: dict[str, str] = {
    "mmhg": "mm[Hg]", "mm(hg)": "mm[Hg]", "torr": "mm[Hg]", "kpa": "kPa", "cmh2o": "cm[H2O]", "cmh20": "cm[H2O]",
    "gm/dl": "g/dL", "g/dl": "g/dL", "gm%": "g/dL", "g%": "g/dL", "g/100ml": "g/dL", "g/l": "g/L",
    "meq/l": "meq/L", "mmol/l": "mmol/L", "umol/l": "umol/L", "mg/dl": "mg/dL",
    "liters/min": "L/min", "liter/min": "L/min", "litres/min": "L/min", "l/min": "L/min", "lpm": "L/min",
    "ml/min": "mL/min", "l/min/m^2": "L/min/m2", "l/min/m2": "L/min/m2", "l/min/m²": "L/min/m2",
    "bpm": "/min", "rpm": "/min", "breaths/min": "/min", "beats/min": "/min", "br/min": "/min",
    "degc": "Cel", "°c": "Cel", "c": "Cel", "degf": "[degF]", "°f": "[degF]", "f": "[degF]",
    "vol%": "mL/dL", "ml/100ml": "mL/dL", "ml/dl": "mL/dL", "cc/dl": "mL/dL", "ml/l": "mL/L",
    "percent": "%", "%sat": "%", "units": "[pH]", "phunits": "[pH]", "ph": "[pH]", "{ph}": "[pH]",
    "lb": "[lb_av]", "lbs": "[lb_av]", "in": "[in_i]", "ml": "mL", "l": "L",
}  # fmt: skip
"""Spellings, case-folded and without spaces; each is taken only where the quantity allows the unit that it means."""

_NOTHING = frozenset({"", "nu", "none", "n/a", "na", "null"})


def scale(from_code: str, to_code: str, legacy: bool = False) -> Scale:
    """The conversion between two UCUM codes; raises SkipError(UNIT) for an unknown code or another dimension."""
    try:
        start, end = UNITS[from_code], UNITS[to_code]
    except KeyError as error:
        raise SkipError(Reason.UNIT, f"unit {error.args[0]!r} is not in the table of units") from None
    if start.dimension != end.dimension:
        raise SkipError(Reason.UNIT, f"{from_code} is a {start.dimension}, {to_code} a {end.dimension}")
    factor = start.factor / end.factor
    return Scale(float(factor), float(start.offset * factor - end.offset), legacy)


_SUBSTANCES: dict[tuple[str, str, str], Decimal] = {
    ("ph", "1", "[pH]"): Decimal(1),
    ("gcs", "1", "{score}"): Decimal(1),
    ("hb", "mmol/L", "g/dL"): 1 / HAEMOGLOBIN_MMOL_PER_G_PER_DL,
    ("lactate", "mg/dL", "mmol/L"): 1 / LACTATE_MG_PER_DL_PER_MMOL_PER_L,
    ("glucose", "mg/dL", "mmol/L"): 1 / GLUCOSE_MG_PER_DL_PER_MMOL_PER_L,
    ("cto2", "mmol/L", "mL/dL"): OXYGEN_ML_PER_MMOL / 10,
    ("cto2", "mol/L", "mL/dL"): OXYGEN_ML_PER_MMOL * 100,
    ("cto2_cath", "mmol/L", "mL/dL"): OXYGEN_ML_PER_MMOL / 10,
    ("cto2_cath", "mol/L", "mL/dL"): OXYGEN_ML_PER_MMOL * 100,
}


def substance_scale(quantity: str, from_code: str, to_code: str) -> Scale:
    """The conversion for one quantity, by its molar mass or volume where amount and mass meet; else ``scale``."""
    factor = _SUBSTANCES.get((quantity, from_code, to_code))
    if factor is not None:
        return Scale(float(factor), 0.0, legacy=False)
    return scale(from_code, to_code)


def read_unit(
    system: str | None, code: str | None, unit: str | None, allowed: Collection[str], absent: str
) -> tuple[str, bool]:
    """Which allowed unit a Quantity names, and whether by a legacy spelling.

    The UCUM code decides; without a coded unit the text does, by the closed list. ``absent`` is the unit meant where
    none is given ('' where none is meant). Raises SkipError(UNIT) for no unit, an unknown or foreign one, one that the
    quantity does not have, and a text that contradicts the code.
    """
    if code is not None and system not in (None, "", UCUM):
        raise SkipError(Reason.UNIT, "the unit is coded in a system other than UCUM")
    if code is None or code.strip().casefold() in _NOTHING:
        if unit is None or unit.strip().casefold() in _NOTHING:
            if absent:
                return absent, False
            raise SkipError(Reason.UNIT, "no unit")
        return _from_text(unit, allowed)
    if system:
        found, legacy = _allowed(code, allowed), False
        if found is None:
            found, legacy = _spelt(code, allowed), True
    else:
        found, legacy = _from_text(code, allowed)
    if found is None:
        raise SkipError(Reason.UNIT, f"unit {code!r} is not one that this quantity has")
    _check_contradiction(found, unit)
    return found, legacy


def _from_text(text: str, allowed: Collection[str]) -> tuple[str, bool]:
    found = _allowed(text, allowed) or _spelt(text, allowed)
    if found is None:
        raise SkipError(Reason.UNIT, f"unit {text[:20]!r} is not one that this quantity has")
    return found, True


def _allowed(code: str, allowed: Collection[str]) -> str | None:
    """The allowed unit equal to ``code``: the same code, or another code of the same size and dimension."""
    if code in allowed:
        return code
    unit = UNITS.get(code)
    if unit is None:
        return None
    return next((one for one in allowed if _same(UNITS[one], unit)), None)


def _spelt(text: str, allowed: Collection[str]) -> str | None:
    meant = _LEGACY.get("".join(text.casefold().split()))
    return None if meant is None else _allowed(meant, allowed)


def _same(one: Unit, other: Unit) -> bool:
    return (one.dimension, one.factor, one.offset) == (other.dimension, other.factor, other.offset)


def _check_contradiction(found: str, text: str | None) -> None:
    if not text or text == found:
        return
    meant = UNITS.get(text) or UNITS.get(_LEGACY.get("".join(text.casefold().split()), ""))
    if meant is not None and not _same(meant, UNITS[found]) and not _both_ways(meant, UNITS[found]):
        raise SkipError(Reason.UNIT, f"the text {text[:20]!r} contradicts the unit {found}")


def _both_ways(one: Unit, other: Unit) -> bool:
    """Whether one is the plain number by which the other, a pH or a score, is also written."""
    return {one.code, other.code} in ({"1", "[pH]"}, {"1", "{score}"})

"""What each quantity is: ``measured`` what is read, ``derived`` what is computed; and the columns that rules name.

The formula of a derived quantity stands in ``derive/<topic>.py``; the codes that bring a measured quantity stand in
``codes.csv``.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from fhiro2.catalogue.derived import BASES, DERIVED, Derived
from fhiro2.catalogue.measured import MEASURED, Measured
from fhiro2.model import Floats, Integers

__all__ = [
    "BASES",
    "DERIVED",
    "DERIVED_BY_CODE",
    "INPUTS",
    "INPUT_BY_NAME",
    "MEASURED",
    "MEASURED_BY_NAME",
    "QUANTITY",
    "Derived",
    "Input",
    "Measured",
    "decimals_of",
    "default_uncertainty",
    "title_of",
    "unit_of",
]

QUANTITY: dict[str, int] = {row.name: number for number, row in enumerate(MEASURED)}
DERIVED_BY_CODE: dict[str, Derived] = {row.code: row for row in DERIVED}

_ABSOLUTE = np.array([row.absolute for row in MEASURED])
_RELATIVE = np.array([row.relative for row in MEASURED])


def default_uncertainty(quantity: Integers, value: Floats) -> Floats:
    """Standard uncertainty of readings by their quantity number, in the canonical unit; NaN where the value is."""
    result: Floats = np.hypot(_ABSOLUTE[quantity], _RELATIVE[quantity] * value)
    return result


@dataclass(frozen=True)
class Input:
    """A column that pairing fills: which measured quantity, of which blood, under which name rules may use."""

    name: str
    title: str
    quantity: str


INPUTS: tuple[Input, ...] = (
    Input("pao2", "PaO2", "po2"),
    Input("paco2", "PaCO2", "pco2"),
    Input("pha", "arterial pH", "ph"),
    Input("hco3a", "arterial bicarbonate", "hco3"),
    Input("sao2", "measured arterial saturation", "so2"),
    Input("fo2hba", "arterial oxyhaemoglobin fraction", "fo2hb"),
    Input("fcohb", "carboxyhaemoglobin", "fcohb"),
    Input("fmethb", "methaemoglobin", "fmethb"),
    Input("hb", "haemoglobin", "hb"),
    Input("lactate", "lactate", "lactate"),
    Input("fio2", "inspired oxygen fraction", "fio2"),
    Input("peep", "positive end-expiratory pressure", "peep"),
    Input("pb", "barometric pressure", "pb"),
    Input("temp", "core temperature", "temp_core"),
    Input("co", "cardiac output", "co"),
    Input("ci", "cardiac index", "ci"),
    Input("weight", "body weight", "weight"),
    Input("height", "body height", "height"),
    Input("spo2", "SpO2", "spo2"),
    Input("pvo2", "mixed venous oxygen pressure", "po2"),
    Input("pvco2", "mixed venous carbon dioxide pressure", "pco2"),
    Input("svo2", "mixed venous saturation", "so2"),
    Input("fo2hbv", "mixed venous oxyhaemoglobin fraction", "fo2hb"),
    Input("pcvo2", "central venous oxygen pressure", "po2"),
    Input("pcvco2", "central venous carbon dioxide pressure", "pco2"),
    Input("scvo2", "central venous saturation", "so2"),
    Input("fo2hbcv", "central venous oxyhaemoglobin fraction", "fo2hb"),
)

INPUT_BY_NAME: dict[str, Input] = {row.name: row for row in INPUTS}
MEASURED_BY_NAME: dict[str, Measured] = {row.name: row for row in MEASURED}


def unit_of(column: str) -> str:
    """Canonical UCUM unit of a column of an anchor table (an input's name or a derived code); KeyError if unknown."""
    if column in DERIVED_BY_CODE:
        return DERIVED_BY_CODE[column].unit
    return MEASURED_BY_NAME[INPUT_BY_NAME[column].quantity].unit


def title_of(column: str) -> str:
    """The words for a column of an anchor table; KeyError if unknown."""
    if column in DERIVED_BY_CODE:
        return DERIVED_BY_CODE[column].title
    return INPUT_BY_NAME[column].title


def decimals_of(column: str) -> int:
    """Declared decimals of a column in its canonical unit; KeyError if unknown."""
    if column in DERIVED_BY_CODE:
        return DERIVED_BY_CODE[column].decimals
    return MEASURED_BY_NAME[INPUT_BY_NAME[column].quantity].decimals

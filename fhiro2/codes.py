"""The table of codes that are read: LOINC and MDC codes with quantity, blood, units, limits and status (codes.csv)."""

from __future__ import annotations

import csv
import re
from collections.abc import Mapping
from dataclasses import dataclass, fields
from enum import IntEnum
from functools import cache
from importlib.resources import files
from math import inf
from types import MappingProxyType

from fhiro2.errors import StopError
from fhiro2.model import Kind, Specimen
from fhiro2.units import UNITS

LOINC = "http://loinc.org"
MDC = "urn:iso:std:iso:11073:10101"
LOINC_NOTICE = (
    "This material contains content from LOINC (http://loinc.org). LOINC is copyright (c) 1995-2020, Regenstrief "
    "Institute, Inc. and the Logical Observation Identifiers Names and Codes (LOINC) Committee and is available at "
    "no cost under the license at http://loinc.org/license. LOINC(R) is a registered United States trademark of "
    "Regenstrief Institute, Inc."
)
USES = ("value", "panel", "refuse")
CONSCIOUSNESS = ("alert", "confused", "voice", "pain", "unresponsive")
ANSWERS: Mapping[tuple[str, str], tuple[str, int]] = MappingProxyType(
    {
        (LOINC, answer): ("consciousness", CONSCIOUSNESS.index(meaning))
        for answer, meaning in (
            ("LA9340-6", "alert"),
            ("LA6560-2", "confused"),
            ("LA17108-4", "voice"),
            ("LA17107-6", "pain"),
            ("LA9343-0", "unresponsive"),
        )
    }
)
"""Coded answers of 67775-7: (system, code) to quantity and number in ``CONSCIOUSNESS``."""


@dataclass(frozen=True)
class Code:
    """One row of the table. ``low`` and ``high`` are plausible limits in the quantity's canonical unit, inclusive."""

    loinc: str
    long_name: str
    status: str
    use: str
    quantity: str
    specimen: Specimen
    kind: Kind
    corrected: bool
    negate: bool
    units: tuple[str, ...]
    unit_if_absent: str
    low: float
    high: float
    method: str
    note: str
    mdc: tuple[str, ...]
    confidence: str
    source: str


COLUMNS = tuple(field.name for field in fields(Code))


@cache
def code_table() -> Mapping[tuple[str, str], Code]:
    """All codes by (system, code); raises StopError naming file and line for a bad row."""
    return read_table(files("fhiro2").joinpath("codes.csv").read_text(encoding="utf-8"), "codes.csv")


def read_table(text: str, name: str) -> Mapping[tuple[str, str], Code]:
    """The table in ``text``, checked row by row; ``name`` is used in messages. Raises StopError."""
    lines = [(number, line) for number, line in enumerate(text.splitlines(), 1) if line and not line.startswith("#")]
    if not lines or lines[0][1] != ",".join(COLUMNS):
        raise StopError(f"{name}:{lines[0][0] if lines else 1}: the first row must be {','.join(COLUMNS)}")
    found: dict[tuple[str, str], Code] = {}
    for number, line in lines[1:]:
        try:
            code = _code(_row(line))
            for key in ((LOINC, code.loinc), *((MDC, one) for one in code.mdc)):
                if key in found:
                    raise ValueError(f"{key[1]} is given twice; remove one row")
                found[key] = code
        except (ValueError, csv.Error) as error:
            raise StopError(f"{name}:{number}: {error}") from None
    return MappingProxyType(found)


def check_digit(loinc: str) -> bool:
    """Whether the last digit of a LOINC code is its mod-10 check digit (LOINC users' guide)."""
    if not re.fullmatch("[0-9]+-[0-9]", loinc):
        return False
    number, digit = loinc.split("-")
    doubled = "".join(str(int(one) * 2) if place % 2 == 0 else one for place, one in enumerate(reversed(number)))
    return (10 - sum(map(int, doubled)) % 10) % 10 == int(digit)


def _row(line: str) -> dict[str, str]:
    [cells] = csv.reader([line], strict=True)
    if len(cells) != len(COLUMNS):
        raise ValueError(f"{len(cells)} columns where {len(COLUMNS)} are due; quote texts with commas")
    return dict(zip(COLUMNS, cells, strict=True))


def _code(row: dict[str, str]) -> Code:
    use = row["use"]
    if use not in USES:
        raise ValueError(f"use {use!r} is none of {', '.join(USES)}")
    if not check_digit(row["loinc"]):
        raise ValueError(f"{row['loinc']} has a wrong check digit; correct the code")
    units = tuple(one for one in row["units"].split(";") if one)
    for unit in units:
        if unit not in UNITS:
            raise ValueError(f"unit {unit!r} is not in the table of units")
    if row["unit_if_absent"] not in ("", *units):
        raise ValueError(f"unit_if_absent {row['unit_if_absent']!r} is none of the row's units")
    low, high = float(row["low"] or "nan"), float(row["high"] or "nan")
    if use == "value" and not -inf < low < high < inf:
        raise ValueError(f"limits {row['low']!r} to {row['high']!r} are no range")
    if use == "value" and not row["quantity"]:
        raise ValueError("a code that is read needs its quantity")
    if not row["source"]:
        raise ValueError("a code needs its source")
    return Code(
        row["loinc"],
        row["long_name"],
        row["status"],
        use,
        row["quantity"],
        Specimen[_member(row["specimen"], Specimen)],
        Kind[_member(row["kind"], Kind)],
        _flag(row["corrected"]),
        _flag(row["negate"]),
        units,
        row["unit_if_absent"],
        low,
        high,
        row["method"],
        row["note"],
        tuple(one for one in row["mdc"].split(";") if one),
        row["confidence"],
        row["source"],
    )


def _member(text: str, names: type[IntEnum]) -> str:
    if text.upper() not in names.__members__:
        raise ValueError(f"{text!r} is none of {', '.join(names.__members__).lower()}")
    return text.upper()


def _flag(text: str) -> bool:
    if text not in ("0", "1"):
        raise ValueError(f"{text!r} is neither 0 nor 1")
    return text == "1"

"""Operands of formulas, and how a formula becomes a derived column: value, doubt, cautions, inputs, or why not."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from fhiro2.catalogue import DERIVED_BY_CODE
from fhiro2.derive.constants import Constant
from fhiro2.derive.uncertainty import interval, propagate
from fhiro2.model import AnchorTable, Caution, Column, Floats, Integers, Truths, Why

NOBODY = -1
_PASSED_ON = (
    Why.DIFFERENT_BASIS,
    Why.SUSPECT_SAMPLE,
    Why.NOT_COMPUTED_FROM_CALCULATED,
    Why.BEFORE_TRANSFUSION,
)


@dataclass(frozen=True)
class Operand:
    """One raw argument of a formula at every anchor, and which input columns it rests on, row by row."""

    column: Column
    rests_on: dict[str, Truths]


@dataclass(frozen=True)
class Guard:
    """Where a value must not be computed, and why."""

    where: Truths
    why: Why


@dataclass(frozen=True)
class Mark:
    """Where a derived value carries a caution of its own."""

    where: Truths
    caution: Caution


def read(table: AnchorTable, name: str) -> Operand:
    """An input column of the table."""
    column = table.columns[name]
    return Operand(column, {name: np.ones(len(column.value), dtype=bool)})


def fixed(constant: Constant, count: int) -> Operand:
    """A constant, with its uncertainty."""
    return exact(np.full(count, constant.value), np.full(count, constant.uncertainty))


def exact(value: Floats, uncertainty: Floats) -> Operand:
    """A number that is known everywhere and rests on no input."""
    nobody = np.full(len(value), NOBODY, dtype=np.int64)
    why = np.full(len(value), int(Why.KNOWN), dtype=np.int64)
    cautions = np.zeros(len(value), dtype=np.uint64)
    return Operand(Column(value, value, value, uncertainty, cautions, why, nobody, nobody), {})


def within(operand: Operand, low: float, high: float) -> Guard:
    """Guard against a known value outside a formula's range; a bound is judged by both its ends."""
    column = operand.column
    inside = (column.high >= low) & (column.low <= high)
    return Guard(column.known() & ~inside, Why.OUT_OF_RANGE)


def derive(
    table: AnchorTable,
    code: str,
    formula: Callable[..., Floats],
    operands: Sequence[Operand],
    guards: Sequence[Guard] = (),
    marks: Sequence[Mark] = (),
    constants: Integers | int = 0,
) -> None:
    """Add the derived column ``code`` to ``table``: rounded to its declared decimals, or missing with a reason."""
    count = len(table.reading)
    names = tuple(dict.fromkeys(name for operand in operands for name in operand.rests_on))
    missing, used = np.zeros(count, dtype=np.int64), np.zeros(count, dtype=np.int64)
    why = np.full(count, int(Why.KNOWN), dtype=np.int64)
    cautions = np.zeros(count, dtype=np.uint64)
    for operand in operands:
        lacking = ~operand.column.known()
        why[lacking] = np.where(np.isin(operand.column.why, _PASSED_ON), operand.column.why, Why.INPUT_MISSING)[
            lacking
        ]
        cautions |= operand.column.cautions
        for name, rows in operand.rests_on.items():
            bit = np.int64(1) << names.index(name)
            missing[lacking & rows] |= bit
            used[~lacking & rows] |= bit
    for guard in guards:
        why[guard.where & (why == Why.KNOWN)] = guard.why
    for mark in marks:
        cautions[mark.where] |= np.uint64(mark.caution)
    value, low, high, uncertainty = _computed(code, formula, operands, why)
    numbers = np.full(count, constants) if isinstance(constants, int) else constants
    nobody = np.full(count, NOBODY, dtype=np.int64)
    cautions[why != Why.KNOWN] = 0
    table.columns[code] = Column(
        value, low, high, uncertainty, cautions, why, nobody, nobody, names, missing, used, numbers
    )


def _computed(
    code: str, formula: Callable[..., Floats], operands: Sequence[Operand], why: Integers
) -> tuple[Floats, Floats, Floats, Floats]:
    """Value, low, high and standard uncertainty; rows that turn out unbounded get their reason in ``why``."""
    count, decimals = len(why), DERIVED_BY_CODE[code].decimals
    value, low, high, uncertainty = (np.full(count, np.nan) for _ in range(4))
    rows = np.flatnonzero(why == Why.KNOWN)
    bounded = np.zeros(len(rows), dtype=bool)
    for operand in operands:
        bounded |= operand.column.low[rows] < operand.column.high[rows]
    sharp, loose = rows[~bounded], rows[bounded]
    if len(sharp):
        values = [operand.column.value[sharp] for operand in operands]
        value[sharp] = np.round(formula(*values), decimals)
        low[sharp] = high[sharp] = value[sharp]
        uncertainty[sharp] = propagate(formula, values, [operand.column.uncertainty[sharp] for operand in operands])
    if len(loose):
        least, greatest = interval(
            formula,
            [operand.column.low[loose] for operand in operands],
            [operand.column.high[loose] for operand in operands],
        )
        low[loose], high[loose] = np.round(least, decimals), np.round(greatest, decimals)
        why[loose[np.isnan(least) | np.isnan(greatest)]] = Why.UNBOUNDED
    return value, low, high, uncertainty

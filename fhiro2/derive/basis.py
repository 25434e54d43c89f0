"""The basis of a content: which saturation, which inactive haemoglobin, and the binding constant that pairs with them.

FO2Hb, or sO2 with COHb and MetHb, pairs with 1.39 mL/g; sO2 alone pairs with 1.34 mL/g and a caution. Both sides of
an arterial-venous pair share one basis and one set of COHb and MetHb; the crossed pairs do not exist here.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from fhiro2.derive.constants import BINDING_OXYHAEMOGLOBIN, BINDING_TOTAL
from fhiro2.derive.doubt import fractions_disagree
from fhiro2.derive.operand import Operand, exact
from fhiro2.model import AnchorTable, Caution, Column, Integers, Truths, Why, choose

PAIRED, TOTAL = 1, 2  # rows of catalogue.BASES


@dataclass(frozen=True)
class Basis:
    """Operands that belong together: one saturation a side, inactive haemoglobin, binding constant, basis number."""

    saturations: tuple[Operand, ...]
    inactive: Operand
    binding: Operand
    number: Integers


@dataclass(frozen=True)
class Side:
    """Names of one sample's functional saturation and oxyhaemoglobin fraction in a table."""

    functional: str
    fractional: str


def basis(table: AnchorTable, sides: Sequence[Side], inactive: Sequence[tuple[str, str]]) -> Basis:
    """The basis for one sample, or one that both samples of a pair share.

    ``inactive`` names (COHb, MetHb) columns in order of preference. FO2Hb on all sides is taken first, then sO2 on
    all sides with COHb and MetHb, then sO2 alone; where no basis serves all sides the saturation is missing.
    """
    functional = [table.columns[side.functional] for side in sides]
    fractional = [table.columns[side.fractional] for side in sides]
    by_fraction = _all_known(fractional)
    fractions = [(name, table.columns[name]) for pair in inactive for name in pair]
    chosen = _first_set(fractions)
    corrected = ~by_fraction & _all_known(functional) & (chosen >= 0)
    alone = ~by_fraction & ~corrected & _all_known(functional)
    any_known = [one.known() | other.known() for one, other in zip(functional, fractional, strict=True)]
    crossed = np.all(any_known, axis=0) & ~(by_fraction | corrected | alone)
    saturations = [_saturation(table, side, by_fraction, crossed) for side in sides]
    shares = _inactive(fractions, chosen, corrected)
    paired = by_fraction | corrected
    binding = exact(
        np.where(paired, BINDING_OXYHAEMOGLOBIN.value, BINDING_TOTAL.value),
        np.where(paired, BINDING_OXYHAEMOGLOBIN.uncertainty, BINDING_TOTAL.uncertainty),
    )
    binding.column.cautions[alone] |= np.uint64(Caution.INACTIVE_HAEMOGLOBIN_UNKNOWN)
    return Basis(tuple(saturations), shares, binding, np.where(paired, PAIRED, TOTAL))


def _all_known(columns: Sequence[Column]) -> Truths:
    result: Truths = np.all([column.known() for column in columns], axis=0)
    return result


def _first_set(fractions: Sequence[tuple[str, Column]]) -> Integers:
    """Which pair (COHb, MetHb) is the first with both known; -1 where none is."""
    chosen = np.full(len(fractions[0][1].value), -1, dtype=np.int64)
    for number in range(len(fractions) // 2 - 1, -1, -1):
        both = fractions[2 * number][1].known() & fractions[2 * number + 1][1].known()
        chosen[both] = number
    return chosen


def _saturation(table: AnchorTable, side: Side, by_fraction: Truths, crossed: Truths) -> Operand:
    """The saturation of one side: FO2Hb where all sides have it, else sO2; missing where the sides cross."""
    functional, fractional = table.columns[side.functional], table.columns[side.fractional]
    column = choose(by_fraction | (fractional.known() & ~functional.known()), fractional, functional)
    column.why[crossed] = Why.DIFFERENT_BASIS
    column.why[fractions_disagree(column)] = Why.SUSPECT_SAMPLE
    return Operand(column, {side.functional: ~by_fraction, side.fractional: by_fraction})


def _inactive(fractions: Sequence[tuple[str, Column]], chosen: Integers, corrected: Truths) -> Operand:
    """COHb + MetHb where the basis takes them off, else 0."""
    count = len(chosen)
    operand = exact(np.zeros(count), np.zeros(count))
    rests_on: dict[str, Truths] = {}
    column = operand.column
    value, low, high = np.zeros(count), np.zeros(count), np.zeros(count)
    uncertainty, cautions = np.zeros(count), np.zeros(count, dtype=np.uint64)
    for number in range(len(fractions) // 2):
        rows = corrected & (chosen == number)
        for name, fraction in fractions[2 * number : 2 * number + 2]:
            value[rows] += fraction.value[rows]
            low[rows] += fraction.low[rows]
            high[rows] += fraction.high[rows]
            uncertainty[rows] = np.hypot(uncertainty[rows], fraction.uncertainty[rows])
            cautions[rows] |= fraction.cautions[rows]
            rests_on[name] = rows
    return Operand(
        Column(value, low, high, uncertainty, cautions, column.why, column.source, column.runner_up), rests_on
    )

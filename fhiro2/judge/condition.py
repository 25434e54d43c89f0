"""Conditions over columns: true, false or unknown at every anchor, with the probability that they truly hold.

Three-valued logic: Kleene SC, Introduction to Metamathematics, 1952, section 64 (strong tables).
"""

from __future__ import annotations

import operator
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from enum import StrEnum
from functools import reduce
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

from fhiro2.catalogue import INPUT_BY_NAME, decimals_of, unit_of
from fhiro2.model import Column, Floats, Truths
from fhiro2.normal import probability_below
from fhiro2.units import Scale, substance_scale

Truth = NDArray[np.int8]

TRUE, FALSE, UNKNOWN = 1, 0, -1


class Operator(StrEnum):
    """How a value is compared with a limit; the words of the rule file."""

    BELOW = "below"
    ABOVE = "above"
    AT_MOST = "at_most"
    AT_LEAST = "at_least"


_COMPARE: dict[Operator, Callable[[Any, Any], Any]] = {
    Operator.BELOW: operator.lt,
    Operator.ABOVE: operator.gt,
    Operator.AT_MOST: operator.le,
    Operator.AT_LEAST: operator.ge,
}


@dataclass(frozen=True)
class Comparison:
    """A column against a limit, which is in the column's canonical unit and has its declared decimals."""

    quantity: str
    operator: Operator
    limit: float


@dataclass(frozen=True)
class AnyOf:
    """True where one part is."""

    parts: tuple[Condition, ...]


@dataclass(frozen=True)
class AllOf:
    """True where every part is."""

    parts: tuple[Condition, ...]


@dataclass(frozen=True)
class Not:
    """True where the part is false."""

    part: Condition


Condition: TypeAlias = Comparison | AnyOf | AllOf | Not


@dataclass(frozen=True)
class Finding:
    """What a condition is at every anchor.

    ``truth`` is TRUE, FALSE or UNKNOWN; ``probability``, that the condition truly holds, is NaN where it is not known.
    ``missing`` says of each quantity where the condition is unknown because of it: not known, or a bound too wide.
    """

    truth: Truth
    probability: Floats
    missing: dict[str, Truths]


def canonical(quantity: str, unit: str) -> Scale:
    """The conversion from ``unit`` to the canonical unit of a column.

    Raises KeyError for a column that the catalogue does not have, SkipError for a unit that the column cannot have.
    """
    measured = INPUT_BY_NAME[quantity].quantity if quantity in INPUT_BY_NAME else quantity
    return substance_scale(measured, unit, unit_of(quantity))


def comparison(quantity: str, how: Operator, number: float, unit: str) -> Comparison:
    """A comparison with ``number`` in ``unit``; raises as ``canonical`` does.

    The limit gets the decimals of the column, as the values do, so that a value equal to it is equal in every unit.
    """
    scale = canonical(quantity, unit)
    limit = np.round(number * scale.factor + scale.offset, decimals_of(quantity))
    return Comparison(quantity, how, float(limit))


def quantities(condition: Condition) -> tuple[str, ...]:
    """The columns that a condition names, each once, in its order."""
    match condition:
        case Comparison():
            return (condition.quantity,)
        case Not():
            return quantities(condition.part)
        case AnyOf() | AllOf():
            return tuple(dict.fromkeys(name for part in condition.parts for name in quantities(part)))


def evaluate(condition: Condition, columns: Mapping[str, Column]) -> Finding:
    """What ``condition`` is at every anchor; raises KeyError where a column that it names is not there.

    Probabilities of groups are bounds that need no independence (Frechet 1935): of ``all`` the least of its parts, an
    upper bound; of ``any`` the greatest of its known parts, a lower bound; of ``not`` the complement.
    """
    match condition:
        case Comparison():
            return _compared(condition, columns[condition.quantity])
        case Not():
            found = evaluate(condition.part, columns)
            truth = np.where(found.truth == UNKNOWN, UNKNOWN, 1 - found.truth).astype(np.int8)
            return Finding(truth, 1 - found.probability, found.missing)
        case AnyOf():
            return _grouped([evaluate(part, columns) for part in condition.parts], TRUE, np.fmax)
        case AllOf():
            return conjunction([evaluate(part, columns) for part in condition.parts])


def conjunction(parts: Sequence[Finding]) -> Finding:
    """All parts at once, as ``evaluate`` takes an ``all``."""
    return _grouped(parts, FALSE, np.fmin)


def _compared(condition: Comparison, column: Column) -> Finding:
    decimals, limit = decimals_of(condition.quantity), condition.limit
    compare = _COMPARE[condition.operator]
    bounded = column.low < column.high
    value = np.round(column.value, decimals)
    low = np.where(bounded, np.round(column.low, decimals), value)
    high = np.where(bounded, np.round(column.high, decimals), value)
    known = column.known() & ~np.isnan(low) & ~np.isnan(high)
    at_low, at_high = compare(low, limit), compare(high, limit)
    decided = known & (at_low == at_high)
    truth = np.where(decided, at_low, UNKNOWN).astype(np.int8)
    probability = probability_below(value, column.uncertainty, limit)
    if condition.operator in (Operator.ABOVE, Operator.AT_LEAST):
        probability = 1 - probability
    # a value whose doubt is not known is not called certain: its truth is all that is known of it
    probability = np.where(np.isnan(column.uncertainty), 0.5, probability)
    probability = np.where(bounded, at_low, probability)
    return Finding(truth, np.where(decided, probability, np.nan), {condition.quantity: ~decided})


def _grouped(parts: Sequence[Finding], decisive: int, choose: Callable[[Floats, Floats], Floats]) -> Finding:
    """``decisive`` is the truth of one part that settles the whole group."""
    truths = np.stack([part.truth for part in parts])
    settled = (truths == decisive).any(axis=0)
    unknown = ~settled & (truths == UNKNOWN).any(axis=0)
    truth = np.where(settled, decisive, np.where(unknown, UNKNOWN, 1 - decisive)).astype(np.int8)
    missing: dict[str, Truths] = {}
    for part in parts:
        for name, where in part.missing.items():
            missing[name] = missing.get(name, False) | (where & unknown)
    return Finding(truth, reduce(choose, [part.probability for part in parts]), missing)

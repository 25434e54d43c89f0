"""Conditions over columns: true, false or unknown at every anchor, with the probability that they truly hold.

Three-valued logic: Kleene SC, Introduction to Metamathematics, 1952, section 64 (strong tables).
"""

from __future__ import annotations

import operator
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from enum import StrEnum
from functools import cache
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

from fhiro2.catalogue import INPUT_BY_NAME, decimals_of, unit_of
from fhiro2.model import Column, Floats, Truths
from fhiro2.normal import probability_below
from fhiro2.units import Scale, substance_scale

Truth = NDArray[np.int8]

TRUE, FALSE, UNKNOWN = 1, 0, -1
EVEN = 0.5
"""The probability of what nothing is known of but its truth; a true comparison has at least this much."""


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
    """A column against a limit, which is in the column's canonical unit and has its declared decimals.

    ``certainty`` (0.5 to 1) is the least probability at which it is true. With less there is no evidence: false.
    """

    quantity: str
    operator: Operator
    limit: float
    certainty: float = EVEN


@dataclass(frozen=True)
class NotKnown:
    """True where a column has neither a value nor a bound, false where it has; never unknown."""

    quantity: str


@dataclass(frozen=True)
class AnyOf:
    """True where one part is."""

    parts: tuple[Condition, ...]


@dataclass(frozen=True)
class AllOf:
    """True where every part is."""

    parts: tuple[Condition, ...]


@dataclass(frozen=True)
class SomeOf:
    """True where at least ``least`` parts are, from 1 to all of them."""

    least: int
    parts: tuple[Condition, ...]


@dataclass(frozen=True)
class Not:
    """True where the part is false."""

    part: Condition


Condition: TypeAlias = Comparison | NotKnown | AnyOf | AllOf | SomeOf | Not


@dataclass(frozen=True)
class Finding:
    """What a condition is at every anchor.

    ``truth`` is TRUE, FALSE or UNKNOWN; ``probability``, that the condition truly holds, is NaN where it is unknown.
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


def comparison(quantity: str, how: Operator, number: float, unit: str, certainty: float = EVEN) -> Comparison:
    """A comparison with ``number`` in ``unit``; raises as ``canonical`` does.

    The limit gets the decimals of the column, as the values do, so that a value equal to it is equal in every unit.
    """
    scale = canonical(quantity, unit)
    limit = np.round(number * scale.factor + scale.offset, decimals_of(quantity))
    return Comparison(quantity, how, float(limit), certainty)


def leaves(condition: Condition) -> Iterator[Comparison | NotKnown]:
    """What a condition asks of single columns, in its order."""
    match condition:
        case Comparison() | NotKnown():
            yield condition
        case Not():
            yield from leaves(condition.part)
        case AnyOf() | AllOf() | SomeOf():
            for part in condition.parts:
                yield from leaves(part)


@cache
def quantities(condition: Condition) -> tuple[str, ...]:
    """The columns that a condition names, each once, in its order."""
    return tuple(dict.fromkeys(leaf.quantity for leaf in leaves(condition)))


def evaluate(condition: Condition, columns: Mapping[str, Column]) -> Finding:
    """What ``condition`` is at every anchor; raises KeyError where a column that it names is not there.

    The probability of a comparison is that of the quantity itself lying there, also where it is less than the
    comparison's certainty; of ``not`` it is the complement. Of a group it is the ``least``-th greatest of its parts,
    where an unknown part speaks against the finding: 0 where the group is true, 1 where it is false. That is exact
    where the doubts of the parts rise and fall together. However they depend on each other, it is a lower bound for
    ``any``, an upper bound for ``all`` (Frechet 1935), and for numbers between the two neither.
    """
    match condition:
        case Comparison():
            return _compared(condition, columns[condition.quantity])
        case NotKnown():
            absent = ~_usable(columns[condition.quantity])
            never = np.zeros_like(absent)
            return Finding(absent.astype(np.int8), absent.astype(np.float64), {condition.quantity: never})
        case Not():
            found = evaluate(condition.part, columns)
            truth = np.where(found.truth == UNKNOWN, UNKNOWN, 1 - found.truth).astype(np.int8)
            return Finding(truth, 1 - found.probability, found.missing)
        case AnyOf():
            least = 1
        case AllOf():
            least = len(condition.parts)
        case SomeOf():
            least = condition.least
    return _counted([evaluate(part, columns) for part in condition.parts], least)


def conjunction(parts: Sequence[Finding]) -> Finding:
    """All parts at once, as ``evaluate`` takes an ``all``."""
    return _counted(parts, len(parts))


def _usable(column: Column) -> Truths:
    return column.known() & (~np.isnan(column.value) | (column.low < column.high))


def _compared(condition: Comparison, column: Column) -> Finding:
    decimals, limit = decimals_of(condition.quantity), condition.limit
    compare = _COMPARE[condition.operator]
    bounded = column.low < column.high
    value = np.round(column.value, decimals)
    low = np.where(bounded, np.round(column.low, decimals), value)
    high = np.where(bounded, np.round(column.high, decimals), value)
    at_low, at_high = compare(low, limit), compare(high, limit)
    decided = _usable(column) & (at_low == at_high)
    probability = probability_below(value, column.uncertainty, limit)
    if condition.operator in (Operator.ABOVE, Operator.AT_LEAST):
        probability = 1 - probability
    # a value whose doubt is not known is not called certain: its truth is all that is known of it
    probability = np.where(np.isnan(column.uncertainty), EVEN, probability)
    probability = np.where(bounded, at_low, probability)
    truth = np.where(decided, at_low & (probability >= condition.certainty), UNKNOWN).astype(np.int8)
    return Finding(truth, np.where(decided, probability, np.nan), {condition.quantity: ~decided})


def _counted(parts: Sequence[Finding], least: int) -> Finding:
    """Whether at least ``least`` of the parts are true, whatever the unknown ones are."""
    truths = np.stack([part.truth for part in parts])
    enough = (truths == TRUE).sum(axis=0) >= least
    possible = (truths != FALSE).sum(axis=0) >= least
    unknown = possible & ~enough
    truth = np.where(unknown, UNKNOWN, enough).astype(np.int8)
    likely = np.stack([np.where(np.isnan(part.probability), ~enough, part.probability) for part in parts])
    probability = np.where(unknown, np.nan, np.sort(likely, axis=0)[-least])
    missing: dict[str, Truths] = {}
    for part in parts:
        for name, where in part.missing.items():
            missing[name] = missing.get(name, False) | (where & unknown)
    return Finding(truth, probability, missing)

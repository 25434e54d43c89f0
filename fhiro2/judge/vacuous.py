"""Conditions that tell nothing apart, since they are true, or not true, whatever the values.

What a condition is depends only on where each value lies among the limits that it is compared with. The limits, one
value between each two and the ends of what is plausible therefore stand for all values. Only where one quantity is
compared with different certainties at different limits may a true answer lie so near to a limit that none meets it.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from functools import cache
from itertools import pairwise, product
from math import nan, prod
from statistics import NormalDist

import numpy as np

from fhiro2.catalogue import DERIVED_BY_CODE, INPUT_BY_NAME
from fhiro2.codes import code_table
from fhiro2.judge.condition import EVEN, TRUE, Comparison, Condition, NotKnown, evaluate, leaves, quantities
from fhiro2.model import Column, Why

MOST_COMBINATIONS = 100_000
"""On how many combinations of values one condition is tried at most: some tenths of a second. Design choice."""

_MISSING = (nan, nan)


def objections(condition: Condition, *, finds: bool) -> Iterator[str]:
    """What is wrong with a condition that tells nothing apart, and what to do.

    One that ``finds`` what a flag says must also need a value: a flag without any value would have no evidence.
    """
    tried = {
        name: _stand_ins(name, [leaf for leaf in leaves(condition) if leaf.quantity == name])
        for name in quantities(condition)
    }
    combinations = prod(map(len, tried.values()))
    if combinations > MOST_COMBINATIONS:
        yield (
            f"its limits divide the values into {combinations} combinations, of which {MOST_COMBINATIONS} can be "
            "checked; split the rule into rules of fewer quantities or limits"
        )
        return
    true = evaluate(condition, _columns(tried)).truth == TRUE
    if true.all():
        yield "true whatever the values are; change a limit or remove what makes it so"
    elif not true.any():
        yield "never true, whatever plausible values there are; change a limit, its unit, or what excludes it"
    elif finds and evaluate(condition, _columns({name: [_MISSING] for name in tried})).truth[0] == TRUE:
        yield "true where nothing is known, so that a flag has no evidence; ask, with all, also for a known value"


def _stand_ins(name: str, asked: Sequence[Comparison | NotKnown]) -> list[tuple[float, float]]:
    """Values of a quantity, each with its uncertainty, that differ in what is ``asked`` of them, and cover it."""
    compared = [one for one in asked if isinstance(one, Comparison)]
    low, high = _plausible(name, [one.limit for one in compared])
    limits = sorted({one.limit for one in compared if low <= one.limit <= high})
    values = sorted({low, high, *limits, *((one + other) / 2 for one, other in pairwise(limits))})
    missing = [_MISSING] if len(compared) < len(asked) else []
    return [(value, doubt) for value in values for doubt in _doubts(value, compared)] + missing


def _doubts(value: float, compared: Sequence[Comparison]) -> list[float]:
    """Uncertainties of a value: none, between each two at which a comparison ceases to be certain, and not known."""
    ceasing = sorted(
        abs(value - one.limit) / NormalDist().inv_cdf(one.certainty) for one in compared if one.certainty > EVEN
    )
    return [0.0, *((one + other) / 2 for one, other in pairwise(ceasing)), *([nan] if ceasing else [])]


def _plausible(name: str, limits: Sequence[float]) -> tuple[float, float]:
    """The least and the greatest value of a column, in its canonical unit: of an input, what its codes admit.

    A derived value has no such range: from 0, or below all ``limits`` if it is signed, to above all of them.
    """
    if name in INPUT_BY_NAME:
        return _admitted()[INPUT_BY_NAME[name].quantity]
    low = min((0.0, *limits)) - 1 if DERIVED_BY_CODE[name].signed else 0.0
    return low, max((0.0, *limits)) + 1


@cache
def _admitted() -> Mapping[str, tuple[float, float]]:
    found: dict[str, tuple[float, float]] = {}
    for code in code_table().values():
        if code.use == "value":
            low, high = found.get(code.quantity, (code.low, code.high))
            found[code.quantity] = min(low, code.low), max(high, code.high)
    return found


def _columns(tried: Mapping[str, Sequence[tuple[float, float]]]) -> dict[str, Column]:
    """Every combination of the values tried, as columns."""
    rows = np.array(list(product(*tried.values())), dtype=np.float64)
    none, nowhere = np.zeros(len(rows), np.uint64), np.full(len(rows), -1)
    columns = {}
    for place, name in enumerate(tried):
        value, uncertainty = rows[:, place].T
        why = np.where(np.isnan(value), Why.NEVER_RECORDED, Why.KNOWN)
        columns[name] = Column(value, value, value, uncertainty, none, why, nowhere, nowhere)
    return columns

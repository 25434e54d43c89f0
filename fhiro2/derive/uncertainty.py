"""What inexact inputs do to a result: standard uncertainty, and bounds."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from itertools import product

import numpy as np

from fhiro2.model import Floats

_MOST_VARYING = 4
"""Inputs of one row that may be known as bounds only."""


def propagate(formula: Callable[..., Floats], values: Sequence[Floats], uncertainties: Sequence[Floats]) -> Floats:
    """Standard uncertainty of ``formula(*values)``, in the unit of its result; NaN where a needed number is.

    ``values`` are the raw inputs, each given once even if the formula uses it twice, so that shared inputs keep
    their correlation; ``uncertainties`` are their standard uncertainties, 0 or more, in the same units and order.

    Source: JCGM 100:2008 (GUM), eq. 10, with the sensitivities of clause 5.1.3 note 2 (differences over +-u).
    Assumes: independent raw inputs, a formula that is defined and nearly straight over +-u.
    """
    variance: Floats = np.zeros_like(formula(*values))
    for number, uncertainty in enumerate(uncertainties):
        if np.any(uncertainty):
            above, below = list(values), list(values)
            above[number] = values[number] + uncertainty
            below[number] = values[number] - uncertainty
            variance = variance + ((formula(*above) - formula(*below)) / 2) ** 2
    return np.sqrt(variance)


def interval(formula: Callable[..., Floats], lows: Sequence[Floats], highs: Sequence[Floats]) -> tuple[Floats, Floats]:
    """Least and greatest value of ``formula`` when each input lies between its low and its high.

    NaN in rows where more than 4 inputs vary, where an input is NaN, or where a corner has no value (as infinity
    minus infinity). Source: definition (interval by corners). Assumes: a formula monotonic in each input.
    """
    edges = np.broadcast_arrays(*lows, *highs)
    starts, ends = edges[: len(lows)], edges[len(lows) :]
    pattern = np.zeros(edges[0].shape, np.int64)
    for number, (start, end) in enumerate(zip(starts, ends, strict=True)):
        pattern |= np.left_shift(start != end, number)
    low = np.full(edges[0].shape, np.nan)
    high = np.full(edges[0].shape, np.nan)
    for bits in np.unique(pattern):
        if int(bits).bit_count() > _MOST_VARYING:
            continue
        rows = pattern == bits
        sides = [
            (start[rows], end[rows]) if int(bits) >> number & 1 else (start[rows],)
            for number, (start, end) in enumerate(zip(starts, ends, strict=True))
        ]
        with np.errstate(invalid="ignore"):
            corners = np.stack([formula(*corner) for corner in product(*sides)])
        low[rows], high[rows] = corners.min(axis=0), corners.max(axis=0)
    return low, high

"""The normal distribution, by NumPy alone."""

from __future__ import annotations

import numpy as np

from fhiro2.model import Floats


def probability_below(value: Floats, uncertainty: Floats, limit: Floats | float) -> Floats:
    """Probability that the true quantity lies below ``limit``, given ``value`` and its standard ``uncertainty``.

    All in one unit, ``uncertainty`` 0 or more; without uncertainty it is 1 below the limit, 0.5 on it, 0 above it.
    NaN if any is NaN.

    Source: normal distribution; error function by Abramowitz M & Stegun IA, Handbook of Mathematical Functions,
    1964, 7.1.26 (error below 1.5e-7, thus below 1e-7 here).
    """
    distance = limit - value
    certain = np.equal(uncertainty, 0)
    scaled = distance / np.where(certain, 1, np.sqrt(2) * uncertainty)
    result: Floats = (1 + np.where(certain, np.sign(distance), _error_function(scaled))) / 2
    return result


def _error_function(argument: Floats) -> Floats:
    size = np.abs(argument)
    t = 1 / (1 + 0.3275911 * size)
    series = t * (0.254829592 + t * (-0.284496736 + t * (1.421413741 + t * (-1.453152027 + t * 1.061405429))))
    result: Floats = np.sign(argument) * (1 - series * np.exp(-(size**2)))
    return result

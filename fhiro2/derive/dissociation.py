"""Haemoglobin-oxygen dissociation: saturation from oxygen pressure and back.

The default is the Siggaard-Andersen curve with its affinity terms; the Severinghaus curve with the exact inverse of
Ellis is the simple one, without any shift. Saturation is the functional one, a fraction of active haemoglobin.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from fhiro2.derive.constants import KILOPASCAL_PER_MMHG, NORMAL_DPG, NORMAL_TEMPERATURE, STANDARD_PCO2, STANDARD_PH
from fhiro2.model import Floats

_REFERENCE_PRESSURE = 7.0
"""kPa; the curve's coordinate is ln pressure over this one, so its standard centre is 0."""

_CENTRE_LOGIT = 1.8747
"""ln(s / (1 - s)) at the curve's centre."""

_STEPS = 46
"""Halvings of a bracket: what is left of a width of 1 is 1e-14, and curve and inverse stay a pair to 1e-9."""


def saturation(
    po2: Floats,
    ph: Floats,
    pco2: Floats,
    temperature: Floats,
    dpg: Floats,
    cohb: Floats,
    methb: Floats,
    hbf: Floats,
) -> Floats:
    """Functional oxygen saturation (fraction) of blood with a given oxygen pressure.

    ``po2`` and ``pco2`` in mm[Hg], above 0 (``po2`` used from 5 to 700); ``ph`` of plasma; ``temperature`` in Cel;
    ``dpg`` in mmol/L (0 to 10); ``cohb``, ``methb`` (of total haemoglobin, together below 1) and ``hbf`` as
    fractions. NaN where a pressure is not above 0 or any input is NaN.

    Source: Siggaard-Andersen M & O, Scand J Clin Lab Invest Suppl 1990;203:29-45, with Fogh-Andersen 1993;214:113-119
    (constants read in a secondary source). Core: Siggaard-Andersen et al., Clin Chem 1984;30:1646-1651.
    Assumes: carbon monoxide shares the curve with oxygen (Haldane), combined saturation solved by bisection.
    """
    affinity = _affinity(ph, pco2, dpg, methb, hbf)
    po2, affinity, temperature, carboxy = np.broadcast_arrays(po2, affinity, temperature, cohb / (1 - methb))
    result: Floats = np.array(_curve(po2, affinity, temperature))
    poisoned = carboxy != 0
    if np.any(poisoned):
        result[poisoned] = _beside_carbon_monoxide(
            po2[poisoned], affinity[poisoned], temperature[poisoned], carboxy[poisoned]
        )
    return result


def saturation_gap(observed: Floats, predicted: Floats) -> Floats:
    """How far an ``observed`` saturation lies above the ``predicted`` one, in points of percent; both as fractions.

    Source: definition.
    """
    return 100.0 * (observed - predicted)


def pressure(
    saturation: Floats,
    ph: Floats,
    pco2: Floats,
    temperature: Floats,
    dpg: Floats,
    cohb: Floats,
    methb: Floats,
    hbf: Floats,
) -> Floats:
    """Oxygen pressure (mm[Hg]) at which blood has a given functional saturation; P50 at a saturation of 0.5.

    ``saturation`` as a fraction between 0 and 1, both excluded; the others, NaN and source as in ``saturation``.
    """
    carboxy = cohb / (1 - methb)
    combined = saturation + carboxy * (1 - saturation)
    affinity = _affinity(ph, pco2, dpg, methb, hbf)
    inside = _proper(combined)
    logit = np.log(inside / (1 - inside))
    reach = np.abs(_steepness(affinity))
    distance = _bisect(lambda x: _logit(x, affinity) - logit, logit - _CENTRE_LOGIT - reach, 2 * reach)
    both = _REFERENCE_PRESSURE * np.exp(distance + _displacement(affinity, temperature)) / KILOPASCAL_PER_MMHG.value
    result: Floats = both * _proper(saturation) * (1 - carboxy) / combined
    return result


def severinghaus(po2: Floats) -> Floats:
    """Saturation (fraction) of adult blood at 37 Cel and pH 7.40 from ``po2`` in mm[Hg], 0 or more.

    Source: Severinghaus JW, J Appl Physiol 1979;46:599-602, eq. 1 (fit +-0.0055).
    Assumes: no COHb, MetHb or HbF; ``po2`` already brought to 37 Cel and pH 7.40.
    """
    cubic = po2**3 + 150.0 * po2
    return cubic / (cubic + 23400.0)


def ellis(saturation: Floats) -> Floats:
    """Oxygen pressure (mm[Hg]) on the Severinghaus curve for a saturation between 0 and 1; NaN outside.

    Source: Ellis RK, J Appl Physiol 1989;67:902 (formula from memory, exact by round trip).
    Deviates: the second cube root is written through the first, which avoids a loss of digits near saturation 1.
    """
    inside = _proper(saturation)
    half = 11700.0 * inside / (1 - inside)
    root = np.cbrt(half + np.sqrt(50.0**3 + half**2))
    result: Floats = root - 50.0 / root
    return result


def _affinity(ph: Floats, pco2: Floats, dpg: Floats, methb: Floats, hbf: Floats) -> Floats:
    """Shift of the curve at 37 Cel, in ln pressure."""
    standard_pco2 = STANDARD_PCO2.value / KILOPASCAL_PER_MMHG.value
    result: Floats = (
        -0.88 * (ph - STANDARD_PH.value)
        + 0.048 * np.log(_positive(pco2) / standard_pco2)
        - 0.7 * methb
        + (0.06 - 0.02 * hbf) * (dpg - NORMAL_DPG.value)
        - 0.25 * hbf
    )
    return result


def _displacement(affinity: Floats, temperature: Floats) -> Floats:
    """Place of the curve's centre, in ln pressure."""
    return affinity + 0.055 * (temperature - NORMAL_TEMPERATURE.value)


def _steepness(affinity: Floats) -> Floats:
    """Height of the hyperbolic tangent."""
    return 3.5 + affinity


def _logit(distance: Floats, affinity: Floats) -> Floats:
    """ln(s / (1 - s)) at a distance in ln pressure from the curve's centre."""
    result: Floats = _CENTRE_LOGIT + distance + _steepness(affinity) * np.tanh(0.5342857 * distance)
    return result


def _curve(po2: Floats, affinity: Floats, temperature: Floats) -> Floats:
    """Saturation at a pressure (mm[Hg]) that counts all ligands."""
    position = np.log(_positive(po2) * KILOPASCAL_PER_MMHG.value / _REFERENCE_PRESSURE)
    result: Floats = 1 / (1 + np.exp(-_logit(position - _displacement(affinity, temperature), affinity)))
    return result


def _beside_carbon_monoxide(po2: Floats, affinity: Floats, temperature: Floats, carboxy: Floats) -> Floats:
    """Oxygen saturation where ``carboxy`` is the carbon monoxide saturation of the active haemoglobin."""

    def excess(oxygen: Floats) -> Floats:
        combined = oxygen + carboxy * (1 - oxygen)
        return combined - _curve(po2 * combined / (oxygen * (1 - carboxy)), affinity, temperature)

    return _bisect(excess, np.zeros_like(po2), np.ones_like(po2))


def _bisect(rising: Callable[[Floats], Floats], low: Floats, width: Floats) -> Floats:
    """Where a rising function crosses zero between ``low`` and ``low + width``; NaN where the function is."""
    for _ in range(_STEPS):
        width = width / 2
        low = np.where(rising(low + width) <= 0, low + width, low)
    result: Floats = np.where(np.isnan(rising(low + width)), np.nan, low + width / 2)
    return result


def _positive(value: Floats) -> Floats:
    return np.where(np.greater(value, 0), value, np.nan)


def _proper(fraction: Floats) -> Floats:
    return np.where(np.greater(fraction, 0) & np.less(fraction, 1), fraction, np.nan)

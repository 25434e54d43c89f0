"""Oxygen in the alveoli, and how far arterial blood falls short of it."""

from __future__ import annotations

import numpy as np

from fhiro2.derive.constants import KILOPASCAL_PER_MMHG
from fhiro2.model import Floats


def water_vapour(temperature: Floats) -> Floats:
    """Saturated water vapour pressure, mm[Hg], at ``temperature`` in Cel (0 to 50; used from 25 to 41).

    Source: Buck AL, J Appl Meteorol 1981;20:1527-1532, with the coefficients that its author revised in 1996 (read in
    secondary sources; within 0.03 mm[Hg] of IAPWS-IF97 from 25 to 41 Cel).
    """
    hectopascal = 6.1121 * np.exp((18.678 - temperature / 234.5) * temperature / (257.14 + temperature))
    result: Floats = hectopascal / 10 / KILOPASCAL_PER_MMHG.value
    return result


def alveolar_pressure(fio2: Floats, barometric: Floats, paco2: Floats, quotient: Floats, vapour: Floats) -> Floats:
    """Ideal alveolar oxygen pressure, mm[Hg].

    ``fio2`` as a fraction (0.205 to 1.0); ``barometric`` (station pressure), ``paco2`` and water ``vapour`` in
    mm[Hg]; respiratory ``quotient`` 0.7 to 1.0.

    Source: Fenn WO, Rahn H, Otis AB, Am J Physiol 1946;146:637-653, full form of the alveolar air equation.
    Assumes: steady state, no carbon dioxide in inspired gas, alveolar pCO2 equal to arterial.
    """
    return fio2 * (barometric - vapour) - paco2 * (fio2 + (1 - fio2) / quotient)


def gradient(
    fio2: Floats, barometric: Floats, paco2: Floats, quotient: Floats, temperature: Floats, pao2: Floats
) -> Floats:
    """Alveolar-arterial oxygen gradient, mm[Hg], on raw inputs; may be negative (then an input is in doubt).

    Inputs as in ``alveolar_pressure`` with the body ``temperature`` in Cel; ``paco2`` and ``pao2`` in mm[Hg], both
    at that temperature. Source: definition.
    """
    return alveolar_pressure(fio2, barometric, paco2, quotient, water_vapour(temperature)) - pao2


def ratio(oxygenation: Floats, fio2: Floats) -> Floats:
    """Oxygenation over inspired fraction, in the unit of ``oxygenation``.

    PaO2/FiO2 with the arterial oxygen pressure in mm[Hg]; SpO2/FiO2 with the saturation in percent (up to 97).
    ``fio2`` as a fraction (0.205 to 1.0).

    Source: Horovitz JH et al., Arch Surg 1974;108:349 (P/F, from memory); Rice TW et al., Chest 2007;132:410 (S/F).
    """
    return oxygenation / fio2


def pressure_at_altitude(altitude: Floats) -> Floats:
    """Barometric pressure, mm[Hg], at ``altitude`` in km above the sea (0 to 9), mean over the year.

    Source: West JB, J Appl Physiol 1996;81:1850-1854, model atmosphere equation (coefficients read in a
    secondary source that names it).
    """
    result: Floats = np.exp(6.63268 - 0.1112 * altitude - 0.00149 * altitude**2)
    return result

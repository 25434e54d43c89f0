"""Acid-base relations."""

from __future__ import annotations

import numpy as np

from fhiro2.model import Floats


def bicarbonate(ph: Floats, pco2: Floats) -> Floats:
    """Plasma bicarbonate, mmol/L, from ``ph`` (6.6 to 7.9) and ``pco2`` in mm[Hg] (5 to 200).

    Source: CLSI C46 form (pK 6.095, solubility 0.0307 mmol/L/mm[Hg]); equals the 24.8 of its base-excess equation.
    """
    result: Floats = 10.0 ** (ph - 7.608) * pco2
    return np.asarray(result)

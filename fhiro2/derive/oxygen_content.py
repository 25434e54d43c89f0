"""How much oxygen blood carries, bound and dissolved."""

from __future__ import annotations

from fhiro2.derive.constants import KILOPASCAL_PER_MMHG
from fhiro2.model import Floats


def content(
    binding: Floats,
    haemoglobin: Floats,
    saturation: Floats,
    inactive: Floats,
    solubility: Floats,
    pressure: Floats,
) -> Floats:
    """Oxygen content of blood, mL/dL.

    ``binding`` in mL/g; total ``haemoglobin`` in g/dL (2 to 25); ``saturation`` and ``inactive`` as fractions;
    ``solubility`` in mL/dL/kPa; oxygen ``pressure`` in mm[Hg]. Three pairings are right, no other:
    BINDING_OXYHAEMOGLOBIN with functional saturation and ``inactive`` = COHb + MetHb;
    BINDING_OXYHAEMOGLOBIN with the oxyhaemoglobin fraction and ``inactive`` = 0 (it is already taken off);
    BINDING_TOTAL with functional saturation and ``inactive`` = 0, when COHb and MetHb are not known.

    Source: definition (bound by Huefner's number plus dissolved by Henry's law); constants in ``constants``.
    """
    return binding * haemoglobin * saturation * (1 - inactive) + solubility * KILOPASCAL_PER_MMHG.value * pressure

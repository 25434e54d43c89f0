"""Oxygen carried by the circulation: delivery, consumption, extraction, and their relation to body size."""

from __future__ import annotations

from fhiro2.derive.constants import ORDINARY_CARDIAC_INDEX, ORDINARY_CONSUMPTION_INDEX
from fhiro2.model import Floats


def delivery(cardiac_output: Floats, content: Floats) -> Floats:
    """Oxygen delivery, mL/min, of ``cardiac_output`` in L/min (0.5 to 20) with arterial ``content`` in mL/dL.

    Source: definition (10 dL in a litre).
    """
    return 10.0 * cardiac_output * content


def consumption(cardiac_output: Floats, difference: Floats) -> Floats:
    """Oxygen consumption, mL/min, from the arterial minus mixed venous content ``difference`` in mL/dL, above 0.

    Source: Fick A, 1870, reversed: what is delivered and does not come back.
    Assumes: steady state; leaves out what the lung itself uses.
    """
    return delivery(cardiac_output, difference)


def extraction_ratio(arterial: Floats, venous: Floats) -> Floats:
    """Fraction of the delivered oxygen that tissues take; both contents in mL/dL, of one patient and one moment.

    Source: definition, from the principle of Fick A, 1870.
    """
    return (arterial - venous) / arterial


def extraction_excess(arterial: Floats, venous: Floats) -> Floats:
    """How much more of the delivered oxygen tissues take than expected for this arterial content; a fraction, signed.

    ``arterial`` and mixed ``venous`` contents in mL/dL, of one patient and one moment. Expected is what an ordinary
    consumption index takes from the delivery at an ordinary cardiac index, so that low haemoglobin alone is no excess.

    Source: definition, from the principle of Fick A, 1870; what is ordinary stands in ``constants``. Assumes: an
    adult at rest.
    """
    expected = ORDINARY_CONSUMPTION_INDEX.value / (10.0 * ORDINARY_CARDIAC_INDEX.value * arterial)
    return extraction_ratio(arterial, venous) - expected


def index(quantity: Floats, surface: Floats) -> Floats:
    """A flow by body ``surface`` in m2 (0.15 to 3.5): cardiac, delivery or consumption index. Source: definition."""
    return quantity / surface


def body_surface_area(height: Floats, weight: Floats) -> Floats:
    """Body surface area, m2, from ``height`` in cm and ``weight`` in kg.

    Source: Du Bois D & EF, Arch Intern Med 1916;17:863-871 (from memory). Adults; for children another form is due.
    """
    return 0.007184 * weight**0.425 * height**0.725

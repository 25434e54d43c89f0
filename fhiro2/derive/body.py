"""Body surface and what is indexed by it, for adults only."""

from __future__ import annotations

import numpy as np

from fhiro2.derive.operand import Guard, Operand, derive, exact, read, within
from fhiro2.derive.transport import body_surface_area, index
from fhiro2.model import DAY, AnchorTable, Floats, Timelines, Why, choose

YEAR = 365.25 * DAY
_BASIS = 5  # row of catalogue.BASES
_DOUBT = 0.05  # relative doubt of body surface by formula (common practice)
_ADULT_YEARS = 18
FLOW = (0.5, 20.0)  # L/min; plausible cardiac outputs to compute from (design proposal)


def add_body(output: AnchorTable, body: AnchorTable, timelines: Timelines) -> None:
    """Cardiac index at each cardiac output, body surface area at each weight (in place)."""
    _add_index(output, timelines)
    operands, guard = surface(body, timelines)
    derive(body, "body-surface-area", surface_area, operands, [guard], (), _BASIS)


def take_index(arterial: AnchorTable, timelines: Timelines) -> None:
    """Where no cardiac index was measured near an arterial sample, the one at its cardiac output (in place).

    It is computed again from the readings at that cardiac output, which may lie in another part of a cut batch.
    """
    measured, flow = arterial.columns["ci"], arterial.columns["co"]
    moment = timelines.readings["effective"][np.maximum(flow.source, 0)]
    outputs = AnchorTable("cardiac-output", flow.source, arterial.patient, moment, arterial.known)
    outputs.columns = {"co": flow} | {name: arterial.columns[f"{name}_co"] for name in ("weight", "height")}
    _add_index(outputs, timelines)
    computed = outputs.columns["cardiac-index"]
    computed.source = np.where(computed.known(), flow.source, computed.source)
    computed.why = np.where(flow.known(), computed.why, flow.why)
    own = measured.known() | (~flow.known() & (measured.why != Why.NEVER_RECORDED))
    column = choose(own, measured, computed)
    column.derived = np.where(~own & computed.known(), "cardiac-index", "")
    arterial.columns["ci"] = column


def _add_index(output: AnchorTable, timelines: Timelines) -> None:
    flow = read(output, "co")
    operands, guard = surface(output, timelines)
    derive(output, "cardiac-index", _cardiac_index, [flow, *operands], [within(flow, *FLOW), guard], (), _BASIS)


def surface(table: AnchorTable, timelines: Timelines) -> tuple[list[Operand], Guard]:
    """Height, weight and the formula's doubt as operands of ``surface_area``; the guard leaves out who is no adult."""
    count = len(table.reading)
    doubt = exact(np.ones(count), np.full(count, _DOUBT))
    not_adult = ~(age(table, timelines) >= _ADULT_YEARS * YEAR)
    return [read(table, "height"), read(table, "weight"), doubt], Guard(not_adult, Why.AGE_EXCLUDES)


def age(table: AnchorTable, timelines: Timelines) -> Floats:
    """Age in microseconds at each anchor; NaN where the birth is not known."""
    born = np.array([np.nan if one.born is None else one.born for one in timelines.patients], dtype=np.float64)
    if not len(born):
        return np.zeros(0)
    return table.effective.astype(np.float64) - born[table.patient]


def surface_area(height: Floats, weight: Floats, doubt: Floats) -> Floats:
    """Body surface by height and weight, times 1 with the doubt of the formula."""
    return body_surface_area(height, weight) * doubt


def _cardiac_index(flow: Floats, height: Floats, weight: Floats, doubt: Floats) -> Floats:
    return index(flow, surface_area(height, weight, doubt))

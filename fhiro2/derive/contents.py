"""Oxygen contents, delivery, uptake and extraction of arterial samples and arterial-venous pairs."""

from __future__ import annotations

import numpy as np

from fhiro2.derive.basis import Basis, Side, basis
from fhiro2.derive.body import FLOW, surface, surface_area
from fhiro2.derive.constants import SOLUBILITY
from fhiro2.derive.doubt import mark_fractions, suspect
from fhiro2.derive.operand import Guard, Mark, Operand, derive, fixed, read, within
from fhiro2.derive.oxygen_content import content
from fhiro2.derive.transport import consumption, delivery, extraction_excess, extraction_ratio, index
from fhiro2.model import AnchorTable, Caution, Column, Floats, Timelines, Truths, Why

_ARTERIAL = Side("sao2", "fo2hba")
_MIXED, _CENTRAL = Side("svo2", "fo2hbv"), Side("scvo2", "fo2hbcv")
_HAEMOGLOBIN = (2.0, 25.0)  # g/dL; plausible to compute from (design proposal), as the next
_SATURATION = (0.1, 1.0)
_APART = 0.06  # of the larger haemoglobin; more is dilution or a bleed
_ONE_SIDED_95 = 1.645


def add_contents(arterial: AnchorTable, mixed: AnchorTable, central: AnchorTable, timelines: Timelines) -> None:
    """Contents at each sample, and at arterial samples all that follows from them (in place)."""
    for table, side in ((mixed, _MIXED), (central, _CENTRAL)):
        mark_fractions(table, side.functional, side.fractional)
    _venous(mixed, "oxygen-content-mixed-venous", "pvo2", _MIXED)
    _venous(central, "oxygen-content-central-venous", "pcvo2", _CENTRAL)
    _arterial(arterial, timelines)
    _pair(arterial, timelines)
    _central_pair(arterial)


def _venous(table: AnchorTable, code: str, pressure: str, side: Side) -> None:
    found = basis(table, [side], [("fcohb", "fmethb")])
    operands = _content_operands(table, found, pressure)
    derive(table, code, content, operands, _content_guards(operands), constants=found.number)


def _content_operands(table: AnchorTable, found: Basis, pressure: str) -> list[Operand]:
    solubility = fixed(SOLUBILITY, len(table.reading))
    return [found.binding, read(table, "hb"), found.saturations[0], found.inactive, solubility, read(table, pressure)]


def _content_guards(operands: list[Operand]) -> list[Guard]:
    return [within(operands[1], *_HAEMOGLOBIN), within(operands[2], *_SATURATION)]


def _arterial(table: AnchorTable, timelines: Timelines) -> None:
    found = basis(table, [_ARTERIAL], [("fcohb", "fmethb")])
    operands = _content_operands(table, found, "pao2")
    guards = _content_guards(operands)
    derive(table, "oxygen-content-arterial", content, operands, guards, constants=found.number)
    flow = read(table, "co")
    sizes, adult = surface(table, timelines)
    guards = [*guards, suspect(table), within(flow, *FLOW)]

    def delivered(flow: Floats, *rest: Floats) -> Floats:
        return delivery(flow, content(*rest))

    def indexed(height: Floats, weight: Floats, doubt: Floats, *rest: Floats) -> Floats:
        return index(delivered(*rest), surface_area(height, weight, doubt))

    derive(table, "oxygen-delivery", delivered, [flow, *operands], guards, constants=found.number)
    derive(
        table,
        "oxygen-delivery-index",
        indexed,
        [*sizes, flow, *operands],
        [*guards, adult],
        constants=found.number,
    )


def _content_pair(
    binding: Floats,
    haemoglobin: Floats,
    arterial: Floats,
    venous: Floats,
    inactive: Floats,
    solubility: Floats,
    arterial_pressure: Floats,
    venous_pressure: Floats,
) -> tuple[Floats, Floats]:
    return (
        content(binding, haemoglobin, arterial, inactive, solubility, arterial_pressure),
        content(binding, haemoglobin, venous, inactive, solubility, venous_pressure),
    )


def _difference(*pair: Floats) -> Floats:
    arterial, venous = _content_pair(*pair)
    return arterial - venous


def _extraction(*pair: Floats) -> Floats:
    return extraction_ratio(*_content_pair(*pair))


def _excess(*pair: Floats) -> Floats:
    return extraction_excess(*_content_pair(*pair))


def _consumption(flow: Floats, *pair: Floats) -> Floats:
    return consumption(flow, _difference(*pair))


def _consumption_index(height: Floats, weight: Floats, doubt: Floats, *rest: Floats) -> Floats:
    return index(_consumption(*rest), surface_area(height, weight, doubt))


def _pair_operands(table: AnchorTable, side: Side, pressure: str, suffix: str) -> tuple[list[Operand], Basis]:
    found = basis(table, [_ARTERIAL, side], [("fcohb", "fmethb"), (f"fcohb_{suffix}", f"fmethb_{suffix}")])
    return [
        found.binding,
        read(table, "hb"),
        *found.saturations,
        found.inactive,
        fixed(SOLUBILITY, len(table.reading)),
        read(table, "pao2"),
        read(table, pressure),
    ], found


def _pair_guards(table: AnchorTable, operands: list[Operand], suffix: str) -> list[Guard]:
    own, other = table.columns["hb"], table.columns[f"hb_{suffix}"]
    earlier = ((own.cautions | other.cautions) & np.uint64(Caution.EARLIER_HAEMOGLOBIN)) != 0
    apart = ~earlier & (np.abs(own.value - other.value) > _APART * np.maximum(own.value, other.value))
    excluded = (table.facts["ecmo"] == 1) | (table.facts["intracardiac-shunt"] == 1)
    return [
        *_content_guards(operands),
        within(operands[3], *_SATURATION),
        suspect(table),
        Guard(apart, Why.HAEMOGLOBINS_APART),
        Guard(excluded, Why.CONTEXT_EXCLUDES),
    ]


def _unknown_context(table: AnchorTable) -> Mark:
    unknown = (table.facts["ecmo"] == -1) | (table.facts["intracardiac-shunt"] == -1)
    return Mark(unknown, Caution.CONTEXT_UNKNOWN)


def _pair(table: AnchorTable, timelines: Timelines) -> None:
    operands, found = _pair_operands(table, _MIXED, "pvo2", "v")
    guards, marks = _pair_guards(table, operands, "v"), [_unknown_context(table)]
    derive(table, "oxygen-content-difference", _difference, operands, guards, marks, found.number)
    derive(table, "oxygen-extraction-ratio", _extraction, operands, guards, marks, found.number)
    flow = read(table, "co")
    sizes, adult = surface(table, timelines)
    derive(table, "oxygen-extraction-excess", _excess, operands, [*guards, adult], marks, found.number)
    method = (flow.column.cautions & np.uint64(Caution.CARDIAC_OUTPUT_METHOD_UNKNOWN)) != 0
    guards = [*guards, within(flow, *FLOW), Guard(method, Why.CARDIAC_OUTPUT_METHOD)]
    derive(table, "oxygen-consumption", _consumption, [flow, *operands], guards, marks, found.number)
    derive(
        table,
        "oxygen-consumption-index",
        _consumption_index,
        [*sizes, flow, *operands],
        [*guards, adult],
        marks,
        found.number,
    )
    _judge_difference(
        table,
        "oxygen-content-difference",
        "oxygen-extraction-ratio",
        ("oxygen-extraction-excess", "oxygen-consumption", "oxygen-consumption-index"),
    )


def _central_pair(table: AnchorTable) -> None:
    operands, found = _pair_operands(table, _CENTRAL, "pcvo2", "cv")
    guards = _pair_guards(table, operands, "cv")
    everywhere = np.ones(len(table.reading), dtype=bool)
    marks = [_unknown_context(table), Mark(everywhere, Caution.CENTRAL_NOT_MIXED)]
    derive(table, "oxygen-content-difference-central", _difference, operands, guards, marks, found.number)
    derive(table, "oxygen-extraction-ratio-central", _extraction, operands, guards, marks, found.number)
    _judge_difference(table, "oxygen-content-difference-central", "oxygen-extraction-ratio-central", ())


def _judge_difference(table: AnchorTable, difference: str, extraction: str, others: tuple[str, ...]) -> None:
    """No positive difference: nothing follows. Within twice its doubt: extraction is a bound, others are withheld."""
    column = table.columns[difference]
    negative = column.known() & ~(column.high > 0)
    doubtful = column.known() & ~negative & (column.value <= 2 * column.uncertainty)
    ratio_column = table.columns[extraction]
    loose = doubtful & ratio_column.known()
    ratio_column.high[loose] = np.round(ratio_column.value[loose] + _ONE_SIDED_95 * ratio_column.uncertainty[loose], 2)
    ratio_column.low[loose] = 0.0
    ratio_column.value[loose] = ratio_column.uncertainty[loose] = np.nan
    for name in (difference, extraction):
        table.columns[name].cautions[doubtful] |= np.uint64(Caution.LOW_DIFFERENCE)
    for name in (extraction, *others):
        _withhold(table.columns[name], negative, Why.NO_POSITIVE_DIFFERENCE)
    for name in others:
        _withhold(table.columns[name], doubtful, Why.UNCERTAIN_DIFFERENCE)


def _withhold(column: Column, where: Truths, why: Why) -> None:
    rows = where & column.known()
    column.why[rows] = why
    column.cautions[rows] = 0
    for values in (column.value, column.low, column.high, column.uncertainty):
        values[rows] = np.nan

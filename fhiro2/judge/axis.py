"""The four links of the oxygen chain at an arterial sample: each met (short), not met or not assessable.

Every link is judged by itself and all that are met are told, never one winner. A value that is missing leaves a link
*not assessable*, never *not met*. Limits are defaults for local review:

- **gas** by oxygen pressure below 8 kPa or saturation below 90 % (convention, common practice). Pulse oximetry can
  meet it; being doubtful by 4 points it cannot exclude it.
- **carrier** by haemoglobin below 100 g/L (our choice, within the moderate anaemia of the World Health Organization,
  80 to 109 g/L, from memory), COHb above 10 % or MetHb above 5 % (convention, common practice). Pressure, pulse
  oximetry and haemoglobin are all normal in carbon monoxide poisoning: only all three measured can exclude it.
- **flow** by a cardiac index below 2.2 L/min/m2 with an extraction above 0.30 (conventions, common practice) that is
  more than this oxygen content explains, beyond 1.64 standard uncertainties. Without an index, flow and demand cannot
  be told apart.
- **use** by an extraction below 0.20 from mixed venous blood, beyond 1.64 standard uncertainties, with a lactate of
  4 mmol/L or more (conventions, common practice) in a patient of 35 Cel or more. Sepsis, liver failure, shunts and
  wedge samples look the same.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np

from fhiro2.catalogue import title_of
from fhiro2.flags import AxisState
from fhiro2.judge.condition import (
    FALSE,
    TRUE,
    UNKNOWN,
    AllOf,
    AnyOf,
    Condition,
    Not,
    NotKnown,
    Operator,
    Truth,
    comparison,
    evaluate,
    leaves,
    quantities,
)
from fhiro2.model import AnchorTable, Integers, Truths

MET, NOT_MET, NOT_ASSESSABLE = "met", "not met", "not assessable"
_WORDS: Final = {TRUE: MET, FALSE: NOT_MET, UNKNOWN: NOT_ASSESSABLE}
_CERTAIN: Final = 0.95  # one-sided, 1.64 standard uncertainties


@dataclass(frozen=True)
class Axis:
    """One link. ``unless`` are stated facts that forbid to judge it, ``aside`` words for what it may be instead."""

    name: str
    met: Condition
    not_met: Condition
    unless: tuple[str, ...] = ()
    aside: tuple[tuple[Condition, str], ...] = ()


def _known(*names: str) -> Condition:
    return AllOf(tuple(Not(NotKnown(name)) for name in names))


_HIGH_EXTRACTION = AllOf(
    (
        comparison("oxygen-extraction-ratio", Operator.ABOVE, 0.30, "1"),
        comparison("oxygen-extraction-excess", Operator.ABOVE, 0.0, "1", _CERTAIN),
    )
)
_LOW_FLOW = AllOf((comparison("ci", Operator.BELOW, 2.2, "L/min/m2"), _HIGH_EXTRACTION))
_WARM = comparison("temp", Operator.AT_LEAST, 35, "Cel")
_LITTLE_USED = AllOf(
    (
        comparison("oxygen-extraction-ratio", Operator.BELOW, 0.20, "1", _CERTAIN),
        comparison("lactate", Operator.AT_LEAST, 4, "mmol/L"),
    )
)
_LOW_GAS = tuple(
    comparison(name, Operator.BELOW, limit, unit)
    for name, limit, unit in (("pao2", 8, "kPa"), ("sao2", 90, "%"), ("spo2", 90, "%"))
)
_POOR_CARRIER = AnyOf(
    (
        comparison("hb", Operator.BELOW, 100, "g/L"),
        comparison("fcohb", Operator.ABOVE, 10, "%"),
        comparison("fmethb", Operator.ABOVE, 5, "%"),
    )
)

AXES: Final = (
    Axis("gas", AnyOf(_LOW_GAS), AnyOf(tuple(Not(one) for one in _LOW_GAS[:2])), ("cyanotic-lesion",)),
    Axis("carrier", _POOR_CARRIER, Not(_POOR_CARRIER)),
    Axis(
        "flow",
        _LOW_FLOW,
        AllOf((Not(_LOW_FLOW), _known("oxygen-extraction-excess"))),
        ("ecmo", "intracardiac-shunt"),
        (
            (
                AllOf((_HIGH_EXTRACTION, NotKnown("ci"))),
                "high extraction by flow or demand, which cannot be separated",
            ),
            (AllOf((_HIGH_EXTRACTION, Not(_LOW_FLOW))), "high extraction at this flow: demand"),
        ),
    ),
    Axis(
        "use",
        AllOf((_LITTLE_USED, _WARM)),
        AllOf((Not(_LITTLE_USED), _WARM, _known("oxygen-extraction-ratio", "lactate"))),
        ("ecmo", "intracardiac-shunt"),
        ((Not(_WARM), "core temperature below 35 Cel"),),
    ),
)


def axis_truths(axis: Axis, table: AnchorTable) -> Truth:
    """TRUE where the link is met, FALSE where it is not, UNKNOWN where it is not assessable."""
    met, not_met = (evaluate(one, table.columns).truth == TRUE for one in (axis.met, axis.not_met))
    result: Truth = np.where(met, TRUE, np.where(not_met, FALSE, UNKNOWN)).astype(np.int8)
    for fact in axis.unless:
        result[table.facts[fact] == TRUE] = UNKNOWN
    return result


def axis_states(table: AnchorTable, places: Integers) -> list[tuple[AxisState, ...]]:
    """What a reader is told of the links at each of ``places``: those whose columns the table has, in order."""
    told = [axis for axis in AXES if _quantities(axis) <= table.columns.keys()]
    here = table.at(places, {name for axis in told for name in _quantities(axis)})
    states = [_states(axis, here) for axis in told]
    return [tuple(row) for row in zip(*states, strict=True)] if states else [()] * len(places)


def _quantities(axis: Axis) -> set[str]:
    conditions = (axis.met, axis.not_met, *(condition for condition, _ in axis.aside))
    return {name for condition in conditions for name in quantities(condition)}


def _states(axis: Axis, table: AnchorTable) -> list[AxisState]:
    """The states at all anchors, with the words for why."""
    columns = table.columns
    holds = [(title_of(leaf.quantity), evaluate(leaf, columns).truth == TRUE) for leaf in leaves(axis.met)]
    lacks = [(title_of(name), ~columns[name].known()) for name in quantities(axis.met)]
    stated = [(fact.replace("-", " "), table.facts[fact] == TRUE) for fact in axis.unless]
    asides = [(words, evaluate(condition, columns).truth == TRUE) for condition, words in axis.aside]
    found = []
    for place, truth in enumerate(axis_truths(axis, table).tolist()):

        def here(named: list[tuple[str, Truths]], place: int = place) -> list[str]:
            return [name for name, where in named if where[place]]

        if truth == TRUE:
            words = [", ".join(here(holds))]
        elif facts := here(stated):
            words = [f"stated: {', '.join(facts)}"]
        else:
            lacking = here(lacks) if truth == UNKNOWN else []
            words = [*here(asides), *([f"not known: {', '.join(lacking)}"] if lacking else [])]
        found.append((axis.name, _WORDS[truth], "; ".join(words)))
    return found

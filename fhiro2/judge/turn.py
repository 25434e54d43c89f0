"""What a turn of an episode holds: the values as they stand at its anchor, by names that outlive the batch."""

from __future__ import annotations

import math
from collections.abc import Sequence
from datetime import UTC, datetime

import numpy as np

from fhiro2.catalogue import decimals_of, unit_of
from fhiro2.flags import AxisState, Cited, Evidence, Turn, TurnKind
from fhiro2.judge.condition import Condition, canonical, quantities
from fhiro2.judge.rulefile import TIME, Rule
from fhiro2.model import CAUTION_TEXT, MICROSECONDS, AnchorTable, Caution, Timelines, Why


def turn(
    kind: TurnKind,
    rule: Rule,
    timelines: Timelines,
    table: AnchorTable,
    place: int,
    probability: float,
    axes: tuple[AxisState, ...],
) -> Turn:
    """The turn that an episode of ``rule`` takes at the anchor ``place``, where the links are ``axes``."""
    condition = rule.clears if kind is TurnKind.CLEARED else rule.raises
    return Turn(
        kind,
        int(table.effective[place]),
        cited(timelines, int(table.reading[place])),
        None if kind is TurnKind.CLEARED else probability,
        "" if kind is TurnKind.CLEARED else _message(rule, table, place),
        tuple(_evidence(name, timelines, table, place) for name in _known(condition, table, place)),
        axes,
    )


def doubts(rule: Rule, table: AnchorTable, place: int) -> set[str]:
    """The cautions that the values and the scope of ``rule`` earn at this anchor."""
    bits = [table.columns[name].cautions[place] for name in _known(rule.raises, table, place)]
    texts = {CAUTION_TEXT[one] for one in Caution(int(np.bitwise_or.reduce(bits)))} if bits else set()
    silent = [fact.replace("-", " ") for fact in rule.scope.unless if table.facts[fact][place] < 0]
    return texts | ({f"nobody stated whether there is: {', '.join(silent)}"} if silent else set())


def cited(timelines: Timelines, reading: int, derived: str = "") -> Cited:
    """The Observation of a reading, or the value ``derived`` at it as anchor."""
    row, origins = timelines.readings[reading], timelines.origins
    origin = int(row["origin"])
    return Cited(
        timelines.patients[int(row["patient"])].source,
        timelines.names.subjects[int(row["subject"])],
        origins.ids[origin],
        int(row["part"]),
        origins.versions[origin],
        origins.hashes.get(origin, ""),
        derived,
    )


def _known(condition: Condition, table: AnchorTable, place: int) -> Sequence[str]:
    return [name for name in quantities(condition) if table.columns[name].why[place] == Why.KNOWN]


def _evidence(name: str, timelines: Timelines, table: AnchorTable, place: int) -> Evidence:
    column = table.columns[name]
    reading, derived = int(column.source[place]), "" if column.derived is None else str(column.derived[place])
    if reading < 0:
        reading, derived = int(table.reading[place]), name
    age = int(table.effective[place]) - int(timelines.readings["effective"][reading])
    value, doubt = _number(column.value[place]), _number(column.uncertainty[place])
    return Evidence(name, value, doubt, unit_of(name), age, cited(timelines, reading, derived))


def _number(number: float) -> float | None:
    return None if math.isnan(number) else float(number)


def _message(rule: Rule, table: AnchorTable, place: int) -> str:
    moment = datetime.fromtimestamp(int(table.effective[place]) // MICROSECONDS, UTC)
    words = {name: _words(rule, table, place, name) for name in quantities(rule.raises)}
    return rule.message.format_map({**words, TIME: f"{moment:%Y-%m-%d %H:%M} UTC"})


def _words(rule: Rule, table: AnchorTable, place: int, name: str) -> str:
    """A value in the unit of the rule, with no fewer decimals than the catalogue declares for the quantity."""
    column, unit = table.columns[name], rule.units[name]
    scale = canonical(name, unit)
    decimals = max(0, math.ceil(round(decimals_of(name) + math.log10(scale.factor), 6)))
    label = "" if unit == "1" else f" {unit.replace('[', '').replace(']', '')}"

    def shown(number: float) -> str:
        rounded = round((number - scale.offset) / scale.factor, decimals) + 0.0
        return f"{rounded:.{decimals}f}"

    if column.why[place] != Why.KNOWN:
        return "not known"
    low, high = float(column.low[place]), float(column.high[place])
    if not low < high:
        return shown(float(column.value[place])) + label
    if math.isinf(high):
        return f"at least {shown(low)}{label}"
    return f"at most {shown(high)}{label}" if low <= 0 else f"{shown(low)} to {shown(high)}{label}"

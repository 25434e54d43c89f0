"""What a turn of an episode holds: the values as they stand at its anchor, by names that outlive the batch."""

from __future__ import annotations

import math
from dataclasses import dataclass
from datetime import UTC, datetime

import numpy as np

from fhiro2.catalogue import decimals_of, unit_of
from fhiro2.flags import Cited, Evidence, Turn, TurnKind
from fhiro2.judge.axis import axis_states
from fhiro2.judge.condition import canonical, quantities
from fhiro2.judge.rulefile import TIME, Rule
from fhiro2.model import CAUTION_TEXT, MICROSECONDS, AnchorTable, Caution, Column, Integers, Timelines, Why


@dataclass
class _Values:
    """One column at some anchors, as plain lists: a value is looked up faster there than in an array."""

    known: list[bool]
    value: list[float]
    low: list[float]
    high: list[float]
    uncertainty: list[float]
    cautions: list[int]
    reading: list[int]
    derived: list[str]
    taken: list[int]


class Turns:
    """The turns that episodes of ``rule`` may take at the anchors ``places`` of ``table``."""

    def __init__(self, rule: Rule, timelines: Timelines, table: AnchorTable, places: Integers) -> None:
        self._rule = rule
        self._timelines = timelines
        self._effective: list[int] = table.effective[places].tolist()
        self._anchors: list[int] = table.reading[places].tolist()
        self._axes = axis_states(table, places)
        self._silent = {fact: (table.facts[fact][places] < 0).tolist() for fact in rule.scope.unless}
        self._raises, self._clears = quantities(rule.raises), quantities(rule.clears)
        self._values = {name: _values(name, timelines, table, places) for name in {*self._raises, *self._clears}}
        self._shown = {name: _Shown(name, rule.units[name]) for name in self._raises}

    def at(self, number: int, kind: TurnKind, probability: float) -> Turn:
        """The turn at the ``number``-th of the places."""
        cleared = kind is TurnKind.CLEARED
        names = self._clears if cleared else self._raises
        return Turn(
            kind,
            self._effective[number],
            cited(self._timelines, self._anchors[number]),
            None if cleared else probability,
            "" if cleared else self._message(number),
            tuple(self._evidence(name, number) for name in self._known(names, number)),
            self._axes[number],
        )

    def doubts(self, number: int) -> set[str]:
        """The cautions that the values and the scope of the rule earn there."""
        bits = 0
        for name in self._known(self._raises, number):
            bits |= self._values[name].cautions[number]
        texts = {CAUTION_TEXT[one] for one in Caution(bits)}
        silent = [fact.replace("-", " ") for fact, unknown in self._silent.items() if unknown[number]]
        return texts | ({f"nobody stated whether there is: {', '.join(silent)}"} if silent else set())

    def _known(self, names: tuple[str, ...], number: int) -> list[str]:
        return [name for name in names if self._values[name].known[number]]

    def _evidence(self, name: str, number: int) -> Evidence:
        found = self._values[name]
        value, doubt = found.value[number], found.uncertainty[number]
        return Evidence(
            name,
            None if math.isnan(value) else value,
            None if math.isnan(doubt) else doubt,
            unit_of(name),
            self._effective[number] - found.taken[number],
            cited(self._timelines, found.reading[number], found.derived[number]),
        )

    def _message(self, number: int) -> str:
        moment = datetime.fromtimestamp(self._effective[number] // MICROSECONDS, UTC)
        words = {name: self._shown[name].words(self._values[name], number) for name in self._raises}
        return self._rule.message.format_map({**words, TIME: f"{moment:%Y-%m-%d %H:%M} UTC"})


class _Shown:
    """How a quantity is shown: in a unit of the rule, with no fewer decimals than the catalogue declares."""

    def __init__(self, name: str, unit: str) -> None:
        self._scale = canonical(name, unit)
        self._decimals = max(0, math.ceil(round(decimals_of(name) + math.log10(self._scale.factor), 6)))
        self._label = "" if unit == "1" else f" {unit.replace('[', '').replace(']', '')}"

    def words(self, values: _Values, number: int) -> str:
        """The value, or the bound that is known of it."""
        if not values.known[number]:
            return "not known"
        low, high = values.low[number], values.high[number]
        if not low < high:
            return self._number(values.value[number]) + self._label
        if math.isinf(high):
            return f"at least {self._number(low)}{self._label}"
        if low <= 0:
            return f"at most {self._number(high)}{self._label}"
        return f"{self._number(low)} to {self._number(high)}{self._label}"

    def _number(self, number: float) -> str:
        rounded = round((number - self._scale.offset) / self._scale.factor, self._decimals) + 0.0
        return f"{rounded:.{self._decimals}f}"


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


def _values(name: str, timelines: Timelines, table: AnchorTable, places: Integers) -> _Values:
    """The column ``name``; what was derived at the anchor itself has the anchor's reading and its own code."""
    column: Column = table.columns[name]
    source = column.source[places]
    own = source < 0
    reading = np.where(own, table.reading[places], source)
    codes = np.full(len(places), "") if column.derived is None else column.derived[places]
    return _Values(
        (column.why[places] == Why.KNOWN).tolist(),
        column.value[places].tolist(),
        column.low[places].tolist(),
        column.high[places].tolist(),
        column.uncertainty[places].tolist(),
        column.cautions[places].tolist(),
        reading.tolist(),
        np.where(own, name, codes).tolist(),
        timelines.readings["effective"][reading].tolist(),
    )

"""Episodes: a rule's findings folded over a patient's anchors, from raised to cleared, each a flag with evidence."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace
from datetime import UTC, datetime

import numpy as np

from fhiro2.catalogue import decimals_of, unit_of
from fhiro2.judge.condition import TRUE, canonical, evaluate, quantities
from fhiro2.judge.rulefile import TIME, Rule
from fhiro2.model import (
    CAUTION_TEXT,
    DAY,
    MICROSECONDS,
    AnchorTable,
    Caution,
    Evidence,
    Flag,
    Floats,
    Integers,
    Timelines,
    Truths,
    Why,
)

YEAR = 365.25 * DAY

RAISED_FROM: dict[str, float] = {"info": 0.95, "warning": 0.5, "critical": 0.5}
"""The least probability at which a true finding raises a flag, by severity. Design choice."""


@dataclass(frozen=True)
class OpenEpisode:
    """An episode that is not cleared yet, with its flag as it was raised."""

    flag: Flag


Carried = dict[tuple[str, str], OpenEpisode]
"""The open episodes by patient key and rule id."""


def findings(rule: Rule, timelines: Timelines, table: AnchorTable) -> Floats:
    """The probability of the rule's positive findings at the anchors of ``table``; NaN where there is none.

    Positive is a condition that is true with enough probability in a patient within the rule's scope.
    """
    found = evaluate(rule.raises, table.columns)
    positive = in_scope(rule, timelines, table) & (found.truth == TRUE)
    return np.where(positive & (found.probability >= RAISED_FROM[rule.severity]), found.probability, np.nan)


def fold(
    rule: Rule,
    timelines: Timelines,
    table: AnchorTable,
    probability: Floats,
    carried: Mapping[tuple[str, str], OpenEpisode],
) -> tuple[list[Flag], Carried]:
    """The flags that ``rule`` raises or clears at the anchors of ``table``, and the episodes open after them.

    Raised where ``probability`` is a number and no episode is open; cleared where it is NaN and the rule's clearing
    condition is true. What is unknown changes nothing.
    """
    raising = ~np.isnan(probability)
    clearing = ~raising & in_scope(rule, timelines, table) & (evaluate(rule.clears, table.columns).truth == TRUE)
    opened, flags = dict(carried), []
    for place in _turns(table.patient, raising, clearing).tolist():
        key = (timelines.patients[int(table.patient[place])].key, rule.id)
        if raising[place] and key not in opened:
            opened[key] = OpenEpisode(_flag(rule, timelines, table, place, float(probability[place])))
        elif clearing[place] and key in opened:
            flags.append(replace(opened.pop(key).flag, cleared=int(table.effective[place])))
    flags += [episode.flag for key, episode in opened.items() if carried.get(key) is not episode]
    return flags, opened


def in_scope(rule: Rule, timelines: Timelines, table: AnchorTable) -> Truths:
    """Where the patient's age at the anchor is known and within the rule's scope."""
    born = np.array([np.nan if one.born is None else one.born for one in timelines.patients], dtype=np.float64)
    result: Truths = (table.effective - born[table.patient]) / YEAR >= rule.scope.age_years.least
    return result


def _turns(patient: Integers, raising: Truths, clearing: Truths) -> Integers:
    """The anchors that can change an episode: of equal findings in a row of one patient, the first."""
    places = np.flatnonzero(raising | clearing)
    state, owner = raising[places], patient[places]
    turns = np.ones(len(places), dtype=bool)
    turns[1:] = (state[1:] != state[:-1]) | (owner[1:] != owner[:-1])
    return places[turns]


def _flag(rule: Rule, timelines: Timelines, table: AnchorTable, place: int, probability: float) -> Flag:
    anchor = int(table.reading[place])
    row = timelines.readings[anchor]
    observation, part = timelines.origins.ids[int(row["origin"])], int(row["part"])
    known = [name for name in quantities(rule.raises) if table.columns[name].why[place] == Why.KNOWN]
    bits = np.bitwise_or.reduce([table.columns[name].cautions[place] for name in known])
    doubts = [CAUTION_TEXT[one] for one in Caution(int(bits))]
    return Flag(
        rule=rule.id,
        rule_version=rule.version,
        title=rule.title,
        severity=rule.severity,
        patient=timelines.patients[int(table.patient[place])].key,
        anchor=anchor,
        anchor_id=observation if part < 0 else f"{observation}#{part}",
        subject=timelines.names.subjects[int(row["subject"])],
        raised=int(table.effective[place]),
        cleared=None,
        probability=probability,
        message=_message(rule, table, place),
        cautions=tuple(sorted({*rule.cautions, *doubts})),
        evidence=tuple(_evidence(name, timelines, table, place) for name in known),
    )


def _evidence(name: str, timelines: Timelines, table: AnchorTable, place: int) -> Evidence:
    column = table.columns[name]
    reading = int(column.source[place])
    age = int(table.effective[place]) - int(timelines.readings["effective"][reading]) if reading >= 0 else 0
    derived = "" if column.derived is None else str(column.derived[place])
    value, uncertainty = float(column.value[place]), float(column.uncertainty[place])
    return Evidence(name, value, uncertainty, unit_of(name), age, reading, derived)


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

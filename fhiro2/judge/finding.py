"""Findings: where a rule's condition holds for a patient in its scope, true, false or unknown, and for how long."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import NamedTuple

import numpy as np

from fhiro2.judge.condition import FALSE, TRUE, UNKNOWN, Finding, Truth, conjunction, evaluate
from fhiro2.judge.rulefile import Lasting, Rule
from fhiro2.model import DAY, MINUTE, AnchorTable, Floats, SpecimenEvidence, Timelines, Truths

YEAR = 365.25 * DAY

RAISED_FROM: dict[str, float] = {"info": 0.95, "warning": 0.5, "critical": 0.5}
"""The least probability at which a true finding raises a flag, by severity. Design choice."""

NAMED_BY = {"specimen": SpecimenEvidence.SPECIMEN, "body-site": SpecimenEvidence.BODY_SITE}
"""What a rule may ask to name the kind of blood, and the evidence that a reading then has."""


class Run(NamedTuple):
    """An unbroken run of positive findings: when it began, and its last anchor (microseconds)."""

    since: int
    last: int


Runs = dict[int, Run | None]
"""The run that stands at the end, by patient number, of all patients with a finding that is not unknown."""


def finding(rule: Rule, timelines: Timelines, table: AnchorTable) -> Finding:
    """What ``rule`` finds at every anchor; ``missing`` also names what of the scope is not known."""
    scope = [
        Finding(part, np.where(part == UNKNOWN, np.nan, part), {name: part == UNKNOWN})
        for name, part in _scope(rule, timelines, table)
    ]
    return conjunction([*scope, evaluate(rule.raises, table.columns)])


def positive(found: Finding, severity: str) -> Floats:
    """The probability of the findings that are true and probable enough to raise a flag; NaN at all others."""
    enough = (found.truth == TRUE) & (found.probability >= RAISED_FROM[severity])
    return np.where(enough, found.probability, np.nan)


def outside(rule: Rule, timelines: Timelines, table: AnchorTable) -> Truths:
    """Where the patient is known not to be in the rule's scope."""
    result = np.zeros(len(table.reading), dtype=bool)
    for _, part in _scope(rule, timelines, table):
        result |= part == FALSE
    return result


def lasting(
    limits: Lasting, table: AnchorTable, probability: Floats, known: Truths, carried: Mapping[int, Run]
) -> tuple[Floats, Runs]:
    """``probability`` where the run of positive findings has lasted long enough, else NaN; and the runs at the end.

    A run ends where what is ``known`` is not positive, and where two positive findings lie too far apart; all other
    anchors neither end nor prolong it. ``carried`` are the runs before the first anchor.
    """
    places = np.flatnonzero(known)
    there, owner, time = ~np.isnan(probability[places]), table.patient[places], table.effective[places]
    apart, least = limits.at_most_apart_minutes * MINUTE, limits.minutes * MINUTE
    first = np.ones(len(places), dtype=bool)
    first[1:] = owner[1:] != owner[:-1]
    begins = np.ones(len(places), dtype=bool)
    begins[1:] = first[1:] | ~(there[1:] & there[:-1]) | (time[1:] - time[:-1] > apart)
    begin = time.copy()
    for place in np.flatnonzero(first & there).tolist():
        run = carried.get(int(owner[place]))
        if run is not None and time[place] - run.last <= apart:
            begin[place] = run.since
    since = begin[np.maximum.accumulate(np.where(begins, np.arange(len(places)), 0))]
    enough = there & (time - since >= least)
    result = np.full_like(probability, np.nan)
    result[places[enough]] = probability[places[enough]]
    ends = np.flatnonzero(np.append(first[1:], True)) if len(places) else places
    runs: Runs = {
        int(owner[end]): Run(int(since[end]), int(time[end])) if there[end] else None for end in ends.tolist()
    }
    return result, runs


def _scope(rule: Rule, timelines: Timelines, table: AnchorTable) -> Iterator[tuple[str, Truth]]:
    """Whether the patient is in the scope, by each thing that it asks for."""
    scope = rule.scope
    yield "age", _age(scope.age_years.least, scope.age_years.most, timelines, table)
    for fact in scope.with_facts:
        yield fact, table.facts[fact]
    for fact in scope.without:
        state = table.facts[fact]
        yield fact, np.where(state == UNKNOWN, UNKNOWN, 1 - state).astype(np.int8)
    for fact in scope.unless:
        yield fact, (table.facts[fact] != TRUE).astype(np.int8)
    if scope.blood_named_by:
        bits = np.bitwise_or.reduce([int(NAMED_BY[one]) for one in scope.blood_named_by])
        named = (timelines.readings["evidence"][table.reading] & bits) != 0
        yield "kind of blood", np.where(named, TRUE, UNKNOWN).astype(np.int8)


def _age(least: int, most: int | None, timelines: Timelines, table: AnchorTable) -> Truth:
    born = np.array([np.nan if one.born is None else one.born for one in timelines.patients], dtype=np.float64)
    age = table.effective - born[table.patient] if len(born) else np.zeros(0)
    inside = age >= least * YEAR
    if most is not None:
        inside &= age < (most + 1) * YEAR
    result: Truth = np.where(np.isnan(age), UNKNOWN, inside).astype(np.int8)
    return result

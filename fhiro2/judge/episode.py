"""Episodes: a rule's findings folded over a patient's anchors, from raised to cleared; each is one flag."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from fhiro2.flags import Flag, Turn, TurnKind
from fhiro2.judge.condition import TRUE, evaluate
from fhiro2.judge.finding import Run, lasting, outside, positive
from fhiro2.judge.rulefile import Rule
from fhiro2.judge.turn import Turns
from fhiro2.model import MINUTE, AnchorTable, Floats, Integers, Timelines, Truths

Key = tuple[str, str]


@dataclass(frozen=True)
class Standing:
    """What is carried of one rule in one patient: its last episode, and the run of findings towards the next.

    A cleared episode is carried as long as it may go on after a quiet time.
    """

    flag: Flag | None = None
    run: Run | None = None

    @property
    def is_open(self) -> bool:
        """Whether an episode stands."""
        return self.flag is not None and self.flag.cleared is None


Carried = dict[Key, Standing]
"""What is carried from anchors to later ones, by patient key and rule id."""

_NOTHING = Standing()
_RAISING, _WORSE, _CLEARING = 1, 2, 3


def sustained(
    rule: Rule, timelines: Timelines, table: AnchorTable, found: Floats, known: Truths, carried: Carried
) -> tuple[Floats, Carried]:
    """Positive findings that have lasted as long as ``rule`` asks, and what is carried with the runs as they stand."""
    if rule.lasting is None:
        return found, carried
    keys = [(patient.key, rule.id) for patient in timelines.patients]
    before = {
        number: standing.run
        for number, key in enumerate(keys)
        if (standing := carried.get(key, _NOTHING)).run is not None
    }
    cleared = evaluate(rule.clears, table.columns).truth == TRUE
    result, runs = lasting(rule.lasting, table, found, known | cleared, before)
    after = dict(carried)
    for number, run in runs.items():
        _keep(after, keys[number], replace(after.get(keys[number], _NOTHING), run=run), rule)
    return result, after


def fold(
    rule: Rule,
    timelines: Timelines,
    table: AnchorTable,
    probability: Floats,
    carried: Carried,
    remarks: frozenset[str] = frozenset(),
) -> tuple[list[Flag], Carried]:
    """The flags that ``rule`` raises or changes at the anchors of ``table``, and what is carried after them.

    Raised where ``probability`` is a number and no episode is open; cleared where it is NaN and the rule's clearing
    condition is true or the patient has left the rule's scope. What is unknown changes nothing. ``remarks`` are
    cautions that every flag carries.
    """
    states = _states(rule, timelines, table, probability)
    places = _turns(table.patient, states)
    turns = Turns(rule, timelines, table, places)
    changed: dict[tuple[str, str], Flag] = {}
    after = dict(carried)
    for number, place in enumerate(places.tolist()):
        key = (timelines.patients[int(table.patient[place])].key, rule.id)
        before = after.get(key, _NOTHING)
        flag = before.flag
        for kind in _kinds(rule, before, int(states[place]), int(table.effective[place])):
            one = turns.at(number, kind, float(probability[place]))
            cautions = {*rule.cautions, *turns.doubts(number), *remarks}
            flag = _turned(rule, flag, one, cautions, key[0])
        if flag is not None and flag is not before.flag:
            changed[key[0], flag.anchor.anchor_id] = flag
            _keep(after, key, replace(before, flag=flag), rule)
    return list(changed.values()), after


def _states(rule: Rule, timelines: Timelines, table: AnchorTable, probability: Floats) -> Integers:
    """What every anchor asks for: raising, raising what is worse, clearing, or nothing (0)."""
    raising = ~np.isnan(probability)
    cleared = evaluate(rule.clears, table.columns).truth == TRUE
    states = np.where(raising, _RAISING, np.where(cleared | outside(rule, timelines, table), _CLEARING, 0))
    if rule.worse is not None and rule.worsens is not None:
        worse = positive(evaluate(rule.worsens, table.columns), rule.worse.severity)
        states[raising & ~np.isnan(worse)] = _WORSE
    return states


def _turns(patient: Integers, states: Integers) -> Integers:
    """The anchors that can change an episode: of equal ones in a row of one patient, the first."""
    places = np.flatnonzero(states)
    state, owner = states[places], patient[places]
    turns = np.ones(len(places), dtype=bool)
    turns[1:] = (state[1:] != state[:-1]) | (owner[1:] != owner[:-1])
    return places[turns]


def _kinds(rule: Rule, before: Standing, state: int, now: int) -> list[TurnKind]:
    """The turns that an episode takes where an anchor asks for ``state``."""
    if state == _CLEARING:
        return [TurnKind.CLEARED] if before.is_open else []
    kinds, flag = [], before.flag
    if not before.is_open:
        goes_on = flag is not None and flag.cleared is not None and now - flag.cleared < rule.quiet_minutes * MINUTE
        kinds.append(TurnKind.RAISED_AGAIN if goes_on else TurnKind.RAISED)
        flag = flag if goes_on else None
    known_worse = flag is not None and any(one.kind is TurnKind.WORSENED for one in flag.turns)
    if state == _WORSE and not known_worse:
        kinds.append(TurnKind.WORSENED)
    return kinds


def _turned(rule: Rule, flag: Flag | None, one: Turn, cautions: set[str], patient: str) -> Flag:
    """The flag after one more turn; a new one where it is raised."""
    if one.kind is TurnKind.RAISED or flag is None:
        return Flag(rule.id, rule.version, rule.title, rule.severity, patient, tuple(sorted(cautions)), (one,))
    turns = (*flag.turns, one)
    if one.kind is TurnKind.CLEARED:
        return replace(flag, turns=turns)
    severity: str = rule.worse.severity if rule.worse and one.kind is TurnKind.WORSENED else flag.severity
    return replace(flag, severity=severity, cautions=tuple(sorted({*flag.cautions, *cautions})), turns=turns)


def _keep(carried: Carried, key: Key, standing: Standing, rule: Rule) -> None:
    """Carry only what a later anchor can still change."""
    flag = standing.flag if standing.is_open or rule.quiet_minutes else None
    if flag is None and standing.run is None:
        carried.pop(key, None)
    else:
        carried[key] = Standing(flag, standing.run)

"""The core: timelines in, outcome out. Pure: no clock, no file, no network, no state but what is passed in.

Law, held by property tests: assessing the whole equals folding over any cut of it in time or by patient, with what
was carried passed on. The live worker, replay and rehearsal all call this one function.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace

from fhiro2.derive import add_derived
from fhiro2.flags import Flag
from fhiro2.judge import Carried, Pack, judge
from fhiro2.judge.history import key_of
from fhiro2.model import Outcome, Timelines
from fhiro2.pair import tables
from fhiro2.settings import Settings


@dataclass(frozen=True)
class Checkpoint:
    """What was carried past all anchors before ``at`` (microseconds since 1970)."""

    at: int
    carried: Carried


def assess(
    timelines: Timelines, settings: Settings, pack: Pack, carried: Carried | None = None
) -> tuple[Outcome, Carried]:
    """Anchor tables with inputs and derived values, and the flag episodes, from ``timelines.start`` to ``stop``.

    ``carried`` is what the anchors before ``start`` left; what is returned is what those before ``stop`` leave.
    """
    made = tables(timelines, settings)
    add_derived(made, timelines, settings)
    flags, carried, held = judge(pack, timelines, made, carried or {})
    return Outcome(timelines, made, flags, held), carried


def reassess(
    timelines: Timelines, settings: Settings, pack: Pack, checkpoints: Sequence[Checkpoint], first: int, last: int
) -> tuple[list[Outcome], list[Checkpoint]]:
    """Assess again after a late value, a correction or a retraction, and give the checkpoints as they then are.

    Anchors may differ from ``first`` to ``last``. The outcomes go from the last of ``checkpoints`` (in order of time)
    that is not after ``first``, up to the first one after ``last`` at which what is carried is as it was; values found
    outside of them stand, and ``standing`` tells which flags do.
    """
    before = [one for one in checkpoints if one.at <= first]
    begin = before[-1] if before else Checkpoint(timelines.start, {})
    renewed, outcomes, carried = before, list[Outcome](), begin.carried
    later = [one for one in checkpoints if one.at > first]
    for number, end in enumerate([*later, Checkpoint(timelines.stop, {})]):
        outcome, carried = assess(replace(timelines, start=begin.at, stop=end.at), settings, pack, carried)
        outcomes.append(outcome)
        if number == len(later):
            break
        if end.at > last and carried == end.carried:
            return outcomes, [*renewed, *later[number:]]
        begin = Checkpoint(end.at, carried)
        renewed.append(begin)
    return outcomes, renewed


def standing(given: Iterable[Flag], outcomes: Sequence[Outcome], checkpoints: Sequence[Checkpoint]) -> list[Flag]:
    """The flags that stand after ``reassess`` gave ``outcomes`` and ``checkpoints``; ``given`` stood before it.

    What was raised outside of the outcomes stands as it was. What they took on from the anchors before goes on from
    how it was then, and what they hand on to the anchors after them ends as it did, since it is handed on unchanged.
    """
    start, stop = outcomes[0].timelines.start, outcomes[-1].timelines.stop
    handed = {one.at: [last.flag for last in one.carried.values() if last.flag is not None] for one in checkpoints}
    before = {key_of(flag): flag for flag in given}
    stands = {key: flag for key, flag in before.items() if not start <= flag.raised < stop}
    stands |= {key_of(flag): flag for flag in handed.get(start, ())}
    stands |= {key_of(flag): flag for outcome in outcomes for flag in outcome.flags}
    stands |= {key_of(flag): before[key_of(flag)] for flag in handed.get(stop, ())}
    return list(stands.values())

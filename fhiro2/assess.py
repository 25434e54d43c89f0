"""The core: timelines in, outcome out. Pure: no clock, no file, no network, no state but what is passed in.

Law, held by property tests: assessing the whole equals folding over any cut of it in time or by patient, with what
was carried passed on. The live worker, replay and rehearsal all call this one function.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

from fhiro2.derive import add_derived
from fhiro2.judge import Carried, Pack, judge
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
    that is not after ``first``, up to the first one after ``last`` at which what is carried is as it was; what was
    found outside of them stands.
    """
    before = [one for one in checkpoints if one.at <= first]
    begin = before[-1] if before else Checkpoint(timelines.start, {})
    renewed, outcomes, carried = before or [begin], list[Outcome](), begin.carried
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

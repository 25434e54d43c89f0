"""The core: timelines in, outcome out. Pure: no clock, no file, no network, no state but what is passed in.

Law, held by property tests: assessing the whole equals folding over any cut of it in time or by patient, with what
was carried passed on. The live worker, replay and rehearsal all call this one function.
"""

from __future__ import annotations

from fhiro2.derive import add_derived
from fhiro2.judge import Carried, Pack, judge
from fhiro2.model import Outcome, Timelines
from fhiro2.pair import tables
from fhiro2.settings import Settings


def assess(
    timelines: Timelines, settings: Settings, pack: Pack, carried: Carried | None = None
) -> tuple[Outcome, Carried]:
    """Anchor tables with inputs and derived values, and the flag episodes, from ``timelines.start`` to ``stop``.

    ``carried`` holds the episodes open before ``start``; what is returned holds those open before ``stop``.
    """
    made = tables(timelines, settings)
    add_derived(made, timelines, settings)
    flags, carried = judge(pack, timelines, made, carried or {})
    return Outcome(timelines, made, flags), carried

"""A source that starts to send a code in another unit: read rightly by its unit, but a change to be told of."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from fhiro2.model import Integers, Readings

STEADY_RUN = 5
"""So many results in one unit, and then in another, make a switch; fewer are exceptions (limit of this project)."""


def unit_switches(readings: Readings, units: Integers, names: Sequence[str]) -> list[str]:
    """A sentence for each source and code whose unit switched, in order of known-at; it holds no value.

    ``units`` holds for each reading a place in ``names`` (as ``source|code|unit``), or -1.
    """
    ordered = sorted(names)
    streams = [name.rpartition("|")[0] for name in ordered]
    several = {stream for stream in streams if streams.count(stream) > 1}
    if not several:
        return []
    place = np.array([ordered.index(name) for name in names])
    unit = np.where(units >= 0, place[units], -1)
    found = []
    for stream in sorted(several):
        mine = np.flatnonzero(np.isin(unit, [number for number, one in enumerate(streams) if one == stream]))
        order = mine[np.lexsort((unit[mine], readings["effective"][mine], readings["known"][mine]))]
        sentence = _switches(unit[order], ordered)
        if sentence:
            source, _, code = stream.rpartition("|")
            found.append(f"{source}: {code} {sentence}")
    return found


def _switches(unit: Integers, names: Sequence[str]) -> str:
    """The first switch in a sequence of units, and how many there were; '' for none."""
    starts = np.flatnonzero(np.diff(unit, prepend=-1))
    steady = starts[np.diff(starts, append=len(unit)) >= STEADY_RUN]
    turns = np.flatnonzero(np.diff(unit[steady]))
    if not len(turns):
        return ""
    before, after = steady[turns[0]], steady[turns[0] + 1]
    old, new = (names[unit[run]].rpartition("|")[2] for run in (before, after))
    more = f", the first of {len(turns)} switches" if len(turns) > 1 else ""
    return f"switched from {old} to {new} after {after} results{more}"

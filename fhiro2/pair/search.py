"""Partners in time: which readings of a stream lie near an anchor, for all anchors at once.

Patient and time share one integer key, so that one binary search serves all patients of a batch.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from fhiro2.model import Integers, Readings, Timelines, Truths

_TIME_BITS = 51
NOBODY = -1


@dataclass(frozen=True)
class Keys:
    """The key of every reading: patient in the upper bits, microseconds since the batch's first in the lower.

    ``trust`` ranks readings of one quantity: co-oximetry, measured, set, calculated, estimated; the lowest is best.
    """

    readings: Readings
    of: Integers
    base: int
    trust: Integers

    def at(self, patient: Integers, effective: Integers) -> Integers:
        """Keys for any patient numbers and times."""
        result: Integers = (patient.astype(np.int64) << _TIME_BITS) + (effective - self.base)
        return result


def keys(timelines: Timelines) -> Keys:
    """The keys of a batch."""
    readings = timelines.readings
    base = int(readings["effective"].min()) if len(readings) else 0
    trust = 2 * readings["kind"].astype(np.int64) + ~readings["oximetry"]
    made = Keys(readings, np.zeros(0, dtype=np.int64), base, trust)
    return replace(made, of=made.at(readings["patient"], readings["effective"]))


@dataclass
class Choice:
    """For each anchor the chosen reading row and the next candidate, or NOBODY."""

    row: Integers
    runner_up: Integers

    @classmethod
    def none(cls, count: int) -> Choice:
        """No choice for any of ``count`` anchors."""
        return cls(np.full(count, NOBODY, dtype=np.int64), np.full(count, NOBODY, dtype=np.int64))

    def found(self) -> Truths:
        """Where a reading was chosen."""
        result: Truths = self.row >= 0
        return result

    def or_else(self, other: Choice) -> Choice:
        """This choice where it found something, else ``other``."""
        chosen = self.found()
        return Choice(np.where(chosen, self.row, other.row), np.where(chosen, self.runner_up, other.runner_up))


def latest(keyed: Keys, stream: Integers, anchors: Integers, window: int) -> Choice:
    """The last reading of ``stream`` (rows in order) at or before each anchor key, at most ``window`` before.

    Among readings of one instant the first in order is taken, the next one is the runner-up.
    """
    choice = Choice.none(len(anchors))
    if not len(stream):
        return choice
    of_stream = keyed.of[stream]
    last = np.searchsorted(of_stream, anchors, side="right") - 1
    near = (last >= 0) & _reachable(of_stream[np.maximum(last, 0)], anchors, window)
    first = np.searchsorted(of_stream, of_stream[np.maximum(last, 0)], side="left")
    other = np.where(last > first, first + 1, first - 1)
    other_near = near & (other >= 0) & _reachable(of_stream[np.maximum(other, 0)], anchors, window)
    choice.row = np.where(near, stream[first], NOBODY)
    choice.runner_up = np.where(other_near, stream[np.maximum(other, 0)], NOBODY)
    return choice


def _reachable(found: Integers, anchors: Integers, window: int) -> Truths:
    same: Truths = ((found >> _TIME_BITS) == (anchors >> _TIME_BITS)) & (anchors - found <= window)
    return same


@dataclass(frozen=True)
class Candidates:
    """All (anchor, reading) pairs within a window, flat: ``anchor`` counts anchors, ``row`` is a reading row."""

    anchor: Integers
    row: Integers
    distance: Integers

    def where(self, keep: Truths) -> Candidates:
        """Only the pairs that ``keep`` marks."""
        return Candidates(self.anchor[keep], self.row[keep], self.distance[keep])


def within(keyed: Keys, stream: Integers, anchors: Integers, before: int, after: int) -> Candidates:
    """All readings of ``stream`` from ``before`` to ``after`` (both inclusive) around each anchor key."""
    of_stream = keyed.of[stream]
    low = np.maximum(anchors - before, (anchors >> _TIME_BITS) << _TIME_BITS)
    high = np.minimum(anchors + after, (((anchors >> _TIME_BITS) + 1) << _TIME_BITS) - 1)
    first = np.searchsorted(of_stream, low, side="left")
    count = np.maximum(np.searchsorted(of_stream, high, side="right") - first, 0)
    anchor = np.repeat(np.arange(len(anchors)), count)
    offset = np.arange(len(anchor)) - np.repeat(np.cumsum(count) - count, count)
    place = first[anchor] + offset
    return Candidates(anchor, stream[place], of_stream[place] - anchors[anchor])


def nearest(keyed: Keys, candidates: Candidates, count: int, rank: Integers | None = None) -> Choice:
    """For each of ``count`` anchors the best candidate: lowest ``rank`` of its row, nearest, earlier."""
    choice = Choice.none(count)
    if not len(candidates.row):
        return choice
    ranked = np.zeros(len(candidates.row), dtype=np.int64) if rank is None else rank[candidates.row]
    late = candidates.distance > 0
    order = np.lexsort((candidates.row, late, np.abs(candidates.distance), ranked, candidates.anchor))
    anchor, row = candidates.anchor[order], candidates.row[order]
    first = np.flatnonzero(np.r_[True, anchor[1:] != anchor[:-1]])
    choice.row[anchor[first]] = row[first]
    second = first[first + 1 < len(anchor)] + 1
    second = second[anchor[second] == anchor[second - 1]]
    choice.runner_up[anchor[second]] = row[second]
    return choice

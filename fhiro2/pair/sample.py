"""One blood sample: which readings were measured in it.

The same sample is the same panel, accession or specimen; else the same time (within a minute) with no contradicting
blood or device, where a reading that another sample owns is not taken, and two candidates of one kind give neither.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from fhiro2.catalogue import QUANTITY
from fhiro2.model import Integers, Kind, Readings, Specimen, Truths
from fhiro2.pair.search import NOBODY, Candidates, Choice, Keys, nearest, within

_ANY_BLOOD = frozenset({"hb", "fcohb", "fmethb", "lactate"})  # the same in blood of any origin, so UNKNOWN joins


@dataclass(frozen=True)
class Sampled:
    """The anchors of one kind of blood: their lead reading rows, keys, and the sample numbers that leads own."""

    blood: Specimen
    lead: Integers
    at: Integers
    owned: Integers


def leads(keyed: Keys, blood: Specimen, usable: Truths, same_sample: int) -> Sampled:
    """The lead readings of ``blood``: each oxygen pressure, and each measured saturation without one in its sample."""
    readings = keyed.readings
    of_blood = usable & (readings["specimen"] == blood) & ~readings["corrected"]
    pressure = np.flatnonzero(of_blood & (readings["quantity"] == QUANTITY["po2"]))
    lead = pressure
    for name in ("so2", "fo2hb"):
        rows = np.flatnonzero(
            of_blood & (readings["quantity"] == QUANTITY[name]) & (readings["kind"] == Kind.MEASURED)
        )
        alone = ~_has_partner(keyed, rows, lead, same_sample)
        lead = np.sort(np.concatenate([lead, rows[alone]]))
    owned = np.unique(readings["sample"][lead])
    return Sampled(blood, lead, keyed.of[lead], owned[owned >= 0])


def _has_partner(keyed: Keys, rows: Integers, lead: Integers, same_sample: int) -> Truths:
    if not len(rows) or not len(lead):
        return np.zeros(len(rows), dtype=bool)
    readings = keyed.readings
    mine, theirs = readings["sample"][rows], np.unique(readings["sample"][lead])
    shared = (mine >= 0) & np.isin(mine, theirs)
    near = within(keyed, lead, keyed.of[rows], same_sample, same_sample)
    close = np.zeros(len(rows), dtype=bool)
    close[near.anchor] = True
    result: Truths = shared | close
    return result


def in_sample(
    keyed: Keys, sampled: Sampled, quantity: str, usable: Truths, same_sample: int, *, measured_only: bool = False
) -> tuple[Choice, Truths]:
    """For each anchor the reading of ``quantity`` from its sample, and where two candidate samples gave neither."""
    readings = keyed.readings
    stream = usable & (readings["quantity"] == QUANTITY[quantity]) & ~readings["corrected"]
    if measured_only:
        stream &= readings["kind"] == Kind.MEASURED
    shared = _shared(keyed, sampled, np.flatnonzero(stream))
    blood = readings["specimen"] == sampled.blood
    if quantity in _ANY_BLOOD:
        blood |= readings["specimen"] == Specimen.UNKNOWN
    timed, torn = _timed(keyed, sampled, np.flatnonzero(stream & blood), same_sample)
    torn &= ~shared.found()
    timed.row[torn] = NOBODY
    return shared.or_else(timed), torn


def _shared(keyed: Keys, sampled: Sampled, stream: Integers) -> Choice:
    """By the same panel, accession or specimen of the same patient; the blood may be unstated but not another."""
    readings = keyed.readings
    blood = readings["specimen"][stream]
    stream = stream[(readings["sample"][stream] >= 0) & ((blood == sampled.blood) | (blood == Specimen.UNKNOWN))]
    wanted = readings["sample"][sampled.lead]
    order = np.argsort(readings["sample"][stream], kind="stable")
    by_sample = readings["sample"][stream][order]
    first = np.searchsorted(by_sample, wanted, side="left")
    count = np.where(wanted >= 0, np.searchsorted(by_sample, wanted, side="right") - first, 0)
    anchor = np.repeat(np.arange(len(wanted)), count)
    place = first[anchor] + np.arange(len(anchor)) - np.repeat(np.cumsum(count) - count, count)
    row = stream[order][place]
    found = Candidates(anchor, row, keyed.of[row] - sampled.at[anchor])
    found = found.where(readings["patient"][row] == readings["patient"][sampled.lead[anchor]])
    return nearest(keyed, found, len(wanted), keyed.trust)


def _timed(keyed: Keys, sampled: Sampled, stream: Integers, same_sample: int) -> tuple[Choice, Truths]:
    readings = keyed.readings
    count = len(sampled.lead)
    found = within(keyed, stream, sampled.at, same_sample, same_sample)
    mine, theirs = readings["sample"][sampled.lead[found.anchor]], readings["sample"][found.row]
    elsewhere = (theirs >= 0) & (theirs != mine) & np.isin(theirs, sampled.owned)
    device, other_device = readings["device"][sampled.lead[found.anchor]], readings["device"][found.row]
    contradicting = (device >= 0) & (other_device >= 0) & (device != other_device)
    found = found.where(~elsewhere & ~contradicting)
    rank = keyed.trust
    best = np.full(count, np.iinfo(np.int64).max)
    np.minimum.at(best, found.anchor, rank[found.row])
    return nearest(keyed, found, count, rank), _torn(
        readings, sampled, found.where(rank[found.row] == best[found.anchor])
    )


def _torn(readings: Readings, sampled: Sampled, found: Candidates) -> Truths:
    """Where an anchor's best candidates disagree, or one candidate lies near two anchors of different samples."""
    torn = np.zeros(len(sampled.lead), dtype=bool)
    if not len(found.row):
        return torn
    value = np.nan_to_num(readings["value"][found.row], nan=-1.0)
    order = np.lexsort((value, found.anchor))
    anchor, ordered = found.anchor[order], value[order]
    differ = (anchor[1:] == anchor[:-1]) & (ordered[1:] != ordered[:-1])
    torn[anchor[1:][differ]] = True
    order = np.lexsort((found.anchor, found.row))
    anchor, row = found.anchor[order], found.row[order]
    claimed = (row[1:] == row[:-1]) & (row[1:] != sampled.lead[anchor[1:]]) & (row[1:] != sampled.lead[anchor[:-1]])
    torn[anchor[1:][claimed]] = True
    torn[anchor[:-1][claimed]] = True
    return torn

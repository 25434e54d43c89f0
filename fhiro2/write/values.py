"""Derived values as Observations, each with its Provenance, in one order whatever the batch.

Values are rendered column by column from plain lists: an object a value would be the slowest part of a replay.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from functools import lru_cache
from hashlib import sha256
from itertools import pairwise

import numpy as np

from fhiro2.catalogue import DERIVED, DERIVED_BY_CODE
from fhiro2.errors import StopError
from fhiro2.fhir import systems
from fhiro2.fhir.resources import date_times, instants, quoted
from fhiro2.flags import anchor_id
from fhiro2.model import DAY, HOUR, MINUTE, AnchorTable, Column, Floats, Integers, Outcome, Why
from fhiro2.write import Run
from fhiro2.write.identity import named, provenance_of, stem
from fhiro2.write.observation import Form, notes, observation_shape, source_shape
from fhiro2.write.provenance import Entities, References, provenance_shape

ANCHORS_AT_ONCE = 500

_ORDER = {row.code: number for number, row in enumerate(DERIVED)}


@dataclass
class Written:
    """Values of some patients in their order: ids, lines, SHA-256 of each line, and the lines of their Provenance."""

    ids: list[str] = field(default_factory=list)
    lines: list[bytes] = field(default_factory=list)
    hashes: list[str] = field(default_factory=list)
    provenance: list[str] = field(default_factory=list)


@dataclass
class _Anchors:
    """The anchors of one table in a block, ready for text: ``context`` is (subject,) or (subject, encounter)."""

    table: AnchorTable
    span: slice
    rank: list[int]
    stems: list[str]
    context: list[tuple[str, ...]]
    effective: list[str]
    origin: list[int]


@dataclass
class _Input:
    """One input of an anchor table in a block: origin (-1: none), words, ``derivedFrom`` entry, when it was known."""

    origin: Integers
    text: list[str]
    entry: list[str]
    known: Integers


def age_text(age: int) -> str:
    """How long before the anchor (microseconds; negative: after it) something was taken, in words."""
    size = abs(age)
    if size == 0:
        return "at the draw"
    side = "before" if age > 0 else "after"
    if size < MINUTE:
        return f"less than 1 min {side}"
    unit, name = (MINUTE, "min") if size < 2 * HOUR else (HOUR, "h") if size < 2 * DAY else (DAY, "d")
    return f"{round(size / unit)} {name} {side}"


def values(outcome: Outcome, run: Run) -> Iterator[Written]:
    """All values of a batch with their Provenance, patient after patient, a bounded number at a time.

    Order: patient, effective time, kind of anchor, anchor, code. Raises StopError where a value that is said to be
    known has neither a number nor a bound.
    """
    references = References(outcome.timelines.origins)
    entities = Entities(references)
    for first, last in _blocks(outcome):
        spans = {kind: _span(table, first, last) for kind, table in outcome.tables.items()}
        found = Written()
        order: list[int] = []
        for anchors in _anchors(outcome, spans):
            inputs: dict[str, _Input] = {}
            for code in [code for code in _ORDER if code in anchors.table.columns]:
                order += _render(outcome, run, anchors, code, inputs, entities, found)
        yield _sorted(found, order)


def _blocks(outcome: Outcome) -> Iterator[tuple[int, int]]:
    """Ranges of patient numbers with about ``ANCHORS_AT_ONCE`` anchors each."""
    patients = len(outcome.timelines.patients)
    counts = np.zeros(patients, dtype=np.int64)
    for table in outcome.tables.values():
        counts += np.bincount(table.patient, minlength=patients)
    numbers = np.cumsum(counts) // ANCHORS_AT_ONCE
    edges = [0, *(np.flatnonzero(np.diff(numbers)) + 1).tolist(), patients]
    return pairwise(edges)


def _span(table: AnchorTable, first: int, last: int) -> slice:
    start, stop = np.searchsorted(table.patient, [first, last])
    return slice(int(start), int(stop))


def _anchors(outcome: Outcome, spans: dict[str, slice]) -> list[_Anchors]:
    found = []
    keys: list[tuple[int, int, str, str]] = []
    for kind, table in outcome.tables.items():
        span = spans[kind]
        rows = outcome.timelines.readings[table.reading[span]]
        places = list(zip(rows["origin"].tolist(), rows["part"].tolist(), strict=True))
        ids = [anchor_id(outcome.timelines.origins.ids[origin], part) for origin, part in places]
        patients = table.patient[span].tolist()
        found.append(
            _Anchors(
                table=table,
                span=span,
                rank=[],
                stems=_stems(outcome, patients, rows["subject"].tolist(), ids),
                context=_contexts(outcome, patients, rows["encounter"].tolist()),
                effective=date_times(table.effective[span]),
                origin=[origin for origin, _ in places],
            )
        )
        keys += zip(patients, table.effective[span].tolist(), [kind] * len(ids), ids, strict=True)
    ranks = np.empty(len(keys), dtype=np.int64)
    ranks[sorted(range(len(keys)), key=keys.__getitem__)] = np.arange(len(keys))
    start = 0
    for anchors in found:
        stop = start + len(anchors.stems)
        anchors.rank = ranks[start:stop].tolist()
        start = stop
    return found


def _stems(outcome: Outcome, patients: list[int], subjects: list[int], ids: list[str]) -> list[str]:
    """What the id of each value at an anchor is made of, but for its code."""
    people, written = outcome.timelines.patients, outcome.timelines.names.subjects
    places = zip(patients, subjects, ids, strict=True)
    return [stem(people[patient].source, written[subject], name) for patient, subject, name in places]


def _contexts(outcome: Outcome, patients: list[int], encounters: list[int]) -> list[tuple[str, ...]]:
    people, names = outcome.timelines.patients, outcome.timelines.names.encounters
    return [
        _context(people[patient].reference, names[encounter] if encounter >= 0 else "")
        for patient, encounter in zip(patients, encounters, strict=True)
    ]


@lru_cache(maxsize=65_536)
def _context(subject: str, encounter: str) -> tuple[str, ...]:
    return (quoted(subject), quoted(encounter)) if encounter else (quoted(subject),)


def _render(
    outcome: Outcome,
    run: Run,
    anchors: _Anchors,
    code: str,
    inputs: dict[str, _Input],
    entities: Entities,
    found: Written,
) -> list[int]:
    """Render one column of a block into ``found`` and return the place of each value in the block's order."""
    column = anchors.table.columns[code]
    rows = np.flatnonzero(column.why[anchors.span] == Why.KNOWN)
    at = rows + anchors.span.start
    forms, numbers = _numbers(code, column, at)
    doubts = _doubts(code, column.uncertainty[at])
    used, issued = _used(outcome, anchors, column, rows, inputs, entities)
    cautions = column.cautions[at].tolist()
    bases = column.constants[at].tolist() if column.constants is not None else [0] * len(rows)
    history = provenance_shape(run, "Observation", f"{systems.FORMULA}/{DERIVED_BY_CODE[code].formula}")
    stems, context, effective = anchors.stems, anchors.context, anchors.effective
    sources_of = _Sources(anchors.origin, used, entities)
    ids, lines, hashes, provenance = found.ids, found.lines, found.hashes, found.provenance
    for number, i in enumerate(rows.tolist()):
        identity, doubt, where, when = named(stems[i] + code), doubts[number], context[i], effective[i]
        noted = notes(cautions[number])
        form = observation_shape(code, bases[number], len(where) == 2, forms[number], doubt != (), noted != ())
        sources, origins = sources_of.at(i)
        line = form.filled(
            (identity, *doubt, identity, *where, when, issued[number], *numbers[number], *noted, sources)
        ).encode()
        content_hash = sha256(line).hexdigest()
        ids.append(identity)
        lines.append(line)
        hashes.append(content_hash)
        provenance.append(history.filled((provenance_of(identity, content_hash), identity, when, origins)))
    return [anchors.rank[i] * len(_ORDER) + _ORDER[code] for i in rows.tolist()]


class _Sources:
    """The ``derivedFrom`` entries and the Provenance entities of one column's values, anchor by anchor."""

    def __init__(self, anchor: list[int], used: list[tuple[list[int], _Input]], entities: Entities) -> None:
        self._anchor = anchor
        self._used = [(origins, found.entry, found.text) for origins, found in used]
        self._entities = entities

    def at(self, i: int) -> tuple[str, str]:
        """Both lists for the ``i``-th anchor: the anchor's Observation first, each Observation once."""
        anchor = self._anchor[i]
        entries: dict[int, str] = {anchor: ""}
        for origins, entry, _ in self._used:
            place = origins[i]
            if place >= 0:
                if entries.get(place):
                    entries = self._merged(i)
                    break
                entries[place] = entry[i]
        if not entries[anchor]:
            entries[anchor] = source_shape().filled((self._entities.references[anchor], "anchor"))
        return ",".join(entries.values()), ",".join([self._entities[place] for place in entries])

    def _merged(self, i: int) -> dict[int, str]:
        """Entries where inputs are parts of one Observation: their words stand in one entry."""
        words: dict[int, str] = {self._anchor[i]: ""}
        for origins, _, text in self._used:
            place = origins[i]
            if place >= 0:
                words[place] = f"{words[place]}, {text[i]}" if words.get(place) else text[i]
        references = self._entities.references
        return {
            place: source_shape().filled((references[place], text)) if text else "" for place, text in words.items()
        }


def _sorted(found: Written, order: list[int]) -> Written:
    places = np.argsort(np.array(order, dtype=np.int64)).tolist()
    return Written(
        [found.ids[place] for place in places],
        [found.lines[place] for place in places],
        [found.hashes[place] for place in places],
        [found.provenance[place] for place in places],
    )


def _used(
    outcome: Outcome,
    anchors: _Anchors,
    column: Column,
    rows: Integers,
    inputs: dict[str, _Input],
    entities: Entities,
) -> tuple[list[tuple[list[int], _Input]], list[str]]:
    """Each input with its origins where it was used, and when each value in ``rows`` became knowable."""
    used = []
    known: Integers = anchors.table.known[anchors.span]
    for bit, name in enumerate(column.inputs):
        if name not in inputs:
            inputs[name] = _input(outcome, anchors, name, entities)
        found = inputs[name]
        origin = found.origin
        if column.used is not None:
            origin = np.where(column.used[anchors.span] >> bit & 1, origin, -1)
        known = np.where(origin >= 0, np.maximum(known, found.known), known)
        used.append((origin.tolist(), found))
    return used, instants(known[rows])


def _input(outcome: Outcome, anchors: _Anchors, name: str, entities: Entities) -> _Input:
    timelines = outcome.timelines
    column = anchors.table.columns[name]
    source, runner_up = column.source[anchors.span], column.runner_up[anchors.span]
    rows = timelines.readings[source]
    there = source >= 0
    origin = np.where(there, rows["origin"], -1)
    ages = anchors.table.effective[anchors.span] - rows["effective"]
    words = {age: quoted(f"{name}, {age_text(age)}") for age in np.unique(ages[there]).tolist()}
    text = [words.get(age, "") for age in ages.tolist()]
    ids = timelines.origins.ids
    for place in np.flatnonzero(there & (runner_up >= 0)).tolist():
        next_nearest = ids[timelines.readings["origin"][runner_up[place]]]
        text[place] += quoted(f"; next nearest Observation/{next_nearest}")
    filled, references = source_shape().filled, entities.references
    entry = [
        filled((references[place], words)) if place >= 0 else ""
        for place, words in zip(origin.tolist(), text, strict=True)
    ]
    return _Input(origin, text, entry, rows["known"])


def _numbers(code: str, column: Column, at: Integers) -> tuple[list[int], list[tuple[str, ...]]]:
    """What is known of each value, and its numbers with the declared decimals; bounds are rounded outwards."""
    decimals = DERIVED_BY_CODE[code].decimals
    value, low, high = column.value[at], column.low[at], column.high[at]
    bounded = low < high
    upper = bounded & np.isfinite(high)
    at_most = upper & ((low == 0) | (low == -np.inf))
    bounds = np.where(at_most, Form.AT_MOST, np.where(upper, Form.BETWEEN, Form.AT_LEAST))
    forms = np.where(bounded, bounds, Form.VALUE)
    lowest, highest = _outwards(np.floor, low, decimals), _outwards(np.ceil, high, decimals)
    first = np.where(bounded, np.where(at_most, highest, lowest), np.round(value, decimals))
    if not np.isfinite(first).all():
        raise StopError(f"{code}: a value said to be known has neither number nor bound; report this, it is a fault")
    numbers: list[tuple[str, ...]] = [(text,) for text in _texts(first, decimals)]
    between = np.flatnonzero(forms == Form.BETWEEN)
    for place, text in zip(between.tolist(), _texts(highest[between], decimals), strict=True):
        numbers[place] += (text,)
    return forms.tolist(), numbers


def _outwards(rounding: Callable[[Floats], Floats], bound: Floats, decimals: int) -> Floats:
    scale = 10.0**decimals
    result: Floats = rounding(np.round(bound * scale, 6)) / scale
    return result


def _texts(numbers: Floats, decimals: int) -> list[str]:
    pattern = f"%.{decimals}f"
    return [pattern % number for number in (numbers + 0.0).tolist()]


def _doubts(code: str, uncertainty: Floats) -> list[tuple[str, ...]]:
    """The standard uncertainties, with one decimal more than the value has; nothing where it is not known."""
    decimals = DERIVED_BY_CODE[code].decimals + 1
    texts = _texts(np.round(uncertainty, decimals), decimals)
    return [(text,) if there else () for text, there in zip(texts, np.isfinite(uncertainty).tolist(), strict=True)]

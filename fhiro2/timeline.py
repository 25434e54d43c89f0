"""TIMELINE: resolve first, then order. Which version of each resource stands, and each patient's readings in order."""

from __future__ import annotations

import struct
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fhiro2.catalogue import default_uncertainty
from fhiro2.errors import Bucket, Reason
from fhiro2.model import Fact, Names, Origins, Patient, Readings, Timelines, Truths

_BUCKETS = tuple(Bucket)
_REASONS = tuple(Reason)
_VERSION = np.dtype(
    [
        ("key", "i4"),
        ("updated", "i8"),
        ("number", "i8"),
        ("text", "i4"),
        ("bucket", "i1"),
        ("reason", "i1"),
        ("origin", "i4"),
        ("file", "i4"),
        ("line", "i8"),
        ("entry", "i4"),
    ]
)
_ROW = struct.Struct("<iqqibbiiqi")
_pack = _ROW.pack
_NO_KEY = -1
NEVER_UPDATED = -(2**62)
MOST_PATIENTS = 2048  # a batch's time keys fit 63 bits: 11 bits of patient, 51 bits of microseconds


@dataclass
class Versions:
    """One row a received resource version, in order of arrival: what it is, where it ended, what it gave."""

    _keys: dict[str, int] = field(default_factory=dict)
    _texts: dict[str, tuple[int, int]] = field(default_factory=dict)
    _packed: bytearray = field(default_factory=bytearray)

    @property
    def count(self) -> int:
        """How many versions were received."""
        return len(self._packed) // _ROW.size

    def add(
        self,
        key: str,
        version: str,
        updated: int,
        bucket: Bucket,
        reason: Reason | None,
        origin: int,
        file: int,
        line: int,
        entry: int,
    ) -> int:
        """Add a version of the resource ``key`` ('' for one without identity) and its place; return its row."""
        keys = self._keys
        text = self._texts.get(version)
        if text is None:
            text = self._texts[version] = _version_numbers(version, len(self._texts))
        self._packed += _pack(
            keys.setdefault(key, len(keys)) if key else _NO_KEY,
            updated,
            text[0],
            text[1],
            _BUCKETS.index(bucket),
            -1 if reason is None else _REASONS.index(reason),
            origin,
            file,
            line,
            entry,
        )
        return len(self._packed) // _ROW.size - 1

    def rows(self) -> NDArray[np.void]:
        """All rows as one structured array."""
        return np.frombuffer(bytes(self._packed), dtype=_VERSION)


def _version_numbers(version: str, place: int) -> tuple[int, int]:
    """A versionId as a number (-1: not a whole number) and as the number of its text (-1: no version)."""
    whole = version.isascii() and version.isdigit() and len(version) < 19
    return int(version) if whole else -1, place if version else -1


@dataclass
class Resolution:
    """Which versions stand, and the final bucket and reason of every version."""

    stands: Truths
    bucket: NDArray[np.int8]
    reason: NDArray[np.int8]
    origin: NDArray[np.int32]

    def standing(self, row: int) -> tuple[Bucket, Reason | None]:
        """Bucket and reason of one version."""
        reason = int(self.reason[row])
        return _BUCKETS[int(self.bucket[row])], None if reason < 0 else _REASONS[reason]

    def lose(self, row: int, bucket: Bucket, reason: Reason) -> None:
        """Take a version out of what stands."""
        self.stands[row], self.bucket[row], self.reason[row] = False, _BUCKETS.index(bucket), _REASONS.index(reason)

    def torn(self) -> NDArray[np.intp]:
        """The versions that were refused for having two contents."""
        return np.flatnonzero(~self.stands & (self.bucket == _BUCKETS.index(Bucket.QUARANTINED)))

    def counts(self) -> Iterator[tuple[Bucket, Reason | None, int]]:
        """How many versions ended in each bucket for each reason."""
        kinds = self.bucket.astype(np.int64) * (len(_REASONS) + 1) + self.reason + 1
        for kind, number in enumerate(np.bincount(kinds).tolist()):
            if number:
                bucket, reason = divmod(kind, len(_REASONS) + 1)
                yield _BUCKETS[bucket], _REASONS[reason - 1] if reason else None, number


def resolve(versions: Versions, content: Callable[[list[int]], Mapping[int, bytes]]) -> Resolution:
    """Decide which version of each resource stands.

    The winner is the greatest ``lastUpdated``, then the greatest versionId if both are integers, then the greatest
    SHA-256 of the content. One version with two contents is quarantined whole. ``content`` gives the SHA-256 of the
    canonical content of rows; it is asked once, for the rows that nothing else can tell apart.
    """
    rows = versions.rows()
    resolution = Resolution(
        np.ones(len(rows), dtype=bool), rows["bucket"].copy(), rows["reason"].copy(), rows["origin"]
    )
    groups = _groups(rows)
    alike = sorted({row for group in groups for row in _alike(rows, group)})
    hashes = content(alike) if alike else {}
    for group in groups:
        _resolve_one(rows, group, resolution, hashes)
    return resolution


def _groups(rows: NDArray[np.void]) -> list[list[int]]:
    """The rows of each resource that was received more than once, in order of lastUpdated and version number."""
    keyed = np.flatnonzero(rows["key"] != _NO_KEY)
    order = keyed[np.lexsort((rows["number"][keyed], rows["updated"][keyed], rows["key"][keyed]))]
    key = rows["key"][order]
    starts = np.flatnonzero(np.diff(key, prepend=-1))
    lengths = np.diff(starts, append=len(order))
    return [
        order[start : start + length].tolist()
        for start, length in zip(starts[lengths > 1].tolist(), lengths[lengths > 1].tolist(), strict=True)
    ]


def _alike(rows: NDArray[np.void], group: list[int]) -> list[int]:
    """The rows of a group whose content must be compared: one version twice, or one rank twice."""
    found = []
    for labels in (
        [int(rows["text"][row]) if rows["text"][row] >= 0 else -2 - row for row in group],
        [(int(rows["updated"][row]), int(rows["number"][row])) for row in group],
    ):
        sharing: dict[object, list[int]] = {}
        for label, row in zip(labels, group, strict=True):
            sharing.setdefault(label, []).append(row)
        for members in sharing.values():
            if len(members) > 1:
                found += members
    return found


def _resolve_one(
    rows: NDArray[np.void], group: list[int], resolution: Resolution, hashes: Mapping[int, bytes]
) -> None:
    def content(row: int) -> bytes:
        return hashes.get(row, b"")

    contents: dict[int, set[bytes]] = {}
    for row in group:
        if rows["text"][row] >= 0:
            contents.setdefault(int(rows["text"][row]), set()).add(content(row))
    torn = {row for row in group if len(contents.get(int(rows["text"][row]), ())) > 1}
    for row in torn:
        resolution.lose(row, Bucket.QUARANTINED, Reason.VERSION)
    whole = [row for row in group if row not in torn]
    if not whole:
        return
    winner = max(whole, key=lambda row: (int(rows["updated"][row]), int(rows["number"][row]), content(row)))
    for row in whole:
        if row != winner:
            again = content(row) == content(winner) and rows["text"][row] == rows["text"][winner]
            resolution.lose(row, Bucket.REPEATED, Reason.SAME_VERSION if again else Reason.SUPERSEDED)


def panel_samples(readings: Readings, names: Names, origins: Origins, panels: Mapping[str, str]) -> None:
    """Give members of a ``hasMember`` panel their panel as sample, where they have no nearer one (in place).

    ``panels`` maps ``source|member id`` to the sample's name.
    """
    if not panels:
        return
    numbers = {name: number for number, name in enumerate(names.samples)}
    for row in np.flatnonzero(readings["sample"] < 0).tolist():
        source = names.subjects[readings["subject"][row]].partition("|")[0]
        panel = panels.get(f"{source}|{origins.ids[readings['origin'][row]]}")
        if panel is not None:
            if panel not in numbers:
                numbers[panel] = len(names.samples)
                names.samples.append(panel)
            readings["sample"][row] = numbers[panel]


@dataclass(frozen=True)
class Roster:
    """What is known of patients: by subject as written, its root patient, birth and facts."""

    root: dict[str, str]
    born: dict[str, int | None]
    facts: dict[str, tuple[Fact, ...]]


def batches(
    readings: Readings, names: Names, origins: Origins, roster: Roster, most_readings: int = 200_000
) -> Iterator[Timelines]:
    """Timelines of whole patients in the order of their keys, each batch near ``most_readings`` readings.

    Readings of one patient are in order (effective, source, id, component). Raises nothing; order of arrival,
    and how the input was split, leave no trace.
    """
    roots = [roster.root.get(subject, subject) for subject in names.subjects]
    keys = sorted(set(roots))
    number = {key: place for place, key in enumerate(keys)}
    of_subject = np.array([number[root] for root in roots], dtype=np.int32)
    patient = of_subject[readings["subject"]] if len(readings) else np.zeros(0, dtype=np.int32)
    order = np.lexsort((readings["effective"], patient))
    edges = np.searchsorted(patient[order], np.arange(len(keys) + 1))
    first = 0
    while first < len(keys):
        last = int(np.searchsorted(edges, edges[first] + most_readings, side="right")) - 1
        last = min(max(last, first + 1), first + MOST_PATIENTS, len(keys))
        chosen = readings[order[edges[first] : edges[last]]]
        chosen["patient"] = patient[order[edges[first] : edges[last]]] - first
        yield _timelines(chosen, keys[first:last], names, origins, roster)
        first = last


def _timelines(readings: Readings, keys: list[str], names: Names, origins: Origins, roster: Roster) -> Timelines:
    identities = np.array([origins.ids[origin] for origin in readings["origin"].tolist()], dtype=np.bytes_)
    _, tie = np.unique(identities, return_inverse=True)
    readings = readings[np.lexsort((readings["part"], tie, readings["effective"], readings["patient"]))]
    usual = default_uncertainty(readings["quantity"], _middle(readings))
    readings["uncertainty"] = np.where(np.isnan(readings["uncertainty"]), usual, readings["uncertainty"])
    patients = [_patient(key, roster) for key in keys]
    return Timelines(readings, patients, [roster.facts.get(key, ()) for key in keys], names, origins)


def _middle(readings: Readings) -> NDArray[np.float64]:
    value: NDArray[Any] = readings["value"]
    bound = np.where(np.isfinite(readings["high"]), readings["high"], readings["low"])
    result: NDArray[np.float64] = np.where(np.isnan(value), bound, value)
    return result


def _patient(key: str, roster: Roster) -> Patient:
    source, _, reference = key.partition("|")
    return Patient(key, source, reference, roster.born.get(key))

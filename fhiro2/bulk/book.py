"""The versions received in one pass over one source: where each was found, where it ended, what was refused in it."""

from __future__ import annotations

from collections.abc import Callable, Iterator

from fhiro2.account import Account
from fhiro2.admit import Admission
from fhiro2.bulk.quarantine import Keeper
from fhiro2.bulk.unit import units
from fhiro2.errors import Bucket, Reason, SkipError
from fhiro2.fhir.wire import content_hash
from fhiro2.model import Integers
from fhiro2.read import Raw, Source
from fhiro2.timeline import NEVER_UPDATED, Resolution, Versions, resolve

Ends = Callable[[int, Bucket, Reason | None], None]
"""Told of each version, by its line, where it ended."""


class Book:
    """One row a received version; ``close`` resolves them and enters each into the account once."""

    def __init__(self, source: Source, quarantine: Keeper | None, ends: Ends | None = None) -> None:
        self.source = source
        self._ends = ends
        self.versions = Versions()
        self._quarantine = quarantine
        self._parts: dict[int, tuple[Reason, ...]] = {}

    def add(self, unit: Raw, key: str, version: str, updated: int, admission: Admission, origin: int = -1) -> int:
        """Enter one version; what was refused, whole or in part, is kept for another try."""
        bucket, reason, detail, parts = admission
        row = self.versions.add(key, version, updated, bucket, reason, origin, unit.file, unit.line, unit.entry)
        if parts:
            self._parts[row] = tuple(error.reason for _, error in parts)
        if self._quarantine is not None and (parts or bucket is Bucket.QUARANTINED):
            if bucket is Bucket.QUARANTINED:
                self._quarantine.keep(row, self.source, unit, key, reason, detail)
            for number, error in parts:
                self._quarantine.keep(row, self.source, unit, key, error.reason, error.detail, number)
        return row

    def refuse(
        self, unit: Raw, error: SkipError, key: str = "", version: str = "", updated: int = NEVER_UPDATED
    ) -> int:
        """Enter a version that gave nothing, for the reason in ``error``."""
        return self.add(unit, key, version, updated, Admission(error.bucket, error.reason, error.detail))

    def close(self, account: Account) -> Resolution:
        """Decide which versions stand, and count every version into its final bucket."""
        resolution = resolve(self.versions, self._hashes)
        for bucket, reason, number in resolution.counts():
            account.place(bucket, reason, number)
        for row, reasons in self._parts.items():
            if resolution.stands[row]:
                account.parts.update(reasons)
        if self._quarantine is not None:
            self._quarantine.settle(lambda row: bool(resolution.stands[row]))
            for row, unit in self._again(resolution.torn().tolist()):
                detail = "this version came with two contents"
                self._quarantine.keep(row, self.source, unit, "", Reason.VERSION, detail)
            self._quarantine.settle(lambda row: True)
        if self._ends is not None:
            for row, line in enumerate(self.versions.rows()["line"].tolist()):
                self._ends(line, *resolution.standing(row))
        return resolution

    def _hashes(self, rows: list[int]) -> dict[int, bytes]:
        return {row: content_hash(unit.content) for row, unit in self._again(rows)}

    def _again(self, rows: list[int]) -> Iterator[tuple[int, Raw]]:
        """Some rows' units, read again from their places."""
        if not rows:
            return
        places: list[tuple[int, int, int]] = self.versions.rows()[["file", "line", "entry"]][rows].tolist()
        wanted = dict(zip(places, rows, strict=True))
        touched = {place[:2] for place in places}
        for raw in self.source.read():
            if (raw.file, raw.line) in touched:
                for unit in units(raw):
                    row = wanted.get((unit.file, unit.line, unit.entry))
                    if row is not None:
                        yield row, unit


def standing_origins(resolution: Resolution) -> Integers:
    """The origins whose version stands."""
    found: Integers = resolution.origin[resolution.stands & (resolution.origin >= 0)]
    return found

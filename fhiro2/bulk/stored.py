"""Stored versions as a source, and where each of them ended."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence

from fhiro2.bulk.quarantine import Refusal
from fhiro2.errors import Bucket, Reason
from fhiro2.read import Raw
from fhiro2.store import Ended


class Stored:
    """A source of the core that reads stored versions: each line number is the row of a version."""

    def __init__(self, name: str, rows: Sequence[tuple[int, bytes]]) -> None:
        self.name = name
        self._rows = rows

    def read(self, leave_out: bytes | None = None) -> Iterator[Raw]:
        """All of them but those beginning with ``leave_out``."""
        for row, content in self._rows:
            if leave_out is None or not content.startswith(leave_out):
                yield Raw(content, 0, row)


def ended(ends: Mapping[int, tuple[Bucket, Reason | None]], refusals: Sequence[Refusal]) -> list[Ended]:
    """Where each row ended, with what was refused in it."""
    details: dict[int, str] = {}
    parts: dict[int, list[str]] = {}
    for refusal in refusals:
        if refusal.part is None:
            details[refusal.line] = refusal.detail
        else:
            parts.setdefault(refusal.line, []).append(refusal.reason)
            details.setdefault(refusal.line, refusal.detail)
    return [
        Ended(
            row, bucket.value, "" if reason is None else reason.value, details.get(row, ""), tuple(parts.get(row, ()))
        )
        for row, (bucket, reason) in ends.items()
    ]

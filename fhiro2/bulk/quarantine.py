"""What could not be used, kept whole with its reason, so that nothing is lost and all of it can be tried again."""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Protocol

from fhiro2.errors import Reason
from fhiro2.read import Raw, Source

_MOST_DETAIL = 200  # characters; what a feed wrote may be quoted in it


class Keeper(Protocol):
    """Where refused resources go until it is known which versions stand."""

    def keep(
        self,
        row: int,
        source: Source,
        unit: Raw,
        resource: str,
        reason: Reason | None,
        detail: str,
        part: int | None = None,
    ) -> None:
        """Keep one refused resource (or its component ``part``)."""

    def settle(self, standing: Callable[[int], bool]) -> None:
        """Drop what was kept of versions that do not stand."""


@dataclass(frozen=True)
class Refusal:
    """One refused resource at a line of its source, or its component ``part``."""

    line: int
    reason: str
    detail: str
    part: int | None


class KeptInMemory:
    """Keeps the refusals of standing versions as a list."""

    def __init__(self) -> None:
        self._waiting: list[tuple[int, Refusal]] = []
        self.refusals: list[Refusal] = []

    def keep(
        self,
        row: int,
        source: Source,
        unit: Raw,
        resource: str,
        reason: Reason | None,
        detail: str,
        part: int | None = None,
    ) -> None:
        """Keep one refusal until it is known whether its version stands."""
        self._waiting.append((row, Refusal(unit.line, str(reason), detail[:_MOST_DETAIL], part)))

    def settle(self, standing: Callable[[int], bool]) -> None:
        """Move the refusals of standing versions to the list, and drop the others."""
        self.refusals += [refusal for row, refusal in self._waiting if standing(row)]
        self._waiting.clear()


class Quarantine:
    """Writes ``quarantine.ndjson``: one line a quarantined resource or component that no later version replaced."""

    def __init__(self, path: Path) -> None:
        self._path = path
        self._draft = path.with_name(path.name + ".draft")
        self._partial = path.with_name(path.name + ".partial")
        self._stream = self._draft.open("w+", encoding="utf-8")
        self._settled = self._partial.open("w", encoding="utf-8")

    def keep(
        self,
        row: int,
        source: Source,
        unit: Raw,
        resource: str,
        reason: Reason | None,
        detail: str,
        part: int | None = None,
    ) -> None:
        """Keep one refused resource (or its component ``part``) until it is known whether its version stands."""
        line: dict[str, Any] = {
            "source": source.name,
            "file": _file_name(source, unit.file),
            "line": unit.line,
            "resource": resource,
            "reason": str(reason),
            "detail": detail if len(detail) <= _MOST_DETAIL else f"{detail[:_MOST_DETAIL]}…",
            "raw": unit.content.decode("utf-8", "backslashreplace"),
        }
        if unit.entry >= 0:
            line["entry"] = unit.entry
        if part is not None:
            line["component"] = part
        self._stream.write(f"{row}\t{json.dumps(line, ensure_ascii=True)}\n")

    def settle(self, standing: Callable[[int], bool]) -> None:
        """Move the kept lines of standing versions to the file, and drop the replaced ones."""
        self._stream.seek(0)
        for kept in self._stream:
            row, line = kept.split("\t", 1)
            if standing(int(row)):
                self._settled.write(line)
        self._stream.seek(0)
        self._stream.truncate()

    def close(self, *, keep: bool = True) -> None:
        """Give the file its name, or leave nothing behind when the run failed."""
        self._stream.close()
        self._settled.close()
        self._draft.unlink()
        if keep:
            self._partial.replace(self._path)
        else:
            self._partial.unlink()


def _file_name(source: Source, number: int) -> str:
    files: list[Path] = getattr(source, "files", [])
    return files[number].name if number < len(files) else ""

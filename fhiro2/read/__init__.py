"""READ: a source gives raw resources and says where each came from. Knows files and HTTP; knows no medicine."""

from __future__ import annotations

from collections.abc import Iterator
from typing import NamedTuple, Protocol

from fhiro2.errors import Reason


class Raw(NamedTuple):
    """One raw resource: its bytes without the line end, number of its file, its line, and what is wrong with it."""

    content: bytes
    file: int
    line: int
    fault: Reason | None = None


class Source(Protocol):
    """Where raw resources come from. ``name`` enters the ids of what is written."""

    name: str

    def read(self, leave_out: bytes | None = None) -> Iterator[Raw]:
        """All raw resources but whole lines beginning with ``leave_out``, in any order; the same when called again."""

"""READ: a source gives raw resources and says where each came from. Knows files and HTTP; knows no medicine."""

from __future__ import annotations

from collections.abc import Iterator
from typing import NamedTuple, Protocol

from fhiro2.errors import Reason


class Raw(NamedTuple):
    """One raw resource: its bytes (without the line end), the file's number and its line, and what is wrong with it."""

    content: bytes
    file: int
    line: int
    fault: Reason | None = None


class Source(Protocol):
    """Where raw resources come from. ``name`` enters the ids of what is written."""

    name: str

    def read(self) -> Iterator[Raw]:
        """All raw resources, in any order; may be called again and then gives the same."""

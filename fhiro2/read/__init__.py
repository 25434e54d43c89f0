"""READ: a source gives raw resources and says where each came from. Knows files and HTTP; knows no medicine."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Protocol

import msgspec

from fhiro2.errors import Reason


class Raw(msgspec.Struct, frozen=True, gc=False):
    """One raw resource: its bytes without the line end, where it was found, and what is wrong with it.

    ``file`` is the number of its file, ``line`` counts from 1, ``entry`` is its place in a Bundle (-1: not in one) and
    ``full_url`` its name there.
    """

    content: bytes
    file: int
    line: int
    fault: Reason | None = None
    entry: int = -1
    full_url: str = ""


class Source(Protocol):
    """Where raw resources come from. ``name`` enters the ids of what is written."""

    name: str

    def read(self, leave_out: bytes | None = None) -> Iterator[Raw]:
        """All raw resources but whole lines beginning with ``leave_out``, in any order; the same when called again."""

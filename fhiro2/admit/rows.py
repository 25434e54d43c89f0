"""Where admitted readings collect: packed rows of dtype READING, with identifiers as small integers."""

from __future__ import annotations

import struct
from collections.abc import Hashable
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from fhiro2.model import READING, Names, Origins, Readings

_CODES = {"i1": "b", "u1": "B", "i2": "h", "i4": "i", "i8": "q", "u8": "Q", "f8": "d", "b1": "?"}
_ROW = struct.Struct("<" + "".join(_CODES[READING[name].str[1:]] for name in READING.names or ()))


@dataclass
class Interner:
    """Numbers for strings, in order of first sight; -1 for the empty string."""

    names: list[str] = field(default_factory=list)
    _numbers: dict[str, int] = field(default_factory=dict)

    def number(self, name: str) -> int:
        """The number of ``name``."""
        if not name:
            return -1
        found = self._numbers.get(name)
        if found is None:
            found = self._numbers[name] = len(self.names)
            self.names.append(name)
        return found


@dataclass
class Rows:
    """All readings admitted so far, over any number of sources."""

    origins: Origins = field(default_factory=Origins)
    subjects: Interner = field(default_factory=Interner)
    encounters: Interner = field(default_factory=Interner)
    devices: Interner = field(default_factory=Interner)
    samples: Interner = field(default_factory=Interner)
    panels: dict[str, str] = field(default_factory=dict)
    _packed: bytearray = field(default_factory=bytearray)

    def add(self, *values: Hashable) -> None:
        """Add one reading; ``values`` in the order of READING."""
        self._packed += _ROW.pack(*values)

    def origin(self, resource: str, version: str, content_hash: str) -> int:
        """A new origin: one resource version that gives readings."""
        number = len(self.origins.ids)
        self.origins.ids.append(resource)
        self.origins.versions.append(version)
        if content_hash:
            self.origins.hashes[number] = content_hash
        return number

    def readings(self) -> Readings:
        """All rows as one structured array (a copy, free to change)."""
        found: np.ndarray[Any, np.dtype[np.void]] = np.frombuffer(bytes(self._packed), dtype=READING).copy()
        return found

    def names(self) -> Names:
        """The strings behind the numbers."""
        return Names(self.subjects.names, self.encounters.names, self.devices.names, self.samples.names)

"""Where admitted readings collect: packed rows of dtype READING, with identifiers as small integers."""

from __future__ import annotations

import struct
from array import array
from dataclasses import dataclass, field

import numpy as np

from fhiro2.model import READING, Names, Origins, Readings

_CODES = {"i1": "b", "u1": "B", "i2": "h", "i4": "i", "i8": "q", "u8": "Q", "f8": "d", "b1": "?"}
pack_row = struct.Struct("<" + "".join(_CODES[READING[name].str[1:]] for name in READING.names or ())).pack
"""One reading as bytes; arguments in the order of READING."""


class Interner:
    """Numbers for strings, in order of first sight; -1 for the empty string.

    ``names`` gains each new string behind ``prefix``, and may be shared with interners of other prefixes.
    """

    def __init__(self, names: list[str], prefix: str) -> None:
        self._names = names
        self._prefix = prefix
        self._numbers: dict[str, int] = {"": -1}

    def number(self, name: str) -> int:
        """The number of ``name``."""
        found = self._numbers.get(name)
        if found is None:
            found = self._numbers[name] = len(self._names)
            self._names.append(self._prefix + name)
        return found


@dataclass
class Rows:
    """All readings admitted so far, over any number of sources.

    ``units`` holds for each reading the number of its ``source|code|unit`` in ``unit_names``, or -1.
    """

    origins: Origins = field(default_factory=Origins)
    names: Names = field(default_factory=Names)
    panels: dict[str, str] = field(default_factory=dict)
    packed: bytearray = field(default_factory=bytearray)
    units: array[int] = field(default_factory=lambda: array("i"))
    unit_names: list[str] = field(default_factory=list)

    def origin(self, resource: str, version: str, content_hash: str) -> int:
        """A new origin: one resource version that gives readings."""
        number = len(self.origins.ids)
        self.origins.ids.append(resource)
        self.origins.versions.append(version)
        if content_hash:
            self.origins.hashes[number] = content_hash
        return number

    def readings(self) -> Readings:
        """All rows as one structured array, free to change; they are handed over and no longer kept here."""
        packed, self.packed = self.packed, bytearray()
        found: Readings = np.frombuffer(packed, dtype=READING)
        return found

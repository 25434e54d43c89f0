"""NDJSON files, plain or gzipped, and single JSON files: split on line feeds only, bounded in size, repeatable."""

from __future__ import annotations

import gzip
import zlib
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import BinaryIO, cast

from fhiro2.errors import Reason, StopError
from fhiro2.read import Raw

MOST_LINE = 5_000_000
MOST_FILE = 200_000_000  # a single JSON file (a Bundle) is read whole
MOST_EXPANSION = 200  # a gzip file that grows more than this is a bomb
_SMALL = 64_000_000
_ENDINGS = (".ndjson", ".ndjson.gz", ".jsonl", ".jsonl.gz", ".json")
_CHUNK = 1 << 20
_MARK = b"\xef\xbb\xbf"


class NdjsonSource:
    """The resources of files and folders; a folder's files are read in the order of their names."""

    def __init__(self, name: str, paths: list[Path], progress: Callable[[int], None] = lambda size: None) -> None:
        self.name = name
        self.files = [file for path in paths for file in _files(path)]
        self._progress = progress

    def size(self) -> int:
        """Bytes on disk."""
        return sum(file.stat().st_size for file in self.files)

    def read(self, leave_out: bytes | None = None) -> Iterator[Raw]:
        """All lines that hold anything, with their place; blank lines count nothing."""
        for number, file in enumerate(self.files):
            if file.name.endswith(".json"):
                yield from self._whole(number, file)
            elif file.name.endswith(".gz"):
                yield from self._zipped(number, file, leave_out)
            else:
                with file.open("rb", buffering=1 << 20) as stream:
                    yield from self._lines(number, stream, leave_out)

    def _whole(self, number: int, file: Path) -> Iterator[Raw]:
        size = file.stat().st_size
        self._progress(size)
        if size > MOST_FILE:
            yield Raw(b"", number, 1, Reason.SIZE)
            return
        content = file.read_bytes().removeprefix(_MARK).strip()
        if content:
            yield Raw(content, number, 1)

    def _zipped(self, number: int, file: Path, leave_out: bytes | None) -> Iterator[Raw]:
        most = max(_SMALL, MOST_EXPANSION * file.stat().st_size)
        line = 0
        with gzip.open(file, "rb") as stream:
            try:
                for raw in self._lines(number, cast(BinaryIO, stream), leave_out, most):
                    line = raw.line
                    yield raw
            except (EOFError, OSError, zlib.error):
                yield Raw(b"", number, line + 1, Reason.TRUNCATED)

    def _lines(self, number: int, stream: BinaryIO, leave_out: bytes | None, most: int | None = None) -> Iterator[Raw]:
        """Lines of one stream; a line over the cap is passed over without holding it."""
        line = total = reported = 0
        while content := stream.readline(MOST_LINE + 1):
            line += 1
            total += len(content)
            if total - reported > _CHUNK:
                self._progress(total - reported)
                reported = total
            if line == 1:
                content = content.removeprefix(_MARK)
            if most is not None and total > most:
                yield Raw(b"", number, line, Reason.SIZE)
                return
            whole = content.endswith(b"\n")
            if not whole and len(content) > MOST_LINE:
                passed, ended = _pass_over(stream, None if most is None else most - total)
                total += passed
                yield Raw(content[:200], number, line, Reason.SIZE)
                if not ended:
                    return
                continue
            if leave_out is not None and whole and content.startswith(leave_out):
                continue
            stripped = content.strip()
            if stripped:
                yield Raw(stripped, number, line, None if whole else Reason.TRUNCATED)
        self._progress(total - reported)


def _pass_over(stream: BinaryIO, most: int | None) -> tuple[int, bool]:
    """Skip to the end of the line; returns bytes passed, and False when the cap was met instead."""
    passed = 0
    while content := stream.readline(_CHUNK):
        passed += len(content)
        if content.endswith(b"\n"):
            return passed, True
        if most is not None and passed > most:
            return passed, False
    return passed, True


def _files(path: Path) -> list[Path]:
    if path.is_dir():
        found = sorted(file for file in path.iterdir() if file.is_file() and file.name.endswith(_ENDINGS))
        if not found:
            raise StopError(f"{path}: holds no {', '.join(_ENDINGS)} file; name a folder of exported resources")
        return found
    if not path.exists():
        raise StopError(f"{path}: no such file or folder; check the path")
    if not path.name.endswith(_ENDINGS):
        raise StopError(f"{path}: not a file that is read here ({', '.join(_ENDINGS)})")
    return [path]

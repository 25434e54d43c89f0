"""Resources into NDJSON files, which appear under their names only when all is written."""

from __future__ import annotations

from pathlib import Path
from types import TracebackType
from typing import Self

from fhiro2.model import Outcome
from fhiro2.write import Run
from fhiro2.write.flag import flags
from fhiro2.write.provenance import software
from fhiro2.write.values import values

FILES = ("devices.ndjson", "observations.ndjson", "flags.ndjson", "provenance.ndjson")


class NdjsonSink:
    """Writes values, flags, their Provenance and this software's Device into ``folder``; counts what it wrote.

    While writing, each file carries ``.partial`` behind its name. Files of an earlier run are replaced at the end.
    """

    def __init__(self, folder: Path, run: Run) -> None:
        self.folder = folder
        self.run = run
        self.derived = 0
        self.flags = 0
        folder.mkdir(parents=True, exist_ok=True)
        self._open = {name: (folder / f"{name}.partial").open("wb") for name in FILES}
        self._open["devices.ndjson"].write(software(run).encode() + b"\n")

    def __enter__(self) -> Self:
        """Ready to write."""
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        """Give the files their names, or remove them after an error."""
        for file in self._open.values():
            file.close()
        for name in FILES:
            partial = self.folder / f"{name}.partial"
            if kind is None:
                partial.replace(self.folder / name)
            else:
                partial.unlink()

    def write(self, outcome: Outcome) -> None:
        """Append one batch; raises StopError where the batch contradicts itself."""
        hashes: dict[str, str] = {}
        for block in values(outcome, self.run):
            self._append("observations.ndjson", block.lines)
            self._append("provenance.ndjson", ["\n".join(block.provenance).encode()] if block.provenance else [])
            self.derived += len(block.lines)
            if outcome.flags:
                hashes.update(zip(block.ids, block.hashes, strict=True))
        raised = flags(outcome, self.run, hashes)
        self._append("flags.ndjson", [line for line, _ in raised])
        self._append("provenance.ndjson", [provenance.encode() for _, provenance in raised])
        self.flags += len(raised)

    def _append(self, name: str, lines: list[bytes]) -> None:
        if lines:
            self._open[name].write(b"\n".join(lines) + b"\n")

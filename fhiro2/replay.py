"""REPLAY: past resources through the whole way, into files; the same input gives the same bytes in any order."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable, Sequence
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from fhiro2 import __version__
from fhiro2.account import Account
from fhiro2.assess import assess
from fhiro2.bulk.intake import few_collections, take_in
from fhiro2.bulk.quarantine import Quarantine
from fhiro2.bulk.tally import tally
from fhiro2.judge import Pack
from fhiro2.model import Outcome
from fhiro2.read.ndjson import NdjsonSource
from fhiro2.settings import Mapping, Settings
from fhiro2.timeline import batches
from fhiro2.write import Run
from fhiro2.write.ndjson import NdjsonSink

COMPARED = ("observations.ndjson", "flags.ndjson", "account.json")
_HASHED = 1 << 20


def replay(
    sources: Sequence[NdjsonSource],
    out: Path,
    settings: Settings,
    mapping: Mapping,
    pack: Pack,
    watch: Callable[[Outcome, float], None] = lambda outcome, share: None,
) -> Account:
    """Read ``sources``, write everything into the folder ``out`` and return the account.

    ``watch`` sees each batch's outcome and which share of the readings is done with it. Raises StopError for input
    that cannot be read at all; a failed run leaves none of its files under their names.
    """
    out.mkdir(parents=True, exist_ok=True)
    started = datetime.now(UTC)
    run = Run(started.isoformat(timespec="milliseconds").replace("+00:00", "Z"), pack.hash, __version__)
    quarantine = Quarantine(out / "quarantine.ndjson")
    try:
        with few_collections(), NdjsonSink(out, run) as sink:
            intake = take_in(sources, settings, mapping, quarantine)
            account, names, origins = intake.account, intake.rows.names, intake.rows.origins
            done, everything = 0, len(intake.readings)
            for timelines in batches(intake.readings, names, origins, intake.roster):
                outcome, _ = assess(timelines, settings, pack)
                tally(account, outcome)
                sink.write(outcome)
                done += len(timelines.readings)
                watch(outcome, done / max(everything, 1))
    except BaseException:
        quarantine.close(keep=False)
        raise
    quarantine.close()
    _write_json(out / "account.json", account.as_json())
    _write_json(
        out / "manifest.json",
        {
            "software": {"name": "fhiro2", "version": __version__},
            "pack": {"sha256": pack.hash, "rules": [f"{rule.id}/{rule.version}" for rule in pack.rules]},
            "settings_sha256": _text_hash(settings.model_dump_json()),
            "mapping": {"name": mapping.mapping, "sha256": _text_hash(mapping.model_dump_json())},
            "input": [
                {"source": source.name, "file": file.name, "sha256": _file_hash(file)}
                for source in sources
                for file in source.files
            ],
            "output_sha256": {name: _file_hash(out / name) for name in COMPARED},
            "readers": {
                "fast": sum(door.fast for door in intake.doors),
                "strict": sum(door.strict for door in intake.doors),
            },
            "run": {"started": run.recorded, "seconds": (datetime.now(UTC) - started).total_seconds()},
        },
    )
    return account


def _write_json(path: Path, content: dict[str, Any]) -> None:
    partial = path.with_name(path.name + ".partial")
    partial.write_text(json.dumps(content, indent=2) + "\n", encoding="utf-8")
    partial.replace(path)


def _text_hash(text: str) -> str:
    return hashlib.sha256(text.encode()).hexdigest()


def _file_hash(path: Path) -> str:
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()

"""A worker put together from a site's settings, and what its store says: for the commands that need them."""

from __future__ import annotations

import os
import socket
import stat
import time
from collections import Counter
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

from fhiro2.errors import Bucket, StopError
from fhiro2.fhir.client import Client
from fhiro2.fhir.exchange import Limits
from fhiro2.judge import Pack
from fhiro2.read.server import ServerSource
from fhiro2.settings import Mapping, Server, Settings
from fhiro2.store import Store
from fhiro2.store.entry import STANDING
from fhiro2.worker import Cycle, Worker
from fhiro2.write.server import ServerSink

TOKEN = "FHIRO2_TOKEN"  # noqa: S105 - the name of an environment variable
LEASE_SECONDS = 600


@contextmanager
def store_at(path: Path) -> Iterator[Store]:
    """An existing store; raises StopError where there is none."""
    if not path.is_file():
        raise StopError(f"{path}: no such store; `fhiro2 run` makes one where the settings say")
    store = Store(path)
    try:
        yield store
    finally:
        store.close()


def run_once(settings: Settings, mapping: Mapping, pack: Pack) -> Cycle:
    """One cycle; raises StopError where the settings do not allow one."""
    with _at_work(settings, mapping, pack) as worker:
        return worker.cycle()


def retract(settings: Settings, mapping: Mapping, pack: Pack) -> Cycle:
    """Take back everything of ours that the server holds; raises StopError where the settings do not allow it."""
    with _at_work(settings, mapping, pack) as worker:
        return worker.retract()


@contextmanager
def _at_work(settings: Settings, mapping: Mapping, pack: Pack) -> Iterator[Worker]:
    """The only worker of the store, until it is let go; raises StopError where the settings do not allow one."""
    server = _checked(settings)
    client = Client(
        server.url,
        lambda: token(server),
        ca_file=server.ca_file,
        limits=Limits(silence=server.timeout_seconds),
    )
    settings = settings.model_copy(update={"base_urls": (server.url, *settings.base_urls)})
    overlap = timedelta(minutes=server.overlap_minutes)
    source = ServerSource(client, settings.base_urls, server.page_size, overlap, server.code_parameter)
    store = Store(settings.store)
    holder = f"{socket.gethostname()}:{os.getpid()}"
    try:
        with store.leased(holder, _now, LEASE_SECONDS * 1_000_000, may_be_alive):
            sink = ServerSink(client) if settings.write else None
            yield Worker(source, sink, store, settings, mapping, pack, server.name, _now, _recorded)
    finally:
        store.close()


def may_be_alive(holder: str) -> bool:
    """Whether the worker ``host:process`` may still run: it does not if it was one of this machine that has ended."""
    host, _, process = holder.rpartition(":")
    if host != socket.gethostname() or not process.isdigit():
        return True
    try:
        os.kill(int(process), 0)
    except ProcessLookupError:
        return False
    except PermissionError:
        return True
    return True


def token(server: Server) -> str | None:
    """The bearer token, from its file or from the environment; None where there is none."""
    if server.token_file is None:
        return os.environ.get(TOKEN) or None
    try:
        if server.token_file.stat().st_mode & (stat.S_IRWXG | stat.S_IRWXO):
            raise StopError(f"{server.token_file}: others may read the token; set its mode to 600")
        return server.token_file.read_text(encoding="utf-8").strip() or None
    except OSError as error:
        raise StopError(
            f"{server.token_file}: cannot be read ({error.strerror}); name the file of the token"
        ) from None


def account_of(store: Store) -> dict[str, Any]:
    """The account of everything that a store was ever given, in the words of a replay's."""
    with store.transaction() as work:
        ends, counters, written = work.ends(), work.counters(), work.written()
    buckets, reasons, parts = Counter[str](), Counter[tuple[str, str]](), Counter[str]()
    for bucket, reason, refused, number in ends:
        buckets[bucket or "pending"] += number
        reasons[bucket, reason] += number if reason else 0
        for part in refused.split():
            parts[part] += number
    for name, bucket, reason in (
        ("repeated", Bucket.REPEATED, "same-version"),
        ("own-output", Bucket.OUT_OF_SCOPE, "own-output"),
        ("foreign", Bucket.OUT_OF_SCOPE, "not-asked-for"),
    ):
        buckets[bucket] += counters.get(name, 0)
        reasons[bucket, reason] += counters.get(name, 0)
    standing = Counter(one.reference.partition("/")[0] for one in written if one.state == STANDING)
    return {
        "received": sum(buckets.values()),
        **{bucket.value: buckets[bucket] for bucket in Bucket},
        "pending": buckets["pending"],
        "parts_quarantined": sum(parts.values()),
        "derived": standing["Observation"],
        "flags_raised": standing["Flag"],
        "reasons": {
            bucket.value: {
                reason: number for (where, reason), number in sorted(reasons.items()) if where == bucket and number
            }
            for bucket in Bucket
        },
        "parts_quarantined_by_reason": dict(sorted(parts.items())),
        "withdrawn": len(written) - sum(one.state == STANDING for one in written),
        "notices": [],
    }


def _checked(settings: Settings) -> Server:
    if settings.server is None:
        raise StopError("the settings name no server; add `server: {url: ...}`")
    if settings.usual_pressure_kpa is None:
        raise StopError(
            "the settings name neither station_pressure_kpa nor altitude_m; add one: alveolar values need it"
        )
    return settings.server


def _now() -> int:
    return time.time_ns() // 1000


def _recorded() -> str:
    return datetime.now(UTC).isoformat(timespec="milliseconds").replace("+00:00", "Z")

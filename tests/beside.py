"""A worker beside a server in memory, with a small ward on it, and what both then hold."""

from __future__ import annotations

from dataclasses import dataclass, field
from datetime import timedelta
from functools import cache
from pathlib import Path
from typing import Any

import responses

from fhiro2.fhir.client import Client
from fhiro2.fhir.exchange import Clock, Limits
from fhiro2.judge import Pack, read_pack
from fhiro2.packaged import rules_folder
from fhiro2.read.server import ServerSource
from fhiro2.settings import NO_MAPPING, Mapping, Settings
from fhiro2.store import Store
from fhiro2.store.entry import Entry
from fhiro2.worker import Cycle, Worker
from fhiro2.write.server import ServerSink
from tests.feeds import Resource, component, observation, panel, patient, specimen
from tests.memory_server import FIRST_SECOND, MemoryServer
from tests.planted import NAME, TOKEN, VALUE

BASE = "https://fhir.example.org/r4"
SOURCE = "north"
NOW = FIRST_SECOND + timedelta(days=1)
RECORDED = "2026-03-04T06:00:00.000Z"


@cache
def pack() -> Pack:
    return read_pack(rules_folder())


def gas(name: str = "gas", saturation: float = 78.0, **more: Any) -> Resource:
    """An arterial gas with co-oximetry, which gives an oxygen content and a flag of low arterial oxygen."""
    parts = (
        component("2703-7", VALUE, "mm[Hg]"),
        component("2708-6", saturation, "%"),
        component("14775-1", 14.0, "g/dL"),
        component("2030-5", 1.0, "%"),
        component("2615-3", 0.5, "%"),
    )
    return panel(name, *parts, **{"specimen": {"reference": "Specimen/drawn"}, **more})


def lactate(name: str = "lactate", value: float = 1.5, **more: Any) -> Resource:
    return observation(name, "2518-9", value, "mmol/L", **more)


def person(name: str = "p1", **more: Any) -> Resource:
    return {**patient(name, birthDate="1960-02-01", **more), "name": [{"family": NAME}]}


def ward() -> list[Resource]:
    """One patient with a gas and a lactate."""
    return [person(), specimen("drawn"), gas(), lactate()]


@dataclass
class Beside:
    """One store and one server; ``cycle`` makes a worker as a new process would."""

    folder: Path
    server: MemoryServer
    page_size: int = 200
    settings: Settings = field(default_factory=lambda: Settings(station_pressure_kpa=101.3))
    pauses: list[float] = field(default_factory=list)

    def __post_init__(self) -> None:
        self.folder.mkdir(exist_ok=True)
        self.store = Store(self.folder / "store.sqlite")

    def cycle(self, mapping: Mapping = NO_MAPPING, *, write: bool = True) -> Cycle:
        clock = Clock(lambda: sum(self.pauses), NOW.timestamp, self.pauses.append, lambda: 1.0)
        client = Client(self.server.base, lambda: TOKEN, limits=Limits(most_pages=50), clock=clock)
        source = ServerSource(client, (self.server.base,), self.page_size, timedelta(minutes=5))
        sink = ServerSink(client) if write else None
        now = round(NOW.timestamp() * 1_000_000)
        return Worker(
            source, sink, self.store, self.settings, mapping, pack(), SOURCE, lambda: now, lambda: RECORDED
        ).cycle()

    @property
    def ledger(self) -> dict[str, Entry]:
        with self.store.transaction() as work:
            return {one.reference: one for one in work.written()}

    @property
    def outbox(self) -> list[Entry]:
        with self.store.transaction() as work:
            return work.outbox()

    @property
    def cursors(self) -> dict[str, str]:
        with self.store._engine.connect() as connection:
            return {
                row.stream: row.updated for row in connection.exec_driver_sql("SELECT stream, updated FROM cursor")
            }

    @property
    def stored(self) -> list[Any]:
        """Key, version, bucket, reason and content of each stored version."""
        asked = "SELECT key, version, bucket, reason, content FROM version ORDER BY row"
        with self.store._engine.connect() as connection:
            return connection.exec_driver_sql(asked).all()

    def ends(self) -> dict[str, str]:
        """Where each stored version ended, by key and version."""
        return {f"{row.key} {row.version}".strip(): row.reason or row.bucket for row in self.stored}

    def ours(self) -> dict[str, tuple[int, Resource]]:
        """What the server holds of ours: number of versions and the latest content without its meta."""
        written = {key: rows for key, rows in self.server.versions.items() if key in self.ledger}
        return {
            key: (len(rows), {name: part for name, part in rows[-1].items() if name != "meta"})
            for key, rows in written.items()
        }


def beside(folder: Path, mock: responses.RequestsMock, *resources: Resource, **given: Any) -> Beside:
    """A worker that has done nothing yet beside a server of its own with these resources."""
    server = MemoryServer(f"{BASE}/{folder.name}")
    server.start(mock)
    server.add(*(resources or ward()))
    return Beside(folder, server, **given)


@dataclass(frozen=True)
class Held:
    """What server and store hold in the end: our resources, the ledger, and where each version ended."""

    ours: dict[str, tuple[int, Resource]]
    ledger: dict[str, Entry]
    ends: dict[str, str]


def held(made: Beside) -> Held:
    return Held(made.ours(), made.ledger, made.ends())


def undisturbed(folder: Path, *resources: Resource) -> Held:
    """What one cycle without a fault ends with."""
    with responses.RequestsMock(assert_all_requests_are_fired=False) as mock:
        made = beside(folder, mock, *resources)
        made.cycle()
        return held(made)

"""Taking back all that was written, against a real server: what it ends as, and what stays when something fails."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
import requests

from fhiro2 import live
from fhiro2.errors import RetryError, StopError
from fhiro2.fhir import systems
from fhiro2.judge import Pack, read_pack
from fhiro2.packaged import rules_folder
from fhiro2.settings import NO_MAPPING, Server, Settings
from fhiro2.store import Store
from fhiro2.store.entry import DEAD, Entry
from fhiro2.worker import Cycle
from fhiro2.write.provenance import TAKEN_BACK
from fhiro2.write.server import Delivered, ServerSink
from tests.fhir_server import found, running
from tests.test_way import observation


@pytest.fixture(scope="module")
def pack() -> Pack:
    return read_pack(rules_folder())


class Site:
    """A site beside a server that holds one arterial gas, from which values follow."""

    def __init__(self, folder: Path, base_url: str, pack: Pack) -> None:
        self.base_url = base_url
        self.pack = pack
        self.settings = Settings(
            server=Server(url=base_url), station_pressure_kpa=101.3, store=folder / "site.sqlite", write=True
        )
        for name, code, value, unit in (
            ("pao2", "2703-7", 92, "mm[Hg]"), ("sao2", "2708-6", 97, "%"), ("hb", "718-7", 14, "g/dL"),
        ):  # fmt: skip
            self.put(observation(name, code, value, unit))

    def put(self, resource: dict[str, Any]) -> None:
        """What somebody else writes."""
        address = f"{self.base_url}/{resource['resourceType']}/{resource['id']}"
        requests.put(address, json=resource, timeout=30).raise_for_status()

    def run(self, **changes: Any) -> Cycle:
        return live.run_once(self.settings.model_copy(update=changes), NO_MAPPING, self.pack)

    def retract(self, **changes: Any) -> Cycle:
        return live.retract(self.settings.model_copy(update=changes), NO_MAPPING, self.pack)

    def values(self) -> list[dict[str, Any]]:
        """Our values at the server, in force or not."""
        return [
            one
            for one in found(self.base_url, "Observation")
            if any(row["system"] == systems.VALUE_IDENTIFIER for row in one.get("identifier", ()))
        ]

    def statuses(self) -> set[tuple[str, str]]:
        return {(one["status"], one["meta"]["versionId"]) for one in self.values()}

    def outbox(self) -> list[Entry]:
        store = Store(self.settings.store)
        try:
            with store.transaction() as work:
                return work.outbox()
        finally:
            store.close()


@pytest.fixture
def site(tmp_path: Path, pack: Pack) -> Iterator[Site]:
    with running(tmp_path / "server") as base_url:
        yield Site(tmp_path, base_url, pack)


def test_all_is_taken_back_and_written_anew_by_the_next_run(site: Site) -> None:
    written = site.run().to_write
    assert site.statuses() == {("final", "1")}
    assert len(site.values()) == written
    done = site.retract()
    assert (done.withdrawn, done.written, done.waiting, done.dead) == (written, written, 0, 0)
    assert site.statuses() == {("entered-in-error", "2")}
    assert len(found(site.base_url, "Device")) == 1
    nullified = [one for one in found(site.base_url, "Provenance") if "reason" in one]
    assert {one["reason"][0]["text"] for one in nullified} == {TAKEN_BACK}
    assert {one["target"][0]["reference"] for one in nullified} == {
        f"Observation/{one['id']}" for one in site.values()
    }
    assert len(found(site.base_url, "Provenance")) == 2 * written
    assert site.retract().withdrawn == 0
    assert site.run(write=False).waiting > 0
    assert site.statuses() == {("entered-in-error", "2")}
    assert site.run().written > 0
    assert site.statuses() == {("final", "3")}


def test_without_write_nothing_is_taken_back(site: Site) -> None:
    site.run()
    with pytest.raises(StopError, match="do not say `write: true`"):
        site.retract(write=False)
    assert site.statuses() == {("final", "1")}


def test_what_was_never_sent_is_not_sent_and_the_next_run_writes_it(site: Site) -> None:
    waiting = site.run(write=False).to_write
    assert waiting > 0
    done = site.retract()
    assert (done.withdrawn, done.waiting) == (0, 0)
    assert site.values() == found(site.base_url, "Provenance") == []
    assert site.run().to_write == waiting
    assert len(site.values()) == waiting


def test_what_somebody_else_changed_stays_and_is_named(site: Site) -> None:
    site.run()
    changed, *others = site.values()
    site.put(changed | {"note": [{"text": "looked at"}]})
    done = site.retract()
    assert (done.withdrawn, done.dead) == (len(others), 1)
    (mine,) = (one for one in site.values() if one["id"] == changed["id"])
    assert (mine["status"], mine["note"]) == ("final", [{"text": "looked at"}])
    (dead,) = (one for one in site.outbox() if one.state == DEAD)
    assert dead.reference == f"Observation/{changed['id']}"
    assert "changed at the server by somebody else" in dead.problem


class Silent(ServerSink):
    """Stores what it is given, and its answers are lost."""

    def put(self, *given: Any) -> Delivered:
        super().put(*given)
        raise RetryError("no answer")


def test_what_was_stored_without_an_answer_is_taken_back_too(site: Site, monkeypatch: pytest.MonkeyPatch) -> None:
    """The first value reaches the server, its answer is lost; then the answers to the withdrawals are lost."""
    with monkeypatch.context() as lost:
        lost.setattr(live, "ServerSink", Silent)
        for _ in range(2):
            assert site.run().written == 0
    in_doubt = {one["id"] for one in site.values()}
    with monkeypatch.context() as lost:
        lost.setattr(live, "ServerSink", Silent)
        done = site.retract()
        assert done.withdrawn == 0
        assert done.waiting > 0
        assert done.notices == ["writing stopped: no answer"]
    done = site.retract()
    assert (done.waiting, done.dead) == (0, 0)
    assert {one["id"] for one in site.values()} >= in_doubt
    assert {status for status, _ in site.statuses()} <= {"entered-in-error"}


def test_a_server_that_is_gone_loses_nothing(site: Site, monkeypatch: pytest.MonkeyPatch) -> None:
    written = site.run().to_write

    def gone(*_: object) -> Delivered:
        raise RetryError("gone")

    with monkeypatch.context() as away:
        away.setattr(ServerSink, "put", gone)
        assert site.retract().notices == ["writing stopped: gone"]
    assert site.statuses() == {("final", "1")}
    assert site.retract().withdrawn == written
    assert site.outbox() == []
    assert site.statuses() == {("entered-in-error", "2")}

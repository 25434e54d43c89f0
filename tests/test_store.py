"""The store: what is kept once, what brings a patient back, what is to be written, and a lease for one worker."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
from itertools import product
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st
from sqlalchemy import Connection, text

from fhiro2.errors import StopError
from fhiro2.read.label import label
from fhiro2.store import Ended, Received, Store
from fhiro2.store.difference import difference
from fhiro2.store.entry import DEAD, IN_FLIGHT, NEW, STANDING, WITHDRAWN, Entry
from fhiro2.store.migrations import STEPS, migrate

SOURCE = "north"


@pytest.fixture
def store(tmp_path: Path) -> Store:
    return Store(tmp_path / "store.sqlite")


def received(key: str, patient: str = "", *targets: str, version: str = "1", content: bytes = b"{}") -> Received:
    return Received(SOURCE, key, version, f"{key}{version}{content!r}", patient, content, targets)


def entry(reference: str, content: bytes = b"{}", **given: object) -> Entry:
    return Entry(reference, "Patient/a", f"hash of {content!r}", content, **given)  # type: ignore[arg-type]


# --- what was received -------------------------------------------------------------------------------------------


def test_the_same_content_is_kept_once_and_counted(store: Store) -> None:
    with store.transaction() as work:
        assert work.keep(received("Observation/1", "Patient/a"))
        assert not work.keep(received("Observation/1", "Patient/a"))
        assert work.keep(received("Observation/1", "Patient/a", content=b"[]"))
        assert work.counters() == {"repeated": 1}
        assert [content for _, content in work.contents(SOURCE, ["Patient/a"])] == [b"{}", b"[]"]


def test_all_or_nothing(store: Store) -> None:
    def fail() -> None:
        with store.transaction() as work:
            work.keep(received("Observation/1", "Patient/a"))
            work.set_cursor(SOURCE, "Observation", "2026-01-01T00:00:00Z")
            raise OSError("cut")

    with pytest.raises(OSError, match="cut"):
        fail()
    with store.transaction() as work:
        assert (work.pending(SOURCE), work.cursor(SOURCE, "Observation")) == ([], "")


def test_a_late_target_brings_back_who_refers_to_it(store: Store) -> None:
    with store.transaction() as work:
        work.keep(received("Observation/1", "Patient/a", "Patient/a", "Specimen/s"))
        assert work.missing_targets(SOURCE) == ["Patient/a", "Specimen/s"]
        work.keep(received("Specimen/s"))
        assert work.missing_targets(SOURCE) == ["Patient/a"]
        assert work.patients_of(SOURCE, ["Specimen/s"]) == {"Patient/a"}
        assert len(work.contents(SOURCE, ["Patient/a"])) == 2
        assert work.contents(SOURCE, ["Patient/b"]) == []


def test_linked_patients_belong_together_whichever_way(store: Store) -> None:
    with store.transaction() as work:
        work.keep(received("Patient/a", "Patient/a", "Patient/b"))
        work.keep(received("Patient/c", "Patient/c", "Patient/b"))
        work.keep(received("Patient/d", "Patient/d"))
        for one in "abc":
            assert work.linked(SOURCE, [f"Patient/{one}"]) == {"Patient/a", "Patient/b", "Patient/c"}
        assert work.linked(SOURCE, ["Patient/d"]) == {"Patient/d"}


def test_a_subject_named_by_identifier_belongs_to_the_patient_who_has_it(store: Store) -> None:
    with store.transaction() as work:
        work.keep(received("Observation/1", "", "identifier urn:x|7"))
        assert work.patients_of(SOURCE, ["Observation/1"]) == set()
        work.keep(received("Patient/a", "Patient/a", "identifier urn:x|7"))
        assert work.patients_of(SOURCE, ["Observation/1"]) == {"Patient/a"}
        assert len(work.contents(SOURCE, ["Patient/a"])) == 2


def test_a_subject_that_changed_brings_back_both_patients(store: Store) -> None:
    with store.transaction() as work:
        work.keep(received("Observation/1", "Patient/a"))
        work.keep(received("Observation/1", "Patient/b", version="2"))
        assert work.patients_of(SOURCE, ["Observation/1"]) == {"Patient/a", "Patient/b"}
        assert len(work.contents(SOURCE, ["Patient/a"])) == len(work.contents(SOURCE, ["Patient/b"])) == 2


def test_ends_are_counted_and_superseded_content_is_let_go(store: Store) -> None:
    with store.transaction() as work:
        for version in "12":
            work.keep(received("Observation/1", "Patient/a", version=version, content=version.encode()))
        work.keep(received("Observation/2", "Patient/a"))
        work.end([Ended(1, "repeated", "superseded", ""), Ended(2, "used", "", "", ("unit",))])
        assert work.pending(SOURCE) == ["Observation/2"]
        assert sorted(work.ends()) == [
            ("", "", "", 1), ("repeated", "superseded", "", 1), ("used", "", "unit", 1),
        ]  # fmt: skip
        assert [row for row, _ in work.contents(SOURCE, ["Patient/a"])] == [2, 3]
        assert [one["resource"] for one in work.quarantined()] == ["Observation/1"]
        assert (work.content(1), work.content(2)) == (None, b"2")
        assert work.try_again() == 1
        assert work.pending(SOURCE) == ["Observation/1", "Observation/2"]


def test_labels_of_resources() -> None:
    gas = {
        "resourceType": "Observation", "id": "g", "meta": {"versionId": "3", "lastUpdated": "2026-01-01T00:00:00Z"},
        "subject": {"reference": "http://h.example/fhir/Patient/a/_history/2"}, "specimen": {"reference": "#inside"},
        "encounter": {"reference": "Encounter/e"},
    }  # fmt: skip
    found = label(gas, ["http://h.example/fhir"])
    assert found is not None
    assert (found.key, found.version, found.patient) == ("Observation/g", "3", "Patient/a")
    assert set(found.targets) == {"Patient/a", "Encounter/e"}
    patient = {
        "resourceType": "Patient", "id": "a", "identifier": [{"system": "urn:x", "value": "7"}],
        "link": [{"other": {"reference": "Patient/b"}, "type": "replaced-by"}],
    }  # fmt: skip
    found = label(patient, [])
    assert found is not None
    assert (found.patient, set(found.targets)) == ("Patient/a", {"Patient/b", "identifier urn:x|7"})
    named = {"resourceType": "Observation", "id": "g", "subject": {"identifier": {"system": "urn:x", "value": "7"}}}
    found = label(named, [])
    assert found is not None
    assert (found.patient, found.targets) == ("", ("identifier urn:x|7",))
    assert label({"resourceType": "Observation", "id": "a b"}, []) is None
    assert label({"resourceType": ["Observation"], "id": "a"}, []) is None


# --- what is to be written ---------------------------------------------------------------------------------------


def withdrawn(one: Entry) -> tuple[Entry, Entry]:
    return entry(one.reference, b"withdrawn " + one.content, withdrawal=True), entry("Provenance/w")


CONTENTS = st.sampled_from([b"1", b"2"])
WAITING = st.none() | st.builds(
    lambda content, state, back: entry(
        "Observation/x", b"withdrawn " + content if back else content, state=state, withdrawal=back
    ),
    CONTENTS, st.sampled_from([NEW, IN_FLIGHT, DEAD]), st.booleans(),
)  # fmt: skip


@given(
    st.none() | CONTENTS,
    st.none() | st.builds(lambda content, state: (content, state), CONTENTS, st.sampled_from([STANDING, WITHDRAWN])),
    WAITING,
)
def test_whatever_the_server_may_hold_it_ends_as_wanted(
    wanted: bytes | None, there: tuple[bytes, str] | None, waiting: Entry | None
) -> None:
    """Play it out for either fate of what is in flight: in the end the server holds what is wanted."""
    name = "Observation/x"
    pair = {} if wanted is None else {name: (entry(name, wanted), entry("Provenance/p"))}
    ledger = {} if there is None else {name: entry(name, there[0], state=there[1])}
    if waiting is not None and waiting.state == DEAD:
        return  # a person must look; what differs is posted again, what does not is left alone
    found = difference(pair, ledger, {} if waiting is None else {name: waiting}, withdrawn)
    for arrived in (False, True):
        held = there
        if arrived:
            if waiting is None or waiting.state != IN_FLIGHT:
                continue
            held = waiting.content, WITHDRAWN if waiting.withdrawal else STANDING
        outbox = None if waiting is None or name in found.drop else waiting
        if found.post:
            ((outbox, _),) = found.post
        if outbox is not None:
            held = outbox.content, WITHDRAWN if outbox.withdrawal else STANDING
        in_force = held[0] if held is not None and held[1] == STANDING else None
        assert in_force == wanted


@pytest.mark.parametrize(("state", "same"), list(product([NEW, IN_FLIGHT, DEAD], [True, False])))
def test_what_waits_already_is_not_posted_twice(state: str, same: bool) -> None:
    name = "Observation/x"
    pair = {name: (entry(name, b"1"), entry("Provenance/p"))}
    found = difference(pair, {}, {name: entry(name, b"1" if same else b"2", state=state)}, withdrawn)
    assert [one.content for one, _ in found.post] == ([] if same else [b"1"])


def test_the_outbox_keeps_doubt_and_order(store: Store) -> None:
    with store.transaction() as work:
        work.post([entry("Observation/1"), entry("Provenance/1", after="Observation/1"), entry("Observation/2")])
        assert [one.reference for one in work.outbox()] == ["Observation/1", "Provenance/1", "Observation/2"]
        work.send(work.outbox()[:1])
        work.post([entry("Observation/1", b"new"), entry("Observation/2", b"new")])
        work.unpost(["Observation/1", "Observation/2"])
        assert [(one.reference, one.state, one.content) for one in work.outbox()] == [
            ("Observation/1", IN_FLIGHT, b"new"), ("Provenance/1", NEW, b"{}"),
        ]  # fmt: skip
        assert work.doubts(["Observation/1", "Observation/2"]) == {"Observation/1": [b"{}"]}
        work.confirm(work.outbox()[0], 'W/"4"', 7)
        assert work.doubts(["Observation/1"]) == {}
        assert [one.reference for one in work.outbox()] == ["Provenance/1"]
        (ledger,) = work.ledger(["Patient/a"]).values()
        assert (ledger.etag, ledger.state, ledger.content) == ('W/"4"', STANDING, b"new")


# --- one worker, one schema --------------------------------------------------------------------------------------


def test_one_worker_at_a_time(store: Store) -> None:
    store.take_lease("one", now=0, until=10_000_000)
    store.take_lease("one", now=5_000_000, until=20_000_000)
    with pytest.raises(StopError, match="worker one has this store for 16 s more"):
        store.take_lease("two", now=5_000_000, until=9_000_000)
    store.take_lease("two", now=20_000_000, until=30_000_000)
    store.give_up_lease("two")
    store.take_lease("three", now=20_000_001, until=30_000_000)


def test_a_failed_migration_leaves_the_store_as_it_was(store: Store, tmp_path: Path) -> None:
    def second(connection: Connection) -> None:
        connection.execute(text("ALTER TABLE counter ADD COLUMN more TEXT"))
        raise OSError("cut")

    engine = store._engine
    with pytest.raises(OSError, match="cut"):
        migrate(engine, [*STEPS, second])
    with engine.begin() as connection:
        assert connection.execute(text("SELECT number FROM schema_version")).scalar() == 1
        assert "more" not in {row.name for row in connection.execute(text("PRAGMA table_info(counter)"))}
    assert migrate(engine, STEPS) == 1
    with engine.begin() as connection:
        connection.execute(text("UPDATE schema_version SET number = 9"))
    with pytest.raises(StopError, match="schema 9"):
        Store(store.path)


def test_a_file_that_is_no_store_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "notes.txt"
    path.write_text("not a database, just some words that are long enough to be read as a header" * 20)
    with pytest.raises(StopError, match="cannot be opened"):
        Store(path)


def test_a_store_where_no_file_can_be_made_is_refused(tmp_path: Path) -> None:
    with pytest.raises(StopError, match="cannot be made"):
        Store(tmp_path / "nowhere" / "store.sqlite")


def test_only_its_owner_can_read_it(store: Store) -> None:
    with store.transaction() as work:
        work.count("repeated")
    modes = {path.stat().st_mode & 0o777 for path in store.path.parent.glob("store.sqlite*")}
    assert modes == {0o600}


def test_the_file_is_safe_against_power_loss(store: Store) -> None:
    """SQLite's own words for its settings: write-ahead log, and every commit synced (2 is FULL)."""
    with store._engine.connect() as connection:
        assert connection.execute(text("PRAGMA journal_mode")).scalar() == "wal"
        assert connection.execute(text("PRAGMA synchronous")).scalar() == 2


WRITER = """
import sys
from pathlib import Path
from fhiro2.store import Received, Store
store = Store(Path(sys.argv[1]))
for number in range(100_000):
    with store.transaction() as work:
        for one in range(20):
            work.keep(Received("s", f"Observation/{number}-{one}", "1", f"{number}-{one}", "Patient/a", b"{}"))
        work.set_cursor("s", "Observation", str(number))
    print(number, flush=True)
"""


def test_a_killed_writer_leaves_whole_batches(tmp_path: Path) -> None:
    path = tmp_path / "store.sqlite"
    with subprocess.Popen([sys.executable, "-c", WRITER, str(path)], stdout=subprocess.PIPE, text=True) as writer:
        assert writer.stdout is not None
        last = [int(writer.stdout.readline()) for _ in range(30)][-1]
        os.kill(writer.pid, signal.SIGKILL)
    with Store(path).transaction() as work:
        cursor = int(work.cursor("s", "Observation"))
        assert cursor >= last
        assert len(work.pending("s")) == 20 * (cursor + 1)

"""STORE: what was received, what was written and what is still to be written, in one SQLite file.

One worker writes at a time, by a lease. What belongs together (resources, where they ended, what is to be written, the
cursor) is committed in one transaction; the network is never inside one.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from sqlalchemy import Connection, create_engine, delete, event, func, insert, select, update
from sqlalchemy.dialects.sqlite import insert as upsert

from fhiro2.errors import StopError
from fhiro2.store.entry import DEAD, IN_FLIGHT, NEW, STANDING, WITHDRAWN, Entry
from fhiro2.store.migrations import migrate
from fhiro2.store.tables import COUNTER, CURSOR, DOUBT, LEASE, OUTBOX, REFERENCE, VERSION, WRITTEN

_MANY = 500  # values in one IN list


@dataclass(frozen=True)
class Received:
    """One version of a resource as it came. ``patient`` is '' where it names no patient by reference.

    ``targets`` are what it points to: references, and ``identifier system|value`` for a Patient's own identifiers and
    for a subject that is named by one.
    """

    source: str
    key: str
    version: str
    hash: str
    patient: str
    content: bytes
    targets: tuple[str, ...] = ()


@dataclass(frozen=True)
class Ended:
    """Where a stored version ended: its bucket, why, and the reasons of components that were refused."""

    row: int
    bucket: str
    reason: str
    detail: str
    refused_parts: tuple[str, ...] = ()


class Store:
    """A store in a SQLite file, made when it is not there. Raises StopError for a file that is no store of ours."""

    def __init__(self, path: Path) -> None:
        self.path = path
        self._engine = create_engine(f"sqlite:///{path}")
        event.listen(self._engine, "connect", _prepare)
        event.listen(self._engine, "begin", lambda connection: connection.exec_driver_sql("BEGIN IMMEDIATE"))
        migrate(self._engine)

    def close(self) -> None:
        """Let go of the file."""
        self._engine.dispose()

    @contextmanager
    def transaction(self) -> Iterator[Transaction]:
        """One transaction: all of it is kept, or nothing."""
        with self._engine.begin() as connection:
            yield Transaction(connection)

    def take_lease(self, holder: str, now: int, until: int) -> None:
        """Become the one worker until ``until``; asked again, go on. Raises StopError while another is."""
        with self._engine.begin() as connection:
            row = connection.execute(select(LEASE)).one_or_none()
            if row is not None and row.holder != holder and row.until > now:
                seconds = (row.until - now) // 1_000_000 + 1
                raise StopError(
                    f"{self.path}: worker {row.holder} has this store for {seconds} s more; end it or wait"
                )
            connection.execute(delete(LEASE))
            connection.execute(insert(LEASE).values(id=1, holder=holder, until=until))

    def give_up_lease(self, holder: str) -> None:
        """End the lease of ``holder``."""
        with self._engine.begin() as connection:
            connection.execute(delete(LEASE).where(LEASE.c.holder == holder))


class Transaction:
    """Reads and changes of the store within one transaction."""

    def __init__(self, connection: Connection) -> None:
        self._connection = connection

    # --- what was received ---

    def cursor(self, source: str, stream: str) -> str:
        """How far ``stream`` was read; '' where it never was."""
        asked = select(CURSOR.c.updated).where(CURSOR.c.source == source, CURSOR.c.stream == stream)
        return str(self._connection.execute(asked).scalar() or "")

    def set_cursor(self, source: str, stream: str, updated: str) -> None:
        """Note how far ``stream`` was read."""
        row = upsert(CURSOR).values(source=source, stream=stream, updated=updated)
        self._connection.execute(
            row.on_conflict_do_update(index_elements=["source", "stream"], set_={"updated": updated})
        )

    def keep(self, received: Received) -> bool:
        """Keep a version; False (and counted) where this very content of it is there already."""
        values = {
            "source": received.source,
            "key": received.key,
            "version": received.version,
            "hash": received.hash,
            "patient": received.patient,
            "content": received.content,
            "bucket": "",
            "reason": "",
            "detail": "",
            "refused_parts": "",
        }
        if not self._connection.execute(upsert(VERSION).values(values).on_conflict_do_nothing()).rowcount:
            self.count("repeated")
            return False
        for target in received.targets:
            row = upsert(REFERENCE).values(source=received.source, key=received.key, target=target)
            self._connection.execute(row.on_conflict_do_nothing())
        return True

    def count(self, name: str, number: int = 1) -> None:
        """Count what was received and is not kept."""
        row = upsert(COUNTER).values(name=name, number=number)
        self._connection.execute(
            row.on_conflict_do_update(index_elements=["name"], set_={"number": COUNTER.c.number + number})
        )

    def counters(self) -> dict[str, int]:
        """All counts of what was not kept."""
        return {row.name: int(row.number) for row in self._connection.execute(select(COUNTER))}

    def has(self, source: str, keys: Iterable[str]) -> set[str]:
        """Which of ``keys`` there is any version of."""
        return {
            row.key
            for some in _chunks(keys)
            for row in self._connection.execute(
                select(VERSION.c.key).where(VERSION.c.source == source, VERSION.c.key.in_(some)).distinct()
            )
        }

    def missing_targets(self, source: str) -> list[str]:
        """All that is referred to and was never received."""
        there = select(VERSION.c.key).where(VERSION.c.source == source)
        asked = select(REFERENCE.c.target).where(REFERENCE.c.source == source, REFERENCE.c.target.not_in(there))
        return sorted(row.target for row in self._connection.execute(asked.distinct()))

    def patients_of(self, source: str, keys: Iterable[str]) -> set[str]:
        """The patients of these resources and of all that refers to them, or shares an identifier with them."""
        found: set[str] = set()
        of_source = REFERENCE.c.source == source
        for some in _chunks(keys):
            named = select(REFERENCE.c.target).where(
                of_source, REFERENCE.c.key.in_(some), REFERENCE.c.target.like("identifier %")
            )
            referring = select(REFERENCE.c.key).where(
                of_source, REFERENCE.c.target.in_(some) | REFERENCE.c.target.in_(named)
            )
            asked = select(VERSION.c.patient).where(
                VERSION.c.source == source, VERSION.c.key.in_(some) | VERSION.c.key.in_(referring)
            )
            found |= {row.patient for row in self._connection.execute(asked.distinct())}
        return found - {""}

    def linked(self, source: str, patients: Iterable[str]) -> set[str]:
        """These patients and all that are linked with them, directly or through others, whichever way."""
        found, waiting = set[str](), set(patients)
        while waiting:
            found |= waiting
            reached: set[str] = set()
            for some in _chunks(waiting):
                either = REFERENCE.c.key.in_(some) | REFERENCE.c.target.in_(some)
                asked = select(REFERENCE.c.key, REFERENCE.c.target).where(
                    REFERENCE.c.source == source,
                    REFERENCE.c.key.like("Patient/%"),
                    REFERENCE.c.target.like("Patient/%"),
                    either,
                )
                reached |= {name for row in self._connection.execute(asked) for name in (row.key, row.target)}
            waiting = reached - found
        return found

    def contents(self, source: str, patients: Iterable[str]) -> list[tuple[int, bytes]]:
        """All kept versions of what is of these patients or that theirs refers to, with their rows, in order."""
        found: dict[int, bytes] = {}
        of_source = REFERENCE.c.source == source
        for some in _chunks(patients):
            named = select(REFERENCE.c.target).where(
                of_source, REFERENCE.c.key.in_(some), REFERENCE.c.target.like("identifier %")
            )
            theirs = (
                select(VERSION.c.key)
                .where(VERSION.c.source == source, VERSION.c.patient.in_(some))
                .union(select(REFERENCE.c.key).where(of_source, REFERENCE.c.target.in_(named)))
            )
            targets = select(REFERENCE.c.target).where(of_source, REFERENCE.c.key.in_(theirs))
            wanted = VERSION.c.key.in_(theirs) | VERSION.c.key.in_(some) | VERSION.c.key.in_(targets)
            asked = select(VERSION.c.row, VERSION.c.content).where(
                VERSION.c.source == source, VERSION.c.content.is_not(None), wanted
            )
            found |= {int(row.row): bytes(row.content) for row in self._connection.execute(asked)}
        return sorted(found.items())

    def pending(self, source: str) -> list[str]:
        """The keys of all versions that have not ended anywhere yet."""
        asked = select(VERSION.c.key).where(VERSION.c.source == source, VERSION.c.bucket == "").distinct()
        return [row.key for row in self._connection.execute(asked)]

    def pending_contents(self, source: str) -> list[tuple[int, bytes]]:
        """The versions that have not ended anywhere yet, with their rows, in order."""
        asked = select(VERSION.c.row, VERSION.c.content).where(VERSION.c.source == source, VERSION.c.bucket == "")
        return [(int(row.row), bytes(row.content)) for row in self._connection.execute(asked.order_by(VERSION.c.row))]

    def end(self, ended: Sequence[Ended]) -> None:
        """Note where versions ended; the content of what is superseded is let go."""
        for one in ended:
            values: dict[str, Any] = {
                "bucket": one.bucket,
                "reason": one.reason,
                "detail": one.detail,
                "refused_parts": " ".join(one.refused_parts),
            }
            if one.reason == "superseded":
                values["content"] = None
            self._connection.execute(update(VERSION).where(VERSION.c.row == one.row).values(values))

    def ends(self) -> list[tuple[str, str, str, int]]:
        """How many versions ended where: bucket, reason, refused components, number."""
        columns = (VERSION.c.bucket, VERSION.c.reason, VERSION.c.refused_parts)
        return [
            (row.bucket, row.reason, row.refused_parts, int(row.number))
            for row in self._connection.execute(select(*columns, func.count().label("number")).group_by(*columns))
        ]

    def quarantined(self) -> list[dict[str, Any]]:
        """What is kept aside, whole or in a component: source, key, version, reason, detail."""
        asked = select(VERSION).where((VERSION.c.bucket == "quarantined") | (VERSION.c.refused_parts != ""))
        return [
            {
                "row": int(row.row),
                "source": row.source,
                "resource": row.key,
                "version": row.version,
                "reason": row.reason or row.refused_parts,
                "detail": row.detail,
            }
            for row in self._connection.execute(asked.order_by(VERSION.c.row))
        ]

    def content(self, row: int) -> bytes | None:
        """The raw JSON of one version; None where there is none, or none any more."""
        found = self._connection.execute(select(VERSION.c.content).where(VERSION.c.row == row)).scalar()
        return None if found is None else bytes(found)

    def try_again(self) -> int:
        """Let everything that is quarantined, whole or in a component, count as not ended; returns how many."""
        refused = (VERSION.c.bucket == "quarantined") | (VERSION.c.refused_parts != "")
        values = {"bucket": "", "reason": "", "detail": "", "refused_parts": ""}
        return self._connection.execute(update(VERSION).where(refused).values(values)).rowcount

    def patients(self, source: str) -> set[str]:
        """All patients of whom anything was received."""
        asked = select(VERSION.c.patient).where(VERSION.c.source == source).distinct()
        return {row.patient for row in self._connection.execute(asked)} - {""}

    # --- what is written ---

    def ledger(self, patients: Iterable[str]) -> dict[str, Entry]:
        """What was written for these patients, by reference."""
        found = {}
        for some in _chunks(patients):
            for row in self._connection.execute(select(WRITTEN).where(WRITTEN.c.patient.in_(some))):
                found[row.reference] = _written(row)
        return found

    def written(self, references: Iterable[str] | None = None) -> list[Entry]:
        """The whole ledger, or the entries of some references."""
        if references is None:
            rows = self._connection.execute(select(WRITTEN).order_by(WRITTEN.c.reference))
            return [_written(row) for row in rows]
        return [
            _written(row)
            for some in _chunks(references)
            for row in self._connection.execute(select(WRITTEN).where(WRITTEN.c.reference.in_(some)))
        ]

    def post(self, entries: Iterable[Entry]) -> None:
        """Put into the outbox; what was there for the same reference and is not in flight is replaced."""
        for one in entries:
            values = {
                "reference": one.reference,
                "patient": one.patient,
                "hash": one.hash,
                "content": one.content,
                "after": one.after,
                "withdrawal": int(one.withdrawal),
                "state": NEW,
                "attempts": 0,
                "problem": "",
            }
            again = {name: value for name, value in values.items() if name not in ("reference", "state")}
            row = upsert(OUTBOX).values(values)
            kept_doubt = {**again, "state": _in_doubt_or_new()}
            self._connection.execute(row.on_conflict_do_update(index_elements=["reference"], set_=kept_doubt))

    def unpost(self, references: Iterable[str]) -> None:
        """Take out of the outbox what is to be written no longer."""
        for some in _chunks(references):
            self._connection.execute(delete(OUTBOX).where(OUTBOX.c.reference.in_(some), OUTBOX.c.state != IN_FLIGHT))

    def outbox(self, patients: Iterable[str] | None = None) -> list[Entry]:
        """What is still to be written, in order: all of it, or that of some patients."""
        asked = select(OUTBOX).order_by(OUTBOX.c.sequence)
        if patients is not None:
            asked = asked.where(OUTBOX.c.patient.in_(list(patients)))
        return [
            Entry(
                row.reference,
                row.patient,
                row.hash,
                bytes(row.content),
                state=row.state,
                after=row.after,
                withdrawal=bool(row.withdrawal),
                sequence=int(row.sequence),
                attempts=int(row.attempts),
                problem=row.problem,
            )
            for row in self._connection.execute(asked)
        ]

    def send(self, entries: Sequence[Entry]) -> None:
        """Note that these outbox entries are now sent: until they are confirmed the server may hold their content."""
        for one in entries:
            doubt = upsert(DOUBT).values(reference=one.reference, hash=one.hash, content=one.content)
            self._connection.execute(doubt.on_conflict_do_nothing())
        self._mark([one.reference for one in entries], state=IN_FLIGHT, attempts=OUTBOX.c.attempts + 1)

    def doubts(self, references: Iterable[str]) -> dict[str, list[bytes]]:
        """By reference, every content that was sent and is not confirmed."""
        found: dict[str, list[bytes]] = {}
        for some in _chunks(references):
            for row in self._connection.execute(select(DOUBT).where(DOUBT.c.reference.in_(some))):
                found.setdefault(row.reference, []).append(bytes(row.content))
        return found

    def fail(self, reference: str, problem: str, *, dead: bool) -> None:
        """Note why an outbox entry was not taken; what is ``dead`` is not tried again until it changes."""
        self._mark([reference], state=DEAD if dead else IN_FLIGHT, problem=problem)

    def _mark(self, references: Iterable[str], **values: Any) -> None:
        for some in _chunks(references):
            self._connection.execute(update(OUTBOX).where(OUTBOX.c.reference.in_(some)).values(values))

    def confirm(self, entry: Entry, etag: str, at: int) -> None:
        """The server holds ``entry``: enter it into the ledger and take it out of the outbox."""
        values = {
            "reference": entry.reference,
            "patient": entry.patient,
            "hash": entry.hash,
            "content": entry.content,
            "etag": etag,
            "state": WITHDRAWN if entry.withdrawal else STANDING,
            "at": at,
        }
        row = upsert(WRITTEN).values(values)
        self._connection.execute(row.on_conflict_do_update(index_elements=["reference"], set_=values))
        for table in (OUTBOX, DOUBT):
            self._connection.execute(delete(table).where(table.c.reference == entry.reference))


def _in_doubt_or_new() -> Any:
    """What is in flight stays in doubt with its new content: the server may have the old one by now."""
    return func.iif(OUTBOX.c.state == IN_FLIGHT, IN_FLIGHT, NEW)


def _written(row: Any) -> Entry:
    return Entry(row.reference, row.patient, row.hash, bytes(row.content), etag=row.etag, state=row.state)


def _chunks(values: Iterable[str]) -> Iterator[list[str]]:
    everything = sorted(set(values))
    for start in range(0, len(everything), _MANY):
        yield everything[start : start + _MANY]


def _prepare(connection: Any, _: Any) -> None:
    connection.isolation_level = None  # transactions are begun by the engine's own event
    try:
        for setting in ("journal_mode=WAL", "synchronous=FULL", "foreign_keys=ON", "busy_timeout=10000"):
            connection.execute(f"PRAGMA {setting}")
    except Exception as error:
        raise StopError(
            f"the store cannot be opened ({type(error).__name__}); name a file made by this program"
        ) from error

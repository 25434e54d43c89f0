"""What is to be written (outbox), what was sent without an answer (doubt), and what the server has (ledger)."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Any

from sqlalchemy import Connection, delete, func, select, update
from sqlalchemy.dialects.sqlite import insert as upsert

from fhiro2.store.entry import DEAD, IN_FLIGHT, NEW, STANDING, WITHDRAWN, Entry
from fhiro2.store.tables import DOUBT, OUTBOX, WRITTEN, chunks


class WrittenResources:
    """Reads and changes of what is written, within one transaction."""

    def __init__(self, connection: Connection) -> None:
        self._connection = connection

    def ledger(self, patients: Iterable[str]) -> dict[str, Entry]:
        """What was written for these patients, by reference."""
        found = {}
        for some in chunks(patients):
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
            for some in chunks(references)
            for row in self._connection.execute(select(WRITTEN).where(WRITTEN.c.reference.in_(some)))
        ]

    def patients_of_ours(self) -> set[str]:
        """All patients of whom anything was written or is to be written."""
        asked = select(WRITTEN.c.patient).union(select(OUTBOX.c.patient))
        return {row.patient for row in self._connection.execute(asked)} - {""}

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
        for some in chunks(references):
            self._connection.execute(delete(OUTBOX).where(OUTBOX.c.reference.in_(some), OUTBOX.c.state != IN_FLIGHT))

    def outbox(self, patients: Iterable[str] | None = None) -> list[Entry]:
        """What is still to be written, in order: all of it, or that of some patients."""
        asked = select(OUTBOX).order_by(OUTBOX.c.sequence)
        if patients is not None:
            asked = asked.where(OUTBOX.c.patient.in_(list(patients)))
        return [_waiting(row) for row in self._connection.execute(asked)]

    def due(self, failed: Iterable[str], most: int) -> list[Entry]:
        """What may be written now, in order: neither dead nor ``failed``, and nothing whose target is not written."""
        asked = select(OUTBOX).where(
            OUTBOX.c.state != DEAD,
            OUTBOX.c.reference.not_in(list(failed)),
            OUTBOX.c.after.not_in(select(OUTBOX.c.reference)),
        )
        return [_waiting(row) for row in self._connection.execute(asked.order_by(OUTBOX.c.sequence).limit(most))]

    def counts(self) -> tuple[int, int]:
        """How much of the outbox is dead, and how much still waits; what stands behind the dead is neither."""
        dead = select(OUTBOX.c.reference).where(OUTBOX.c.state == DEAD)
        waiting = select(func.count()).where(OUTBOX.c.state != DEAD, OUTBOX.c.after.not_in(dead))
        number = self._connection.execute(select(func.count()).select_from(dead.subquery())).scalar()
        return int(number or 0), int(self._connection.execute(waiting).scalar() or 0)

    def send(self, entries: Sequence[Entry]) -> None:
        """Note that these outbox entries are now sent: until they are confirmed the server may hold their content."""
        for one in entries:
            doubt = upsert(DOUBT).values(reference=one.reference, hash=one.hash, content=one.content)
            self._connection.execute(doubt.on_conflict_do_nothing())
        self._mark([one.reference for one in entries], state=IN_FLIGHT, attempts=OUTBOX.c.attempts + 1)

    def doubts(self, references: Iterable[str]) -> dict[str, list[bytes]]:
        """By reference, every content that was sent and is not confirmed."""
        found: dict[str, list[bytes]] = {}
        for some in chunks(references):
            for row in self._connection.execute(select(DOUBT).where(DOUBT.c.reference.in_(some))):
                found.setdefault(row.reference, []).append(bytes(row.content))
        return found

    def fail(self, reference: str, problem: str, *, dead: bool) -> None:
        """Note why an outbox entry was not taken; what is ``dead`` is not tried again until it changes."""
        self._mark([reference], state=DEAD if dead else IN_FLIGHT, problem=problem)

    def _mark(self, references: Iterable[str], **values: Any) -> None:
        for some in chunks(references):
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


def _waiting(row: Any) -> Entry:
    return Entry(
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


def _written(row: Any) -> Entry:
    return Entry(row.reference, row.patient, row.hash, bytes(row.content), etag=row.etag, state=row.state)

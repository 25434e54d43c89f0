"""What was received: each distinct version once, whom it is of, what it points to, and where it ended."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Any

from sqlalchemy import Connection, func, select, update
from sqlalchemy.dialects.sqlite import insert as upsert

from fhiro2.store.tables import COUNTER, CURSOR, REFERENCE, VERSION, chunks

_NOT_ENDED = {"bucket": "", "reason": "", "detail": "", "refused_parts": ""}


@dataclass(frozen=True)
class Received:
    """One version of a resource as it came. ``patient`` is '' where it names no patient by reference, ``key`` where
    it cannot be read.

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


class ReceivedVersions:
    """Reads and changes of what was received, within one transaction."""

    def __init__(self, connection: Connection) -> None:
        self._connection = connection

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
            **_NOT_ENDED,
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
            for some in chunks(keys)
            for row in self._connection.execute(
                select(VERSION.c.key).where(VERSION.c.source == source, VERSION.c.key.in_(some)).distinct()
            )
        }

    def missing_targets(self, source: str) -> list[str]:
        """All that is referred to and was never received."""
        there = select(VERSION.c.key).where(VERSION.c.source == source)
        asked = select(REFERENCE.c.target).where(REFERENCE.c.source == source, REFERENCE.c.target.not_in(there))
        return sorted(row.target for row in self._connection.execute(asked.distinct()))

    def unknown_identifiers(self, source: str) -> list[str]:
        """The identifiers (``system|value``) of subjects that no patient of whom there is something has."""
        of_source = REFERENCE.c.source == source, REFERENCE.c.target.like("identifier %")
        had = select(REFERENCE.c.target).where(*of_source, REFERENCE.c.key.like("Patient/%"))
        asked = select(REFERENCE.c.target).where(*of_source, REFERENCE.c.target.not_in(had)).distinct()
        return sorted(row.target.removeprefix("identifier ") for row in self._connection.execute(asked))

    def patients_of(self, source: str, keys: Iterable[str]) -> set[str]:
        """The patients of these resources and of all that refers to them, or shares an identifier with them."""
        found: set[str] = set()
        of_source = REFERENCE.c.source == source
        for some in chunks(keys):
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
            for some in chunks(waiting):
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
        for some in chunks(patients):
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
        """The versions that have not ended yet, and the others of their resources, with their rows, in order."""
        pending = select(VERSION.c.key).where(VERSION.c.source == source, VERSION.c.bucket == "", VERSION.c.key != "")
        asked = select(VERSION.c.row, VERSION.c.content).where(
            VERSION.c.source == source,
            VERSION.c.content.is_not(None),
            (VERSION.c.bucket == "") | VERSION.c.key.in_(pending),
        )
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
        return self._connection.execute(update(VERSION).where(refused).values(_NOT_ENDED)).rowcount

    def compute_again(self, source: str, patients: Iterable[str]) -> None:
        """Let everything that is kept of these patients count as not ended."""
        for some in chunks(patients):
            theirs = (VERSION.c.source == source) & VERSION.c.patient.in_(some) & VERSION.c.content.is_not(None)
            self._connection.execute(update(VERSION).where(theirs).values(_NOT_ENDED))

    def patients(self, source: str) -> set[str]:
        """All patients of whom anything was received."""
        asked = select(VERSION.c.patient).where(VERSION.c.source == source).distinct()
        return {row.patient for row in self._connection.execute(asked)} - {""}

    def new_patients(self, source: str) -> list[str]:
        """Those of them that have no cursor of their own, which says that their context was asked for."""
        cursors = select(CURSOR.c.stream).where(CURSOR.c.source == source)
        asked = select(VERSION.c.patient).where(VERSION.c.source == source, VERSION.c.patient != "")
        rows = self._connection.execute(asked.where(VERSION.c.patient.not_in(cursors)).distinct())
        return sorted(row.patient for row in rows)

"""WORKER: one cycle beside a FHIR server: read what is new, compute what then stands, write what differs.

Everything between the network calls is kept in the store: a cycle that is killed anywhere is taken up by the next one.
What is computed for a patient is what a replay of all their stored resources gives.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass, field
from functools import partial
from typing import Any

import msgspec

from fhiro2 import __version__
from fhiro2.admit.context import CONTEXT_TYPES
from fhiro2.admit.envelope import is_own
from fhiro2.assess import assess
from fhiro2.bulk.intake import take_in
from fhiro2.bulk.quarantine import KeptInMemory
from fhiro2.codes import code_table
from fhiro2.errors import Bucket, Reason, RetryError, StopError
from fhiro2.fhir.wire import content_hash
from fhiro2.judge import Pack
from fhiro2.read import Raw
from fhiro2.read.server import Found, Poll, ServerSource
from fhiro2.settings import Mapping, Settings
from fhiro2.store import Ended, Received, Store, Transaction
from fhiro2.store.difference import by_reference, difference
from fhiro2.store.entry import DEAD, Entry
from fhiro2.timeline import batches
from fhiro2.write import Run
from fhiro2.write.flag import flags
from fhiro2.write.identity import SOFTWARE_REFERENCE
from fhiro2.write.provenance import STANDS_NO_LONGER, TAKEN_BACK, software, withdrawal
from fhiro2.write.server import Fate, ServerSink
from fhiro2.write.values import values

PATIENTS_AT_ONCE = 50
WRITES_AT_ONCE = 50
OBSERVATIONS = "Observation"
_CONTEXT_KINDS = tuple(sorted(CONTEXT_TYPES))


@dataclass
class Cycle:
    """What one cycle did, in numbers."""

    received: int = 0
    repeated: int = 0
    foreign: int = 0
    patients: int = 0
    to_write: int = 0
    written: int = 0
    withdrawn: int = 0
    dead: int = 0
    waiting: int = 0
    flags: int = 0
    held: tuple[str, ...] = ()
    notices: list[str] = field(default_factory=list)


class Stored:
    """A source of the core that reads stored versions: each line number is the row of a version."""

    def __init__(self, name: str, rows: Sequence[tuple[int, bytes]]) -> None:
        self.name = name
        self._rows = rows

    def read(self, leave_out: bytes | None = None) -> Iterator[Raw]:
        """All of them but those beginning with ``leave_out``."""
        for row, content in self._rows:
            if leave_out is None or not content.startswith(leave_out):
                yield Raw(content, 0, row)


class Worker:
    """The worker of one server and one store. ``now`` gives microseconds since 1970."""

    def __init__(
        self,
        source: ServerSource,
        sink: ServerSink | None,
        store: Store,
        settings: Settings,
        mapping: Mapping,
        pack: Pack,
        name: str,
        now: Callable[[], int],
        recorded: Callable[[], str],
    ) -> None:
        self._source = source
        self._sink = sink
        self._store = store
        self._settings = settings
        self._mapping = mapping
        self._pack = pack
        self._name = name
        self._now = now
        self._recorded = recorded

    def cycle(self) -> Cycle:
        """One cycle; raises RetryError where the server cannot be reached, with all that was read kept."""
        done = Cycle()
        cursors = self._read(done)
        self._fetch_missing(done)
        self._compute(done)
        with self._store.transaction() as work:
            for stream, updated in cursors.items():
                work.set_cursor(self._name, stream, updated)
        if self._sink is not None:
            self._write(self._sink, done)
        self._count_waiting(done)
        return done

    def retract(self) -> Cycle:
        """Take back all values and flags of ours that the server holds or may hold; the next cycle computes them anew.

        Those that were never sent are not sent any more. Raises StopError where nothing may be written.
        """
        if self._sink is None:
            raise StopError("the settings do not say `write: true`, without which nothing is taken back; add it")
        done = Cycle()
        run = self._run()
        with self._store.transaction() as work:
            patients = sorted(work.patients_of_ours())
        for start in range(0, len(patients), PATIENTS_AT_ONCE):
            group = set(patients[start : start + PATIENTS_AT_ONCE])
            with self._store.transaction() as work:
                done.to_write += _post(work, group, {}, run, TAKEN_BACK)
                work.compute_again(self._name, group)
        done.patients = len(patients)
        self._write(self._sink, done)
        self._count_waiting(done)
        return done

    def _run(self) -> Run:
        return Run(self._recorded(), self._pack.hash, __version__)

    def _count_waiting(self, done: Cycle) -> None:
        with self._store.transaction() as work:
            waiting = work.outbox()
        done.waiting = sum(one.state != DEAD for one in waiting)
        done.dead = len(waiting) - done.waiting

    # --- read ---

    def _read(self, done: Cycle) -> dict[str, str]:
        """Keep all that is new; returns how far each stream goes once all of it is done."""
        cursors = {}
        with self._store.transaction() as work:
            since = {kind: work.cursor(self._name, kind) for kind in (OBSERVATIONS, *_CONTEXT_KINDS)}
        first = self._settings.server.since or "" if self._settings.server else ""
        for kind in (OBSERVATIONS, *_CONTEXT_KINDS):
            poll = Poll()
            codes = self._codes() if kind == OBSERVATIONS else ()
            for page in self._source.changed(kind, since[kind] or first, poll, codes):
                self._keep(page, done, only_known=kind != OBSERVATIONS)
            done.foreign += poll.foreign + poll.unreadable
            if poll.updated:
                cursors[kind] = poll.updated
        return cursors

    def _codes(self) -> list[str]:
        """All codes that are read, the site's own among them, as a search asks for them."""
        site = [f"{row.system}|{row.code}" for row in self._mapping.codes]
        return sorted({*(f"{system}|{code}" for system, code in code_table()), *site})

    def _keep(self, found: Sequence[Found], done: Cycle, *, only_known: bool) -> None:
        with self._store.transaction() as work:
            wanted = self._wanted(work, found) if only_known else {one.label.key for one in found}
            for one in found:
                done.received += 1
                if is_own(one.resource.get("identifier")):
                    work.count("own-output")
                elif one.label.key not in wanted:
                    work.count("foreign")
                    done.foreign += 1
                elif not work.keep(self._received(one)):
                    done.repeated += 1

    def _wanted(self, work: Transaction, found: Sequence[Found]) -> set[str]:
        """Of context: what is referred to, or is of a patient of whom there is something."""
        patients = {one.label.patient for one in found}
        known = work.patients(self._name) & patients
        keys = [one.label.key for one in found]
        there = work.has(self._name, keys) | (set(keys) & set(work.missing_targets(self._name)))
        return there | {one.label.key for one in found if one.label.patient in known}

    def _received(self, one: Found) -> Received:
        return Received(
            self._name,
            one.label.key,
            one.label.version,
            content_hash(one.content).hex(),
            one.label.patient,
            one.content,
            one.label.targets,
        )

    def _fetch_missing(self, done: Cycle) -> None:
        """Ask once for all that is referred to and not there; what the server does not have is asked for next time."""
        asked: set[str] = set()
        while True:
            with self._store.transaction() as work:
                keys = [
                    key
                    for key in work.missing_targets(self._name)
                    if key not in asked and key.partition("/")[0] in CONTEXT_TYPES
                ]
            if not keys:
                return
            asked.update(keys)
            self._keep(list(self._source.named(keys)), done, only_known=False)

    # --- compute ---

    def _compute(self, done: Cycle) -> None:
        """Everything of the patients of whom something is new, a bounded number of patients at a time."""
        with self._store.transaction() as work:
            pending = work.pending(self._name)
            affected = work.patients_of(self._name, pending)
        while affected:
            with self._store.transaction() as work:
                group: set[str] = set()
                while affected and len(group) < PATIENTS_AT_ONCE:
                    group |= work.linked(self._name, {min(affected)})
                    affected -= group
                rows = work.contents(self._name, group)
            self._compute_for(group, rows, done)
        with self._store.transaction() as work:
            rows = work.pending_contents(self._name)
        if rows:
            self._compute_for(set(), rows, done)

    def _compute_for(self, group: set[str], rows: Sequence[tuple[int, bytes]], done: Cycle) -> None:
        run = self._run()
        kept, ends = KeptInMemory(), dict[int, tuple[Bucket, Reason | None]]()

        def end(line: int, bucket: Bucket, reason: Reason | None) -> None:
            ends[line] = bucket, reason

        intake = take_in([Stored(self._name, rows)], self._settings, self._mapping, kept, ends=end)
        wanted: dict[str, tuple[Entry, Entry]] = {}
        for timelines in batches(intake.readings, intake.rows.names, intake.rows.origins, intake.roster):
            outcome, _ = assess(timelines, self._settings, self._pack)
            done.held += outcome.held
            wanted |= self._rendered(outcome, run, group)
        done.patients += len(group)
        with self._store.transaction() as work:
            work.end(_ended(ends, kept))
            if group:
                done.to_write += _post(work, group, wanted, run, STANDS_NO_LONGER)

    def _rendered(self, outcome: Any, run: Run, group: set[str]) -> dict[str, tuple[Entry, Entry]]:
        """What stands for the patients of ``group``: each resource with its Provenance, by reference."""
        found: dict[str, tuple[Entry, Entry]] = {}
        hashes: dict[str, str] = {}
        for block in values(outcome, run):
            hashes.update(zip(block.ids, block.hashes, strict=True))
            found |= _entries("Observation", zip(block.lines, block.provenance, strict=True), group)
        return found | _entries("Flag", flags(outcome, run, hashes), group)

    # --- write ---

    def _write(self, sink: ServerSink, done: Cycle) -> None:
        """Send what waits, in order; stops quietly where the server cannot be reached, to go on in the next cycle."""
        failed: set[str] = set()
        while True:
            with self._store.transaction() as work:
                waiting = [one for one in work.outbox() if one.state != DEAD and one.reference not in failed]
                due = _due(waiting)[:WRITES_AT_ONCE]
                references = [one.reference for one in due]
                etags = {one.reference: one.etag for one in work.written(references)}
                doubts = work.doubts(references)
                work.send(due)
            if not due:
                return
            for one in due:
                etag, doubtful = etags.get(one.reference, ""), doubts.get(one.reference, ())
                try:
                    sent = sink.put(one.reference, one.content, etag, doubtful)
                except RetryError as error:
                    done.notices.append(f"writing stopped: {error}")
                    return
                with self._store.transaction() as work:
                    if sent.fate is Fate.DONE:
                        work.confirm(one, sent.etag, self._now())
                        done.written += not one.withdrawal
                        done.withdrawn += one.withdrawal
                    else:
                        failed.add(one.reference)
                        work.fail(one.reference, sent.problem, dead=sent.fate is Fate.DEAD)


def _due(waiting: Sequence[Entry]) -> list[Entry]:
    """What may be written now: nothing whose target still waits."""
    unwritten = {one.reference for one in waiting}
    return [one for one in waiting if one.after not in unwritten]


def _ended(ends: dict[int, tuple[Bucket, Reason | None]], kept: KeptInMemory) -> list[Ended]:
    details: dict[int, str] = {}
    parts: dict[int, list[str]] = {}
    for refusal in kept.refusals:
        if refusal.part is None:
            details[refusal.line] = refusal.detail
        else:
            parts.setdefault(refusal.line, []).append(refusal.reason)
            details.setdefault(refusal.line, refusal.detail)
    return [
        Ended(
            row, bucket.value, "" if reason is None else reason.value, details.get(row, ""), tuple(parts.get(row, ()))
        )
        for row, (bucket, reason) in ends.items()
    ]


class _Subject(msgspec.Struct):
    reference: str


class _Ours(msgspec.Struct):
    id: str
    subject: _Subject


_OURS = msgspec.json.Decoder(_Ours)


class _Identified(msgspec.Struct):
    id: str


_IDENTIFIED = msgspec.json.Decoder(_Identified)


def _entries(kind: str, lines: Iterable[tuple[bytes, str]], group: set[str]) -> dict[str, tuple[Entry, Entry]]:
    found = {}
    for line, provenance in lines:
        ours = _OURS.decode(line)
        if ours.subject.reference in group:
            reference = f"{kind}/{ours.id}"
            found[reference] = (
                Entry(reference, ours.subject.reference, hashlib.sha256(line).hexdigest(), line),
                _provenance(provenance, ours.subject.reference, reference),
            )
    return found


def _provenance(line: str, patient: str, target: str) -> Entry:
    content = line.encode()
    return Entry(
        f"Provenance/{_IDENTIFIED.decode(content).id}",
        patient,
        hashlib.sha256(content).hexdigest(),
        content,
        after=target,
    )


def _post(work: Transaction, group: set[str], wanted: dict[str, tuple[Entry, Entry]], run: Run, reason: str) -> int:
    """Put into the outbox what differs from what the server has, and take out what need not be written any more.

    ``reason`` says why what is not wanted is withdrawn.
    """
    outbox = work.outbox(group)
    withdraw = partial(_withdrawn, run=run, reason=reason)
    found = difference(wanted, by_reference(work.ledger(group).values()), by_reference(outbox), withdraw)
    again = found.drop | {one.reference for one, _ in found.post}
    work.unpost(found.drop | {one.reference for one in outbox if one.after in again})
    device = _device(run)
    known = [
        *work.written([device.reference]),
        *(one for one in work.outbox({""}) if one.reference == device.reference),
    ]
    if found.post and all(one.hash != device.hash for one in known):
        work.post([device])
    work.post([*(one for one, _ in found.post), *(provenance for _, provenance in found.post)])
    return len(found.post)


def _device(run: Run) -> Entry:
    content = software(run).encode()
    return Entry(SOFTWARE_REFERENCE, "", hashlib.sha256(content).hexdigest(), content)


def _withdrawn(one: Entry, run: Run, reason: str) -> tuple[Entry, Entry]:
    """What was written, as entered in error, with the Provenance that says since when."""
    resource = json.loads(one.content)
    resource["status"] = "entered-in-error"
    content = json.dumps(resource, separators=(",", ":"), ensure_ascii=False).encode()
    digest = hashlib.sha256(content).hexdigest()
    entry = Entry(one.reference, one.patient, digest, content, withdrawal=True)
    return entry, _provenance(withdrawal(run, one.reference, digest, reason), one.patient, one.reference)

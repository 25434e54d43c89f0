"""WORKER: one cycle beside a FHIR server: read what is new, compute what then stands, write what differs.

Everything between the network calls is kept in the store: a cycle that is killed anywhere is taken up by the next one.
What is computed for a patient is what a replay of all their stored resources gives.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass, field
from datetime import UTC, datetime
from typing import Any

import msgspec

from fhiro2 import __version__
from fhiro2.admit.context import CONTEXT_TYPES
from fhiro2.admit.envelope import is_own
from fhiro2.assess import assess
from fhiro2.bulk.intake import take_in
from fhiro2.bulk.quarantine import KeptInMemory
from fhiro2.bulk.stored import Stored, ended
from fhiro2.codes import code_table
from fhiro2.errors import Bucket, Reason, RetryError
from fhiro2.fhir.wire import content_hash
from fhiro2.judge import Pack
from fhiro2.model import MICROSECONDS
from fhiro2.read.server import Found, Poll, ServerSource, escaped
from fhiro2.settings import Mapping, Settings
from fhiro2.store import Received, Store, Transaction
from fhiro2.store.difference import by_reference, difference
from fhiro2.store.entry import DEAD, Entry
from fhiro2.timeline import batches
from fhiro2.write import Run
from fhiro2.write.flag import flags
from fhiro2.write.identity import SOFTWARE_REFERENCE
from fhiro2.write.provenance import software, withdrawal
from fhiro2.write.server import Fate, ServerSink
from fhiro2.write.values import values

PATIENTS_AT_ONCE = 50
WRITES_AT_ONCE = 50
CODES_AT_ONCE = 40
OF_PATIENTS = ("Condition", "Device", "Encounter", "MedicationAdministration", "Procedure")
"""What states facts about a patient and is not referred to by Observations."""


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


@dataclass(frozen=True)
class _Stream:
    """One search that each cycle asks again; its name changes with its codes, so that it then begins anew."""

    kind: str
    codes: tuple[str, ...] = ()

    @property
    def name(self) -> str:
        return (
            " ".join((self.kind, hashlib.sha256(",".join(self.codes).encode()).hexdigest()))
            if self.codes
            else self.kind
        )


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
        with self._store.transaction() as work:
            waiting = work.outbox()
        dead = {one.reference for one in waiting if one.state == DEAD}
        done.dead = len(dead)
        done.waiting = sum(one.reference not in dead and one.after not in dead for one in waiting)
        return done

    # --- read ---

    def _read(self, done: Cycle) -> dict[str, str]:
        """Keep all that is new; returns how far each stream goes once all of it is done."""
        cursors = {}
        streams = [*self._observations(), *map(_Stream, sorted(CONTEXT_TYPES))]
        with self._store.transaction() as work:
            since = {stream.name: work.cursor(self._name, stream.name) for stream in streams}
        first = self._settings.server.since or "" if self._settings.server else ""
        for stream in streams:
            start = since[stream.name] or first
            poll = self._poll(start)
            pages = self._source.changed(stream.kind, start, poll, stream.codes)
            self._keep_all(pages, poll, done, only_known=not stream.codes)
            if poll.updated:
                cursors[stream.name] = poll.updated
        return cursors

    def _observations(self) -> Iterator[_Stream]:
        """All codes that are read, the site's own after the shipped ones, as many as one search asks for."""
        shipped = sorted(f"{system}|{code}" for system, code in code_table())
        site = sorted({f"{row.system}|{row.code}" for row in self._mapping.codes} - set(shipped))
        for codes in (shipped, site):
            for start in range(0, len(codes), CODES_AT_ONCE):
                yield _Stream("Observation", tuple(codes[start : start + CODES_AT_ONCE]))

    def _poll(self, since: str = "") -> Poll:
        return Poll(datetime.fromtimestamp(self._now() / MICROSECONDS, UTC), since)

    def _keep_all(self, pages: Iterable[list[Found]], poll: Poll, done: Cycle, *, only_known: bool = True) -> None:
        for page in pages:
            self._keep(page, done, only_known=only_known)
        if poll.foreign:
            done.received += poll.foreign
            done.foreign += poll.foreign
            with self._store.transaction() as work:
                work.count("foreign", poll.foreign)

    def _keep(self, found: Sequence[Found], done: Cycle, *, only_known: bool) -> None:
        """Keep what is wanted, and what cannot be read, since nobody knows whether it is."""
        with self._store.transaction() as work:
            wanted = self._wanted(work, found) if only_known else {one.label.key for one in found}
            for one in found:
                done.received += 1
                if is_own(one.resource.get("identifier")):
                    work.count("own-output")
                elif one.label.key and one.label.key not in wanted:
                    work.count("foreign")
                    done.foreign += 1
                elif not work.keep(self._received(one)):
                    done.repeated += 1

    def _wanted(self, work: Transaction, found: Sequence[Found]) -> set[str]:
        """Of context: what is referred to, is of a patient of whom there is something, or says who such a one is."""
        labels = [one.label for one in found]
        known = work.patients(self._name) | work.has(self._name, [one.key for one in labels])
        known.update(work.missing_targets(self._name))
        known.update(f"identifier {one}" for one in work.unknown_identifiers(self._name))
        known.discard("")
        return {
            one.key
            for one in labels
            if known & {one.key, one.patient, *(one.targets if one.key.startswith("Patient/") else ())}
        }

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
        asked: set[tuple[str, str, str]] = set()
        while True:
            with self._store.transaction() as work:
                keys = [key.partition("/") for key in work.missing_targets(self._name)]
                sought = {(kind, "_id", identity) for kind, _, identity in keys if kind in CONTEXT_TYPES}
                sought |= {("Patient", "identifier", escaped(one)) for one in work.unknown_identifiers(self._name)}
                new = work.new_patients(self._name)
            sought |= {(kind, "patient", patient) for kind in OF_PATIENTS for patient in new}
            if not sought - asked:
                return
            for kind, name in sorted({(kind, name) for kind, name, _ in sought - asked}):
                values = sorted(value for *what, value in sought - asked if (kind, name) == tuple(what))
                poll = self._poll()
                self._keep_all(self._source.having(kind, name, values, poll), poll, done)
            asked |= sought
            with self._store.transaction() as work:
                for patient in new:
                    work.set_cursor(self._name, patient, self._recorded())

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
        run = Run(self._recorded(), self._pack.hash, __version__)
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
        done.flags += sum(reference.startswith("Flag/") for reference in wanted)
        with self._store.transaction() as work:
            work.end(ended(ends, kept.refusals))
            if group:
                done.to_write += _post(work, group, wanted, run)

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
                due = work.due(failed, WRITES_AT_ONCE)
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


def _post(work: Transaction, group: set[str], wanted: dict[str, tuple[Entry, Entry]], run: Run) -> int:
    """Put into the outbox what differs from what the server has, and take out what need not be written any more."""
    outbox = work.outbox(group)
    found = difference(
        wanted, by_reference(work.ledger(group).values()), by_reference(outbox), lambda one: _withdrawn(one, run)
    )
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


def _withdrawn(one: Entry, run: Run) -> tuple[Entry, Entry]:
    """What was written, as entered in error, with the Provenance that says since when."""
    resource = json.loads(one.content)
    resource["status"] = "entered-in-error"
    content = json.dumps(resource, separators=(",", ":"), ensure_ascii=False).encode()
    digest = hashlib.sha256(content).hexdigest()
    entry = Entry(one.reference, one.patient, digest, content, withdrawal=True)
    return entry, _provenance(withdrawal(run, one.reference, digest), one.patient, one.reference)

"""WORKER: one cycle beside a FHIR server: read what is new, compute what then stands, write what differs.

Everything between the network calls is kept in the store: a cycle that is killed anywhere is taken up by the next one.
What is computed for a patient is what a replay of all their stored resources gives.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass, field
from datetime import UTC, datetime

from fhiro2 import __version__
from fhiro2.admit.context import CONTEXT_TYPES
from fhiro2.admit.envelope import is_own
from fhiro2.assess import assess
from fhiro2.bulk.delivery import deliver
from fhiro2.bulk.intake import take_in
from fhiro2.bulk.posting import Wanted, post, rendered
from fhiro2.bulk.quarantine import KeptInMemory
from fhiro2.bulk.stored import Stored, ended
from fhiro2.codes import code_table
from fhiro2.errors import Bucket, Reason, StopError
from fhiro2.fhir.wire import content_hash
from fhiro2.judge import Pack
from fhiro2.model import MICROSECONDS
from fhiro2.read.server import Found, Poll, ServerSource, escaped
from fhiro2.settings import Mapping, Settings
from fhiro2.store import Received, Store, Transaction
from fhiro2.timeline import batches
from fhiro2.write import Run
from fhiro2.write.provenance import STANDS_NO_LONGER, TAKEN_BACK
from fhiro2.write.server import ServerSink

PATIENTS_AT_ONCE = 50
BASIS = "basis"
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
        """The name of its cursor."""
        digest = hashlib.sha256(",".join(self.codes).encode()).hexdigest()
        return f"{self.kind} {digest}" if self.codes else self.kind


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
            self._deliver(self._sink, done)
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
                done.to_write += post(work, group, {}, set(), run, TAKEN_BACK)
                work.compute_again(self._name, group)
        done.patients = len(patients)
        self._deliver(self._sink, done)
        self._count_waiting(done)
        return done

    def _run(self) -> Run:
        return Run(self._recorded(), self._pack.hash, __version__)

    def _count_waiting(self, done: Cycle) -> None:
        with self._store.transaction() as work:
            done.dead, done.waiting = work.counts()

    def _deliver(self, sink: ServerSink, done: Cycle) -> None:
        found = deliver(self._store, sink, self._settings.write_together, self._now)
        done.written, done.withdrawn = found.written, found.withdrawn
        if found.stopped:
            done.notices.append(f"writing stopped: {found.stopped}")

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
        """Everything of the patients of whom something is new, or of all, a bounded number of patients at a time."""
        basis = self._basis()
        with self._store.transaction() as work:
            affected = work.patients_of(self._name, work.pending(self._name))
            if work.cursor(self._name, BASIS) != basis:
                affected = work.patients(self._name)
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
        with self._store.transaction() as work:
            work.set_cursor(self._name, BASIS, basis)

    def _basis(self) -> str:
        """What everything is computed by; where it changed, all patients are computed again."""
        settings = self._settings.model_dump_json(exclude={"server", "store", "write", "write_together"})
        parts = (__version__, self._pack.hash, settings, self._mapping.model_dump_json())
        return hashlib.sha256("\n".join(parts).encode()).hexdigest()

    def _compute_for(self, group: set[str], rows: Sequence[tuple[int, bytes]], done: Cycle) -> None:
        run = self._run()
        kept, ends = KeptInMemory(), dict[int, tuple[Bucket, Reason | None]]()

        def end(line: int, bucket: Bucket, reason: Reason | None) -> None:
            ends[line] = bucket, reason

        intake = take_in([Stored(self._name, rows)], self._settings, self._mapping, kept, ends=end)
        wanted: Wanted = {}
        held: set[str] = set()
        for timelines in batches(intake.readings, intake.rows.names, intake.rows.origins, intake.roster):
            outcome, _ = assess(timelines, self._settings, self._pack)
            held |= {patient.reference for patient in timelines.patients if patient.key in outcome.held}
            wanted |= rendered(outcome, run, group)
        done.held += tuple(sorted(held & group))
        done.patients += len(group)
        done.flags += sum(reference.startswith("Flag/") for reference in wanted)
        with self._store.transaction() as work:
            work.end(ended(ends, kept.refusals))
            if group:
                done.to_write += post(work, group, wanted, held, run, STANDS_NO_LONGER)

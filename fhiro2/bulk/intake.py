"""Take in: sources are read twice, first for context, then for Observations; every resource version gets its place."""

from __future__ import annotations

import gc
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field
from typing import Any

import msgspec
import numpy as np

from fhiro2.account import Account
from fhiro2.admit import Admission, Admitter
from fhiro2.admit.coding import Coder, Table, site_table
from fhiro2.admit.context import CONTEXT_TYPES, Context, Entry, Interpreter
from fhiro2.admit.envelope import is_own
from fhiro2.admit.moment import moment
from fhiro2.admit.rows import Interner, Rows
from fhiro2.admit.value import Valuer
from fhiro2.bulk.book import Book, Ends, standing_origins
from fhiro2.bulk.quarantine import Keeper
from fhiro2.bulk.unit import OBSERVATION, named_id, observations, refusal, resource, units
from fhiro2.bulk.unit_switch import unit_switches
from fhiro2.codes import CONSCIOUSNESS, LOINC, code_table
from fhiro2.errors import Bucket, Reason, SkipError, StopError
from fhiro2.fhir.wire import Door, Observation
from fhiro2.model import Fact, Integers, Readings
from fhiro2.read import Raw, Source
from fhiro2.settings import Mapping, Settings
from fhiro2.timeline import NEVER_UPDATED, Roster, panel_samples

_COLLECT_EVERY = 200_000
"""New objects between two garbage collections; at the usual 700 they take a tenth of the time."""

Watch = Callable[[Observation, Admission], None]


@dataclass
class Intake:
    """All that was read: standing readings, what they came from, who the patients are, and the account so far."""

    rows: Rows = field(default_factory=Rows)
    readings: Readings = field(default_factory=lambda: Rows().readings())
    roster: Roster = field(default_factory=lambda: Roster({}, {}, {}))
    account: Account = field(default_factory=Account)
    doors: tuple[Door, Door] = field(default_factory=lambda: (Door(), Door()))


def take_in(
    sources: Sequence[Source],
    settings: Settings,
    mapping: Mapping,
    quarantine: Keeper | None = None,
    watch: Watch | None = None,
    ends: Ends | None = None,
) -> Intake:
    """Read all sources; raises StopError for a mapping that names what does not exist.

    ``watch`` sees each Observation that could be read, with what became of it; ``ends`` is told of every version in
    the end.
    """
    with few_collections():
        return _take_in(sources, settings, mapping, quarantine, watch, ends)


@contextmanager
def few_collections() -> Iterator[None]:
    """Let the garbage collector look for cycles rarely: bulk work makes many objects and hardly a cycle."""
    thresholds = gc.get_threshold()
    gc.set_threshold(_COLLECT_EVERY, *thresholds[1:])
    try:
        yield
    finally:
        gc.set_threshold(*thresholds)


def _take_in(
    sources: Sequence[Source],
    settings: Settings,
    mapping: Mapping,
    quarantine: Keeper | None,
    watch: Watch | None,
    ends: Ends | None,
) -> Intake:
    zone = settings.zone or mapping.zone
    interpreter, coder = Interpreter(mapping, zone), Coder(_codes(mapping))
    found, stands, received = Intake(), list[Integers](), 0
    for source in sources:
        first, second = Book(source, quarantine, ends), Book(source, quarantine, ends)
        context = _context(first, interpreter, found)
        admitter = Admitter(
            source.name,
            found.rows,
            context,
            interpreter,
            coder,
            _valuer(source.name, mapping, found.rows),
            zone,
            settings.base_urls,
        )
        stands.append(_observations(second, admitter, found, watch))
        _describe(source.name, context, found.roster)
        received += first.versions.count + second.versions.count
    found.account.check(received)
    readings, unit = found.rows.readings(), np.frombuffer(found.rows.units, dtype=np.int32)
    standing = np.zeros(len(found.rows.origins.ids), dtype=bool)
    for origins in stands:
        standing[origins] = True
    if not standing.all():
        stand = standing[readings["origin"]]
        readings, unit = readings[stand], unit[stand]
    found.readings = readings
    found.account.notices += unit_switches(readings, unit, found.rows.unit_names)
    panel_samples(found.readings, found.rows.names, found.rows.origins, found.rows.panels)
    return found


def _context(book: Book, interpreter: Interpreter, found: Intake) -> Context:
    """First pass: everything that is not an Observation."""
    context = Context(excluded={f"Patient/{name}" for name in interpreter.excluded})
    stated: dict[int, tuple[str, Entry]] = {}
    excluded: dict[int, str] = {}
    for raw in book.source.read(leave_out=OBSERVATION):
        if raw.content.startswith(OBSERVATION) and raw.fault is not Reason.SIZE:
            continue
        for unit in units(raw):
            try:
                content = resource(unit, found.doors[0])
            except SkipError as error:
                book.refuse(unit, error)
                continue
            key, version, updated = _label(content, unit)
            if unit.full_url:
                context.note_alias(unit.full_url, key)
            if content.get("resourceType") == "Observation":
                continue
            try:
                entry = _entry(content, interpreter)
            except SkipError as error:
                row = book.refuse(unit, error, key, version, updated)
                if error.reason is Reason.EXCLUDED_PATIENT:
                    excluded[row] = key
                continue
            stated[book.add(unit, key, version, updated, Admission(Bucket.USED))] = key, entry
    stands = book.close(found.account).stands
    for row, (key, entry) in stated.items():
        if stands[row]:
            context.add(key, entry)
    context.excluded.update(key for row, key in excluded.items() if stands[row])
    return context


def _observations(book: Book, admitter: Admitter, found: Intake, watch: Watch | None) -> Integers:
    """Second pass: Observations. Returns the origins whose version stands."""
    read, admit, given = found.doors[1].observation, admitter.admit, found.rows.origins.ids
    for raw in book.source.read():
        if raw.fault is Reason.SIZE:
            continue
        plain = raw.content.startswith(OBSERVATION)
        for unit in (raw,) if plain else observations(raw):
            origin = len(given)
            try:
                observation = read(unit.content)
            except SkipError as error:
                book.refuse(unit, refusal(unit, error))
                continue
            if observation.id is None:
                observation = msgspec.structs.replace(observation, id=named_id(unit) or None)
            admission = admit(observation, unit.content)
            if watch is not None:
                watch(observation, admission)
            meta = observation.meta
            book.add(
                unit,
                observation.id or "",
                meta.versionId or "" if meta is not None else "",
                NEVER_UPDATED if meta is None or meta.lastUpdated is None else _updated(meta.lastUpdated),
                admission,
                origin if len(given) > origin else -1,
            )
    return standing_origins(book.close(found.account))


def _entry(resource: dict[str, Any], interpreter: Interpreter) -> Entry:
    kind = resource.get("resourceType")
    if not isinstance(kind, str):
        raise SkipError(Reason.TYPE, "no resourceType")
    if is_own(resource.get("identifier")) or _own_provenance(resource):
        raise SkipError(Reason.OWN_OUTPUT, "written by this program")
    if kind not in CONTEXT_TYPES:
        raise SkipError(Reason.OTHER_TYPE, kind)
    if not isinstance(resource.get("id"), str):
        raise SkipError(Reason.INVARIANT, f"{kind} without id")
    return interpreter.entry(resource)


def _own_provenance(resource: dict[str, Any]) -> bool:
    agents = resource.get("agent")
    return isinstance(agents, list) and any(
        isinstance(agent, dict) and isinstance(agent.get("who"), dict) and is_own([agent["who"].get("identifier")])
        for agent in agents
    )


def _label(resource: dict[str, Any], unit: Raw) -> tuple[str, str, int]:
    """Key ('' without identity), versionId and lastUpdated of a resource; an id may come from its full URL."""
    if resource.get("id") is None and named_id(unit):
        resource["id"] = named_id(unit)
    kind, identity, meta = resource.get("resourceType"), resource.get("id"), resource.get("meta")
    if not isinstance(kind, str) or not isinstance(identity, str):
        return "", "", NEVER_UPDATED
    version = meta.get("versionId") if isinstance(meta, dict) else None
    updated = meta.get("lastUpdated") if isinstance(meta, dict) else None
    return (
        f"{kind}/{identity}",
        version if isinstance(version, str) else "",
        _updated(updated) if isinstance(updated, str) else NEVER_UPDATED,
    )


def _updated(text: str) -> int:
    try:
        return moment(text, None)[0]
    except SkipError:
        return NEVER_UPDATED


def _describe(source: str, context: Context, roster: Roster) -> None:
    """Enter a source's patients into the roster under their keys."""
    merged = context.merged()
    for old, target in merged.items():
        roster.root[f"{source}|{old}"] = f"{source}|{target}"
    for reference, entry in context.patients.items():
        roster.born[f"{source}|{reference}"] = entry.born
    gathered: dict[str, set[Fact]] = {}
    for subject, stated in context.facts.items():
        gathered.setdefault(f"{source}|{merged.get(subject, subject)}", set()).update(stated)
    for key, facts in gathered.items():
        roster.facts[key] = tuple(sorted(facts, key=lambda one: (one.fact, one.start, one.end, one.answer)))


def _valuer(source: str, mapping: Mapping, rows: Rows) -> Valuer:
    return Valuer(
        {(row.system, row.code): (row.quantity, CONSCIOUSNESS.index(row.answer)) for row in mapping.answers},
        {row.loinc: row.unit for row in mapping.default_units if row.source == source},
        Interner(rows.unit_names, f"{source}|"),
    )


def _codes(mapping: Mapping) -> Table:
    shipped = code_table()
    for row in mapping.codes:
        if (LOINC, row.loinc) not in shipped:
            raise StopError(f"mapping {mapping.mapping}: {row.code} means LOINC {row.loinc}, which is not shipped")
    return site_table(shipped, {(row.system, row.code): row.loinc for row in mapping.codes})

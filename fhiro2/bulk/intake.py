"""Take in: sources are read twice, first for context, then for Observations; every resource version gets its place."""

from __future__ import annotations

import gc
import hashlib
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field
from typing import Any, NamedTuple

import msgspec
import numpy as np

from fhiro2.account import Account
from fhiro2.admit import Admission, Admitter, is_own
from fhiro2.admit.coding import Coder, site_table
from fhiro2.admit.context import CONTEXT_TYPES, Context, Entry, Interpreter
from fhiro2.admit.moment import moment
from fhiro2.admit.rows import Rows
from fhiro2.admit.value import Valuer
from fhiro2.bulk.quarantine import Quarantine
from fhiro2.codes import CONSCIOUSNESS, code_table
from fhiro2.errors import Bucket, Reason, SkipError, StopError
from fhiro2.fhir.wire import Door, Observation, canonical, read_strictly
from fhiro2.model import Fact, Readings
from fhiro2.read import Raw, Source
from fhiro2.settings import Mapping, Settings
from fhiro2.timeline import NEVER_UPDATED, Resolution, Roster, Versions, panel_samples, resolve

_OBSERVATION = b'{"resourceType":"Observation"'
_BUNDLE = b'"Bundle"'


@dataclass
class Intake:
    """All that was read: standing readings, what they came from, who the patients are, and the account so far."""

    rows: Rows
    readings: Readings
    roster: Roster
    account: Account
    doors: tuple[Door, Door]


class _Unit(NamedTuple):
    """One resource: a line, or an entry of a Bundle (numbered from 0; -1 for a line) with its full URL."""

    content: bytes
    raw: Raw
    entry: int = -1
    full_url: str = ""
    fault: SkipError | None = None


@dataclass
class _Book:
    """The versions received in one pass over one source, with their places, so that any can be read again."""

    source: Source
    versions: Versions = field(default_factory=Versions)

    def add(self, unit: _Unit, label: _Label, admission: Admission, origin: int = -1) -> int:
        return self.versions.add(
            label.key,
            label.version,
            label.updated,
            hash(unit.content),
            admission.bucket,
            admission.reason,
            origin,
            (unit.raw.file, unit.raw.line, unit.entry),
        )

    def hashes(self, rows: list[int]) -> dict[int, bytes]:
        """SHA-256 of the canonical content of some rows, read again from their places."""
        places = self.versions.rows()[["file", "line", "entry"]][rows].tolist()
        wanted = dict(zip(places, rows, strict=True))
        touched = {place[:2] for place in places}
        found: dict[int, bytes] = {}
        for raw in self.source.read():
            if (raw.file, raw.line) in touched:
                for unit in _units(raw):
                    row = wanted.get((raw.file, raw.line, unit.entry))
                    if row is not None:
                        found[row] = _digest(unit.content)
        return found


class _Label(NamedTuple):
    """What names a version: key ('' without identity), versionId and lastUpdated in microseconds."""

    key: str
    version: str
    updated: int


_COLLECT_EVERY = 200_000
"""New objects between two garbage collections while reading: rows make no cycles, looking for them costs a tenth."""

Watch = Callable[[Observation, Admission], None]


def take_in(
    sources: Sequence[Source],
    settings: Settings,
    mapping: Mapping,
    quarantine: Quarantine | None = None,
    watch: Watch | None = None,
) -> Intake:
    """Read all sources; raises StopError for a mapping that names what does not exist.

    ``watch`` sees each Observation that could be read, with what became of it.
    """
    thresholds = gc.get_threshold()
    gc.set_threshold(_COLLECT_EVERY, *thresholds[1:])
    try:
        return _take_in(sources, settings, mapping, quarantine, watch)
    finally:
        gc.set_threshold(*thresholds)


def _take_in(
    sources: Sequence[Source],
    settings: Settings,
    mapping: Mapping,
    quarantine: Quarantine | None,
    watch: Watch | None,
) -> Intake:
    zone = settings.zone or mapping.zone
    interpreter = Interpreter(mapping, zone)
    coder = Coder(_site_codes(mapping))
    rows, account = Rows(), Account()
    doors = Door(), Door()
    root: dict[str, str] = {}
    born: dict[str, int | None] = {}
    facts: dict[str, tuple[Fact, ...]] = {}
    stands: list[int] = []
    received = 0
    for source in sources:
        valuer = Valuer(
            {(row.system, row.code): (row.quantity, CONSCIOUSNESS.index(row.answer)) for row in mapping.answers},
            {row.loinc: row.unit for row in mapping.default_units if row.source == source.name},
        )
        context, book = _context(source, interpreter, doors[0], account, quarantine)
        received += book.versions.count
        admitter = Admitter(source.name, rows, context, interpreter, coder, valuer, zone, settings.base_urls)
        observations = _observations(source, admitter, rows, doors[1], account, quarantine, watch, stands)
        received += observations.versions.count
        _describe(source.name, context, root, born, facts)
    account.check(received)
    readings = rows.readings()
    readings = readings[np.isin(readings["origin"], np.array(stands, dtype=np.int64))]
    panel_samples(readings, rows.names, rows.origins, rows.panels)
    return Intake(rows, readings, Roster(root, born, facts), account, doors)


def _context(
    source: Source, interpreter: Interpreter, door: Door, account: Account, quarantine: Quarantine | None
) -> tuple[Context, _Book]:
    """First pass: everything that is not an Observation."""
    book, context = _Book(source), Context()
    stated: dict[int, tuple[str, Entry]] = {}
    excluded: dict[int, str] = {}
    for raw in source.read(leave_out=_OBSERVATION):
        if raw.content.startswith(_OBSERVATION) and raw.fault is not Reason.SIZE:
            continue
        for unit in _units(raw):
            try:
                resource = _resource(unit, door)
            except SkipError as error:
                _place(book, unit, _Label("", "", NEVER_UPDATED), error, quarantine, {})
                continue
            _note_alias(context, unit, resource)
            kind = resource.get("resourceType")
            if kind == "Observation":
                continue
            label = _label(resource, unit)
            try:
                entry = _entry(resource, interpreter)
            except SkipError as error:
                row = _place(book, unit, label, error, quarantine, resource)
                if error.reason is Reason.EXCLUDED_PATIENT:
                    excluded[row] = label.key
                continue
            stated[book.add(unit, label, Admission(Bucket.USED))] = label.key, entry
    resolution = resolve(book.versions, book.hashes)
    _close(resolution, account, quarantine)
    for row, (key, entry) in stated.items():
        if resolution.stands[row]:
            context.add(key, entry)
    context.excluded.update(key for row, key in excluded.items() if resolution.stands[row])
    return context, book


def _observations(
    source: Source,
    admitter: Admitter,
    rows: Rows,
    door: Door,
    account: Account,
    quarantine: Quarantine | None,
    watch: Watch | None,
    stands: list[int],
) -> _Book:
    """Second pass: Observations. ``stands`` gains the origins whose version stands."""
    book = _Book(source)
    parts: dict[int, tuple[Reason, ...]] = {}
    for raw in source.read():
        first = raw.content.startswith(_OBSERVATION)
        if raw.fault is Reason.SIZE:
            continue
        for unit in (_Unit(raw.content, raw),) if first else _units(raw):
            if not first and not _is_observation(unit):
                continue
            origin = len(rows.origins.ids)
            try:
                found = door.observation(unit.content)
                if found.id is None and unit.full_url:
                    found = msgspec.structs.replace(found, id=unit.full_url.rpartition(":")[2])
                label = _observation_label(found, unit)
                admission = admitter.admit(found)
                if watch is not None:
                    watch(found, admission)
            except SkipError as error:
                reason = Reason.TRUNCATED if raw.fault and error.reason is Reason.JSON else error.reason
                label, admission = _Label("", "", NEVER_UPDATED), Admission(Bucket.QUARANTINED, reason, error.detail)
            given = origin if len(rows.origins.ids) > origin else -1
            row = book.add(unit, label, admission, given)
            if admission.bucket is Bucket.QUARANTINED and quarantine is not None:
                quarantine.keep(row, source, unit.raw, label.key, admission.reason, admission.detail, unit.content)
            if admission.parts:
                parts[row] = tuple(refused.reason for _, refused in admission.parts)
                if quarantine is not None:
                    for number, refused in admission.parts:
                        quarantine.keep(
                            row, source, unit.raw, label.key, refused.reason, refused.detail, unit.content, number
                        )
    resolution = resolve(book.versions, book.hashes)
    _close(resolution, account, quarantine)
    stands.extend(resolution.origin[resolution.stands & (resolution.origin >= 0)].tolist())
    for row, reasons in parts.items():
        if resolution.stands[row]:
            account.parts.update(reasons)
    return book


def _close(resolution: Resolution, account: Account, quarantine: Quarantine | None) -> None:
    for bucket, reason, number in resolution.counts():
        account.place(bucket, reason, number)
    if quarantine is not None:
        quarantine.settle(resolution)


def _place(
    book: _Book,
    unit: _Unit,
    label: _Label,
    error: SkipError,
    quarantine: Quarantine | None,
    resource: dict[str, Any],
) -> int:
    admission = Admission(error.bucket, error.reason, error.detail)
    row = book.add(unit, label, admission)
    if admission.bucket is Bucket.QUARANTINED and quarantine is not None:
        name = label.key or str(resource.get("resourceType", ""))
        quarantine.keep(row, book.source, unit.raw, name, error.reason, error.detail, unit.content)
    return row


def _units(raw: Raw) -> Iterator[_Unit]:
    """The resources in one raw line: itself, or the entries of a Bundle."""
    if raw.fault is Reason.SIZE:
        yield _Unit(raw.content, raw, fault=SkipError(Reason.SIZE, "larger than what is read"))
        return
    if _BUNDLE not in raw.content[:4096]:
        yield _Unit(raw.content, raw)
        return
    try:
        bundle = msgspec.json.decode(raw.content, type=_Bundle)
    except (msgspec.MsgspecError, UnicodeDecodeError, RecursionError):
        yield _Unit(raw.content, raw)
        return
    if bundle.resourceType != "Bundle":
        yield _Unit(raw.content, raw)
        return
    for number, entry in enumerate(bundle.entry):
        if entry.resource is not None:
            yield _Unit(bytes(entry.resource), raw, number, entry.fullUrl or "")


class _Entry(msgspec.Struct):
    fullUrl: str | None = None  # noqa: N815
    resource: msgspec.Raw | None = None


class _Bundle(msgspec.Struct):
    resourceType: str = ""  # noqa: N815
    entry: tuple[_Entry, ...] = ()


class _Kind(msgspec.Struct):
    resourceType: str = ""  # noqa: N815


_KIND: Callable[[bytes], _Kind] = msgspec.json.Decoder(_Kind).decode


def _is_observation(unit: _Unit) -> bool:
    """Whether the first pass left this unit to the second: it is readable and says that it is an Observation."""
    try:
        if _KIND(unit.content).resourceType != "Observation":
            return False
        Door().resource(unit.content)
    except (msgspec.MsgspecError, UnicodeDecodeError, RecursionError, SkipError):
        return False
    return True


def _resource(unit: _Unit, door: Door) -> dict[str, Any]:
    if unit.fault is not None:
        raise unit.fault
    try:
        return door.resource(unit.content)
    except SkipError as error:
        if unit.raw.fault is Reason.TRUNCATED and error.reason is Reason.JSON:
            raise SkipError(Reason.TRUNCATED, "the file ends in the middle of this line") from None
        raise


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


def _label(resource: dict[str, Any], unit: _Unit) -> _Label:
    kind, identity, meta = resource.get("resourceType"), resource.get("id"), resource.get("meta")
    if identity is None and unit.full_url.startswith("urn:uuid:"):
        identity = resource["id"] = unit.full_url.rpartition(":")[2]
    if not isinstance(kind, str) or not isinstance(identity, str):
        return _Label("", "", NEVER_UPDATED)
    version = meta.get("versionId") if isinstance(meta, dict) else None
    updated = meta.get("lastUpdated") if isinstance(meta, dict) else None
    return _Label(f"{kind}/{identity}", version if isinstance(version, str) else "", _updated(updated))


def _observation_label(found: Observation, unit: _Unit) -> _Label:
    if found.id is None:
        return _Label("", "", NEVER_UPDATED)
    meta = found.meta
    if meta is None:
        return _Label(found.id, "", NEVER_UPDATED)
    return _Label(found.id, meta.versionId or "", _updated(meta.lastUpdated))


def _updated(text: Any) -> int:
    try:
        return moment(text, None)[0] if isinstance(text, str) else NEVER_UPDATED
    except SkipError:
        return NEVER_UPDATED


def _note_alias(context: Context, unit: _Unit, resource: dict[str, Any]) -> None:
    kind = resource.get("resourceType")
    identity = resource.get("id") or unit.full_url.rpartition(":")[2]
    if unit.full_url and isinstance(kind, str) and kind in CONTEXT_TYPES:
        target = f"{kind}/{identity}"
        known = context.aliases.setdefault(unit.full_url, target)
        if known != target:
            context.aliases[unit.full_url] = ""


def _describe(
    source: str,
    context: Context,
    root: dict[str, str],
    born: dict[str, int | None],
    facts: dict[str, tuple[Fact, ...]],
) -> None:
    """Enter a source's patients into the roster under their keys."""
    merged = context.merged()
    for old, target in merged.items():
        root[f"{source}|{old}"] = f"{source}|{target}"
    for reference, entry in context.patients.items():
        born[f"{source}|{reference}"] = entry.born
    for subject, stated in context.facts.items():
        key = f"{source}|{merged.get(subject, subject)}"
        rows = sorted({*facts.get(key, ()), *stated}, key=lambda one: (one.fact, one.start, one.end, one.answer))
        facts[key] = tuple(rows)


def _site_codes(mapping: Mapping) -> Any:
    shipped = code_table()
    for row in mapping.codes:
        if ("http://loinc.org", row.loinc) not in shipped:
            raise StopError(f"mapping {mapping.mapping}: {row.code} means LOINC {row.loinc}, which is not shipped")
    return site_table(shipped, {(row.system, row.code): row.loinc for row in mapping.codes})


def _digest(content: bytes) -> bytes:
    try:
        return hashlib.sha256(canonical(read_strictly(content))).digest()
    except SkipError:
        return hashlib.sha256(content).digest()

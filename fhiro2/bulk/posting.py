"""What stands for some patients becomes what is to be written, each resource with its Provenance."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterable
from functools import partial

import msgspec

from fhiro2.model import Outcome
from fhiro2.store import Transaction
from fhiro2.store.difference import by_reference, difference
from fhiro2.store.entry import Entry
from fhiro2.write import Run
from fhiro2.write.flag import flags
from fhiro2.write.identity import SOFTWARE_REFERENCE
from fhiro2.write.provenance import software, withdrawal
from fhiro2.write.values import values

Wanted = dict[str, tuple[Entry, Entry]]
"""Each resource with its Provenance, by reference."""


def rendered(outcome: Outcome, run: Run, group: set[str]) -> Wanted:
    """What stands for the patients of ``group``, of whom the batch has everything."""
    found: Wanted = {}
    hashes: dict[str, str] = {}
    for block in values(outcome, run):
        hashes.update(zip(block.ids, block.hashes, strict=True))
        found |= _entries("Observation", zip(block.lines, block.provenance, strict=True), group)
    return found | _entries("Flag", flags(outcome, run, hashes), group)


def post(work: Transaction, group: set[str], wanted: Wanted, held: set[str], run: Run, reason: str) -> int:
    """Put into the outbox what differs from what the server has, and take out what need not be written any more.

    The flags of patients who are ``held`` stay as they are: nothing is known of what should stand. ``reason`` says why
    what is not wanted is withdrawn.
    """

    def left_alone(one: Entry) -> bool:
        return one.patient in held and one.reference.startswith("Flag/")

    outbox = [one for one in work.outbox(group) if not left_alone(one)]
    ledger = [one for one in work.ledger(group).values() if not left_alone(one)]
    withdraw = partial(_withdrawn, run=run, reason=reason, wanted=wanted)
    found = difference(wanted, by_reference(ledger), by_reference(outbox), withdraw)
    again = found.drop | {one.reference for one, _ in found.post}
    work.unpost(found.drop | {one.reference for one in outbox if one.after in again})
    device = _device(run)
    known = [*work.written([device.reference]), *work.outbox({""})]
    if found.post and all(one.hash != device.hash for one in known):
        work.post([device])
    work.post([*(one for one, _ in found.post), *(provenance for _, provenance in found.post)])
    return len(found.post)


def _withdrawn(one: Entry, run: Run, reason: str, wanted: Wanted) -> tuple[Entry, Entry]:
    """What was written, as entered in error, with the Provenance that says since when."""
    resource = json.loads(one.content)
    resource["status"] = "entered-in-error"
    content = json.dumps(resource, separators=(",", ":"), ensure_ascii=False).encode()
    digest = hashlib.sha256(content).hexdigest()
    entry = Entry(one.reference, one.patient, digest, content, withdrawal=True)
    heir = _heir(one, wanted)
    told = f"{reason}; replaced by {heir}" if heir else reason
    return entry, _provenance(withdrawal(run, one.reference, digest, told), one.patient, one.reference)


class _Period(msgspec.Struct):
    start: str
    end: str = "9999"


class _Coded(msgspec.Struct):
    coding: tuple[_Coding, ...]


class _Coding(msgspec.Struct):
    code: str


class _Spell(msgspec.Struct):
    """The time of a flag, and its rule."""

    period: _Period
    code: _Coded


_SPELL = msgspec.json.Decoder(_Spell)


def _heir(gone: Entry, wanted: Wanted) -> str:
    """The earliest standing flag of the same rule and patient that shares time with a flag; '' where there is none."""
    if not gone.reference.startswith("Flag/"):
        return ""
    old = _SPELL.decode(gone.content)
    sharing = []
    for reference, (entry, _) in wanted.items():
        if reference.startswith("Flag/") and entry.patient == gone.patient:
            new = _SPELL.decode(entry.content)
            if new.code == old.code and new.period.start <= old.period.end and old.period.start <= new.period.end:
                sharing.append((new.period.start, reference))
    return min(sharing)[1] if sharing else ""


class _Subject(msgspec.Struct):
    reference: str


class _Ours(msgspec.Struct):
    id: str
    subject: _Subject


_OURS = msgspec.json.Decoder(_Ours)


class _Identified(msgspec.Struct):
    id: str


_IDENTIFIED = msgspec.json.Decoder(_Identified)


def _entries(kind: str, lines: Iterable[tuple[bytes, str]], group: set[str]) -> Wanted:
    found: Wanted = {}
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


def _device(run: Run) -> Entry:
    content = software(run).encode()
    return Entry(SOFTWARE_REFERENCE, "", hashlib.sha256(content).hexdigest(), content)

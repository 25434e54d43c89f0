"""What other resources say about readings: patients and merges, specimens, and context facts stated by a site."""

from __future__ import annotations

from dataclasses import dataclass, field
from datetime import UTC, datetime
from typing import Any, TypeVar

import msgspec

from fhiro2.admit.moment import moment
from fhiro2.errors import Reason, SkipError
from fhiro2.fhir.wire import Concept, Period, Reference
from fhiro2.model import DAY, MICROSECONDS, Fact, Specimen
from fhiro2.settings import Mapping

FIRST_MOMENT = -(2**61)
LAST_MOMENT = 2**61
CONTEXT_TYPES = frozenset(
    {"Patient", "Specimen", "Encounter", "Device", "Condition", "Procedure", "MedicationAdministration"}
)
_SPECIMEN_SYSTEMS = ("http://terminology.hl7.org/CodeSystem/v2-0487", "http://terminology.hl7.org/CodeSystem/v2-0070")
_SPECIMEN_CODES = {
    "BLDA": Specimen.ARTERIAL,
    "BLDV": Specimen.VENOUS,
    "BLDC": Specimen.CAPILLARY,
    "BLDCO": Specimen.CORD,
    "PLAS": Specimen.PLASMA,
    "SER": Specimen.PLASMA,
}
_TEST_DATA = ("http://terminology.hl7.org/CodeSystem/v3-ActReason", "HTEST")
_DONE = {"completed": True, "in-progress": True, "stopped": True, "on-hold": True, "not-done": False}


@dataclass(frozen=True)
class PatientEntry:
    """A Patient: birth (microseconds or None), identifiers, and the patients it points to by ``link``."""

    born: int | None
    identifiers: tuple[tuple[str, str], ...]
    replaced_by: tuple[str, ...]
    replaces: tuple[str, ...]


@dataclass(frozen=True)
class SpecimenEntry:
    """A Specimen: the kinds of blood that its type and its body site state, its accession, a doubt of its times."""

    kind: Specimen
    site: Specimen
    accession: str
    subject: str
    received_too_early: bool


@dataclass(frozen=True)
class FactEntry:
    """A context fact of one patient."""

    subject: str
    fact: Fact


Entry = PatientEntry | SpecimenEntry | tuple[FactEntry, ...] | None


class _Identifier(msgspec.Struct, frozen=True):
    system: str = ""
    value: str = ""


class _Link(msgspec.Struct, frozen=True):
    other: Reference = Reference()
    type: str = ""


class _Meta(msgspec.Struct, frozen=True):
    security: Any = None


class _Patient(msgspec.Struct, frozen=True):
    id: str
    meta: _Meta = _Meta()
    birthDate: str | None = None  # noqa: N815
    identifier: tuple[_Identifier, ...] = ()
    link: tuple[_Link, ...] = ()


class _Collection(msgspec.Struct, frozen=True):
    bodySite: Concept = Concept()  # noqa: N815
    collectedDateTime: str | None = None  # noqa: N815
    collectedPeriod: Period = Period()  # noqa: N815


class _Specimen(msgspec.Struct, frozen=True):
    status: str = ""
    type: Concept = Concept()
    accessionIdentifier: _Identifier = _Identifier()  # noqa: N815
    collection: _Collection = _Collection()
    receivedTime: str | None = None  # noqa: N815
    subject: Reference = Reference()


class _Thing(msgspec.Struct, frozen=True):
    """An Encounter or Device: its type may state a fact."""

    type: Concept | tuple[Concept, ...] = ()
    patient: Reference = Reference()


class _Event(msgspec.Struct, frozen=True):
    """A Condition, Procedure or MedicationAdministration."""

    resourceType: str  # noqa: N815
    status: str = ""
    code: Concept = Concept()
    medicationCodeableConcept: Concept = Concept()  # noqa: N815
    verificationStatus: Concept = Concept()  # noqa: N815
    subject: Reference = Reference()
    onsetDateTime: str | None = None  # noqa: N815
    abatementDateTime: str | None = None  # noqa: N815
    performedDateTime: str | None = None  # noqa: N815
    performedPeriod: Period = Period()  # noqa: N815
    effectiveDateTime: str | None = None  # noqa: N815
    effectivePeriod: Period = Period()  # noqa: N815


Read = TypeVar("Read")


def _read(resource: dict[str, Any], form: type[Read]) -> Read:
    if resource.get("modifierExtension") is not None:
        raise SkipError(Reason.MODIFIER, "an unknown modifier extension")
    if resource.get("implicitRules") is not None:
        raise SkipError(Reason.VERSION, "implicit rules that are not known")
    try:
        return msgspec.convert(resource, form)
    except msgspec.ValidationError as error:
        raise SkipError(Reason.TYPE, f"does not have the form of R4: {error}") from None


class Interpreter:
    """Reads context resources by a site's mapping."""

    def __init__(self, mapping: Mapping, zone: str | None) -> None:
        self._zone = zone
        self._facts = {(row.system, row.code): row.fact for row in mapping.facts}
        self._specimens = {(row.system, row.code): Specimen[row.specimen.upper()] for row in mapping.specimens}
        self.excluded = frozenset(mapping.excluded_patients)

    def entry(self, resource: dict[str, Any]) -> Entry:
        """What ``resource`` states; raises SkipError where it states nothing that is used."""
        kind = resource.get("resourceType")
        if kind == "Patient":
            return self._patient(_read(resource, _Patient))
        if kind == "Specimen":
            return self.specimen(resource)
        if kind in ("Encounter", "Device"):
            thing = _read(resource, _Thing)
            types = thing.type if isinstance(thing.type, tuple) else (thing.type,)
            stated = self._stated(*types)
            return _facts(stated, thing.patient, True, FIRST_MOMENT, LAST_MOMENT) if stated else None
        return self._event(_read(resource, _Event))

    def specimen(self, resource: dict[str, Any]) -> SpecimenEntry:
        """The blood that a Specimen speaks of; raises SkipError where it is withdrawn or has not the form of one."""
        found = _read(resource, _Specimen)
        if found.status == "entered-in-error":
            raise SkipError(Reason.RETRACTED, "specimen entered in error")
        accession = found.accessionIdentifier
        return SpecimenEntry(
            self.kind(found.type),
            self.kind(found.collection.bodySite),
            f"{accession.system}|{accession.value}" if accession.value else "",
            found.subject.reference or "",
            self._received_too_early(found),
        )

    def _received_too_early(self, found: _Specimen) -> bool:
        """Whether it came in before it was taken, as far as both times can be placed."""
        collected = found.collection.collectedDateTime or found.collection.collectedPeriod.start
        if collected is None or found.receivedTime is None:
            return False
        try:
            return moment(found.receivedTime, self._zone)[0] < moment(collected, self._zone)[0]
        except SkipError:
            return False

    def kind(self, concept: Concept) -> Specimen:
        """The kind of blood that a specimen type or body site states, else UNKNOWN."""
        for coding in concept.coding:
            system, code = coding.system or "", coding.code or ""
            if (system, code) in self._specimens:
                return self._specimens[system, code]
            if system in _SPECIMEN_SYSTEMS and code in _SPECIMEN_CODES:
                return _SPECIMEN_CODES[code]
        return Specimen.UNKNOWN

    def _patient(self, found: _Patient) -> PatientEntry:
        identifiers = tuple((row.system, row.value) for row in found.identifier)
        if {found.id, *(value for _, value in identifiers)} & self.excluded:
            raise SkipError(Reason.EXCLUDED_PATIENT, "on the list of excluded patients")
        if is_test_data(found.meta.security):
            raise SkipError(Reason.EXCLUDED_PATIENT, "labelled as test data")
        return PatientEntry(
            _birth(found.birthDate),
            identifiers,
            tuple(row.other.reference or "" for row in found.link if row.type == "replaced-by"),
            tuple(row.other.reference or "" for row in found.link if row.type == "replaces"),
        )

    def _event(self, found: _Event) -> Entry:
        kind = found.resourceType
        stated = self._stated(found.medicationCodeableConcept if kind == "MedicationAdministration" else found.code)
        if not stated:
            raise SkipError(Reason.UNMAPPED_CODE, f"{kind} of no mapped code")
        verification = {coding.code for coding in found.verificationStatus.coding}
        if found.status == "entered-in-error" or "entered-in-error" in verification:
            raise SkipError(Reason.RETRACTED, f"{kind} entered in error")
        if kind == "Condition":
            answer = "refuted" not in verification
            times = (found.onsetDateTime if answer else None, found.abatementDateTime)
        else:
            if found.status not in _DONE:
                raise SkipError(Reason.STATUS, f"{kind} of a status that states no fact")
            answer = _DONE[found.status]
            once = found.performedDateTime or found.effectiveDateTime
            period = found.performedPeriod if kind == "Procedure" else found.effectivePeriod
            times = (once, once) if once else (period.start, period.end)
        start, end = (None if text is None else moment(text, self._zone)[0] for text in times)
        return _facts(
            stated,
            found.subject,
            answer,
            FIRST_MOMENT if start is None else start,
            LAST_MOMENT if end is None else end,
        )

    def _stated(self, *concepts: Concept) -> list[str]:
        pairs = {(coding.system or "", coding.code or "") for concept in concepts for coding in concept.coding}
        return sorted({self._facts[pair] for pair in pairs if pair in self._facts})


def is_test_data(labels: Any) -> bool:
    """Whether a resource's security labels say HTEST, test health data (HL7 v3-ActReason)."""
    return isinstance(labels, list) and any(
        isinstance(row, dict) and (row.get("system"), row.get("code")) == _TEST_DATA for row in labels
    )


def _facts(stated: list[str], subject: Reference, answer: bool, start: int, end: int) -> tuple[FactEntry, ...]:
    return tuple(FactEntry(subject.reference or "", Fact(fact, answer, start, end)) for fact in stated)


@dataclass
class Context:
    """The index over one source's context: what readings are looked up in."""

    patients: dict[str, PatientEntry] = field(default_factory=dict)
    specimens: dict[str, SpecimenEntry] = field(default_factory=dict)
    facts: dict[str, list[Fact]] = field(default_factory=dict)
    aliases: dict[str, str] = field(default_factory=dict)
    excluded: set[str] = field(default_factory=set)
    _by_identifier: dict[tuple[str, str], set[str]] = field(default_factory=dict)

    def add(self, reference: str, entry: Entry) -> None:
        """Index what the resource ``reference`` (as ``Type/id``) states."""
        if isinstance(entry, PatientEntry):
            self.patients[reference] = entry
            for pair in entry.identifiers:
                self._by_identifier.setdefault(pair, set()).add(reference)
        elif isinstance(entry, SpecimenEntry):
            self.specimens[reference] = entry
        elif entry is not None:
            for row in entry:
                self.facts.setdefault(row.subject, []).append(row.fact)

    def note_alias(self, full_url: str, reference: str) -> None:
        """Note which resource a Bundle calls ``full_url``; one URL for two resources names neither."""
        if self.aliases.setdefault(full_url, reference) != reference:
            self.aliases[full_url] = ""

    def patient_of(self, system: str, value: str) -> str | None:
        """The one patient who has this identifier, else None."""
        found = self._by_identifier.get((system, value), set())
        return next(iter(found)) if len(found) == 1 else None

    def merged(self) -> dict[str, str]:
        """For each patient that was merged away, the patient it ended in; links that form a ring merge nothing."""
        replaced = self._replacements()
        return {old: root for old in replaced if (root := _followed(old, replaced)) != old}

    def _replacements(self) -> dict[str, set[str]]:
        replaced: dict[str, set[str]] = {}
        for reference, entry in self.patients.items():
            for target in entry.replaced_by:
                replaced.setdefault(reference, set()).add(target)
            for old in entry.replaces:
                replaced.setdefault(old, set()).add(reference)
        return replaced


def _followed(patient: str, replaced: dict[str, set[str]]) -> str:
    seen = [patient]
    while len(targets := replaced.get(seen[-1], set())) == 1:
        target = next(iter(targets))
        if target in seen:
            return patient
        seen.append(target)
    return seen[-1]


def _birth(text: str | None) -> int | None:
    """Noon of the day of birth in microseconds; None where the day is not known."""
    try:
        born = datetime.strptime(text or "", "%Y-%m-%d").replace(tzinfo=UTC)
    except ValueError:
        return None
    return round(born.timestamp()) * MICROSECONDS + DAY // 2

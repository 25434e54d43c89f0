"""What other resources say about readings: patients and merges, specimens, and context facts stated by a site."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field
from typing import Any

from fhiro2.admit.moment import moment
from fhiro2.errors import Reason, SkipError
from fhiro2.model import Fact, Specimen
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
    """A Specimen: the kinds of blood that its type and its body site state, and its accession."""

    kind: Specimen
    site: Specimen
    accession: str
    subject: str


@dataclass(frozen=True)
class FactEntry:
    """A context fact of one patient."""

    subject: str
    fact: Fact


Entry = PatientEntry | SpecimenEntry | tuple[FactEntry, ...] | None


class Interpreter:
    """Reads context resources by a site's mapping."""

    def __init__(self, mapping: Mapping, zone: str | None) -> None:
        self._zone = zone
        self._facts = {(row.system, row.code): row.fact for row in mapping.facts}
        self._specimens = {(row.system, row.code): Specimen[row.specimen.upper()] for row in mapping.specimens}
        self._excluded = frozenset(mapping.excluded_patients)

    def entry(self, resource: dict[str, Any]) -> Entry:
        """What ``resource`` states; raises SkipError where it states nothing that is used."""
        kind = resource.get("resourceType")
        if kind == "Patient":
            return self._patient(resource)
        if kind == "Specimen":
            return self.specimen(resource)
        if kind in ("Encounter", "Device") and not self._stated(resource, "type"):
            return None
        if kind == "Device":
            subject = _reference(resource.get("patient"))
            return self._stated_facts(resource, "type", subject, True, FIRST_MOMENT, LAST_MOMENT)
        return self._event(resource)

    def specimen(self, resource: dict[str, Any]) -> SpecimenEntry:
        """The blood that a Specimen speaks of; raises SkipError where its own statements contradict each other."""
        if resource.get("status") == "entered-in-error":
            raise SkipError(Reason.RETRACTED, "specimen entered in error")
        collection = resource.get("collection")
        accession = resource.get("accessionIdentifier")
        text = ""
        if isinstance(accession, dict) and isinstance(accession.get("value"), str):
            text = f"{accession.get('system', '')}|{accession['value']}"
        return SpecimenEntry(
            self.kind(_codings(resource.get("type"))),
            self.kind(_codings(collection.get("bodySite"))) if isinstance(collection, dict) else Specimen.UNKNOWN,
            text,
            _reference(resource.get("subject")),
        )

    def kind(self, codings: Iterable[tuple[Any, Any]]) -> Specimen:
        """The kind of blood that codings of a specimen type or body site state, else UNKNOWN."""
        for system, code in codings:
            if (system, code) in self._specimens:
                return self._specimens[system, code]
            if system in _SPECIMEN_SYSTEMS and code in _SPECIMEN_CODES:
                return _SPECIMEN_CODES[code]
        return Specimen.UNKNOWN

    def _patient(self, resource: dict[str, Any]) -> PatientEntry:
        identifiers = tuple(
            (str(row.get("system", "")), str(row.get("value", "")))
            for row in resource.get("identifier") or ()
            if isinstance(row, dict)
        )
        links = [row for row in resource.get("link") or () if isinstance(row, dict)]
        named = {str(resource.get("id")), *(value for _, value in identifiers)}
        if named & self._excluded:
            raise SkipError(Reason.EXCLUDED_PATIENT, "on the list of excluded patients")
        return PatientEntry(
            _birth(resource.get("birthDate")),
            identifiers,
            tuple(_reference(row.get("other")) for row in links if row.get("type") == "replaced-by"),
            tuple(_reference(row.get("other")) for row in links if row.get("type") == "replaces"),
        )

    def _event(self, resource: dict[str, Any]) -> Entry:
        kind = resource.get("resourceType")
        concept = "medicationCodeableConcept" if kind == "MedicationAdministration" else "code"
        if not self._stated(resource, concept):
            raise SkipError(Reason.UNMAPPED_CODE, f"{kind} of no mapped code")
        if kind == "Condition":
            verification = {code for _, code in _codings(resource.get("verificationStatus"))}
            if "entered-in-error" in verification:
                raise SkipError(Reason.RETRACTED, "condition entered in error")
            answer = "refuted" not in verification
            start = self._moment(resource.get("onsetDateTime")) if answer else None
            end = self._moment(resource.get("abatementDateTime"))
        else:
            status = resource.get("status")
            if status == "entered-in-error":
                raise SkipError(Reason.RETRACTED, f"{kind} entered in error")
            if status not in _DONE:
                raise SkipError(Reason.STATUS, f"{kind} of a status that states no fact")
            answer = _DONE[status]
            start, end = self._performed(resource, "effective" if kind == "MedicationAdministration" else "performed")
        return self._stated_facts(
            resource,
            concept,
            _reference(resource.get("subject")),
            answer,
            FIRST_MOMENT if start is None else start,
            LAST_MOMENT if end is None else end,
        )

    def _performed(self, resource: dict[str, Any], name: str) -> tuple[int | None, int | None]:
        once = self._moment(resource.get(f"{name}DateTime"))
        if once is not None:
            return once, once
        period = resource.get(f"{name}Period")
        if isinstance(period, dict):
            return self._moment(period.get("start")), self._moment(period.get("end"))
        return None, None

    def _moment(self, text: Any) -> int | None:
        return moment(text, self._zone)[0] if isinstance(text, str) else None

    def _stated(self, resource: dict[str, Any], name: str) -> bool:
        return any(pair in self._facts for pair in _codings(resource.get(name)))

    def _stated_facts(
        self, resource: dict[str, Any], name: str, subject: str, answer: bool, start: int, end: int
    ) -> tuple[FactEntry, ...]:
        stated = sorted({self._facts[pair] for pair in _codings(resource.get(name)) if pair in self._facts})
        return tuple(FactEntry(subject, Fact(fact, answer, start, end)) for fact in stated)


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


def _codings(concept: Any) -> Iterator[tuple[Any, Any]]:
    if isinstance(concept, list):
        for one in concept:
            yield from _codings(one)
    elif isinstance(concept, dict):
        for row in concept.get("coding") or ():
            if isinstance(row, dict):
                yield row.get("system"), row.get("code")


def _reference(node: Any) -> str:
    return node["reference"] if isinstance(node, dict) and isinstance(node.get("reference"), str) else ""


def _birth(text: Any) -> int | None:
    try:
        return moment(f"{text}T12:00:00Z", None)[0] if isinstance(text, str) else None
    except SkipError:
        return None

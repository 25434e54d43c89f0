"""ADMIT: one raw Observation becomes readings, or a reason. The only place that interprets codes, units, blood,
status, comparators and time.
"""

from __future__ import annotations

from typing import Any, Final, NamedTuple

import msgspec

from fhiro2.admit.coding import SATURATION_OR_PULSE, Coder
from fhiro2.admit.context import Context, Interpreter, SpecimenEntry, is_test_data
from fhiro2.admit.envelope import ID, check_envelope
from fhiro2.admit.moment import moment
from fhiro2.admit.rows import Interner, Rows, pack_row
from fhiro2.admit.value import Value, Valuer
from fhiro2.catalogue import QUANTITY
from fhiro2.codes import Code
from fhiro2.errors import Bucket, Reason, SkipError
from fhiro2.fhir.systems import OBSERVATION_CATEGORY
from fhiro2.fhir.wire import Observation, Reference, content_hash
from fhiro2.model import MINUTE, Caution, Kind, Specimen, SpecimenEvidence

NAN: Final = float("nan")
FUTURE: Final = 5 * MINUTE
_VENOUS: Final = frozenset({Specimen.VENOUS, Specimen.MIXED_VENOUS, Specimen.CENTRAL_VENOUS})
_METHOD_CAUTION: Final = {
    "unknown": int(Caution.CARDIAC_OUTPUT_METHOD_UNKNOWN),
    "fick": int(Caution.CARDIAC_OUTPUT_METHOD_UNKNOWN),
    "legacy": int(Caution.LEGACY_CODE),
    "from-haematocrit": int(Caution.CALCULATED_HAEMOGLOBIN),
}
_METHOD_DOUBT: Final = {"unknown": 0.20, "fick": 0.20, "doppler": 0.175}
"""Relative standard uncertainty of a cardiac output by method, where it is not the catalogue's (common practice)."""


class Admission(NamedTuple):
    """Where one resource version ended, why, and which of its components were refused."""

    bucket: Bucket
    reason: Reason | None = None
    detail: str = ""
    parts: tuple[tuple[int, SkipError], ...] = ()


class _Setting(msgspec.Struct, frozen=True, gc=False):
    """What holds for all values of one resource."""

    subject: int
    effective: int
    known: int
    cautions: int
    encounter: int
    device: int
    sample: int
    origin: int
    blood: Specimen
    site: Specimen
    laboratory: bool
    vital_sign: bool


_USED: Final = Admission(Bucket.USED)


class Admitter:
    """Admits the Observations of one source into ``rows`` by that source's context."""

    def __init__(
        self,
        source: str,
        rows: Rows,
        context: Context,
        interpreter: Interpreter,
        coder: Coder,
        valuer: Valuer,
        zone: str | None,
        base_urls: tuple[str, ...],
    ) -> None:
        self._source = source
        self._rows = rows
        self._context = context
        self._interpreter = interpreter
        self._coder = coder
        self._valuer = valuer
        self._zone = zone
        self._base_urls = base_urls
        self._subjects: dict[str, int | SkipError] = {}
        names = rows.names
        self._patients = Interner(names.subjects, f"{source}|")
        self._encounters = Interner(names.encounters, "")
        self._devices = Interner(names.devices, f"{source}|")
        self._samples = Interner(names.samples, f"{source}|")

    def admit(self, found: Observation, content: bytes) -> Admission:
        """Add the readings of ``found``, which was read from ``content``, or say why it gives none."""
        try:
            return self._admit(found, content)
        except SkipError as error:
            return Admission(error.bucket, error.reason, error.detail)

    def _admit(self, found: Observation, content: bytes) -> Admission:
        check_envelope(found)
        grouping = bool(found.component or found.hasMember)
        code = self._panel_code(found) if grouping else self._coder.code(found.code)
        if code is not None and code.use == "panel":
            code = None
        value = self._valuer.value(found, code) if code is not None else None
        if code is None and not found.component:
            if found.hasMember:
                self._note_panel(found)
                return Admission(Bucket.OUT_OF_SCOPE, Reason.GROUPING_ONLY)
            raise SkipError(Reason.GROUPING_ONLY, "a panel without members")
        setting = self._setting(found, content)
        used = False
        if code is not None and (value is not None or not found.component):
            # no value and no stated reason is an absence as well: the measurement was asked for and gave nothing
            self._add(setting, code, value or Value(), -1)
            used = True
        if found.hasMember:
            self._note_panel(found)
        if not found.component:
            return _USED
        return self._components(found, setting, used)

    def _panel_code(self, found: Observation) -> Code | None:
        try:
            return self._coder.code(found.code)
        except SkipError as error:
            if error.reason in (Reason.UNMAPPED_CODE, Reason.NOT_USED_CODE):
                return None
            raise

    def _components(self, found: Observation, setting: _Setting, used: bool) -> Admission:
        admitted: list[tuple[int, Code, Value]] = []
        refused: list[tuple[int, SkipError]] = []
        out_of_scope: SkipError | None = None
        for number, part in enumerate(found.component):
            try:
                if part.modifierExtension is not None:
                    raise SkipError(Reason.MODIFIER, "a component with an unknown modifier")
                code = self._coder.code(part.code)
                admitted.append((number, code, self._valuer.value(part, code) or Value()))
            except SkipError as error:
                if error.bucket is Bucket.QUARANTINED:
                    refused.append((number, error))
                else:
                    out_of_scope = error
        clashing = _clashing(admitted)
        if any(code.quantity == "po2" for _, code, _ in admitted):
            setting = msgspec.structs.replace(setting, laboratory=True)
        for number, code, value in admitted:
            if (code.quantity, code.specimen) in clashing:
                refused.append((number, SkipError(Reason.CONFLICT, "one quantity twice with different values")))
                continue
            try:
                self._add(setting, code, value, number)
                used = True
            except SkipError as error:
                refused.append((number, error))
        if not used and not refused and out_of_scope is not None:
            raise out_of_scope
        return Admission(Bucket.USED, parts=tuple(refused))

    def _setting(self, found: Observation, content: bytes) -> _Setting:
        subject = self._subject(found)
        text = found.effectiveDateTime
        if text is None or found.effectivePeriod or found.effectiveInstant or found.effectiveTiming:
            effective, cautions = self._effective(found)
        else:
            effective, cautions = moment(text, self._zone)
        issued = None if found.issued is None else moment(found.issued, self._zone)[0]
        meta = found.meta
        if meta is not None and meta.lastUpdated is not None:
            known = moment(meta.lastUpdated, self._zone)[0]
        else:
            known = effective if issued is None else issued
        if effective > known + FUTURE:
            raise SkipError(Reason.TIME, "later than it was known")
        if meta is not None and meta.security is not None and is_test_data(meta.security):
            raise SkipError(Reason.EXCLUDED_PATIENT, "labelled as test data")
        specimen = None if found.specimen is None else self._specimen(found)
        if (issued is not None and issued < effective) or (specimen is not None and specimen.received_too_early):
            cautions |= int(Caution.TIME_ORDER)
        laboratory, vital_sign = found.specimen is not None, False
        for row in found.category:
            for coding in row.coding:
                if coding.system == OBSERVATION_CATEGORY:
                    laboratory |= coding.code == "laboratory"
                    vital_sign |= coding.code == "vital-signs"
        device = "" if found.device is None else found.device.reference or ""
        version = meta.versionId if meta is not None and meta.versionId else ""
        return _Setting(
            subject,
            effective,
            known,
            cautions,
            self._encounters.number(_plain(found.encounter, "Encounter/")),
            self._devices.number(device),
            self._samples.number(self._sample(found, specimen)),
            self._rows.origin(found.id or "", version, "" if version else content_hash(content).hex()),
            specimen.kind if specimen else Specimen.UNKNOWN,
            self._site(found, specimen) if found.bodySite or found.method or specimen else Specimen.UNKNOWN,
            laboratory,
            vital_sign,
        )

    def _sample(self, found: Observation, specimen: SpecimenEntry | None) -> str:
        """The name of the sample that ``found`` says it belongs to: accession, specimen or panel; else ''."""
        if specimen is not None and specimen.accession:
            return f"accession {specimen.accession}"
        if found.specimen is not None and found.specimen.reference:
            contained = found.specimen.reference.startswith("#")
            return f"specimen {found.id if contained else ''}{found.specimen.reference}"
        return f"panel {found.id}" if found.component or found.hasMember else ""

    def _add(self, setting: _Setting, code: Code, value: Value, part: int) -> None:
        quantity, kind, cautions = code.quantity, code.kind, setting.cautions | value.cautions
        if code.loinc == SATURATION_OR_PULSE and quantity == "so2":
            if not setting.laboratory:
                if not setting.vital_sign:
                    raise SkipError(Reason.AMBIGUOUS, "2708-6 without category or specimen: oximetry of which kind")
                quantity = "spo2"
            cautions |= int(Caution.METHOD_NOT_STATED)
        blood, evidence = Specimen.NONE, 0
        if code.specimen is not Specimen.NONE and quantity != "spo2":
            agreed = _BLOOD[code.specimen][setting.blood][setting.site]
            if agreed is None:
                raise SkipError(Reason.SPECIMEN, "code, specimen and body site name different blood")
            blood, evidence = agreed
            if blood is Specimen.MIXED_VENOUS and evidence == SpecimenEvidence.CODE:
                cautions |= int(Caution.MIXED_VENOUS_UNPROVEN)
        if code.method:
            cautions |= _METHOD_CAUTION.get(code.method, 0)
        self._rows.units.append(value.unit)
        self._rows.packed += pack_row(
            -1,
            setting.subject,
            setting.effective,
            setting.known,
            QUANTITY[quantity],
            value.value,
            value.low,
            value.high,
            _METHOD_DOUBT[code.method] * value.value if code.method in _METHOD_DOUBT else NAN,
            value.answer,
            blood,
            evidence,
            Kind.ESTIMATED if code.quantity == "hb" and code.method == "from-haematocrit" else kind,
            code.method == "co-oximetry",
            code.corrected,
            cautions,
            setting.encounter,
            setting.device,
            setting.sample,
            setting.origin,
            part,
        )

    def _subject(self, found: Observation) -> int:
        reference = found.subject
        if reference is None:
            raise SkipError(Reason.SUBJECT, "no subject")
        text = reference.reference
        if text is None or text.startswith("#"):
            return self._number(self._by_identifier(found, reference))
        known = self._subjects.get(text)
        if known is None:
            try:
                known = self._number(self._patient(text))
            except SkipError as error:
                known = error
            self._subjects[text] = known
        if isinstance(known, SkipError):
            raise known
        return known

    def _number(self, patient: str) -> int:
        if patient in self._context.excluded:
            raise SkipError(Reason.EXCLUDED_PATIENT, "on the list of excluded patients")
        return self._patients.number(patient)

    def _patient(self, text: str) -> str:
        kind, _, identity = self._local(text).partition("/")
        if kind != "Patient" or not ID.fullmatch(identity):
            raise SkipError(Reason.SUBJECT, "the subject is not a patient of this source")
        return f"Patient/{identity}"

    def _local(self, text: str) -> str:
        """A reference as ``Type/id`` of this source, where it can be known to be one."""
        text = self._context.aliases.get(text, text)
        for base in self._base_urls:
            text = text.removeprefix(base.rstrip("/") + "/")
        return text.partition("/_history/")[0]

    def _by_identifier(self, found: Observation, reference: Reference) -> str:
        identifiers = [reference.identifier]
        if reference.reference:
            contained = _contained(found, reference.reference)
            if contained is None or contained.get("resourceType") != "Patient":
                raise SkipError(Reason.SUBJECT, "the contained subject is missing or not a patient")
            identifiers = list(contained.get("identifier") or ())
        for row in identifiers:
            if isinstance(row, dict) and isinstance(row.get("value"), str):
                if row["value"] in self._interpreter.excluded:
                    raise SkipError(Reason.EXCLUDED_PATIENT, "on the list of excluded patients")
                patient = self._context.patient_of(str(row.get("system", "")), row["value"])
                if patient is not None:
                    return patient
        raise SkipError(Reason.SUBJECT, "the subject's identifier names no patient, or several")

    def _effective(self, found: Observation) -> tuple[int, int]:
        """The instant of anything but a plain dateTime."""
        text, period = found.effectiveDateTime, found.effectivePeriod
        stated = (text, found.effectiveInstant, period, found.effectiveTiming)
        if sum(one is not None for one in stated) > 1:
            raise SkipError(Reason.INVARIANT, "more than one effective[x]")
        if found.effectiveInstant is not None:
            return moment(found.effectiveInstant, self._zone)
        if period is None or period.start is None:
            raise SkipError(Reason.TIME, "no time that can be paired")
        start, caution = moment(period.start, self._zone)
        return start, caution if period.end is not None else caution | int(Caution.OPEN_PERIOD)

    def _specimen(self, found: Observation) -> SpecimenEntry | None:
        if found.specimen is None or found.specimen.reference is None:
            return None
        text = found.specimen.reference
        if text.startswith("#"):
            contained = _contained(found, text)
            if contained is None or contained.get("resourceType") != "Specimen":
                return None
            return self._interpreter.specimen(contained)
        return self._context.specimens.get(self._local(text))

    def _site(self, found: Observation, specimen: SpecimenEntry | None) -> Specimen:
        """The kind of blood that body site or method state by the site's mapping."""
        for concept in (found.bodySite, found.method):
            if concept is not None:
                stated = self._interpreter.kind(concept)
                if stated is not Specimen.UNKNOWN:
                    return stated
        return specimen.site if specimen else Specimen.UNKNOWN

    def _note_panel(self, found: Observation) -> None:
        for member in found.hasMember:
            if member.reference:
                identity = member.reference.partition("/_history/")[0].rpartition("/")[2]
                key = f"{self._source}|{identity}"
                panel = f"{self._source}|panel {found.id}"
                self._rows.panels[key] = min(panel, self._rows.panels.get(key, panel))


def _agreed(code: Specimen, specimen: Specimen, site: Specimen) -> tuple[Specimen, int] | None:
    """The kind of blood that all evidence agrees on, with the evidence; None where it contradicts itself."""
    blood, evidence = code, SpecimenEvidence.NOTHING if code is Specimen.UNKNOWN else SpecimenEvidence.CODE
    for stated, kind in ((specimen, SpecimenEvidence.SPECIMEN), (site, SpecimenEvidence.BODY_SITE)):
        if stated is Specimen.UNKNOWN:
            continue
        if blood is Specimen.UNKNOWN or (blood is Specimen.VENOUS and stated in _VENOUS):
            blood, evidence = stated, evidence | kind
        elif stated is blood or (stated is Specimen.VENOUS and blood in _VENOUS):
            evidence |= kind if stated is blood else SpecimenEvidence.NOTHING
        elif Specimen.PLASMA not in (blood, stated):
            return None
    return blood, int(evidence)


_BLOOD: Final = [[[_agreed(code, one, site) for site in Specimen] for one in Specimen] for code in Specimen]
"""``_agreed`` for every combination, by the numbers of the specimens."""


def _clashing(admitted: list[tuple[int, Code, Value]]) -> set[tuple[str, Specimen]]:
    seen: dict[tuple[str, Specimen], Value] = {}
    clashing = set()
    for _, code, value in admitted:
        first = seen.setdefault((code.quantity, code.specimen), value)
        if first is not value and repr(first.numbers()) != repr(value.numbers()):
            clashing.add((code.quantity, code.specimen))
    return clashing


def _contained(found: Observation, reference: str) -> dict[str, Any] | None:
    return next((row for row in found.contained if row.get("id") == reference[1:]), None)


def _plain(reference: Reference | None, kind: str) -> str:
    text = reference.reference if reference and reference.reference else ""
    return text if text.startswith(kind) else ""

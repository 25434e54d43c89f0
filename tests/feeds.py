"""Small feeds for tests: resources by keyword, and what becomes of them on the way to anchor tables."""

from __future__ import annotations

import json
from collections import Counter
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

from fhiro2.bulk.intake import Intake, take_in
from fhiro2.bulk.quarantine import Quarantine
from fhiro2.catalogue import MEASURED
from fhiro2.derive import add_derived
from fhiro2.errors import Bucket, Reason
from fhiro2.model import AnchorTable, Caution, Column, Kind, Specimen, SpecimenEvidence, Timelines, Why
from fhiro2.pair import tables
from fhiro2.read.ndjson import NdjsonSource
from fhiro2.settings import NO_MAPPING, Mapping, Settings
from fhiro2.timeline import batches

LOINC = "http://loinc.org"
MDC = "urn:iso:std:iso:11073:10101"
UCUM = "http://unitsofmeasure.org"
CATEGORY = "http://terminology.hl7.org/CodeSystem/observation-category"
SPECIMEN_TYPE = "http://terminology.hl7.org/CodeSystem/v2-0487"
SITE = "urn:example:site"  # a hospital's own codes
KNOWN = "2026-03-03T00:00:00Z"
NOON = datetime(2026, 3, 1, 12, tzinfo=UTC)

Resource = dict[str, Any]


def at(seconds: float = 0) -> str:
    """A time some seconds after noon of the test day."""
    return (NOON + timedelta(seconds=seconds)).isoformat().replace("+00:00", "Z")


def concept(*codings: str | tuple[str, str]) -> Resource:
    """A CodeableConcept of LOINC codes, or of (system, code)."""
    pairs = [(LOINC, one) if isinstance(one, str) else one for one in codings]
    return {"coding": [{"system": system, "code": code} for system, code in pairs]}


def quantity(value: Any, unit: str | None = "mm[Hg]", **more: Any) -> Resource:
    """A Quantity with its UCUM unit as code and text; without any unit for None."""
    coded = {} if unit is None else {"unit": unit, "system": UCUM, "code": unit}
    return {"value": value, **coded, **more}


def observation(
    name: str = "tested",
    code: str = "2703-7",
    value: float | None = 90,
    unit: str | None = "mm[Hg]",
    seconds: float = 0,
    category: str | None = "laboratory",
    **more: Any,
) -> Resource:
    """A final Observation of patient p1; ``more`` replaces elements, and takes out those that are None."""
    made = {
        "resourceType": "Observation",
        "id": name,
        "meta": {"versionId": "1", "lastUpdated": KNOWN},
        "status": "final",
        "category": None if category is None else [concept((CATEGORY, category))],
        "code": concept(code),
        "subject": {"reference": "Patient/p1"},
        "effectiveDateTime": at(seconds),
        "valueQuantity": None if value is None else quantity(value, unit),
        **more,
    }
    return {key: part for key, part in made.items() if part is not None}


def component(code: str, value: float, unit: str | None, **more: Any) -> Resource:
    """One component of a panel."""
    return {"code": concept(code), "valueQuantity": quantity(value, unit), **more}


def panel(name: str, *components: Resource, seconds: float = 0, **more: Any) -> Resource:
    """A gas panel of components."""
    return observation(name, "24336-0", None, seconds=seconds, component=list(components), **more)


def specimen(name: str, kind: str | None = "BLDA", site: str | None = None, **more: Any) -> Resource:
    """A Specimen of a v2-0487 type, drawn at a site's own body site."""
    made = {
        "resourceType": "Specimen",
        "id": name,
        "meta": {"versionId": "1", "lastUpdated": KNOWN},
        "type": None if kind is None else concept((SPECIMEN_TYPE, kind)),
        "collection": None if site is None else {"bodySite": concept((SITE, site))},
        "subject": {"reference": "Patient/p1"},
        **more,
    }
    return {key: part for key, part in made.items() if part is not None}


def patient(name: str = "p1", **more: Any) -> Resource:
    """A Patient."""
    return {"resourceType": "Patient", "id": name, "meta": {"versionId": "1", "lastUpdated": KNOWN}, **more}


def mapping(**parts: Any) -> Mapping:
    """A site's mapping."""
    stated = {"mapping": "test", "version": 1, "owner": "laboratory", "signed": "2026-01-01", **parts}
    return Mapping.model_validate(stated, strict=False)


def line(resource: Resource | bytes) -> bytes:
    """A resource as one line of NDJSON, whole lines as they are."""
    return resource if isinstance(resource, bytes) else json.dumps(resource, separators=(",", ":")).encode()


def take(
    *resources: Resource | bytes, given: Mapping = NO_MAPPING, settings: Settings | None = None, source: str = "feed"
) -> Intake:
    """What the bulk way takes in from one file of these resources."""
    with TemporaryDirectory() as name:
        folder = Path(name)
        (folder / "feed.ndjson").write_bytes(b"".join(line(one) + b"\n" for one in resources))
        return take_in([NdjsonSource(source, [folder])], settings or Settings(), given)


def kept(*resources: Resource | bytes, given: Mapping = NO_MAPPING) -> bytes:
    """The quarantine file of these resources."""
    with TemporaryDirectory() as name:
        folder = Path(name)
        (folder / "feed.ndjson").write_bytes(b"".join(line(one) + b"\n" for one in resources))
        quarantine = Quarantine(folder / "quarantine.out")
        take_in([NdjsonSource("feed", [folder])], Settings(), given, quarantine)
        quarantine.close()
        return (folder / "quarantine.out").read_bytes()


@dataclass(frozen=True)
class Seen:
    """One standing reading, in words."""

    resource: str
    part: int
    patient: str
    quantity: str
    value: float
    low: float
    high: float
    answer: int
    specimen: Specimen
    evidence: SpecimenEvidence
    kind: Kind
    corrected: bool
    cautions: Caution
    sample: str


def seen(intake: Intake) -> list[Seen]:
    """All standing readings by resource and component."""
    names, origins = intake.rows.names, intake.rows.origins
    found = [
        Seen(
            origins.ids[row["origin"]],
            int(row["part"]),
            names.subjects[row["subject"]],
            MEASURED[row["quantity"]].name,
            float(row["value"]),
            float(row["low"]),
            float(row["high"]),
            int(row["answer"]),
            Specimen(row["specimen"]),
            SpecimenEvidence(int(row["evidence"])),
            Kind(row["kind"]),
            bool(row["corrected"]),
            Caution(int(row["cautions"])),
            names.samples[row["sample"]] if row["sample"] >= 0 else "",
        )
        for row in intake.readings
    ]
    return sorted(found, key=lambda one: (one.resource, one.part))


GOOD = observation("good", "8867-4", 70, "/min", category="vital-signs")


def fate(
    resource: Resource | bytes, *others: Resource, given: Mapping = NO_MAPPING, settings: Settings | None = None
) -> tuple[Bucket, Reason | None]:
    """Where ``resource`` ended, read after ``others`` (all used) and before a good one, which must not suffer."""
    intake = take(*others, resource, GOOD, given=given, settings=settings)
    assert "good" in {one.resource for one in seen(intake)}
    buckets = Counter(intake.account.buckets) - Counter({Bucket.USED: len(others) + 1})
    [bucket] = buckets.elements()
    reasons = [reason for (where, reason), number in intake.account.reasons.items() if where is bucket and number]
    assert len(reasons) <= 1
    return bucket, reasons[0] if reasons else None


def refusal(resource: Resource | bytes, *others: Resource, given: Mapping = NO_MAPPING) -> Reason | None:
    """Why ``resource`` was quarantined; the resource must be quarantined."""
    bucket, reason = fate(resource, *others, given=given)
    assert bucket is Bucket.QUARANTINED
    return reason


def reading(*resources: Resource, given: Mapping = NO_MAPPING, settings: Settings | None = None) -> Seen:
    """The only reading of the resource named "tested"."""
    [found] = [one for one in seen(take(*resources, given=given, settings=settings)) if one.resource == "tested"]
    return found


@dataclass(frozen=True)
class Paired:
    """The anchor tables of a feed, with their timelines."""

    tables: dict[str, AnchorTable]
    timelines: Timelines

    def column(self, name: str, kind: str = "arterial") -> Column:
        """One column of one table."""
        return self.tables[kind].columns[name]

    def value(self, name: str, kind: str = "arterial") -> float:
        """The value at the table's only anchor."""
        [value] = self.column(name, kind).value.tolist()
        return float(value)

    def why(self, name: str, kind: str = "arterial") -> Why:
        """Why the table's only anchor has no value, or KNOWN."""
        [why] = self.column(name, kind).why.tolist()
        return Why(why)

    def cautions(self, name: str, kind: str = "arterial") -> Caution:
        """The cautions at the table's only anchor."""
        [cautions] = self.column(name, kind).cautions.tolist()
        return Caution(cautions)

    def sources(self, name: str, kind: str = "arterial") -> list[str]:
        """The ids of the readings taken, '' where none was."""
        return [self._name(row) for row in self.column(name, kind).source.tolist()]

    def runners_up(self, name: str, kind: str = "arterial") -> list[str]:
        """The ids of the next candidates, '' where there was none."""
        return [self._name(row) for row in self.column(name, kind).runner_up.tolist()]

    def anchors(self, kind: str = "arterial") -> list[str]:
        """The ids of the anchors."""
        return [self._name(row) for row in self.tables[kind].reading.tolist()]

    def _name(self, row: int) -> str:
        timelines = self.timelines
        return timelines.origins.ids[timelines.readings["origin"][row]] if row >= 0 else ""


def pair(*resources: Resource | bytes, given: Mapping = NO_MAPPING, settings: Settings | None = None) -> Paired:
    """The anchor tables of a feed of at most one batch, with derived columns."""
    intake = take(*resources, given=given, settings=settings)
    [timelines] = batches(intake.readings, intake.rows.names, intake.rows.origins, intake.roster)
    made = tables(timelines, settings or Settings())
    add_derived(made, timelines, settings or Settings())
    return Paired(made, timelines)

"""Who and what Ward Nine's Observations speak of: patients, encounters, devices, conditions and procedures."""

from __future__ import annotations

from datetime import datetime, timedelta

from fhiro2.ward.feed import device_of, instant
from fhiro2.ward.scenario import BEDS, START, Bed
from fhiro2.ward.vocabulary import DIALECTS, SITE_FACTS, Json

MERGED_BED = 12
MERGED_PATIENT = "w9-p13"

_EARLIER = START - timedelta(hours=9)
_VERIFICATION = "http://terminology.hl7.org/CodeSystem/condition-ver-status"
_CLINICAL = "http://terminology.hl7.org/CodeSystem/condition-clinical"

# bed, code, words, verification, hour of onset
_CONDITIONS: tuple[tuple[int, str, str, str, float | None], ...] = (
    (1, "SMOKE", "Exposure to smoke", "confirmed", -1.0),
    (2, "BLEED", "Haemorrhage", "confirmed", 8.0),
    *((bed, "ECMO", "Extracorporeal support", "refuted", None) for bed in (2, 3, 4)),
    *((bed, "SHUNT", "Intracardiac shunt", "refuted", None) for bed in (2, 3, 4)),
    (6, "COPD", "Chronic obstruction, target saturation 88 to 92 %", "confirmed", -8760.0),
)
# bed, code, words, status, hours of begin and end
_PROCEDURES: tuple[tuple[int, str, str, str, float, float | None], ...] = (
    (2, "RED-CELLS", "Transfusion of red cells", "completed", 16.0, 24.0),
    (4, "CONTROLLED-VENTILATION", "Controlled ventilation", "in-progress", -2.0, None),
    (5, "CONTROLLED-VENTILATION", "Controlled ventilation", "in-progress", -3.0, None),
)


def patients() -> list[Json]:
    """The twelve patients, and the second record of one of them that was merged away."""
    found = [_patient(bed, f"w9-p{bed.number:02d}", bed.number, _EARLIER) for bed in BEDS]
    second = _patient(BEDS[MERGED_BED - 1], MERGED_PATIENT, 13, START + timedelta(hours=7))
    second["active"] = False
    second["link"] = [{"other": {"reference": f"Patient/w9-p{MERGED_BED}"}, "type": "replaced-by"}]
    return [*found, second]


def encounters() -> list[Json]:
    """One inpatient encounter a bed."""
    return [
        {
            "resourceType": "Encounter",
            "id": f"w9-e{bed.number:02d}",
            "meta": _meta(_EARLIER),
            "status": "in-progress",
            "class": {"system": "http://terminology.hl7.org/CodeSystem/v3-ActCode", "code": "IMP"},
            "subject": _subject(bed.number),
            "period": {"start": DIALECTS[bed.dialect].time(_EARLIER)},
            "location": [{"location": {"display": f"Ward Nine, bed {bed.number}"}}],
        }
        for bed in BEDS
    ]


def devices() -> list[Json]:
    """Analysers, monitors and ventilators."""
    names: dict[str, str] = {}
    for bed in BEDS:
        analyser = "Gas analyser without co-oximeter" if not bed.co_oximeter else "Gas analyser with co-oximeter"
        names[device_of(bed, "laboratory")] = analyser
        names[device_of(bed, "vital-signs")] = f"Monitor, bed {bed.number}"
        if bed.ventilated:
            names[device_of(bed, "therapy")] = f"Ventilator, bed {bed.number}"
    return [
        {
            "resourceType": "Device",
            "id": identity,
            "meta": _meta(_EARLIER),
            "status": "active",
            "deviceName": [{"name": name, "type": "user-friendly-name"}],
        }
        for identity, name in sorted(names.items())
    ]


def conditions() -> list[Json]:
    """Stated context: exposures, a bleed, and what was looked for and not found."""
    return [
        {
            "resourceType": "Condition",
            "id": f"w9-c{number:02d}",
            "meta": _meta(START + timedelta(hours=max(onset or 0.0, 0.0), minutes=4)),
            **({"clinicalStatus": _status(_CLINICAL, "active")} if verification == "confirmed" else {}),
            "verificationStatus": _status(_VERIFICATION, verification),
            "code": {"coding": [{"system": SITE_FACTS, "code": code}], "text": words},
            "subject": _subject(bed),
            "encounter": {"reference": f"Encounter/w9-e{bed:02d}"},
            **({"onsetDateTime": _time(bed, onset)} if onset is not None else {}),
        }
        for number, (bed, code, words, verification, onset) in enumerate(_CONDITIONS, 1)
    ]


def procedures() -> list[Json]:
    """Stated context: transfusion and controlled ventilation."""
    return [
        {
            "resourceType": "Procedure",
            "id": f"w9-q{number:02d}",
            "meta": _meta(START + timedelta(hours=max(begin, 0.0) if end is None else end, minutes=6)),
            "status": status,
            "code": {"coding": [{"system": SITE_FACTS, "code": code}], "text": words},
            "subject": _subject(bed),
            "encounter": {"reference": f"Encounter/w9-e{bed:02d}"},
            "performedPeriod": {
                "start": _time(bed, begin),
                **({"end": _time(bed, end)} if end is not None else {}),
            },
        }
        for number, (bed, code, words, status, begin, end) in enumerate(_PROCEDURES, 1)
    ]


def _patient(bed: Bed, identity: str, number: int, known: datetime) -> Json:
    return {
        "resourceType": "Patient",
        "id": identity,
        "meta": _meta(known),
        "identifier": [{"system": "urn:w9:patients", "value": f"W9-{1000 + number}"}],
        "active": True,
        "name": [{"family": "Testperson", "given": [bed.name]}],
        "gender": bed.gender,
        "birthDate": bed.born,
    }


def _meta(known: datetime) -> Json:
    return {"versionId": "1", "lastUpdated": instant(known)}


def _status(system: str, code: str) -> Json:
    return {"coding": [{"system": system, "code": code}]}


def _subject(bed: int) -> Json:
    return {"reference": f"Patient/w9-p{bed:02d}"}


def _time(bed: int, hour: float) -> str:
    return DIALECTS[BEDS[bed - 1].dialect].time(START + timedelta(hours=hour))

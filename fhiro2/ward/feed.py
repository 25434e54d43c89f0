"""The courses of Ward Nine as FHIR resources: three groups of devices say the same things in three ways.

Dialect A sends one Observation an analyte with a shared Specimen; B sends panels with components, in kPa and g/L and
local time; C sends single Observations under a grouping panel, old unit spellings and, from its monitors, MDC codes.
"""

from __future__ import annotations

from collections.abc import Mapping
from datetime import UTC, datetime, timedelta
from itertools import count
from random import Random

from fhiro2.ward.scenario import BEDS, HOURS, START, Bed, value_at
from fhiro2.ward.vocabulary import (
    CATEGORY,
    DIALECTS,
    LOINC,
    SITE_CODES,
    SITE_SPECIMENS,
    TERMS,
    Json,
    Term,
)

MONITOR = (5.0, 55.0)  # seconds from the measurement until the server knows it
CHART = (60.0, 240.0)
LABORATORY = (240.0, 840.0)

_CO_OXIMETRY = ("po2", "pco2", "ph", "hco3", "so2", "fo2hb", "fcohb", "fmethb", "hb", "lactate")
_GAS_ONLY = ("po2", "pco2", "ph", "hco3", "so2_calculated")
_VENOUS = {
    "mixed": ("po2", "pco2", "ph", "so2", "fcohb", "fmethb", "hb"),
    "central": ("po2", "pco2", "ph", "so2"),
}
_ARTERIAL_PANEL: Json = {"coding": [{"system": LOINC, "code": "24336-0"}], "text": "Arterial blood gas"}
_VENOUS_PANEL: Json = {"coding": [{"system": SITE_CODES, "code": "BG-PANEL-V"}], "text": "Mixed venous blood gas"}
_SPREAD = {
    "po2": 0.9, "pco2": 0.6, "ph": 0.004, "hco3": 0.1, "so2": 0.25, "so2_calculated": 0.2, "fcohb": 0.15,
    "fmethb": 0.1, "hb": 0.06, "lactate": 0.08, "spo2": 0.6, "hr": 3.0, "rr": 1.2, "sbp": 3.0, "dbp": 2.0, "map": 2.0,
    "temp": 0.12, "co": 0.08,
}  # fmt: skip


def instant(moment: datetime) -> str:
    """``moment`` as a FHIR instant in UTC with milliseconds."""
    return moment.astimezone(UTC).isoformat(timespec="milliseconds").replace("+00:00", "Z")


class Feed:
    """All Observations and Specimens of the ward as they are first sent; ``said`` finds one by bed, term and hour."""

    def __init__(self, seed: int) -> None:
        self.observations: list[Json] = []
        self.specimens: list[Json] = []
        self.said: dict[tuple[int, str, int], Json] = {}
        self._numbers = count(1)
        self._random = Random(seed)  # noqa: S311 - synthetic data, not secrets
        for bed in BEDS:
            self._admission(bed)
            for hour in range(HOURS):
                self._hour(bed, hour)

    def say(
        self,
        bed: Bed,
        term: str,
        value: float,
        at: datetime,
        delay: tuple[float, float] = MONITOR,
        more: Mapping[str, object] | None = None,
    ) -> Json:
        """Add one Observation of ``value`` (in the term's unit) made ``at``; ``more`` adds or replaces elements."""
        dialect = DIALECTS[bed.dialect]
        known = TERMS[term]
        content = {"valueQuantity": dialect.quantity(known, value), **(more or {})}
        found = self._observation(bed, dialect.concept(known), known.category, at, delay, content)
        self.said[bed.number, term, (at - START) // timedelta(hours=1)] = found
        return found

    def specimen(self, bed: Bed, site: str, at: datetime) -> str:
        """Add a Specimen of arterial, mixed, central or (peripheral) venous blood taken ``at``; its reference."""
        kind = ("BLDA", "Blood arterial") if site == "arterial" else ("BLDV", "Blood venous")
        dialect = DIALECTS[bed.dialect]
        number = len(self.specimens) + 1
        collection: Json = {"collectedDateTime": dialect.time(at)}
        line = {"mixed": "PA-LINE", "central": "CV-LINE"}.get(site)
        if line:
            collection["bodySite"] = {"coding": [{"system": SITE_SPECIMENS, "code": line}]}
        self.specimens.append(
            {
                "resourceType": "Specimen",
                "id": f"w9-s{number:04d}",
                "meta": {"versionId": "1", "lastUpdated": instant(at + timedelta(minutes=2))},
                "accessionIdentifier": {"system": "urn:w9:accessions", "value": f"W9A{number:05d}"},
                "status": "available",
                "type": {
                    "coding": [
                        {
                            "system": "http://terminology.hl7.org/CodeSystem/v2-0487",
                            "code": kind[0],
                            "display": kind[1],
                        }
                    ]
                },
                "subject": {"reference": f"Patient/w9-p{bed.number:02d}"},
                "receivedTime": dialect.time(at + timedelta(minutes=3)),
                "collection": collection,
            }
        )
        return f"Specimen/w9-s{number:04d}"

    def _observation(
        self, bed: Bed, code: Json, category: str, at: datetime, delay: tuple[float, float], content: Json
    ) -> Json:
        known = at + timedelta(milliseconds=int(self._random.uniform(*delay) * 1000))
        found: Json = {
            "resourceType": "Observation",
            "id": f"w9-o{next(self._numbers):04d}",
            "meta": {"versionId": "1", "lastUpdated": instant(known)},
            "status": "final",
            "category": [{"coding": [{"system": CATEGORY, "code": category}]}],
            "code": code,
            "subject": {"reference": f"Patient/w9-p{bed.number:02d}"},
            "encounter": {"reference": f"Encounter/w9-e{bed.number:02d}"},
            "effectiveDateTime": DIALECTS[bed.dialect].time(at),
        }
        if category == "laboratory":
            found["issued"] = DIALECTS[bed.dialect].time(known - timedelta(seconds=20))
        found["device"] = {"reference": f"Device/{device_of(bed, category)}"}
        found.update(content)
        self.observations.append(found)
        return found

    def _reading(self, bed: Bed, name: str, hour: float) -> float:
        spread = _SPREAD.get(name.removeprefix("venous "), 0.0)
        value = value_at(bed.course, name, hour)
        if spread:
            value += self._random.uniform(-spread, spread)
        if name in ("so2", "venous so2", "so2_calculated"):
            value = min(value, 99.8)
        return min(value, 100.0) if name == "spo2" else value

    def _admission(self, bed: Bed) -> None:
        at = START + timedelta(minutes=5)
        for name, value in (("weight", bed.weight), ("height", bed.height)):
            self.say(bed, name, value, at, CHART)

    def _hour(self, bed: Bed, hour: int) -> None:
        begin = START + timedelta(hours=hour)
        if bed.intensive:
            self._breathing(bed, hour, begin)
        self._monitor(bed, hour, begin + timedelta(minutes=24))
        if hour in bed.gas_hours:
            self._gas(bed, "arterial", hour, begin + timedelta(minutes=25))
        if hour in bed.venous_hours:
            if "co" in bed.course:
                flow = self._reading(bed, "co", hour + 27 / 60)
                self.say(bed, "co", flow, begin + timedelta(minutes=27))
            self._gas(bed, bed.venous, hour, begin + timedelta(minutes=28))

    def _breathing(self, bed: Bed, hour: int, at: datetime) -> None:
        fio2 = value_at(bed.course, "fio2", hour)
        if bed.ventilated:
            self.say(bed, "fio2_set", fio2, at)
            if hour in bed.gas_hours:
                self.say(bed, "peep", value_at(bed.course, "peep", hour), at)
        else:
            self.say(bed, "fio2", fio2, at, CHART)

    def _monitor(self, bed: Bed, hour: int, at: datetime) -> None:
        values = {name: self._reading(bed, name, hour + 0.4) for name in ("spo2", "hr", "rr", "sbp", "dbp", "temp")}
        self._saturation(bed, values["spo2"], hour, at)
        if bed.intensive:
            self.say(bed, "hr", values["hr"], at)
            values["map"] = self._reading(bed, "map", hour + 0.4)
            self._pressures(bed, values, "invasive ", ("sbp", "dbp", "map"), at)
            if hour in bed.gas_hours:
                self.say(bed, "rr", values["rr"], at)
                self.say(bed, bed.core_temperature, values["temp"], at)
        elif hour % 4 == 0:
            for name in ("hr", "rr", "temp"):
                self.say(bed, name, values[name], at, CHART)
            self._pressures(bed, values, "cuff " if bed.dialect == "C" else "", ("sbp", "dbp"), at)

    def _saturation(self, bed: Bed, spo2: float, hour: int, at: datetime) -> None:
        if bed.intensive:
            self.say(bed, "spo2", spo2, at)
            return
        flow = value_at(bed.course, "flow", hour)
        if bed.dialect == "B":
            both = [{"system": LOINC, "code": code} for code in ("59408-5", "2708-6")]
            part = self._part(bed, TERMS["flow"], flow)
            self.say(bed, "spo2", spo2, at, more={"code": {"coding": both}, "component": [part]})
        else:
            self.say(bed, "spo2", spo2, at)
            self.say(bed, "flow", flow, at, CHART)

    def _pressures(
        self, bed: Bed, values: Mapping[str, float], kind: str, names: tuple[str, ...], at: datetime
    ) -> None:
        if bed.dialect == "B" or (bed.dialect == "A" and not bed.intensive):
            parts = [self._part(bed, TERMS[kind + name], values[name]) for name in names]
            panel = DIALECTS[bed.dialect].concept(TERMS["pressures"])
            self._observation(bed, panel, "vital-signs", at, MONITOR, {"component": parts})
        else:
            for name in names:
                self.say(bed, kind + name, values[name], at)

    def _gas(self, bed: Bed, site: str, hour: int, at: datetime) -> None:
        values = self._sample(bed, site, hour + (at.minute / 60))
        if bed.dialect == "B":
            parts = [self._part(bed, TERMS[f"{site} {name}"], value) for name, value in values.items()]
            content = {"component": parts, "specimen": {"reference": self.specimen(bed, site, at)}}
            panel = _ARTERIAL_PANEL if site == "arterial" else _VENOUS_PANEL
            self._observation(bed, panel, "laboratory", at, LABORATORY, content)
            return
        more: Json = {}
        if bed.dialect == "A" or site != "arterial":
            more["specimen"] = {"reference": self.specimen(bed, site, at)}
        members = [self.say(bed, f"{site} {name}", value, at, LABORATORY, more) for name, value in values.items()]
        if not bed.co_oximeter:
            members[0]["code"] = {"coding": [{"system": SITE_CODES, "code": "BG-PO2A"}], "text": "pO2 (a)"}
        if bed.dialect == "C" and site == "arterial":
            references = [{"reference": f"Observation/{member['id']}"} for member in members]
            self._observation(bed, _ARTERIAL_PANEL, "laboratory", at, LABORATORY, {"hasMember": references})

    def _sample(self, bed: Bed, site: str, hour: float) -> dict[str, float]:
        if site != "arterial":
            names = [(name, f"venous {name}") for name in _VENOUS[site]]
            return {name: self._reading(bed, own if own in bed.course else name, hour) for name, own in names}
        wanted = _CO_OXIMETRY if bed.co_oximeter else _GAS_ONLY
        values = {name: self._reading(bed, name, hour) for name in wanted if name != "fo2hb"}
        if bed.co_oximeter:  # by definition: the functional share of what COHb and MetHb leave
            values["fo2hb"] = values["so2"] * (100 - values["fcohb"] - values["fmethb"]) / 100
        return {name: values[name] for name in wanted}

    def _part(self, bed: Bed, term: Term, value: float) -> Json:
        dialect = DIALECTS[bed.dialect]
        coding = {"system": LOINC, "code": term.loinc}
        return {"code": {"coding": [coding]}, "valueQuantity": dialect.quantity(term, value)}


def device_of(bed: Bed, category: str) -> str:
    """The id of the device that makes a bed's Observations of one category."""
    if category == "laboratory":
        return f"w9-d-analyser-{bed.dialect.lower() if bed.co_oximeter else 'x'}"
    if category == "therapy":
        return f"w9-d-ventilator-{bed.number:02d}"
    return f"w9-d-monitor-{bed.number:02d}"

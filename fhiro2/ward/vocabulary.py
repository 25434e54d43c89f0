"""How Ward Nine names and measures things: LOINC and MDC codes, units, and the three dialects of its devices.

LOINC names are the terms' own; the notice that goes with them stands in the ward's README.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import UTC, datetime, timedelta, timezone, tzinfo
from typing import Any, NamedTuple

from fhiro2.units import UCUM, scale

LOINC = "http://loinc.org"
MDC = "urn:iso:std:iso:11073:10101"
SITE_CODES = "urn:w9:codes"
SITE_FACTS = "urn:w9:facts"
SITE_SPECIMENS = "urn:w9:specimens"
CATEGORY = "http://terminology.hl7.org/CodeSystem/observation-category"

Json = dict[str, Any]


class Term(NamedTuple):
    """A code with its name, the UCUM unit and decimals it is sent in, and its Observation category."""

    loinc: str
    name: str
    unit: str
    decimals: int
    category: str = "laboratory"
    mdc: str = ""


_VITAL, _EXAM, _THERAPY = "vital-signs", "exam", "therapy"

TERMS: dict[str, Term] = {
    "arterial po2": Term("2703-7", "Oxygen [Partial pressure] in Arterial blood", "mm[Hg]", 1),
    "arterial pco2": Term("2019-8", "Carbon dioxide [Partial pressure] in Arterial blood", "mm[Hg]", 1),
    "arterial ph": Term("2744-1", "pH of Arterial blood", "[pH]", 3),
    "arterial hco3": Term("1960-4", "Bicarbonate [Moles/volume] in Arterial blood", "mmol/L", 1),
    "arterial so2": Term("2708-6", "Oxygen saturation in Arterial blood", "%", 1),
    "arterial fo2hb": Term("2714-4", "Fractional oxyhemoglobin in Arterial blood", "%", 1),
    "arterial fcohb": Term("2030-5", "Carboxyhemoglobin/Hemoglobin.total in Arterial blood", "%", 1),
    "arterial fmethb": Term("2615-3", "Methemoglobin/Hemoglobin.total in Arterial blood", "%", 1),
    "arterial hb": Term("14775-1", "Hemoglobin [Mass/volume] in Arterial blood by Oximetry", "g/dL", 1),
    "arterial lactate": Term("2518-9", "Lactate [Moles/volume] in Arterial blood", "mmol/L", 1),
    "arterial so2_calculated": Term(
        "2713-6", "Oxygen saturation Calculated from oxygen partial pressure in Blood", "%", 1
    ),
    "mixed po2": Term("19211-2", "Oxygen [Partial pressure] in Mixed venous blood", "mm[Hg]", 1),
    "mixed pco2": Term("19212-0", "Carbon dioxide [Partial pressure] in Mixed venous blood", "mm[Hg]", 1),
    "mixed ph": Term("19213-8", "pH of Mixed venous blood", "[pH]", 3),
    "mixed so2": Term("19224-5", "Oxygen saturation in Mixed venous blood", "%", 1),
    "mixed fcohb": Term("41648-7", "Carboxyhemoglobin/Hemoglobin.total in Mixed venous blood", "%", 1),
    "mixed fmethb": Term("41607-3", "Methemoglobin/Hemoglobin.total in Mixed venous blood", "%", 1),
    "mixed hb": Term("76768-1", "Hemoglobin [Mass/volume] in Mixed venous blood by Oximetry", "g/dL", 1),
    "central po2": Term("11556-8", "Oxygen [Partial pressure] in Blood", "mm[Hg]", 1),
    "central pco2": Term("97538-3", "Carbon dioxide [Partial pressure] in Central venous blood", "mm[Hg]", 1),
    "central ph": Term("97536-7", "pH of Central venous blood", "[pH]", 3),
    "central so2": Term("97549-0", "Oxygen saturation in Central venous blood", "%", 1),
    "blood hb": Term("718-7", "Hemoglobin [Mass/volume] in Blood", "g/dL", 1),
    "co": Term("8737-9", "Left ventricular Cardiac output by Indicator dilution", "L/min", 1, _EXAM),
    "spo2": Term("59408-5", "Oxygen saturation in Arterial blood by Pulse oximetry", "%", 0, _VITAL, "150456"),
    "hr": Term("8867-4", "Heart rate", "/min", 0, _VITAL, "147842"),
    "rr": Term("9279-1", "Respiratory rate", "/min", 0, _VITAL),
    "temp": Term("8310-5", "Body temperature", "Cel", 1, _VITAL),
    "temp_bladder": Term("8334-5", "Body temperature - Urinary bladder", "Cel", 1, _VITAL),
    "temp_blood": Term("60834-9", "Blood temperature", "Cel", 1, _VITAL),
    "pressures": Term("85354-9", "Blood pressure panel with all children optional", "", 0, _VITAL),
    "sbp": Term("8480-6", "Systolic blood pressure", "mm[Hg]", 0, _VITAL),
    "dbp": Term("8462-4", "Diastolic blood pressure", "mm[Hg]", 0, _VITAL),
    "invasive sbp": Term("76215-3", "Invasive Systolic blood pressure", "mm[Hg]", 0, _VITAL, "150017"),
    "invasive dbp": Term("76213-8", "Invasive Diastolic blood pressure", "mm[Hg]", 0, _VITAL, "150018"),
    "invasive map": Term("76214-6", "Invasive Mean blood pressure", "mm[Hg]", 0, _VITAL, "150019"),
    "cuff sbp": Term("76534-7", "Systolic blood pressure by Noninvasive", "mm[Hg]", 0, _VITAL),
    "cuff dbp": Term("76535-4", "Diastolic blood pressure by Noninvasive", "mm[Hg]", 0, _VITAL),
    "fio2": Term("3150-0", "Inhaled oxygen concentration", "%", 0, _VITAL),
    "fio2_set": Term("19994-3", "Oxygen/Total gas setting [Volume Fraction] Ventilator", "%", 0, _THERAPY),
    "peep": Term("20077-4", "Positive end expiratory pressure setting Ventilator", "cm[H2O]", 0, _THERAPY),
    "flow": Term("3151-8", "Inhaled oxygen flow rate", "L/min", 1, _VITAL),
    "weight": Term("29463-7", "Body weight", "kg", 1, _VITAL),
    "height": Term("8302-2", "Body height", "cm", 0, _VITAL),
}

_CONVERTED = {"mm[Hg]": ("kPa", 2), "g/dL": ("g/L", 0)}
_SPELLED = {
    "mm[Hg]": "mmHg",
    "g/dL": "gm/dL",
    "[pH]": "pH units",
    "mmol/L": "mmol/l",
    "L/min": "l/min",
    "cm[H2O]": "cmH2O",
    "Cel": "degC",
}


@dataclass(frozen=True)
class Dialect:
    """How one group of devices writes times, units and codes."""

    zone: tzinfo
    zulu: bool = False
    converted: bool = False
    spelled: bool = False
    device_codes: bool = False

    def time(self, moment: datetime) -> str:
        """``moment`` as this dialect writes it, always with an offset."""
        text = moment.astimezone(self.zone).isoformat(timespec="seconds")
        return text.replace("+00:00", "Z") if self.zulu else text

    def quantity(self, term: Term, value: float) -> Json:
        """``value`` (in the term's own unit) as an R4 Quantity."""
        unit, decimals = term.unit, term.decimals
        if self.converted and term.category == "laboratory" and unit in _CONVERTED:
            unit, decimals = _CONVERTED[unit]
            value *= scale(term.unit, unit).factor
        number = round(value, decimals) if decimals else round(value)
        if self.spelled:
            if unit == "/min":
                unit = "breaths/min" if term.loinc == TERMS["rr"].loinc else "bpm"
            return {"value": number, "unit": _SPELLED.get(unit, unit)}
        return {"value": number, "unit": unit, "system": UCUM, "code": unit}

    def concept(self, term: Term) -> Json:
        """The code of ``term``: MDC alone where this dialect's monitors speak it, else LOINC."""
        if self.device_codes and term.mdc:
            return {"coding": [{"system": MDC, "code": term.mdc}], "text": term.name}
        return {"coding": [{"system": LOINC, "code": term.loinc, "display": term.name}]}


DIALECTS: dict[str, Dialect] = {
    "A": Dialect(UTC),
    "B": Dialect(timezone(timedelta(hours=1)), converted=True),
    "C": Dialect(UTC, zulu=True, spelled=True, device_codes=True),
}

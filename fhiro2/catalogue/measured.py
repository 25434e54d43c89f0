"""What each quantity is that is read: name, canonical unit, precision, default doubt, smallest detectable difference.

Default standard uncertainty: ``sqrt(absolute^2 + (relative * value)^2)`` in the canonical unit. Unless a row says
otherwise it is half the limit that proficiency rules set (42 CFR 493.931 and 493.941 as of 2025) or analyser
practice ("common practice"); a site overrides it with its own.
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Measured:
    """A quantity that is read. ``difference`` is the smallest detectable difference of two results, or NaN."""

    name: str
    title: str
    unit: str
    decimals: int
    absolute: float = 0.0
    relative: float = 0.0
    difference: float = float("nan")
    coded: bool = False


MEASURED: tuple[Measured, ...] = (
    # Blood gas. Differences: Mallat 2015 (PMC4602629), Harding & Fraser 1987 for pH.
    Measured("po2", "oxygen partial pressure", "mm[Hg]", 1, 1.5, 0.03, 9.09),
    Measured("pco2", "carbon dioxide partial pressure", "mm[Hg]", 1, 1.5, 0.0, 2.06),
    Measured("ph", "pH", "[pH]", 3, 0.01, 0.0, 0.04),
    Measured("so2", "functional oxygen saturation", "1", 3, 0.01, 0.0, 0.0123),
    Measured("fo2hb", "oxyhaemoglobin fraction of total", "1", 3, 0.01),
    Measured("fcohb", "carboxyhaemoglobin fraction", "1", 3, 0.01),
    Measured("fmethb", "methaemoglobin fraction", "1", 3, 0.005),
    Measured("fsulfhb", "sulfhaemoglobin fraction", "1", 3, 0.005),
    Measured("fhhb", "deoxyhaemoglobin fraction", "1", 3, 0.01),
    Measured("fhbf", "fetal haemoglobin fraction", "1", 3, 0.05),
    Measured("fcohb_pulse", "carboxyhaemoglobin fraction by pulse device", "1", 3, 0.03),
    Measured("hb", "haemoglobin", "g/dL", 1, 0.0, 0.02),
    Measured("hct", "haematocrit", "1", 3, 0.0, 0.03),
    Measured("lactate", "lactate", "mmol/L", 1, 0.2, 0.0),
    Measured("hco3", "bicarbonate", "mmol/L", 1, 1.0, 0.0, 2.6),
    Measured("hco3_std", "standard bicarbonate", "mmol/L", 1, 1.0),
    Measured("tco2", "total carbon dioxide", "mmol/L", 1, 1.0),
    Measured("be_actual", "base excess", "mmol/L", 1, 1.0, 0.0, 2.2),
    Measured("be_standard", "standard base excess", "mmol/L", 1, 1.0, 0.0, 2.2),
    Measured("cto2", "oxygen content", "mL/dL", 1, 0.3),
    Measured("cto2_cath", "oxygen content at a catheter site", "mL/dL", 1, 0.3),
    Measured("o2cap", "oxygen capacity", "mL/dL", 1, 0.4),
    Measured("p50", "P50", "mm[Hg]", 1, 1.0),
    Measured("aado2", "alveolar-arterial difference", "mm[Hg]", 0, 10.0),
    Measured("a_A_ratio", "arterial-alveolar ratio", "1", 2, 0.05),
    Measured("pf_ratio", "PaO2/FiO2 ratio", "mm[Hg]", 0, 0.0, 0.05),
    Measured("shunt", "shunt fraction", "1", 2, 0.03),
    # Chemistry
    Measured("na", "sodium", "mmol/L", 0, 1.0),
    Measured("k", "potassium", "mmol/L", 1, 0.1),
    Measured("cl", "chloride", "mmol/L", 0, 1.0),
    Measured("ica", "ionised calcium", "mmol/L", 2, 0.02),
    Measured("albumin", "albumin", "g/L", 0, 1.0),
    Measured("glucose", "glucose", "mmol/L", 1, 0.2, 0.03),
    Measured("anion_gap", "anion gap", "mmol/L", 0, 2.0),
    # Airway and gas
    Measured("spo2", "saturation by pulse oximetry", "1", 2, 0.04),
    Measured("fio2", "inspired oxygen fraction", "1", 2, 0.015),
    Measured("eto2", "end-expired oxygen fraction", "1", 2, 0.015),
    Measured("o2_flow", "oxygen flow", "L/min", 1, 0.5),
    Measured("peep", "positive end-expiratory pressure", "cm[H2O]", 1, 0.5),
    Measured("peep_total", "total positive end-expiratory pressure", "cm[H2O]", 1, 0.5),
    Measured("paw_mean", "mean airway pressure", "cm[H2O]", 1, 0.5),
    Measured("paw_mean_insp", "mean inspiratory airway pressure", "cm[H2O]", 1, 0.5),
    Measured("paw_plateau", "plateau pressure", "cm[H2O]", 1, 0.5),
    Measured("paw_peak", "peak airway pressure", "cm[H2O]", 1, 0.5),
    Measured("vt", "tidal volume", "mL", 0, 0.0, 0.05),
    Measured("vt_spont", "spontaneous tidal volume", "mL", 0, 0.0, 0.05),
    Measured("vt_set", "set tidal volume", "mL", 0, 0.0, 0.05),
    Measured("rr", "respiratory rate", "/min", 0, 1.0),
    Measured("rr_spont", "spontaneous respiratory rate", "/min", 0, 1.0),
    Measured("rr_mech", "mechanical respiratory rate", "/min", 0, 1.0),
    Measured("rr_vent_set", "set respiratory rate", "/min", 0, 0.5),
    Measured("rr_vent_total", "total respiratory rate on ventilator", "/min", 0, 1.0),
    Measured("etco2", "end-tidal carbon dioxide", "mm[Hg]", 0, 2.0),
    Measured("vo2", "oxygen consumption", "mL/min", 0, 0.0, 0.07),
    Measured("vco2", "carbon dioxide production", "mL/min", 0, 0.0, 0.07),
    Measured("pb", "barometric pressure", "mm[Hg]", 0, 1.0),
    # Circulation
    Measured("hr", "heart rate", "/min", 0, 2.0),
    Measured("sbp", "systolic pressure", "mm[Hg]", 0, 4.0),
    Measured("dbp", "diastolic pressure", "mm[Hg]", 0, 4.0),
    Measured("map", "mean arterial pressure", "mm[Hg]", 0, 4.0),
    Measured("sbp_art", "invasive systolic pressure", "mm[Hg]", 0, 3.0),
    Measured("dbp_art", "invasive diastolic pressure", "mm[Hg]", 0, 3.0),
    Measured("map_art", "invasive mean pressure", "mm[Hg]", 0, 3.0),
    Measured("sbp_nibp", "cuff systolic pressure", "mm[Hg]", 0, 5.0),
    Measured("dbp_nibp", "cuff diastolic pressure", "mm[Hg]", 0, 5.0),
    Measured("map_nibp", "cuff mean pressure", "mm[Hg]", 0, 5.0),
    Measured("cvp", "central venous pressure", "mm[Hg]", 0, 1.0),
    Measured("rap", "right atrial pressure", "mm[Hg]", 0, 1.0),
    Measured("pap_sys", "pulmonary artery systolic pressure", "mm[Hg]", 0, 2.0),
    Measured("pap_dia", "pulmonary artery diastolic pressure", "mm[Hg]", 0, 2.0),
    Measured("pap_mean", "pulmonary artery mean pressure", "mm[Hg]", 0, 2.0),
    Measured("pawp", "pulmonary artery wedge pressure", "mm[Hg]", 0, 2.0),
    Measured("co", "cardiac output", "L/min", 1, 0.0, 0.10),
    Measured("ci", "cardiac index", "L/min/m2", 1, 0.0, 0.12),
    Measured("sv", "stroke volume", "mL", 0, 0.0, 0.10),
    Measured("svi", "stroke volume index", "mL/m2", 0, 0.0, 0.12),
    Measured("svr", "systemic vascular resistance", "dyn.s/cm5", 0, 0.0, 0.15),
    Measured("svri", "systemic vascular resistance index", "dyn.s.m2/cm5", 0, 0.0, 0.15),
    Measured("pvri", "pulmonary vascular resistance index", "dyn.s.m2/cm5", 0, 0.0, 0.2),
    # Body
    Measured("temp", "body temperature", "Cel", 1, 0.2),
    Measured("temp_core", "core temperature", "Cel", 1, 0.2),
    Measured("temp_blood", "blood temperature", "Cel", 1, 0.2),
    Measured("temp_periph", "peripheral temperature", "Cel", 1, 0.4),
    Measured("weight", "body weight", "kg", 1, 0.0, 0.01),
    Measured("height", "body height", "cm", 0, 1.0),
    Measured("ibw", "ideal body weight", "kg", 1, 0.0, 0.05),
    Measured("bsa", "body surface area", "m2", 2, 0.0, 0.05),
    Measured("consciousness", "level of consciousness", "", 0, coded=True),
    Measured("gcs", "Glasgow coma score", "{score}", 0, 1.0),
)

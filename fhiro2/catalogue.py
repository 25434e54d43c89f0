"""What each quantity is: name, canonical unit, precision, default uncertainty, smallest detectable difference.

``MEASURED`` holds what is read, ``DERIVED`` what is computed and written. The formula of a derived quantity stands
in ``derive/<topic>.py``; the codes that bring a measured quantity stand in ``codes.csv``.

Default standard uncertainty: ``sqrt(absolute^2 + (relative * value)^2)`` in the canonical unit. Unless a row says
otherwise it is half the limit that proficiency rules set (42 CFR 493.931 and 493.941 as of 2025) or analyser
practice ("common practice"); a site overrides it with its own.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from fhiro2.model import Floats, Integers


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


@dataclass(frozen=True)
class Derived:
    """A quantity that is computed. ``unit`` is what is written; ``loinc`` is added where a term truly fits.

    ``formula`` names the equation and its version; ``source`` is where the equation was published; ``signed`` says that
    it can be less than 0.
    """

    code: str
    title: str
    unit: str
    decimals: int
    formula: str
    source: str
    loinc: str = ""
    loinc_name: str = ""
    category: str = "laboratory"
    signed: bool = False


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

_CONTENT = "Binding factor: Dijkhuizen et al., Pflugers Arch 1977;369:223; solubility as in anaesthesia texts (common practice)"
_FICK = "Fick A, 1870: flow = uptake / content difference (reversed)"
_CURVE = "Siggaard-Andersen M & O, Scand J Clin Lab Invest Suppl 1990;203:29-45"
_ALVEOLAR = "Fenn, Rahn & Otis 1946, full form of the alveolar air equation"

DERIVED: tuple[Derived, ...] = (
    Derived(
        "oxygen-content-arterial",
        "Arterial oxygen content",
        "mL/dL",
        1,
        "oxygen-content/1",
        _CONTENT,
        "59274-1",
        "Oxygen content in Arterial blood by calculation",
    ),
    Derived(
        "oxygen-content-mixed-venous",
        "Mixed venous oxygen content",
        "mL/dL",
        1,
        "oxygen-content/1",
        _CONTENT,
        "64798-2",
        "Oxygen content in Mixed venous blood by calculation",
    ),
    Derived(
        "oxygen-content-central-venous", "Central venous oxygen content", "mL/dL", 1, "oxygen-content/1", _CONTENT
    ),
    Derived(
        "oxygen-content-difference",
        "Arterial-mixed venous oxygen content difference",
        "mL/dL",
        1,
        "content-difference/1",
        _CONTENT,
        signed=True,
    ),
    Derived(
        "oxygen-content-difference-central",
        "Arterial-central venous oxygen content difference",
        "mL/dL",
        1,
        "content-difference/1",
        _CONTENT,
        signed=True,
    ),
    Derived("oxygen-delivery", "Oxygen delivery", "mL/min", 0, "oxygen-delivery/1", _CONTENT, category="exam"),
    Derived(
        "oxygen-delivery-index",
        "Oxygen delivery index",
        "mL/min/m2",
        0,
        "oxygen-delivery-index/1",
        _CONTENT,
        category="exam",
    ),
    Derived(
        "oxygen-consumption",
        "Oxygen consumption (reverse Fick)",
        "mL/min",
        0,
        "reverse-fick/1",
        _FICK,
        "60842-2",
        "Oxygen consumption (VO2)",
        "exam",
    ),
    Derived(
        "oxygen-consumption-index",
        "Oxygen consumption index (reverse Fick)",
        "mL/min/m2",
        0,
        "reverse-fick-index/1",
        _FICK,
        category="exam",
    ),
    Derived("oxygen-extraction-ratio", "Oxygen extraction ratio", "1", 2, "extraction-ratio/1", _FICK),
    Derived(
        "oxygen-extraction-excess",
        "Oxygen extraction ratio above the expected one",
        "1",
        2,
        "extraction-excess/1",
        "Fick A, 1870; expected at a consumption index of 130 mL/min/m2 and a cardiac index of 3 L/min/m2 (common practice)",
        signed=True,
    ),
    Derived(
        "oxygen-extraction-ratio-central",
        "Oxygen extraction ratio from central venous blood",
        "1",
        2,
        "extraction-ratio/1",
        _FICK,
    ),
    Derived(
        "alveolar-oxygen-pressure", "Alveolar oxygen pressure", "mm[Hg]", 0, "alveolar-air/1", _ALVEOLAR, signed=True
    ),
    Derived(
        "alveolar-arterial-gradient",
        "Alveolar-arterial oxygen gradient",
        "mm[Hg]",
        0,
        "alveolar-arterial-gradient/1",
        _ALVEOLAR,
        "19991-9",
        "Alveolar-arterial oxygen Partial pressure difference",
        signed=True,
    ),
    Derived(
        "pf-ratio",
        "PaO2/FiO2 ratio",
        "mm[Hg]",
        0,
        "pf-ratio/1",
        "Horovitz et al., Arch Surg 1974;108:349 (from memory)",
        "50984-4",
        "Horowitz index in Arterial blood",
    ),
    Derived(
        "sf-ratio", "SpO2/FiO2 ratio", "1", 0, "sf-ratio/1", "Rice TW et al., Chest 2007;132:410", category="exam"
    ),
    Derived(
        "saturation-predicted",
        "Saturation predicted from the oxygen pressure",
        "%",
        1,
        "dissociation-tanh-1990/1",
        _CURVE,
        "51733-4",
        "Oxygen saturation Calculated from oxygen partial pressure in Arterial blood",
    ),
    Derived(
        "saturation-gap-measured",
        "Measured minus predicted arterial saturation",
        "%",
        1,
        "saturation-gap/1",
        _CURVE,
        signed=True,
    ),
    Derived(
        "saturation-gap-pulse",
        "SpO2 minus predicted arterial saturation",
        "%",
        1,
        "saturation-gap/1",
        _CURVE,
        signed=True,
    ),
    Derived(
        "cardiac-index",
        "Cardiac index",
        "L/min/m2",
        1,
        "cardiac-index/1",
        "Definition: cardiac output / body surface area",
        "75919-1",
        "Left ventricular Cardiac index",
        "exam",
    ),
    Derived(
        "body-surface-area",
        "Body surface area",
        "m2",
        2,
        "body-surface-du-bois/1",
        "Du Bois D & EF, Arch Intern Med 1916;17:863",
        "3140-1",
        "Body surface area Derived from formula",
        "exam",
    ),
)

BASES: tuple[str, ...] = (
    "",
    "1.39 mL/g x haemoglobin x FO2Hb + 0.0225 mL/dL/kPa x pO2",
    "1.34 mL/g x total haemoglobin x functional sO2 + 0.0225 mL/dL/kPa x pO2",
    "respiratory quotient 0.8, water vapour by temperature",
    "DPG 5 mmol/L",
    "Du Bois 1916",
)

QUANTITY: dict[str, int] = {row.name: number for number, row in enumerate(MEASURED)}
DERIVED_BY_CODE: dict[str, Derived] = {row.code: row for row in DERIVED}

_ABSOLUTE = np.array([row.absolute for row in MEASURED])
_RELATIVE = np.array([row.relative for row in MEASURED])


def default_uncertainty(quantity: Integers, value: Floats) -> Floats:
    """Standard uncertainty of readings by their quantity number, in the canonical unit; NaN where the value is."""
    result: Floats = np.hypot(_ABSOLUTE[quantity], _RELATIVE[quantity] * value)
    return result


@dataclass(frozen=True)
class Input:
    """A column that pairing fills: which measured quantity, of which blood, under which name rules may use."""

    name: str
    title: str
    quantity: str


INPUTS: tuple[Input, ...] = (
    Input("pao2", "PaO2", "po2"),
    Input("paco2", "PaCO2", "pco2"),
    Input("pha", "arterial pH", "ph"),
    Input("hco3a", "arterial bicarbonate", "hco3"),
    Input("sao2", "measured arterial saturation", "so2"),
    Input("fo2hba", "arterial oxyhaemoglobin fraction", "fo2hb"),
    Input("fcohb", "carboxyhaemoglobin", "fcohb"),
    Input("fmethb", "methaemoglobin", "fmethb"),
    Input("hb", "haemoglobin", "hb"),
    Input("lactate", "lactate", "lactate"),
    Input("fio2", "inspired oxygen fraction", "fio2"),
    Input("peep", "positive end-expiratory pressure", "peep"),
    Input("pb", "barometric pressure", "pb"),
    Input("temp", "core temperature", "temp_core"),
    Input("co", "cardiac output", "co"),
    Input("ci", "cardiac index", "ci"),
    Input("weight", "body weight", "weight"),
    Input("height", "body height", "height"),
    Input("spo2", "SpO2", "spo2"),
    Input("pvo2", "mixed venous oxygen pressure", "po2"),
    Input("pvco2", "mixed venous carbon dioxide pressure", "pco2"),
    Input("svo2", "mixed venous saturation", "so2"),
    Input("fo2hbv", "mixed venous oxyhaemoglobin fraction", "fo2hb"),
    Input("pcvo2", "central venous oxygen pressure", "po2"),
    Input("pcvco2", "central venous carbon dioxide pressure", "pco2"),
    Input("scvo2", "central venous saturation", "so2"),
    Input("fo2hbcv", "central venous oxyhaemoglobin fraction", "fo2hb"),
)

INPUT_BY_NAME: dict[str, Input] = {row.name: row for row in INPUTS}
MEASURED_BY_NAME: dict[str, Measured] = {row.name: row for row in MEASURED}


def unit_of(column: str) -> str:
    """Canonical UCUM unit of a column of an anchor table (an input's name or a derived code); KeyError if unknown."""
    if column in DERIVED_BY_CODE:
        return DERIVED_BY_CODE[column].unit
    return MEASURED_BY_NAME[INPUT_BY_NAME[column].quantity].unit


def title_of(column: str) -> str:
    """The words for a column of an anchor table; KeyError if unknown."""
    if column in DERIVED_BY_CODE:
        return DERIVED_BY_CODE[column].title
    return INPUT_BY_NAME[column].title


def decimals_of(column: str) -> int:
    """Declared decimals of a column in its canonical unit; KeyError if unknown."""
    if column in DERIVED_BY_CODE:
        return DERIVED_BY_CODE[column].decimals
    return MEASURED_BY_NAME[INPUT_BY_NAME[column].quantity].decimals

"""What each quantity is that is computed and written, and the constants and assumptions it may rest on."""

from __future__ import annotations

from dataclasses import dataclass


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

"""The constants that enter results by name: value, unit, standard uncertainty and source.

Coefficients that belong to one published equation stand in that equation, not here.
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Constant:
    """A named constant; ``uncertainty`` is its standard uncertainty in ``unit`` (0: exact or by definition)."""

    name: str
    value: float
    unit: str
    uncertainty: float
    source: str


BINDING_OXYHAEMOGLOBIN = Constant(
    "binding-oxyhaemoglobin",
    1.39,
    "mL/g",
    0.0144,
    "4 x 22.393 L/mol over 64.458 kg/mol, HiCN chemistry: Dijkhuizen et al., Pflugers Arch 1977;369:223-231; "
    "uncertainty: uniform over a width of 0.05",
)
"""Only with the oxyhaemoglobin fraction of total haemoglobin, measured or from sO2, COHb and MetHb."""

BINDING_TOTAL = Constant(
    "binding-total",
    1.34,
    "mL/g",
    0.0144,
    "in vivo convention, holds a deduction of 3.6 % for inactive haemoglobin (common practice); "
    "uncertainty: uniform over a width of 0.05",
)
"""Only with total haemoglobin and functional saturation, when COHb and MetHb are not known."""

SOLUBILITY = Constant(
    "solubility",
    0.0225,
    "mL/dL/kPa",
    0.00045,
    "oxygen in whole blood at 37 Cel, anaesthesia texts (common practice); uncertainty: 2 %",
)

RESPIRATORY_QUOTIENT = Constant(
    "respiratory-quotient",
    0.8,
    "1",
    0.087,
    "assumed at rest (common practice); uncertainty: uniform over 0.7 to 1.0",
)

NORMAL_TEMPERATURE = Constant(
    "normal-temperature",
    37.0,
    "Cel",
    0.2,
    "reference temperature of blood gas analysis (common practice)",
)

NORMAL_DPG = Constant(
    "normal-dpg",
    5.0,
    "mmol/L",
    1.0,
    "reference of the affinity terms: Siggaard-Andersen M & O, Scand J Clin Lab Invest Suppl 1990;203:29-45",
)

STANDARD_PH = Constant(
    "standard-ph",
    7.40,
    "[pH]",
    0.0,
    "reference of the affinity terms: Siggaard-Andersen M & O, Scand J Clin Lab Invest Suppl 1990;203:29-45",
)

STANDARD_PCO2 = Constant(
    "standard-pco2",
    5.33,
    "kPa",
    0.0,
    "reference of the affinity terms: Siggaard-Andersen M & O, Scand J Clin Lab Invest Suppl 1990;203:29-45",
)

KILOPASCAL_PER_MMHG = Constant(
    "kilopascal-per-mmhg",
    0.133322,
    "kPa/mm[Hg]",
    0.0,
    "UCUM: m[Hg] = 133.3220 kPa",
)

ORDINARY_CONSUMPTION_INDEX = Constant(
    "ordinary-consumption-index",
    130.0,
    "mL/min/m2",
    0.0,
    "adults at rest, within the usual 110 to 160 (common practice); a point of reference, so without uncertainty",
)

ORDINARY_CARDIAC_INDEX = Constant(
    "ordinary-cardiac-index",
    3.0,
    "L/min/m2",
    0.0,
    "adults at rest, within the usual 2.5 to 4.0 (common practice); a point of reference, so without uncertainty",
)

CONSTANTS: tuple[Constant, ...] = (
    BINDING_OXYHAEMOGLOBIN,
    BINDING_TOTAL,
    SOLUBILITY,
    RESPIRATORY_QUOTIENT,
    NORMAL_TEMPERATURE,
    NORMAL_DPG,
    STANDARD_PH,
    STANDARD_PCO2,
    KILOPASCAL_PER_MMHG,
    ORDINARY_CONSUMPTION_INDEX,
    ORDINARY_CARDIAC_INDEX,
)

"""The vocabulary that all stages share: readings as one structured array, and the words for them.

A *reading* is one admitted value. Readings travel as rows of a NumPy array of dtype ``READING``, never as
objects; identifiers are small integers into the lists of ``Names`` and ``Origins``. Values are in the canonical
unit of their quantity (``catalogue.MEASURED``); unknown is NaN or -1.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field
from enum import IntEnum, IntFlag, auto
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fhiro2.flags import Flag

Floats = NDArray[np.float64]
Integers = NDArray[np.integer[Any]]
Flags = NDArray[np.uint64]
Truths = NDArray[np.bool_]
Readings = NDArray[np.void]

MICROSECONDS = 1_000_000
MINUTE = 60 * MICROSECONDS
HOUR = 60 * MINUTE
DAY = 24 * HOUR


class Specimen(IntEnum):
    """The kind of blood (or none) a value speaks of. UNKNOWN never becomes anything else later."""

    UNKNOWN = 0
    ARTERIAL = 1
    MIXED_VENOUS = 2
    CENTRAL_VENOUS = 3
    VENOUS = 4
    CAPILLARY = 5
    PLASMA = 6
    CORD = 7
    NONE = 8


class SpecimenEvidence(IntFlag):
    """What the kind of blood was read from; a mapped method counts as body site."""

    NOTHING = 0
    CODE = 1
    SPECIMEN = 2
    BODY_SITE = 4


class Kind(IntEnum):
    """How a value came about; lower ranks are trusted more."""

    MEASURED = 0
    SETTING = 1
    CALCULATED = 2
    ESTIMATED = 3


class Caution(IntFlag):
    """Doubts that travel with a value. The texts are in ``CAUTION_TEXT``."""

    NONE = 0
    UNIT_SPELLING = auto()
    METHOD_NOT_STATED = auto()
    CARDIAC_OUTPUT_METHOD_UNKNOWN = auto()
    CLIPPED_TO_FULL = auto()
    SEVERE_ANAEMIA_OR_TETRAMER = auto()
    TIME_ZONE_DECLARED = auto()
    TIME_AMBIGUOUS = auto()
    TIME_ORDER = auto()
    OPEN_PERIOD = auto()
    LEGACY_CODE = auto()
    CALCULATED_HAEMOGLOBIN = auto()
    MIXED_VENOUS_UNPROVEN = auto()
    INTERVAL = auto()
    SIGN_FLIPPED = auto()
    SITE_DEFAULT_UNIT = auto()
    LATE_EVIDENCE = auto()
    INACTIVE_HAEMOGLOBIN_UNKNOWN = auto()
    PRESSURE_ASSUMED = auto()
    QUOTIENT_ASSUMED = auto()
    DPG_ASSUMED = auto()
    SHIFT_ASSUMED = auto()
    NOT_STEADY = auto()
    CONTEXT_UNKNOWN = auto()
    NEGATIVE_GRADIENT = auto()
    SUSPECT_SWAP = auto()
    SUSPECT_BUBBLE = auto()
    SUSPECT_VENOUS = auto()
    FRACTIONS_DISAGREE = auto()
    DISCORDANT = auto()
    EARLIER_HAEMOGLOBIN = auto()
    LOW_DIFFERENCE = auto()
    LOW_BAROMETER = auto()
    SATURATION_TREATED_AS_CALCULATED = auto()
    CENTRAL_NOT_MIXED = auto()


CAUTION_TEXT: dict[Caution, str] = {
    Caution.UNIT_SPELLING: "unit read from a known legacy spelling",
    Caution.METHOD_NOT_STATED: "oximetry method not stated",
    Caution.CARDIAC_OUTPUT_METHOD_UNKNOWN: "cardiac output of unknown method: not used for consumption",
    Caution.CLIPPED_TO_FULL: "a value just above the possible maximum was read as the maximum",
    Caution.SEVERE_ANAEMIA_OR_TETRAMER: "severe anaemia or a tetramer unit: check the unit of haemoglobin",
    Caution.TIME_ZONE_DECLARED: "time without offset, placed by the site's declared zone",
    Caution.TIME_AMBIGUOUS: "local time occurs twice or never on that night",
    Caution.TIME_ORDER: "issued or received before it was taken",
    Caution.OPEN_PERIOD: "open period: its start was used",
    Caution.LEGACY_CODE: "deprecated code",
    Caution.CALCULATED_HAEMOGLOBIN: "haemoglobin estimated from haematocrit",
    Caution.MIXED_VENOUS_UNPROVEN: "called mixed venous by its code alone: confirm that it is pulmonary-artery blood",
    Caution.INTERVAL: "an input is known only as a bound",
    Caution.SIGN_FLIPPED: "base deficit, read as negative base excess",
    Caution.SITE_DEFAULT_UNIT: "unit taken from a signed site default",
    Caution.LATE_EVIDENCE: "an input became known more than 60 min after the anchor's own result",
    Caution.INACTIVE_HAEMOGLOBIN_UNKNOWN: "COHb and MetHb not measured",
    Caution.PRESSURE_ASSUMED: "barometric pressure assumed",
    Caution.QUOTIENT_ASSUMED: "respiratory quotient 0.8 assumed",
    Caution.DPG_ASSUMED: "DPG 5 mmol/L assumed",
    Caution.SHIFT_ASSUMED: "curve shift by pH, pCO2, COHb or MetHb assumed standard where not measured",
    Caution.NOT_STEADY: "inspired oxygen changed less than 20 min before",
    Caution.CONTEXT_UNKNOWN: "ECMO and shunt lesions not stated for this patient",
    Caution.NEGATIVE_GRADIENT: "gradient below -5 mmHg: check FiO2, barometric pressure, air bubble, temperature",
    Caution.SUSPECT_SWAP: "pO2 and pCO2 may be swapped",
    Caution.SUSPECT_BUBBLE: "air bubble suspected",
    Caution.SUSPECT_VENOUS: "possible venous sample",
    Caution.FRACTIONS_DISAGREE: "haemoglobin fractions do not add up",
    Caution.DISCORDANT: "two results of the same minute disagree",
    Caution.EARLIER_HAEMOGLOBIN: "haemoglobin from an earlier sample",
    Caution.LOW_DIFFERENCE: "arterial-venous difference within its uncertainty",
    Caution.LOW_BAROMETER: "barometric pressure below 670 mmHg: ratio not corrected for altitude",
    Caution.SATURATION_TREATED_AS_CALCULATED: "saturation equals the curve at its own pO2: treated as calculated",
    Caution.CENTRAL_NOT_MIXED: "central venous blood: not interchangeable with mixed venous",
}

READING = np.dtype(
    [
        ("patient", "i4"),
        ("subject", "i4"),
        ("effective", "i8"),
        ("known", "i8"),
        ("quantity", "i2"),
        ("value", "f8"),
        ("low", "f8"),
        ("high", "f8"),
        ("uncertainty", "f8"),
        ("answer", "i2"),
        ("specimen", "i1"),
        ("evidence", "u1"),
        ("kind", "i1"),
        ("oximetry", "?"),
        ("corrected", "?"),
        ("cautions", "u8"),
        ("encounter", "i4"),
        ("device", "i4"),
        ("sample", "i4"),
        ("origin", "i4"),
        ("part", "i2"),
    ]
)


class Why(IntEnum):
    """Why a column has no value at an anchor; KNOWN means it has one."""

    KNOWN = 0
    NEVER_RECORDED = 1
    OUTSIDE_WINDOW = 2
    TWO_CANDIDATES = 3
    STATED_ABSENT = 4
    NOT_COMPUTED_FROM_CALCULATED = 5
    INPUT_MISSING = 10
    DIFFERENT_BASIS = 11
    OUT_OF_RANGE = 12
    NO_POSITIVE_DIFFERENCE = 13
    HAEMOGLOBINS_APART = 14
    CARDIAC_OUTPUT_METHOD = 15
    SATURATION_TOO_HIGH = 16
    SUSPECT_SAMPLE = 17
    CONTEXT_EXCLUDES = 18
    UNCERTAIN_DIFFERENCE = 19
    UNBOUNDED = 20
    AGE_EXCLUDES = 21
    BEFORE_TRANSFUSION = 22


WHY_TEXT: dict[Why, str] = {
    Why.NEVER_RECORDED: "not recorded",
    Why.OUTSIDE_WINDOW: "no record near enough in time",
    Why.TWO_CANDIDATES: "two candidate samples, neither taken",
    Why.STATED_ABSENT: "stated as absent",
    Why.NOT_COMPUTED_FROM_CALCULATED: "only a calculated saturation",
    Why.INPUT_MISSING: "an input is missing",
    Why.DIFFERENT_BASIS: "the two sides of the pair were measured on different bases",
    Why.OUT_OF_RANGE: "an input is outside the formula's range",
    Why.NO_POSITIVE_DIFFERENCE: "the arterial-venous difference is not positive",
    Why.HAEMOGLOBINS_APART: "the two samples' haemoglobins are more than 6 % apart",
    Why.CARDIAC_OUTPUT_METHOD: "cardiac output of unknown method",
    Why.SATURATION_TOO_HIGH: "saturation above 97 %: the ratio says nothing there",
    Why.SUSPECT_SAMPLE: "the sample is in doubt",
    Why.CONTEXT_EXCLUDES: "excluded by the patient's support or lesion",
    Why.UNCERTAIN_DIFFERENCE: "the arterial-venous difference is within twice its uncertainty",
    Why.UNBOUNDED: "too many inputs are known only as bounds",
    Why.AGE_EXCLUDES: "excluded or not decidable by age",
    Why.BEFORE_TRANSFUSION: "haemoglobin taken before a transfusion or bleed",
}


READ_PARTS = ("value", "low", "high", "uncertainty", "cautions", "why", "source", "runner_up")


@dataclass
class Column:
    """One quantity at every anchor of a table: values with their doubt, and why a value is missing.

    ``low``/``high`` differ where only a bound is known. ``source`` and ``runner_up`` are reading rows (-1: none) and
    are filled for inputs; ``inputs``, ``missing`` and ``used`` (bit i: ``inputs[i]`` is missing, or was used) and
    ``constants`` (number of a row in ``BASES``) are filled for derived values. ``derived`` is filled for an input that
    may be computed where it was not read: the code of the value of the anchor ``source``, and '' where it was read.
    """

    value: Floats
    low: Floats
    high: Floats
    uncertainty: Floats
    cautions: Flags
    why: Integers
    source: Integers
    runner_up: Integers
    inputs: tuple[str, ...] = ()
    missing: Integers | None = None
    used: Integers | None = None
    constants: Integers | None = None
    derived: NDArray[np.str_] | None = None

    def known(self) -> Truths:
        """Where the column has a value or a bound."""
        result: Truths = self.why == Why.KNOWN
        return result


def choose(first: Truths, one: Column, other: Column) -> Column:
    """A column of readings that is ``one`` where ``first``, else ``other``."""
    return Column(*[np.where(first, getattr(one, part), getattr(other, part)) for part in READ_PARTS])


def pick(column: Column, places: Any) -> Column:
    """The rows ``places`` (numbers or truths) of a column of readings."""
    return Column(*[getattr(column, part)[places] for part in READ_PARTS])


@dataclass
class AnchorTable:
    """All anchors of one kind in a batch, in order (patient, effective, source, id#part), with their columns."""

    kind: str
    reading: Integers
    patient: Integers
    effective: Integers
    known: Integers
    columns: dict[str, Column] = field(default_factory=dict)
    facts: dict[str, NDArray[np.int8]] = field(default_factory=dict)

    def at(self, places: Any, names: Iterable[str] | None = None) -> AnchorTable:
        """The anchors ``places`` (numbers or truths) with columns of readings: all of them, or those in ``names``."""
        return AnchorTable(
            self.kind,
            self.reading[places],
            self.patient[places],
            self.effective[places],
            self.known[places],
            {name: pick(self.columns[name], places) for name in (self.columns if names is None else names)},
            {fact: state[places] for fact, state in self.facts.items()},
        )


@dataclass
class Patient:
    """What the context says of one patient after merges; ``born`` is microseconds or None, ``facts`` are rows."""

    key: str
    source: str
    reference: str
    born: int | None = None


@dataclass(frozen=True)
class Fact:
    """A context fact stated for a patient: yes or no, from ``start`` until ``end`` (microseconds)."""

    fact: str
    answer: bool
    start: int
    end: int


@dataclass
class Origins:
    """Where readings came from: one entry a resource version that gave a reading."""

    ids: list[str] = field(default_factory=list)
    versions: list[str] = field(default_factory=list)
    hashes: dict[int, str] = field(default_factory=dict)


@dataclass
class Names:
    """The strings behind the small integers of readings."""

    subjects: list[str] = field(default_factory=list)
    encounters: list[str] = field(default_factory=list)
    devices: list[str] = field(default_factory=list)
    samples: list[str] = field(default_factory=list)


@dataclass
class Timelines:
    """The readings of some patients in order, with what is needed to speak of them.

    Anchors are evaluated from ``start`` (inclusive) to ``stop`` (exclusive); readings outside serve as partners.
    """

    readings: Readings
    patients: list[Patient]
    facts: list[tuple[Fact, ...]]
    names: Names
    origins: Origins
    start: int = -(2**62)
    stop: int = 2**62


@dataclass
class Outcome:
    """What one call of the core found: the anchor tables with derived columns, and the flag episodes.

    ``held`` are the keys of patients whose flags are withheld because the evaluators of flags disagree on them.
    """

    timelines: Timelines
    tables: dict[str, AnchorTable]
    flags: list[Flag]
    held: tuple[str, ...] = ()

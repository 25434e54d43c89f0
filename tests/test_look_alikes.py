"""States that look alike, from resources to flags: which links of the oxygen chain are met, and what may be raised.

The numbers are synthetic scenarios, not patients: saturations and pressures lie on the curve of Severinghaus (J Appl
Physiol 1979;46:599), flow and uptake agree by Fick's principle. What each state must be called follows from the
definitions, worked by hand beside each scenario, for 70 kg and 170 cm (1.81 m2, Du Bois 1916, from memory), COHb 1 and
MetHb 0.5 % unless said otherwise:

- content = 1.39 x Hb x sO2 x (1 - COHb - MetHb) + 0.003 x pO2 (mL/dL; factor and solubility of the README)
- extraction = (Ca - Cv) / Ca; expected = 130 / (30 x Ca): an ordinary uptake index at a cardiac index of 3.0
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from functools import cache
from typing import Any

import numpy as np
import pytest

from fhiro2.derive import add_derived
from fhiro2.errors import Bucket
from fhiro2.flags import AxisState
from fhiro2.judge import Pack, judge, read_pack
from fhiro2.judge.axis import AXES, axis_states, axis_truths
from fhiro2.model import AnchorTable, Timelines
from fhiro2.packaged import rules_folder
from fhiro2.pair import tables
from fhiro2.settings import Settings
from fhiro2.timeline import batches
from tests.feeds import SITE, Resource, concept, mapping, observation, patient, specimen, take

ADULT = patient(birthDate="1960-02-01")
SITE_FACTS = mapping(
    specimens=[
        {"system": SITE, "code": "pulmonary", "specimen": "mixed_venous"},
        {"system": SITE, "code": "jugular", "specimen": "central_venous"},
    ],
    facts=[{"system": SITE, "code": name, "fact": name} for name in ("ecmo", "cyanotic-lesion", "intracardiac-shunt")],
)
CODES = {
    "pao2": ("2703-7", "mm[Hg]"),
    "sao2": ("2708-6", "%"),
    "fo2hb": ("2714-4", "%"),
    "hb": ("14775-1", "g/dL"),
    "cohb": ("2030-5", "%"),
    "methb": ("2615-3", "%"),
    "lactate": ("2518-9", "mmol/L"),
    "pvo2": ("19211-2", "mm[Hg]"),
    "svo2": ("19224-5", "%"),
    "scvo2": ("97549-0", "%"),
    "spo2": ("59408-5", "%"),
    "temp": ("8329-5", "Cel"),
    "co": ("8737-9", "L/min"),  # by indicator dilution, as thermodilution is
    "weight": ("29463-7", "kg"),
    "height": ("8302-2", "cm"),
}
MONITOR = {"spo2", "temp", "co", "weight", "height"}
SPECIMENS = {"pvo2": "pulmonary", "svo2": "pulmonary", "scvo2": "jugular"}
USUAL = {
    "pao2": 95, "sao2": 97.3, "hb": 14, "cohb": 1.0, "methb": 0.5, "spo2": 97, "temp": 37, "lactate": 1,
    "pvo2": 38, "svo2": 72, "co": 5, "weight": 70, "height": 170,
}  # fmt: skip
MET, NOT_MET, NOT_ASSESSABLE = "met", "not met", "not assessable"


def resources(values: dict[str, float], facts: Sequence[str] = ()) -> list[Resource]:
    """One patient's resources at noon; a value of None in ``values`` is left out."""
    made: list[Resource] = [ADULT, *(specimen(site, "BLDV", site) for site in sorted(set(SPECIMENS.values())))]
    for name, value in (USUAL | values).items():
        if value is not None:
            code, unit = CODES[name]
            drawn: dict[str, Any] = {}
            if name in SPECIMENS:
                drawn = {"specimen": {"reference": f"Specimen/{SPECIMENS[name]}"}}
            category = "vital-signs" if name in MONITOR else "laboratory"
            made.append(observation(name, code, value, unit, category=category, **drawn))
    for fact in facts:
        stated = {"resourceType": "Condition", "id": fact, "code": concept((SITE, fact))}
        made.append({**stated, "subject": {"reference": "Patient/p1"}})
    return made


@cache
def pack() -> Pack:
    return read_pack(rules_folder())


@dataclass(frozen=True)
class Found:
    """What became of one patient's resources: the arterial table, and the axes whose rules raised a flag."""

    table: AnchorTable
    raised: set[str]

    @property
    def states(self) -> dict[str, str]:
        """Each link's state at the only arterial sample."""
        return {name: state for name, state, _ in self.told()}

    def told(self) -> tuple[AxisState, ...]:
        """What a reader is told of the links."""
        [states] = axis_states(self.table, np.array([0]))
        return states

    def reason(self, axis: str) -> str:
        """The words for one link."""
        return next(words for name, _, words in self.told() if name == axis)

    def number(self, name: str) -> float:
        """A value at the sample."""
        [value] = self.table.columns[name].value.tolist()
        return float(value)


def assessed(timelines: Timelines) -> Found:
    made = tables(timelines, Settings())
    add_derived(made, timelines, Settings())
    flags, _, held = judge(pack(), timelines, made, {})
    assert held == ()
    axis = {rule.id: rule.axis for rule in pack().rules}
    return Found(made["arterial"], {axis[flag.rule] for flag in flags})


def found(facts: Sequence[str] = (), **values: Any) -> Found:
    intake = take(*resources(values, facts), given=SITE_FACTS)
    assert {bucket for bucket, number in intake.account.buckets.items() if number} == {Bucket.USED}
    [timelines] = batches(intake.readings, intake.rows.names, intake.rows.origins, intake.roster)
    return assessed(timelines)


@dataclass(frozen=True)
class Scenario:
    """A state, its numbers by hand, its links in the order gas, carrier, flow, use, and the axes of its flags.

    ``extraction`` and ``excess`` (over the expected) are None where nothing may be computed.
    """

    name: str
    values: dict[str, float]
    extraction: float | None
    excess: float | None
    index: float
    links: tuple[str, str, str, str]
    raised: set[str] = field(default_factory=set)
    facts: tuple[str, ...] = ()


ALL_WELL = (NOT_MET, NOT_MET, NOT_MET, NOT_MET)
SCENARIOS = (
    # Ca = 1.39 x 14 x 0.985 x 0.973 + 0.285 = 18.94, Cv = 13.80 + 0.11 = 13.91; expected 130 / 568 = 0.229
    Scenario("normal", {}, 0.265, 0.036, 2.76, ALL_WELL),
    # Ca = 14.86 + 0.13 = 14.98, Cv = 10.93 + 0.09 = 11.02; expected 0.289: flow makes up for the low saturation
    Scenario(
        "hypoxic, flow compensates",
        {"pao2": 42, "sao2": 77.5, "spo2": 77, "co": 6.5, "svo2": 57, "pvo2": 30, "lactate": 2},
        0.265, -0.025, 3.59, (MET, NOT_MET, NOT_MET, NOT_MET), {"gas"},
    ),
    # Ca = 7.33 + 0.29 = 7.61, Cv = 4.14 + 0.09 = 4.23; expected 0.569: an extraction that haemoglobin explains
    Scenario(
        "anaemic, high output",
        {"hb": 5.5, "co": 7.5, "svo2": 55, "pvo2": 29, "lactate": 2.5},
        0.444, -0.125, 4.14, (NOT_MET, MET, NOT_MET, NOT_MET), {"carrier"},
    ),
    # Ca as normal, Cv = 8.63 + 0.08 = 8.70 (row "stagnant": extraction 0.54)
    Scenario(
        "true low flow",
        {"co": 2.2, "svo2": 45, "pvo2": 25, "lactate": 4.5},
        0.541, 0.312, 1.21, (NOT_MET, NOT_MET, MET, NOT_MET), {"flow"},
    ),
    # Ca = 8.66 + 0.29 = 8.94, Cv = 1.60 + 0.04 = 1.64; expected 0.485: more than haemoglobin explains
    Scenario(
        "anaemia with low flow",
        {"hb": 6.5, "co": 3.2, "svo2": 18, "pvo2": 14, "lactate": 6},
        0.816, 0.332, 1.77, (NOT_MET, MET, MET, NOT_MET), {"carrier", "flow"},
    ),
    # Ca = 18.94, Cv = 17.44 + 0.18 = 17.63 (row "cyanide", uptake 90 mL/min: extraction 0.08, lactate very high)
    Scenario(
        "as after cyanide",
        {"co": 6, "svo2": 91, "pvo2": 61, "lactate": 12},
        0.069, -0.160, 3.31, (NOT_MET, NOT_MET, NOT_MET, MET), {"use"},
    ),
    # Functional saturations; factor 1.39 x 14 x 0.695 = 13.52: Ca = 13.16 + 0.29 = 13.44, Cv = 9.33 + 0.08 = 9.41
    Scenario(
        "carbon monoxide 30 %",
        {"cohb": 30, "svo2": 69, "pvo2": 26, "lactate": 3},
        0.300, -0.022, 2.76, (NOT_MET, MET, NOT_MET, NOT_MET), {"carrier"},
    ),
    # Ca = 13.32 + 0.29 = 13.61, Cv = 10.68 + 0.13 = 10.81; expected 0.319. Extraction about 0.2 with a doubt of 0.014
    # (1 point of each saturation) is not below 0.20 beyond 1.64 of them; Hb 100 g/L is not below 100.
    Scenario(
        "septic",
        {"hb": 10, "co": 9, "svo2": 78, "pvo2": 43, "lactate": 5, "temp": 38.9},
        0.206, -0.113, 4.97, ALL_WELL,
    ),
    # Uptake 500 mL/min: Ca = 18.94, Cv = 12.36 + 0.10 = 12.47; more than expected, at more than an ordinary flow
    Scenario(
        "shivering",
        {"co": 8, "svo2": 64.5, "pvo2": 34, "lactate": 3, "temp": 36},
        0.342, 0.113, 4.42, ALL_WELL,
    ),
    # A shunt from right to left: Hb 18, Ca = 19.72 + 0.14 = 19.85, Cv = 15.28 + 0.10 = 15.38; low gas is its baseline
    Scenario(
        "cyanotic lesion",
        {"hb": 18, "pao2": 45, "sao2": 80, "spo2": 80, "svo2": 62, "pvo2": 33, "lactate": 1.5},
        0.225, 0.007, 2.76, (NOT_ASSESSABLE, NOT_MET, NOT_MET, NOT_MET), facts=("cyanotic-lesion",),
    ),
    # What returns from the circuit is drawn in again: venous blood tells nothing of the tissues
    Scenario(
        "support by ECMO",
        {"co": 3, "svo2": 90, "pvo2": 60, "lactate": 6},
        None, None, 1.66, (NOT_MET, NOT_MET, NOT_ASSESSABLE, NOT_ASSESSABLE), facts=("ecmo",),
    ),
    # Ca = 18.94, Cv = 16.87 + 0.16 = 17.03: cold tissues take little
    Scenario(
        "hypothermia",
        {"temp": 33, "co": 4.5, "svo2": 88, "pvo2": 54, "lactate": 5},
        0.101, -0.128, 2.49, (NOT_MET, NOT_MET, NOT_MET, NOT_ASSESSABLE),
    ),
)  # fmt: skip


@pytest.mark.parametrize("scenario", SCENARIOS, ids=lambda scenario: scenario.name)
def test_a_state_is_called_what_it_is_and_nothing_else(scenario: Scenario) -> None:
    seen = found(scenario.facts, **scenario.values)
    assert tuple(seen.states[axis] for axis in ("gas", "carrier", "flow", "use")) == scenario.links
    assert seen.raised == scenario.raised
    assert seen.number("ci") == pytest.approx(scenario.index, abs=0.06)
    for name, number in (("ratio", scenario.extraction), ("excess", scenario.excess)):
        expected = float("nan") if number is None else number
        assert seen.number(f"oxygen-extraction-{name}") == pytest.approx(expected, abs=0.011, nan_ok=True)


def test_a_septic_extraction_clearly_below_a_fifth_is_told() -> None:
    """SvO2 0.85: Cv = 11.64 + 0.15 = 11.79, extraction 0.134, 4 to 5 doubts of 0.014 to 0.015 below 0.20."""
    seen = found(hb=10, co=9, svo2=85, pvo2=50, lactate=5, temp=38.9)
    assert seen.states["use"] == MET
    assert seen.raised == {"use"}
    assert found(hb=10, co=9, svo2=85, pvo2=50, lactate=3.9, temp=38.9).states["use"] == NOT_MET


# --- what is missing is never called absent ----------------------------------------------------------------------

NO_VENOUS: dict[str, Any] = {"pvo2": None, "svo2": None}


def test_without_venous_blood_flow_and_use_are_not_assessable() -> None:
    """Also at a low index with a high lactate, and at a good one."""
    for flow, lactate in ((2.2, 9), (6, 1)):
        seen = found(co=flow, lactate=lactate, **NO_VENOUS)
        assert (seen.states["flow"], seen.states["use"]) == (NOT_ASSESSABLE, NOT_ASSESSABLE)
        assert "not known: oxygen extraction" in seen.reason("flow").lower()
        assert not seen.raised & {"flow", "use"}


def test_central_venous_blood_does_not_stand_in_for_mixed() -> None:
    """A central venous saturation of 91 % with lactate 12, and one of 45 % at 2.2 L/min."""
    for flow, saturation, lactate in ((6, 91, 12), (2.2, 45, 5)):
        seen = found(co=flow, scvo2=saturation, lactate=lactate, **NO_VENOUS)
        assert (seen.states["flow"], seen.states["use"]) == (NOT_ASSESSABLE, NOT_ASSESSABLE)
        assert seen.table.columns["scvo2"].value.tolist() == [saturation / 100]
        assert not seen.raised & {"flow", "use"}


@pytest.mark.parametrize("absent", [{"cohb": None}, {"methb": None}, {"cohb": None, "methb": None}])
def test_a_normal_haemoglobin_alone_does_not_clear_the_carrier(absent: dict[str, Any]) -> None:
    """Pressure, pulse oximetry and haemoglobin are all normal in carbon monoxide poisoning."""
    seen = found(**absent)
    assert seen.states["carrier"] == NOT_ASSESSABLE
    for name in absent:
        assert {"cohb": "carboxy", "methb": "met"}[name] + "haemoglobin" in seen.reason("carrier")
    assert found(hb=9.9, **absent).states["carrier"] == MET


@pytest.mark.parametrize(
    ("values", "state"),
    [
        ({"cohb": 10}, NOT_MET), ({"cohb": 10.1}, MET), ({"methb": 5}, NOT_MET), ({"methb": 5.1}, MET),
        ({"hb": 10}, NOT_MET), ({"hb": 9.9}, MET), ({"hb": None}, NOT_ASSESSABLE), ({"hb": None, "cohb": 31}, MET),
    ],
)  # fmt: skip
def test_the_limits_of_the_carrier(values: dict[str, Any], state: str) -> None:
    assert found(**values).states["carrier"] == state


@pytest.mark.parametrize(
    ("values", "state"),
    [
        ({"pao2": None, "sao2": None, "spo2": 97}, NOT_ASSESSABLE),
        ({"pao2": None, "sao2": None, "spo2": None}, NOT_ASSESSABLE),
        ({"pao2": None, "sao2": None, "spo2": 80}, MET),
        ({"sao2": None, "spo2": None}, NOT_MET),
        ({"pao2": None, "spo2": None}, NOT_MET),
        ({"pao2": 59, "sao2": 91}, MET),
        ({"pao2": 61, "sao2": 89}, MET),
    ],
)
def test_pulse_oximetry_can_meet_the_gas_link_and_never_clear_it(values: dict[str, Any], state: str) -> None:
    """8 kPa are 60.0 mm[Hg]; the sample is there by its oxyhaemoglobin fraction where pressure and sO2 are not."""
    assert found(fo2hb=95.8, **values).states["gas"] == state


def test_without_an_index_flow_and_demand_cannot_be_separated() -> None:
    """The true low flow, and shivering, without flow or without body size."""
    for values in ({"svo2": 45, "pvo2": 25, "lactate": 3}, {"svo2": 64.5, "pvo2": 34, "lactate": 3}):
        for missing in ("co", "weight"):
            seen = found(**{**values, missing: None})
            assert seen.states["flow"] == NOT_ASSESSABLE
            assert "flow or demand, which cannot be separated" in seen.reason("flow")
            assert "cardiac index" in seen.reason("flow")


def test_high_extraction_at_a_good_flow_is_demand_and_an_ordinary_one_is_not() -> None:
    seen = found(co=8, svo2=64.5, pvo2=34)
    assert (seen.states["flow"], "demand" in seen.reason("flow")) == (NOT_MET, True)
    for values in ({}, {"co": None}):
        assert "demand" not in found(**values).reason("flow")


def test_every_met_link_is_told() -> None:
    """Hb 6.9 and PaO2 45 (row "hypoxic and anaemic"), with a low flow beside them: three links, and no winner."""
    seen = found(hb=6.9, pao2=45, sao2=80, spo2=80, co=2.5, svo2=20, pvo2=15, lactate=7)
    assert seen.states == {"gas": MET, "carrier": MET, "flow": MET, "use": NOT_MET}
    assert seen.raised == {"gas", "carrier", "flow"}


def test_the_reason_why_a_link_is_not_assessable_is_told() -> None:
    assert found(temp=33, svo2=88, pvo2=54, lactate=5).reason("use") == "core temperature below 35 Cel"
    assert found(temp=None).reason("use") == "not known: core temperature"
    assert found(("cyanotic-lesion",)).reason("gas") == "stated: cyanotic lesion"
    for fact in ("ecmo", "intracardiac-shunt"):
        seen = found((fact,), co=2.2, svo2=45, pvo2=25, lactate=9)
        words = f"stated: {fact.replace('-', ' ')}"
        assert {seen.reason(axis) for axis in ("flow", "use")} == {words}
        assert not seen.raised & {"flow", "use"}


def test_the_truths_of_the_links_are_the_words() -> None:
    seen = found(co=2.2, svo2=45, pvo2=25, cohb=None)
    words = {1: MET, 0: NOT_MET, -1: NOT_ASSESSABLE}
    assert {axis.name: words[int(axis_truths(axis, seen.table)[0])] for axis in AXES} == seen.states
    assert seen.states == {"gas": NOT_MET, "carrier": NOT_ASSESSABLE, "flow": MET, "use": NOT_MET}

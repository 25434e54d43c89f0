"""Episodes: against a plain retelling of the rule, and the same over any cut of the anchors."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from itertools import pairwise
from pathlib import Path
from typing import get_args

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from fhiro2.errors import StopError
from fhiro2.flags import Cited, Evidence, Flag
from fhiro2.judge import Carried, Pack, Rule, judge, read_pack
from fhiro2.judge.chain import ALONE
from fhiro2.judge.rulefile import AgeLimit, Clause, Lasting, Scope, Worse
from fhiro2.model import (
    CAUTION_TEXT,
    DAY,
    MINUTE,
    READING,
    AnchorTable,
    Caution,
    Column,
    Names,
    Origins,
    Patient,
    Timelines,
    Why,
)
from fhiro2.packaged import rules_folder
from fhiro2.settings import ContextFact

START = 1_772_344_800_000_000  # 2026-03-01T06:00:00Z
LOW_OXYGEN, LOW_HAEMOGLOBIN = "low-arterial-oxygen", "low-haemoglobin-raised-extraction"
SHIPPED = read_pack(rules_folder())
PLAIN = {"lasting": None, "worse": None, "quiet_minutes": 0, "scope": Scope(age_years=AgeLimit(least=18))}
RULES = {rule.id: rule.model_copy(update=PLAIN) for rule in SHIPPED.rules if rule.id in (LOW_OXYGEN, LOW_HAEMOGLOBIN)}
"""Two shipped rules as plain episodes, so that the tests here hold whatever else the team makes of them."""
PACK = Pack(tuple(RULES.values()), tuple(file for file in SHIPPED.files if Path(file).stem in RULES), "")
NAMES = ("pao2", "sao2", "hb", "oxygen-extraction-ratio")
NAN = float("nan")


@dataclass(frozen=True)
class Point:
    """An arterial anchor: patient, minutes after the start, values in canonical units (absent: missing)."""

    patient: int
    minutes: int
    values: Mapping[str, float]


def column(values: Sequence[float], source: NDArray[np.int64], uncertainty: float, cautions: int = 0) -> Column:
    value = np.array(values, dtype=np.float64)
    known = ~np.isnan(value)
    return Column(
        value,
        value.copy(),
        value.copy(),
        np.where(known, uncertainty, np.nan),
        np.where(known, cautions, 0).astype(np.uint64),
        np.where(known, Why.KNOWN, Why.NEVER_RECORDED).astype(np.int8),
        np.where(known, source, -1),
        np.full(len(value), -1),
    )


def laid_out(points: Sequence[Point], born: Sequence[int | None]) -> tuple[Timelines, AnchorTable]:
    """Timelines and the arterial table; haemoglobin was read five minutes earlier, in a row of its own."""
    size = len(points)
    effective = START + MINUTE * np.array([point.minutes for point in points], dtype=np.int64)
    readings = np.zeros(2 * size, READING)
    readings["patient"] = readings["subject"] = np.tile([point.patient for point in points], 2)
    readings["effective"] = np.r_[effective, effective - 5 * MINUTE]
    readings["origin"] = np.arange(2 * size)
    readings["part"] = np.repeat([2, -1], size)
    people = [Patient(f"north\nPatient/p{n}", "north", f"Patient/p{n}", one) for n, one in enumerate(born)]
    timelines = Timelines(
        readings,
        people,
        [() for _ in people],
        Names(subjects=[f"Patient/p{n}" for n in range(len(people))]),
        Origins(ids=[f"o{n}" for n in range(2 * size)], versions=["1"] * (2 * size)),
    )
    rows = np.arange(size)
    sources = {"hb": rows + size, "oxygen-extraction-ratio": np.full(size, -1)}
    doubts = {"pao2": 2.0, "sao2": 0.01, "hb": 0.1, "oxygen-extraction-ratio": 0.02}
    columns = {
        name: column([point.values.get(name, NAN) for point in points], sources.get(name, rows), doubts[name])
        for name in NAMES
    }
    patient = readings["patient"][:size].copy()
    facts = {fact: np.full(size, -1, np.int8) for fact in get_args(ContextFact)}
    return timelines, AnchorTable("arterial", rows, patient, effective, effective, columns, facts)


def adults(number: int) -> list[int | None]:
    return [START - 60 * 366 * DAY] * number


def flags_of(points: Sequence[Point], born: Sequence[int | None] | None = None, pack: Pack = PACK) -> list[Flag]:
    timelines, table = laid_out(points, adults(3) if born is None else born)
    return judge(pack, timelines, {"arterial": table}, {})[0]


def changed(rule: str, **fields: object) -> Pack:
    """A pack of one shipped rule with some fields changed."""
    document: Rule = RULES[rule].model_copy(update=fields)
    return Pack((document,), ("one.yaml",), "")


# --- the law -----------------------------------------------------------------------------------------------------

VALUE = st.fixed_dictionaries(
    {},
    optional={
        "pao2": st.sampled_from([40.0, 59.9, 60.0, 62.0, 65.3, 90.0]),
        "sao2": st.sampled_from([0.80, 0.90, 0.97]),
        "hb": st.sampled_from([5.0, 6.9, 7.0, 7.4, 7.5, 12.0]),
        "oxygen-extraction-ratio": st.sampled_from([0.2, 0.35, 0.36, 0.40, 0.41, 0.6]),
    },
)
POINTS = st.lists(st.builds(Point, st.integers(0, 2), st.integers(0, 400), VALUE), max_size=24).map(
    lambda points: sorted(points, key=lambda point: (point.patient, point.minutes))
)
BORN = st.lists(st.sampled_from([None, START - 60 * 366 * DAY, START - 5 * 366 * DAY]), min_size=3, max_size=3)


COURSES: tuple[dict[str, object], ...] = (
    {},
    {"quiet_minutes": 90},
    {"lasting": Lasting(minutes=45, at_most_apart_minutes=120)},
    {
        "lasting": Lasting(minutes=30, at_most_apart_minutes=200),
        "quiet_minutes": 60,
        "worse": Worse(severity="critical", when=Clause(quantity="pao2", below=50.0, unit="mm[Hg]")),
    },
)


@given(
    POINTS, BORN, st.lists(st.integers(0, 401), max_size=4), st.integers(0, 2), st.sampled_from(COURSES), st.booleans()
)
def test_the_whole_equals_any_cut(
    points: list[Point],
    born: list[int | None],
    times: list[int],
    apart: int,
    course: dict[str, object],
    chained: bool,
) -> None:
    """Cut in time at ``times``, and by patient: patient ``apart`` is judged in calls of its own."""
    oxygen, haemoglobin = RULES[LOW_OXYGEN].model_copy(update=course), RULES[LOW_HAEMOGLOBIN]
    pack = Pack((oxygen.model_copy(update={"needs": (LOW_HAEMOGLOBIN,)}) if chained else oxygen, haemoglobin), (), "")
    timelines, table = laid_out(points, born)
    whole, at_end, _ = judge(pack, timelines, {"arterial": table}, {})
    minutes = (table.effective - START) // MINUTE
    edges = [-1, *sorted(times), 500]
    latest: dict[tuple[str, str, str], Flag] = {}
    carried: Carried = {}
    for begin, end in pairwise(edges):
        for mine in (table.patient == apart, table.patient != apart):
            part = table.at(mine & (minutes >= begin) & (minutes < end))
            before = dict(carried)
            found, after, _ = judge(pack, timelines, {"arterial": part}, carried)
            assert carried == before
            latest.update({(flag.rule, flag.patient, flag.anchor.anchor_id): flag for flag in found})
            carried = after
    assert sorted(map(repr, latest.values())) == sorted(map(repr, whole))
    assert len(latest) == len(whole)
    assert sorted(map(repr, carried.items())) == sorted(map(repr, at_end.items()))


def retold(points: Sequence[Point], born: Sequence[int | None]) -> list[tuple[str, int, int, int | None]]:
    """The two shipped rules in plain words: (rule, patient, minutes raised, minutes cleared or None)."""
    episodes: list[tuple[str, int, int, int | None]] = []
    for rule in (LOW_OXYGEN, LOW_HAEMOGLOBIN):
        for patient in range(3):
            birth = born[patient]
            if birth is None or START - birth < 18 * 365 * DAY:
                continue
            raised: int | None = None
            for point in (one for one in points if one.patient == patient):
                get = point.values.get
                if rule == LOW_OXYGEN:
                    high, low = get("pao2", 0) >= 65.3, get("pao2", 99) < 60 or get("sao2", 1) < 0.90
                else:
                    low = get("hb", 99) < 7.0 and get("oxygen-extraction-ratio", 0) > 0.40
                    high = get("hb", 0) >= 7.5 or get("oxygen-extraction-ratio", 1) <= 0.35
                if low and raised is None:
                    raised = point.minutes
                elif high and not low and raised is not None:
                    episodes.append((rule, patient, raised, point.minutes))
                    raised = None
            if raised is not None:
                episodes.append((rule, patient, raised, None))
    return episodes


@given(POINTS, BORN)
def test_episodes_are_those_of_a_plain_retelling(points: list[Point], born: list[int | None]) -> None:
    """The limits in canonical units: 8 kPa is 60.0, 8.7 kPa 65.3 mm[Hg] (0.133322 kPa, UCUM); 10 g/L is 1 g/dL."""
    found = [
        (
            flag.rule,
            int(flag.patient[-1]),
            (flag.raised - START) // MINUTE,
            None if flag.cleared is None else (flag.cleared - START) // MINUTE,
        )
        for flag in flags_of(points, born)
    ]
    assert sorted(found, key=str) == sorted(retold(points, born), key=str)


# --- what a flag holds -------------------------------------------------------------------------------------------


def test_a_flag_freezes_what_raised_it() -> None:
    points = [
        Point(1, 60, {"hb": 6.5, "oxygen-extraction-ratio": 0.49}),
        Point(1, 90, {"hb": 6.0, "oxygen-extraction-ratio": 0.60}),
        Point(1, 120, {"hb": 9.0}),
    ]
    timelines, table = laid_out(points, adults(3))
    table.columns["hb"].cautions[0] = Caution.EARLIER_HAEMOGLOBIN
    table.columns["oxygen-extraction-ratio"].cautions[0] = Caution.CONTEXT_UNKNOWN | Caution.EARLIER_HAEMOGLOBIN
    (flag,) = judge(PACK, timelines, {"arterial": table}, {})[0]
    raised, cleared = flag.turns
    derived = replace(raised.anchor, derived="oxygen-extraction-ratio")
    assert raised.anchor == Cited("north", "Patient/p1", "o0", 2, "1", "")
    assert raised.evidence == (
        Evidence("hb", 6.5, 0.1, "g/dL", 5 * MINUTE, Cited("north", "Patient/p1", "o3", -1, "1", "")),
        Evidence("oxygen-extraction-ratio", 0.49, 0.02, "1", 0, derived),
    )
    assert cleared.evidence == (
        Evidence("hb", 9.0, 0.1, "g/dL", 5 * MINUTE, Cited("north", "Patient/p1", "o5", -1, "1", "")),
    )
    assert (raised.anchor.anchor_id, flag.patient) == ("o0#2", "north\nPatient/p1")
    assert (flag.raised, flag.cleared) == (START + 60 * MINUTE, START + 120 * MINUTE)
    assert raised.message == "Haemoglobin 65 g/L with oxygen extraction ratio 0.49 at 2026-03-01 07:00 UTC"
    texts = {CAUTION_TEXT[Caution.CONTEXT_UNKNOWN], CAUTION_TEXT[Caution.EARLIER_HAEMOGLOBIN]}
    assert set(flag.cautions) - {ALONE} == {*RULES[LOW_HAEMOGLOBIN].cautions, *texts}
    assert raised.probability == pytest.approx(0.9999966, abs=1e-6)  # normal table at 4.5, less likely than 5.0


def test_an_anchor_that_is_a_whole_observation_has_no_part() -> None:
    timelines, table = laid_out([Point(0, 0, {"pao2": 50.0})], adults(1))
    timelines.readings["part"] = -1
    assert judge(PACK, timelines, {"arterial": table}, {})[0][0].anchor.anchor_id == "o0"


def test_a_carried_episode_keeps_its_flag_and_is_returned_when_cleared() -> None:
    points = [Point(0, 0, {"pao2": 50.0}), Point(0, 30, {"pao2": 45.0}), Point(0, 60, {"pao2": 90.0})]
    timelines, table = laid_out(points, adults(1))
    parts = [table.at(table.reading == place) for place in range(3)]
    first, carried, _ = judge(PACK, timelines, {"arterial": parts[0]}, {})
    nothing, still, _ = judge(PACK, timelines, {"arterial": parts[1]}, carried)
    last, closed, _ = judge(PACK, timelines, {"arterial": parts[2]}, still)
    assert (len(first), nothing, still == carried, closed) == (1, [], True, {})
    assert [turn.kind for turn in last[0].turns] == ["raised", "cleared"]
    assert last[0].turns[:1] == first[0].turns
    assert last[0].cleared == START + 60 * MINUTE


# --- how an episode goes on --------------------------------------------------------------------------------------


def pressures(*given: tuple[int, float]) -> list[Point]:
    """Oxygen pressures of one patient at some minutes; NaN is none."""
    return [Point(0, minutes, {} if value != value else {"pao2": value}) for minutes, value in given]


def told(flags: Sequence[Flag]) -> list[list[tuple[str, int]]]:
    """The turns of each flag, with the minutes at which they came."""
    return [[(str(turn.kind), (turn.at - START) // MINUTE) for turn in flag.turns] for flag in flags]


WORSE = Worse(severity="critical", when=Clause(quantity="pao2", below=40.0, unit="mm[Hg]"))


def test_an_episode_worsens_once_and_keeps_the_worse_severity() -> None:
    points = pressures((0, 55), (30, 38), (60, 50), (90, 37), (120, 90))
    (flag,) = flags_of(points, pack=changed(LOW_OXYGEN, worse=WORSE))
    assert told([flag]) == [[("raised", 0), ("worsened", 30), ("cleared", 120)]]
    assert flag.severity == "critical"
    assert flag.latest.message.startswith("PaO2 5.07 kPa")  # 38 mm[Hg] at 0.133322 kPa
    assert [one.value for turn in flag.turns for one in turn.evidence] == [55, 38, 90]


def test_an_episode_that_begins_worse_says_both() -> None:
    (flag,) = flags_of(pressures((0, 35)), pack=changed(LOW_OXYGEN, worse=WORSE))
    assert (told([flag]), flag.severity) == ([[("raised", 0), ("worsened", 0)]], "critical")
    (flag,) = flags_of(pressures((0, 45)), pack=changed(LOW_OXYGEN, worse=WORSE))
    assert (told([flag]), flag.severity) == ([[("raised", 0)]], "warning")


def test_within_the_quiet_time_the_same_episode_goes_on() -> None:
    points = pressures((0, 50), (30, 90), (89, 50), (100, 90), (160, 50))
    assert told(flags_of(points, pack=changed(LOW_OXYGEN, quiet_minutes=60))) == [
        [("raised", 0), ("cleared", 30), ("raised again", 89), ("cleared", 100)],
        [("raised", 160)],
    ]
    assert len(flags_of(points)) == 3


@pytest.mark.parametrize(
    ("given", "raised"),
    [
        (((0, 50), (30, 50), (59, 50)), None),
        (((0, 50), (30, 50), (60, 50)), 60),
        (((0, 50), (30, 70), (60, 50), (90, 50)), None),  # what is not low ends the run
        (((0, 50), (30, NAN), (60, 50)), 60),  # what is not known does not
        (((0, 50), (150, 50), (180, 50)), None),  # too far apart
        (((0, 50), (120, 50)), 120),
    ],
)
def test_a_finding_must_last(given: tuple[tuple[int, float], ...], raised: int | None) -> None:
    pack = changed(LOW_OXYGEN, lasting=Lasting(minutes=60, at_most_apart_minutes=120))
    assert told(flags_of(pressures(*given), pack=pack)) == ([] if raised is None else [[("raised", raised)]])


def test_a_bound_is_said_as_a_bound() -> None:
    """40 mm[Hg] is 5.33 kPa (0.133322, UCUM)."""
    timelines, table = laid_out([Point(0, 0, {"pao2": 40.0})], adults(1))
    pressure = table.columns["pao2"]
    pressure.value[:], pressure.uncertainty[:], pressure.low[:] = NAN, NAN, 0.0
    (flag,) = judge(PACK, timelines, {"arterial": table}, {})[0]
    assert flag.latest.message.startswith("PaO2 at most 5.33 kPa, measured arterial saturation not known at")
    assert flag.latest.probability == 1
    pressure.low[:] = 30.0
    (flag,) = judge(PACK, timelines, {"arterial": table}, {})[0]
    assert flag.latest.message.startswith("PaO2 4.00 to 5.33 kPa,")


# --- who and when ------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("born", "number"), [(None, 0), (START - 6574 * DAY, 0), (START - 6575 * DAY, 1), (START - 80 * 365 * DAY, 1)]
)
def test_only_known_adults_are_judged(born: int | None, number: int) -> None:
    """18 Julian years are 6574.5 days."""
    assert len(flags_of([Point(0, 0, {"pao2": 50.0})], [born])) == number


def scoped(**scope: object) -> Pack:
    """The rule on low oxygen with a scope of its own."""
    return changed(LOW_OXYGEN, scope=Scope.model_validate({"age_years": {"least": 18}, **scope}))


@pytest.mark.parametrize(
    ("scope", "raised"),
    [
        ({"with": ("ecmo",)}, (1, 0, 0)),
        ({"without": ("ecmo",)}, (0, 1, 0)),
        ({"unless": ("ecmo",)}, (0, 1, 1)),
        ({"without": ("ecmo",), "with": ("pregnancy",)}, (0, 0, 0)),
    ],
)
def test_facts_of_the_scope_are_three_valued(scope: dict[str, tuple[str, ...]], raised: tuple[int, ...]) -> None:
    """Patients of whom it is stated, stated not, and not said."""
    points = [Point(patient, 0, {"pao2": 50.0}) for patient in range(3)]
    timelines, table = laid_out(points, adults(3))
    table.facts["ecmo"] = np.array([1, 0, -1], np.int8)
    flags = judge(scoped(**scope), timelines, {"arterial": table}, {})[0]
    assert [sum(flag.patient.endswith(f"p{n}") for flag in flags) for n in range(3)] == list(raised)
    silent = "nobody stated whether there is: ecmo"
    assert [silent in flag.cautions for flag in flags] == [
        scope.get("unless") is not None and flag.patient.endswith("p2") for flag in flags
    ]


def test_a_patient_who_leaves_the_scope_ends_the_episode() -> None:
    timelines, table = laid_out(pressures((0, 50), (30, 45), (60, 45)), adults(1))
    table.facts["ecmo"] = np.array([-1, 1, 1], np.int8)
    flags, carried, _ = judge(scoped(unless=("ecmo",)), timelines, {"arterial": table}, {})
    assert (told(flags), carried) == ([[("raised", 0), ("cleared", 30)]], {})


def test_blood_named_by_the_code_alone_is_not_enough_where_the_rule_says_so() -> None:
    timelines, table = laid_out([Point(n, 0, {"pao2": 50.0}) for n in range(3)], adults(3))
    timelines.readings["evidence"][:3] = [1, 3, 5]  # code; code and specimen; code and body site
    for names, patients in ((("specimen",), "1"), (("body-site",), "2"), (("specimen", "body-site"), "12")):
        flags = judge(scoped(blood_named_by=names), timelines, {"arterial": table}, {})[0]
        assert [flag.patient[-1] for flag in flags] == list(patients)


def test_an_upper_age_is_in_completed_years() -> None:
    born = [START - round(years * 365.25 * DAY) for years in (17.9, 65.9, 66.1)]
    flags = flags_of(
        [Point(n, 0, {"pao2": 50.0}) for n in range(3)], born, scoped(age_years={"least": 18, "most": 65})
    )
    assert [flag.patient[-1] for flag in flags] == ["1"]


@pytest.mark.parametrize(("severity", "number"), [("critical", 1), ("warning", 1), ("info", 0)])
def test_severity_decides_how_certain_it_must_be(severity: str, number: int) -> None:
    """58 +- 2 mm[Hg] is below 60 with probability 0.84 (normal table): enough for a warning, not for an info."""
    assert len(flags_of([Point(0, 0, {"pao2": 58.0})], pack=changed(LOW_OXYGEN, severity=severity))) == number
    assert len(flags_of([Point(0, 0, {"pao2": 56.0})], pack=changed(LOW_OXYGEN, severity=severity))) == 1


@pytest.mark.parametrize("state", ["draft", "shadow", "limited", "retired"])
def test_only_live_rules_raise(state: str) -> None:
    points = [Point(0, 0, {"pao2": 40.0})]
    assert flags_of(points, pack=changed(LOW_OXYGEN, state=state)) == []
    assert len(flags_of(points)) == 1


def test_a_rule_about_what_its_anchors_do_not_have_stops() -> None:
    timelines, table = laid_out([], adults(1))
    with pytest.raises(StopError, match="body anchors have no pao2, sao2"):
        judge(changed(LOW_OXYGEN, at="body"), timelines, {"arterial": table}, {})


def test_no_anchor_no_flag() -> None:
    timelines, table = laid_out([], [])
    assert judge(PACK, timelines, {"arterial": table}, {}) == ([], {}, ())

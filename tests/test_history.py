"""What stands after late values, corrections and retractions: as a fresh run finds it, and told against what was."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import replace
from functools import cache
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import fhiro2.assess
from fhiro2.assess import Checkpoint, assess, reassess, standing
from fhiro2.catalogue import QUANTITY
from fhiro2.flags import Flag
from fhiro2.judge import Carried, Pack, Rule
from fhiro2.judge.history import FlagKey, Withdrawn, differences, key_of
from fhiro2.model import HOUR, MICROSECONDS, MINUTE, Integers, Timelines, Truths
from fhiro2.settings import Settings
from fhiro2.timeline import batches
from tests.feeds import NOON, observation, patient, take
from tests.test_episode import COURSES, LOW_OXYGEN, NAN, RULES, START, changed, flags_of, pressures
from tests.test_way import pack as shipped
from tests.test_way import ward_timelines

EXAMPLES = settings().max_examples
OXYGEN, WINDOWS = RULES[LOW_OXYGEN], Settings().windows
REACH_BEFORE = round(WINDOWS.temperature * MINUTE)
"""How far before a reading anchors can take it: the longest window that looks ahead."""
REACH_AFTER = round((WINDOWS.haemoglobin + WINDOWS.arterial_venous + WINDOWS.repeated_sample) * MINUTE)
"""How far after a reading anchors can take it, body size and barometer aside, which no test here changes."""

Flags = dict[FlagKey, Flag]


def by_key(flags: Iterable[Flag]) -> Flags:
    return {key_of(flag): flag for flag in flags}


def folded(timelines: Timelines, pack: Pack, cuts: Sequence[int]) -> tuple[Flags, list[Checkpoint]]:
    """The flags of a fresh run over ``cuts`` in time, and what was carried past each of them."""
    flags, checkpoints, carried = Flags(), list[Checkpoint](), Carried()
    for start, stop in pairwise([timelines.start, *cuts, timelines.stop]):
        outcome, carried = assess(replace(timelines, start=start, stop=stop), Settings(), pack, carried)
        flags |= by_key(outcome.flags)
        checkpoints.append(Checkpoint(stop, carried))
    return flags, checkpoints[:-1]


class Course:
    """Readings that come, change and go, with the flags and checkpoints that stand."""

    def __init__(self, timelines: Timelines, there: Truths, pack: Pack, cuts: Sequence[int]) -> None:
        self.whole, self.there, self.pack, self.cuts = timelines, there, pack, cuts
        self.flags, self.checkpoints = folded(self.now(), pack, cuts)

    def now(self) -> Timelines:
        return replace(self.whole, readings=self.whole.readings[self.there])

    def change(self, rows: Integers, late: Truths, value: Sequence[float], *, to_the_end: bool) -> int:
        """Readings arrive where ``late``, else get a ``value``, NaN for retracted; the number of outcomes needed."""
        readings = self.whole.readings.copy()
        self.there = self.there.copy()
        for row, arrives, number in zip(rows.tolist(), late.tolist(), value, strict=True):
            self.there[row] = arrives or (self.there[row] and number == number)
            if not arrives and number == number:
                for part in ("value", "low", "high"):
                    readings[part][row] = number
        self.whole = replace(self.whole, readings=readings)
        time = readings["effective"][rows]
        first, last = int(time.min()) - REACH_BEFORE, int(time.max()) + REACH_AFTER
        last = self.whole.stop if to_the_end else last
        outcomes, checkpoints = reassess(self.now(), Settings(), self.pack, self.checkpoints, first, last)
        self.flags = by_key(standing(self.flags.values(), outcomes, checkpoints))
        self.checkpoints = checkpoints
        return len(outcomes)

    def check(self) -> None:
        """What stands is what a fresh run finds, and so is what is carried."""
        flags, checkpoints = folded(self.now(), self.pack, self.cuts)
        assert self.flags == flags
        assert self.checkpoints == checkpoints


# --- the law -----------------------------------------------------------------------------------------------------

SHOWN = {
    "po2": (45.0, 55.0, 59.0, 62.0, 70.0, 90.0),
    "so2": (0.85, 0.92, 0.97),
    "hb": (6.0, 6.9, 7.2, 7.6, 11.0),
}
HAEMOGLOBIN = Rule.model_validate(
    OXYGEN.model_dump(by_alias=True, exclude_unset=True)
    | {
        "id": "low-haemoglobin",
        "raise": {"quantity": "hb", "below": 7.0, "unit": "g/dL"},
        "clear": {"quantity": "hb", "at_least": 7.5, "unit": "g/dL"},
        "message": "Haemoglobin {hb}",
    }
)
"""Haemoglobin is taken from up to four hours before a gas, so that one reading speaks at many anchors."""
PACKS = [
    Pack((OXYGEN.model_copy(update={**course, "needs": needs}), HAEMOGLOBIN), (), "")
    for course, needs in [*((course, ()) for course in COURSES), (COURSES[3], ("low-haemoglobin",))]
]
GAPS = (5, 30, 45, 8, 120, 60, 2, 90, 180, 30, 20, 300, 60, 60)
END = sum(GAPS)


@cache
def two_patients() -> Timelines:
    """Gases of two adults at uneven times, with haemoglobins of their own, before them, or none."""
    resources = []
    for person in ("p1", "p2"):
        resources.append(patient(person, birthDate="1960-02-01"))
        for number, minutes in enumerate(np.cumsum(GAPS).tolist()):
            parts = [("gas", "2703-7", 60.0, "mm[Hg]", minutes), ("sat", "2708-6", 95.0, "%", minutes)]
            parts += [("hb", "718-7", 10.0, "g/dL", minutes - 3 * (number % 3))] if number % 3 else []
            resources += [
                observation(
                    f"{person}-{name}-{number}",
                    code,
                    value,
                    unit,
                    60 * at,
                    subject={"reference": f"Patient/{person}"},
                )
                for name, code, value, unit, at in parts
            ]
    intake = take(*resources)
    [timelines] = batches(intake.readings, intake.rows.names, intake.rows.origins, intake.roster)
    return timelines


def drawn(chance: np.random.Generator, timelines: Timelines, rows: Integers) -> list[float]:
    """A value for each of ``rows``, near the limits of the rules."""
    names = {QUANTITY[name]: values for name, values in SHOWN.items()}
    return [float(chance.choice(names[int(kind)])) for kind in timelines.readings["quantity"][rows]]


@pytest.fixture
def _nothing_derived(monkeypatch: pytest.MonkeyPatch) -> None:
    """The rules here ask for what was read alone, so that many examples can be tried."""
    monkeypatch.setattr(fhiro2.assess, "add_derived", lambda tables, timelines, settings: None)


@pytest.mark.usefixtures("_nothing_derived")
@pytest.mark.parametrize("pack", PACKS, ids=["plain", "quiet", "lasting", "all of them", "needing another"])
@settings(max_examples=EXAMPLES // 8)
@given(st.integers(0, 2**32 - 1), st.lists(st.integers(-10, END + 10), max_size=5, unique=True), st.integers(1, 3))
def test_what_stands_after_any_changes_is_what_a_fresh_run_finds(
    pack: Pack, seed: int, cuts: list[int], steps: int
) -> None:
    """Late values, corrections and retractions together, in steps of a few readings each, near in time or not."""
    chance = np.random.default_rng(seed)
    base = two_patients()
    everything = np.arange(len(base.readings))
    readings = base.readings.copy()
    readings["value"] = readings["low"] = readings["high"] = drawn(chance, base, everything)
    begin = int(readings["effective"].min()) // MINUTE * MINUTE
    at = [begin + minutes * MINUTE for minutes in sorted(cuts)]
    course = Course(replace(base, readings=readings), chance.random(len(readings)) < 0.9, pack, at)
    for _ in range(steps):
        near = np.argsort(np.abs(readings["effective"] - chance.choice(readings["effective"])))[:12]
        rows = chance.choice(near if chance.random() < 0.7 else everything, 3, replace=False)
        value = np.where(chance.random(3) < 0.4, NAN, drawn(chance, base, rows))
        course.change(rows, ~course.there[rows], value.tolist(), to_the_end=bool(chance.random() < 0.3))
    course.check()


@settings(max_examples=EXAMPLES // 15)
@given(st.integers(0, 2**32 - 1))
def test_the_same_holds_for_the_ward_with_everything_derived(seed: int) -> None:
    """The six busy beds under the shipped rules; what is late, wrong or withdrawn lies near the turn of a flag."""
    chance = np.random.default_rng(seed)
    (ward,) = ward_timelines()
    readings = ward.readings[ward.readings["patient"] < 6]
    usual = np.isin(readings["quantity"], [QUANTITY[name] for name in SHOWN])
    there = (chance.random(len(readings)) < 0.8) | ~usual
    span = readings["effective"].min(), readings["effective"].max()
    course = Course(replace(ward, readings=readings), there, shipped(), sorted(chance.integers(*span, 3).tolist()))
    turns = [turn.at for flag in course.flags.values() for turn in flag.turns] or [int(span[0])]
    near = np.flatnonzero(usual & (np.abs(readings["effective"] - chance.choice(turns)) < 4 * HOUR))
    rows = chance.choice(near, min(4, len(near)), replace=False)
    value = np.where(chance.random(len(rows)) < 0.3, NAN, drawn(chance, course.whole, rows))
    course.change(rows, ~course.there[rows], value.tolist(), to_the_end=False)
    course.check()


# --- how far it goes ---------------------------------------------------------------------------------------------


def course_of(pack: Pack, low: Sequence[int], cuts: Sequence[int]) -> Course:
    """One patient of ``two_patients`` with pressures of 90, and 50 at the samples ``low``, cut at some minutes."""
    base = two_patients()
    readings = base.readings[(base.readings["patient"] == 0) & (base.readings["quantity"] == QUANTITY["po2"])].copy()
    for part in ("value", "low", "high"):
        readings[part] = np.where(np.isin(np.arange(len(readings)), low), 50.0, 90.0)
    noon = int(NOON.timestamp()) * MICROSECONDS
    at = [noon + minutes * MINUTE for minutes in cuts]
    return Course(replace(base, readings=readings), np.ones(len(readings), dtype=bool), pack, at)


def turns_of(course: Course) -> list[list[str]]:
    return [[str(turn.kind) for turn in flag.turns] for flag in course.flags.values()]


PLAIN = PACKS[0]


@pytest.mark.usefixtures("_nothing_derived")
def test_it_ends_where_what_is_carried_is_as_it_was() -> None:
    """The sample of minute 35, of those from 5 to 1010, is corrected twice: first raised earlier, then as it was."""
    course = course_of(PLAIN, [2, 3, 11], [570, 890, 1010])
    assert course.change(np.array([1]), np.array([False]), [50.0], to_the_end=False) == 1
    course.check()
    assert turns_of(course) == [["raised", "cleared"]] * 2
    assert course.change(np.array([1]), np.array([False]), [90.0], to_the_end=True) == 4
    course.check()


@pytest.mark.usefixtures("_nothing_derived")
def test_a_cleared_flag_whose_clearing_value_is_retracted_stands_again() -> None:
    """Raised in minute 88, cleared from 208 on: no anchor turns it any more, it is only taken on past minute 120."""
    course = course_of(PLAIN, [3], [120, 600])
    assert turns_of(course) == [["raised", "cleared"]]
    rows = np.arange(4, 14)
    course.change(rows, np.zeros(10, dtype=bool), [NAN] * 10, to_the_end=False)
    course.check()
    assert turns_of(course) == [["raised"]]


@pytest.mark.usefixtures("_nothing_derived")
def test_without_a_checkpoint_before_the_change_all_is_assessed_again() -> None:
    course = course_of(PLAIN, [0, 7], [])
    assert course.change(np.array([0]), np.array([False]), [90.0], to_the_end=False) == 1
    course.check()
    assert (len(course.flags), course.checkpoints) == (1, [])


# --- against what was given --------------------------------------------------------------------------------------


def oxygen(*values: float) -> list[Flag]:
    """The flags of one patient's pressures every half hour; NaN is a sample without one."""
    return flags_of(
        pressures(*((30 * number, value) for number, value in enumerate(values))), pack=changed(LOW_OXYGEN)
    )


def minutes(flag: Flag) -> int:
    return (flag.raised - START) // MINUTE


def test_joined_episodes_keep_the_earliest_key() -> None:
    """The pressure that cleared the first one was wrong: two episodes are one."""
    before, now = oxygen(50, 90, 50, 90), oxygen(50, 62, 50, 90)
    found = differences(before, now)
    assert (found.raised, found.changed, found.unchanged) == ((), tuple(now), ())
    assert found.withdrawn == (Withdrawn(before[1], key_of(before[0])),)
    assert key_of(now[0]) == key_of(before[0])


def test_a_split_episode_keeps_its_key_and_the_rest_is_raised() -> None:
    before, now = oxygen(50, 62, 50, 90), oxygen(50, 90, 50, 90)
    found = differences(before, now)
    assert (found.raised, found.changed, found.withdrawn) == ((now[1],), (now[0],), ())


def test_an_episode_that_began_earlier_takes_the_place_of_the_later() -> None:
    """The late value of minute 0 raises it before; the flag of minute 30 was right by what was known."""
    before, now = oxygen(NAN, 50, 90), oxygen(50, 50, 90)
    found = differences(before, now)
    assert (found.raised, found.withdrawn) == (tuple(now), (Withdrawn(before[0], key_of(now[0])),))
    assert [minutes(flag) for flag in (*before, *now)] == [30, 0]


def test_what_was_never_there_is_withdrawn_for_nothing() -> None:
    before, now = oxygen(50, 90, 50, 90), oxygen(90, 90, 50, 90)
    found = differences(before, now)
    assert found.withdrawn == (Withdrawn(before[0], None),)
    assert (found.unchanged, found.raised, found.changed) == (tuple(now), (), ())


def test_another_rule_or_patient_is_no_heir() -> None:
    [flag] = oxygen(50)
    for other in (replace(flag, rule="another"), replace(flag, patient="north\nPatient/p1")):
        turn = replace(other.turns[0], anchor=replace(other.anchor, observation="another"))
        assert differences([flag], [replace(other, turns=(turn,))]).withdrawn == (Withdrawn(flag, None),)


def test_two_patients_found_to_be_one_keep_their_flags() -> None:
    """The key holds the subject as written: the flag is the same, of another patient."""
    [flag] = oxygen(50)
    merged = replace(flag, patient="north\nPatient/root")
    assert differences([flag], [merged]).changed == (merged,)


@given(st.lists(st.sampled_from([50.0, 62.0, 90.0, NAN]), min_size=8, max_size=8), st.data())
def test_every_flag_of_either_run_is_told_once(values: list[float], data: st.DataObject) -> None:
    """And what is withdrawn has an heir exactly if a standing episode shares a sample's time with it."""
    later = [data.draw(st.sampled_from([value, 50.0, 90.0, NAN])) for value in values]
    before, now = oxygen(*values), oxygen(*later)
    found = differences(before, now)
    assert sorted(map(repr, (*found.raised, *found.changed, *found.unchanged))) == sorted(map(repr, now))
    assert [flag for flag in before if flag in found.unchanged] == [flag for flag in now if flag in before]
    gone = by_key(before).keys() - by_key(now).keys()
    assert {key_of(one.flag) for one in found.withdrawn} == gone
    for one in found.withdrawn:
        sharing = [flag for flag in now if covered(flag, 8) & covered(one.flag, 8)]
        assert one.replaced_by == (key_of(min(sharing, key=minutes)) if sharing else None)


def covered(flag: Flag, samples: int) -> set[int]:
    """The half hours from the raising to the clearing sample, both taken along."""
    last = 30 * samples if flag.cleared is None else (flag.cleared - START) // MINUTE
    return set(range(minutes(flag), last + 1, 30))

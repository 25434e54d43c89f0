"""Chaining: both evaluators against the definition, the fence against each measured fault of the library, files."""

from __future__ import annotations

import importlib.util
import os
import subprocess
import sys
from collections.abc import Mapping
from dataclasses import replace
from datetime import date
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fhiro2.assess import assess
from fhiro2.cli import evaluators
from fhiro2.errors import StopError
from fhiro2.flags import Flag
from fhiro2.judge import Pack, Standing, chain, check_pack, judge, read_pack
from fhiro2.judge.chain import Chain, ForwardChainer, fnv1a
from fhiro2.judge.rulefile import MOST_NEEDED
from fhiro2.packaged import rules_folder
from fhiro2.settings import Settings
from tests.test_episode import LOW_HAEMOGLOBIN, LOW_OXYGEN, PACK, RULES, Point, adults, laid_out
from tests.test_way import ward_timelines

ALIKE = ("294a136d-0909-4f2f-81aa-1fcbb871879f", "08510b35-6da4-4a47-bf2e-6e6d2aa726e8")
SMALL = {"a": frozenset("b"), "b": frozenset[str](), "c": frozenset("ab")}
OXYGEN_NEEDS_BOTH = RULES[LOW_OXYGEN].model_copy(update={"needs": (LOW_HAEMOGLOBIN,)})
CHAINED = Pack((OXYGEN_NEEDS_BOTH, RULES[LOW_HAEMOGLOBIN]), ("one.yaml", "two.yaml"), "")
BLOODLESS = {"hb": 6.0, "oxygen-extraction-ratio": 0.6}
with_durable = pytest.mark.skipif(
    importlib.util.find_spec("durable") is None, reason="durable-rules is not installed: the built-in works alone"
)


def engine() -> Any:
    from durable import engine

    return engine


def run(script: str, *arguments: object, **environment: str) -> list[str]:
    """What ``script`` prints in an interpreter of its own, since the library can end it."""
    ended = subprocess.run(
        [sys.executable, "-c", script, *map(str, arguments)],
        env={**os.environ, **environment},
        capture_output=True,
        text=True,
    )
    assert ended.returncode == 0, ended.stderr
    return ended.stdout.split()


# --- both evaluators, by the definition ----------------------------------------------------------------------------


def test_a_flag_waits_for_what_it_needs() -> None:
    found = Chain(SMALL)
    for findings, flags in (("", ""), ("a", ""), ("b", "b"), ("ab", "ab"), ("bc", "b"), ("ac", ""), ("abc", "abc")):
        assert found.flags(frozenset(findings)) == frozenset(flags)


AGREEMENT = """
import random, sys
from durable import engine
from fhiro2.judge.chain import ForwardChainer, satisfied
chance, asked = random.Random(7), 0
for size in [*range(1, 41), 63, 64, 126, 127] * (int(sys.argv[1]) // 11_000 + 1):
    rules = [f"rule-{number}" for number in range(size)]
    needs = {rule: frozenset(chance.sample(rules, min(size, chance.randint(0, 3)))) - {rule} for rule in rules}
    forward = ForwardChainer(engine, needs)
    for _ in range(250):
        share = chance.random()
        findings = frozenset(rule for rule in rules if chance.random() < share)
        plain = {rule for rule in rules if rule in findings and all(one in findings for one in needs[rule])}
        assert forward.flags(findings) == satisfied(needs, findings) == plain, (needs, findings)
        asked += 1
print(asked)
"""


@with_durable
def test_both_evaluators_agree_with_the_definition(request: pytest.FixtureRequest) -> None:
    least = 100_000 if request.config.getoption("--full") else 10_000
    assert int(run(AGREEMENT, least)[0]) >= least


@given(st.integers(1, 20), st.integers(0, 30), st.integers(0, 2**32 - 1))
def test_anchors_grouped_by_their_set_get_the_flags_of_each(rules: int, anchors: int, seed: int) -> None:
    """Each anchor on its own, by the definition, is what the grouped call gives."""
    chance = np.random.default_rng(seed)
    names = [f"r{number}" for number in range(rules)]
    needs = {name: frozenset(chance.choice(names, min(rules, 2)).tolist()) - {name} for name in names}
    values = np.where(chance.random((rules, anchors)) < 0.6, chance.random((rules, anchors)), np.nan)
    with pytest.MonkeyPatch.context() as patched:
        patched.setitem(sys.modules, "durable", None)
        found, torn = Chain(needs).raising(dict(zip(names, values, strict=True)))
    assert not len(torn)
    for row, name in enumerate(names):
        for place in range(anchors):
            there = all(not np.isnan(values[names.index(one), place]) for one in (name, *needs[name]))
            expected = values[row, place] if there else np.nan
            np.testing.assert_equal(found[name][place], expected)


def test_hiding_the_library_gives_the_same_flags_and_says_so(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(sys.modules, "durable", None)
    alone = Chain(SMALL)
    assert alone.evaluators == ("built-in",)
    assert alone.remarks == {chain.ALONE}
    assert alone.flags(frozenset("abc")) == frozenset("abc")
    assert alone.flags(frozenset("ac")) == frozenset()
    assert "built-in one alone" in evaluators(alone.evaluators)


@with_durable
def test_the_ward_has_the_same_flags_without_the_library(monkeypatch: pytest.MonkeyPatch) -> None:
    """But for the caution that says so; and both evaluators agree on the whole ward."""
    pack = read_pack(rules_folder())

    def found() -> list[Flag]:
        chain._chain.cache_clear()
        outcomes = [assess(timelines, Settings(), pack)[0] for timelines in ward_timelines()]
        assert all(outcome.held == () for outcome in outcomes)
        return [flag for outcome in outcomes for flag in outcome.flags]

    both = found()
    monkeypatch.setitem(sys.modules, "durable", None)
    alone = found()
    chain._chain.cache_clear()
    assert both
    assert all(chain.ALONE in flag.cautions for flag in alone)
    assert both == [
        replace(flag, cautions=tuple(one for one in flag.cautions if one != chain.ALONE)) for flag in alone
    ]


@with_durable
def test_with_the_library_two_evaluators_are_named() -> None:
    assert Chain(SMALL).evaluators == ("durable-rules 2.0.28", "built-in")
    assert Chain(SMALL).remarks == frozenset()
    assert "durable-rules 2.0.28 and built-in, which must agree" in evaluators(Chain(SMALL).evaluators)


def careless(needs: Mapping[str, frozenset[str]], findings: frozenset[str]) -> frozenset[str]:
    """An evaluator that forgets what flags need."""
    return frozenset(findings)


@with_durable
def test_a_wrong_evaluator_is_caught_at_load(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(chain, "satisfied", careless)
    with pytest.raises(StopError, match="disagree on c; the pack is not to be used"):
        Chain(SMALL)
    many = {f"r{number}": frozenset({f"r{(number + 1) % 20}"}) for number in range(20)}
    with pytest.raises(StopError, match="disagree on r"):
        Chain(many)
    Chain(dict.fromkeys(SMALL, frozenset()))


@with_durable
def test_a_disagreement_at_run_time_holds_the_patient_and_no_other(monkeypatch: pytest.MonkeyPatch) -> None:
    pack = Pack((RULES[LOW_HAEMOGLOBIN], OXYGEN_NEEDS_BOTH), ("two.yaml", "one.yaml"), "")
    points = [Point(0, 0, {"pao2": 40.0}), Point(1, 0, BLOODLESS), Point(1, 30, BLOODLESS | {"pao2": 40.0})]
    timelines, table = laid_out([*points, Point(2, 0, BLOODLESS), Point(2, 30, {"pao2": 40.0})], adults(3))
    before, carried, held = judge(pack, timelines, {"arterial": table}, {})
    assert held == ()
    assert [flag.patient[-1] for flag in before] == ["1", "2", "1"]
    chain.chain_of(pack.rules).flags.cache_clear()  # type: ignore[attr-defined]
    monkeypatch.setattr(chain, "satisfied", careless)
    flags, after, held = judge(pack, timelines, {"arterial": table}, {("north\nPatient/p2", "else"): Standing()})
    assert held == ("north\nPatient/p0", "north\nPatient/p2")
    assert flags == [flag for flag in before if flag.patient.endswith("p1")]
    assert after == {key: one for key, one in carried.items() if key[0].endswith("p1")} | {
        ("north\nPatient/p2", "else"): Standing()
    }


# --- the fence -----------------------------------------------------------------------------------------------------


def test_the_hash_is_the_one_that_the_library_uses() -> None:
    """Test vectors of FNV-1a 32 (Eastlake et al., The FNV Non-Cryptographic Hash Algorithm; from memory)."""
    assert [fnv1a(text) for text in ("", "a", "foobar")] == [0x811C9DC5, 0xE40C292C, 0xBF9CF968]
    assert fnv1a(ALIKE[0]) == fnv1a(ALIKE[1])


LIBRARY_MIXES_TWO = """
import sys
from durable import engine
seen = []
both = {"all": [{"a": {"k": "x"}}, {"b": {"k": "y"}}], "run": lambda context: seen.append(context)}
rules = engine.Ruleset("mix", None, {"both": both})
for place, finding in zip(sys.argv[1:], "xy"):
    state = rules.assert_fact({"sid": place, "id": finding, "k": finding})
    rules.do_actions(state, lambda error, _: None)
print(len(seen))
"""


@with_durable
def test_two_patients_with_one_hash_never_share_memory() -> None:
    """The library alone joins the findings of these two session names; the flags of two such patients stay apart."""
    assert run(LIBRARY_MIXES_TWO, *ALIKE) == ["1"]
    points = [Point(0, 0, {"pao2": 40.0}), Point(1, 0, BLOODLESS), Point(2, 0, {"pao2": 40.0, **BLOODLESS})]
    timelines, table = laid_out(points, adults(3))
    for patient, key in zip(timelines.patients, ALIKE, strict=False):
        patient.key = key
    flags, _, _ = judge(CHAINED, timelines, {"arterial": table}, {})
    third = timelines.patients[2].key
    assert sorted((flag.rule, flag.patient) for flag in flags) == sorted(
        [(LOW_HAEMOGLOBIN, ALIKE[1]), (LOW_HAEMOGLOBIN, third), (LOW_OXYGEN, third)]
    )


@with_durable
def test_rules_with_one_hash_are_refused() -> None:
    with pytest.raises(StopError, match="same 32-bit hash"):
        Chain(dict.fromkeys(ALIKE, frozenset()))


SESSIONS = """
import random, resource, sys
from itertools import combinations
from durable import engine
from fhiro2.judge.chain import ForwardChainer, satisfied
rules = [f"rule-{number}" for number in range(24)]
needs = {rule: frozenset(rules[(number + step) % 24] for step in range(1, number % 4))
         for number, rule in enumerate(rules)}
forward = ForwardChainer(engine, needs)
few = [frozenset(some) for size in (1, 2, 3) for some in combinations(rules, size)]
sets = random.Random(3).sample(few, 2000)
answers = [satisfied(needs, one) for one in sets]
def peak():
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss // 1024
right, size = 0, 0
for number in range(int(sys.argv[1])):
    right += forward.flags(sets[number % 2000]) == answers[number % 2000]
    size = size or (peak() if number == 1999 else 0)
print(right, len(set(sets)), peak() - size)
"""


@with_durable
@pytest.mark.parametrize(("perturb", "tenfold"), [("0", True), ("165", False)])
def test_many_sessions_are_all_answered_in_flat_memory(
    perturb: str, tenfold: bool, request: pytest.FixtureRequest
) -> None:
    """2,000 different sets (the library ends at 1,024 sessions), over and over; memory in MB after the first 2,000.

    Also where freed memory is overwritten, which brings crashes to light.
    """
    number = (100_000 if tenfold else 10_000) * (10 if request.config.getoption("--full") else 1)
    right, different, growth = map(int, run(SESSIONS, number, MALLOC_PERTURB_=perturb))
    assert (right, different) == (number, 2000)
    assert growth < 20


class Broken(list[str]):
    def append(self, _: str) -> None:
        raise OSError("planted")


@with_durable
def test_an_error_in_an_action_surfaces_and_stays() -> None:
    forward = ForwardChainer(engine(), SMALL)
    assert forward.flags(frozenset("b")) == frozenset("b")
    forward._fired = Broken()
    with pytest.raises(StopError, match="an error was left behind"):
        forward.flags(frozenset("b"))
    forward._fired = []
    with pytest.raises(StopError, match="failed on b"):
        forward.flags(frozenset("b"))


@with_durable
def test_an_error_of_the_library_surfaces() -> None:
    """A fact that is there already is refused by the library."""
    forward = ForwardChainer(engine(), SMALL)
    ((_, ruleset),) = forward._parts
    ruleset.assert_fact({"sid": chain.SESSION, "id": "b", "k": "b"})
    with pytest.raises(StopError, match="MessageObservedException"):
        forward.flags(frozenset("ab"))


@pytest.mark.parametrize(
    ("finding", "error"),
    [("100", ValueError), ("", ValueError), (100, TypeError), (9.5, TypeError), (True, TypeError), (None, TypeError)],
)
def test_only_ids_of_rules_are_findings(finding: Any, error: type[Exception], monkeypatch: pytest.MonkeyPatch) -> None:
    """The library takes text and truth values for numbers; nothing of the kind gets as far."""
    found = Chain(SMALL)

    def reached(*_: object) -> None:
        raise AssertionError("asked")

    monkeypatch.setattr(ForwardChainer, "flags", reached)
    with pytest.raises(error, match="pass ids of rules"):
        found.flags(frozenset([finding]))


def test_packs_beyond_what_was_proven_are_refused() -> None:
    with pytest.raises(StopError, match="split the pack"):
        Chain({f"r{number}": frozenset() for number in range(201)})
    with pytest.raises(StopError, match="rule r9: needs more than 3"):
        Chain({f"r{number}": frozenset(f"r{one}" for one in range(4 * (number == 9))) for number in range(10)})
    with pytest.raises(StopError, match="not in the pack"):
        Chain({"a": frozenset("b")})


LARGEST = """
from durable import engine
from fhiro2.judge.chain import ForwardChainer
rules = [f"rule-{number}" for number in range(200)]
forward = ForwardChainer(engine, {rule: frozenset(rules[:3]) - {rule} for rule in rules})
print(len(forward.flags(frozenset(rules))), len(forward.flags(frozenset(rules[1:]))), len(forward._parts))
"""


@with_durable
def test_the_largest_pack_is_answered_in_rulesets_of_64() -> None:
    """All 200 need three findings; without one of these none is left. 63 flags and the catch-all are a ruleset."""
    assert run(LARGEST) == ["200", "0", "4"]


# --- rule files and cases ------------------------------------------------------------------------------------------


def written(folder: Path, needs: Mapping[str, str], **changes: tuple[str, str]) -> dict[str, Path]:
    """Two shipped rules with ``needs``, and what ``changes`` says of the one with low haemoglobin."""
    paths = {}
    files = dict(zip([rule.id for rule in PACK.rules], PACK.files, strict=True))
    for name in (LOW_OXYGEN, LOW_HAEMOGLOBIN):
        text = (rules_folder() / files[name]).read_text(encoding="utf-8")
        if name in needs:
            text = text.replace("at: arterial\n", f"at: arterial\nneeds: {needs[name]}\n")
        for old, new in changes.values() if name == LOW_HAEMOGLOBIN else ():
            assert old in text
            text = text.replace(old, new)
        paths[name] = folder / f"{name}.yaml"
        paths[name].write_text(text, encoding="utf-8")
    return paths


@pytest.mark.parametrize(
    ("needs", "said"),
    [
        ("[no-such-rule]", "no rule 'no-such-rule' in this pack"),
        (f"[{LOW_OXYGEN}]", "this rule itself"),
        ("[]", "an empty list"),
        ("", "Input should be"),
        (LOW_HAEMOGLOBIN, "Input should be"),
        ("[a, b, c, d]", f"at most {MOST_NEEDED} items"),
    ],
)
def test_needs_that_cannot_be_are_named_with_their_place(needs: str, said: str, tmp_path: Path) -> None:
    path = written(tmp_path, {LOW_OXYGEN: needs})[LOW_OXYGEN]
    line = path.read_text(encoding="utf-8").split("needs:")[0].count("\n") + 1
    with pytest.raises(StopError) as caught:
        read_pack(tmp_path)
    (mistake,) = str(caught.value).splitlines()
    assert mistake.startswith(f"{path}:{line}:")
    assert said in mistake


def test_needs_in_a_circle_are_named_in_both_files(tmp_path: Path) -> None:
    paths = written(tmp_path, {LOW_OXYGEN: f"[{LOW_HAEMOGLOBIN}]", LOW_HAEMOGLOBIN: f"[{LOW_OXYGEN}]"})
    with pytest.raises(StopError) as caught:
        read_pack(tmp_path)
    lines = str(caught.value).splitlines()
    assert sorted(line.split(":")[0] for line in lines) == sorted(map(str, paths.values()))
    assert all("this rule itself" in line for line in lines)


@pytest.mark.parametrize(
    ("change", "said"),
    [
        (("at: arterial", "at: mixed-venous"), "is at mixed-venous anchors, not at arterial"),
        (("state: live", "state: draft"), "is draft, so that this live rule could raise nothing"),
    ],
)
def test_a_needed_rule_is_live_at_the_same_anchors(change: tuple[str, str], said: str, tmp_path: Path) -> None:
    written(tmp_path, {LOW_OXYGEN: f"[{LOW_HAEMOGLOBIN}]"}, one=change)
    with pytest.raises(StopError, match=said):
        read_pack(tmp_path)


def test_cases_go_through_the_chain(tmp_path: Path) -> None:
    """With the need, the cases that give no haemoglobin no longer flag; one that gives all that is needed does."""
    path = written(tmp_path, {LOW_OXYGEN: f"[{LOW_HAEMOGLOBIN}]"})[LOW_OXYGEN]
    text = path.read_text(encoding="utf-8")
    begin = text.index("cases:\n")
    needed = (
        'hb: {value: 60, unit: g/L, uncertainty: 1}, oxygen-extraction-ratio: {value: 0.6, unit: "1", uncertainty: 0}'
    )
    low = "after_minutes: 0, age_years: 60, pao2: {value: 7, unit: kPa, uncertainty: 0.3}"
    severe = low.replace("value: 7", "value: 5")
    high = 'sao2: {value: 97, unit: "%", uncertainty: 1}, after_minutes: 0, age_years: 60, pao2: {value: 12, unit: kPa'
    told = "PaO2 7.00 kPa, measured arterial saturation not known at 2000-01-01 00:00 UTC"
    worse = told.replace("7.00", "5.00")
    cases = f"""cases:
  - {{name: both, given: [{{{low}, {needed}}}], expect: flag, message: "{told}"}}
  - {{name: both and severe, given: [{{{severe}, {needed}}}], expect: worsened, message: "{worse}"}}
  - {{name: need not known, given: [{{{low}}}], expect: unknown}}
  - {{name: need not met, given: [{{{low}, {needed.replace("value: 60", "value: 120")}}}], expect: none}}
  - {{name: need alone, given: [{{{high}, uncertainty: 0.3}}, {needed}}}], expect: none}}
"""
    path.write_text(text[:begin] + cases, encoding="utf-8")
    report = check_pack(tmp_path, date(2026, 12, 1))
    assert report.failures == ()
    path.write_text(text[:begin] + cases.replace("expect: unknown", "expect: none"), encoding="utf-8")
    with pytest.raises(StopError, match="no case expects 'unknown'"):
        check_pack(tmp_path, date(2026, 12, 1))
    path.write_text(text, encoding="utf-8")
    failures = check_pack(tmp_path, date(2026, 12, 1)).failures
    assert any("'low pressure'" in one and "got unknown (not known: hb, oxygen-extr" in one for one in failures)


def test_a_value_that_no_needed_rule_asks_for_is_refused(tmp_path: Path) -> None:
    path = written(tmp_path, {LOW_OXYGEN: f"[{LOW_HAEMOGLOBIN}]"})[LOW_OXYGEN]
    text = path.read_text(encoding="utf-8")
    old = "{after_minutes: 0, age_years: 60}"
    path.write_text(text.replace(old, old[:-1] + ", paco2: {value: 5, unit: kPa, uncertainty: 0}}"), encoding="utf-8")
    with pytest.raises(StopError, match="only for pao2, sao2, hb, oxygen-extraction-ratio"):
        read_pack(tmp_path)

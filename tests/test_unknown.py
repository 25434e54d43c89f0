"""Nothing that is missing decides a shipped rule: what a deleted value could turn either way is unknown, and says so.

Each input of the last moment of each case (a quantity, the age, a fact, what names the blood) is deleted in turn. The
answer without it is compared with the answers for its *completions*: values around and between all limits that the
rule compares it with and far beyond them, each with no doubt, its own and a large one; facts stated as there and as
not there; ages in and out of scope. Two laws, Kleene's own (Introduction to Metamathematics, 1952, section 64):

- an answer that stands without the value stands for every completion of it;
- where completions make the answer true and false, it is unknown, and the value is named as missing.

Two kinds of question are about absence itself, and are answered by it. A clause ``unknown: quantity`` is true where
the quantity is missing: to compare like with like it is asked here of a quantity that is missing in every completion
too, so that only the comparisons see the completed values. A fact under ``unless`` leaves a patient out only where it
is stated: unsaid it counts as absent, and the flag must carry the caution that nobody spoke of it.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from itertools import pairwise, product
from typing import Any

import numpy as np
import pytest

from fhiro2.catalogue import INPUT_BY_NAME, decimals_of, unit_of
from fhiro2.judge import Rule, read_pack
from fhiro2.judge import finding as judge_finding
from fhiro2.judge.cases import laid_out
from fhiro2.judge.condition import (
    FALSE,
    TRUE,
    UNKNOWN,
    Comparison,
    Condition,
    Finding,
    canonical,
    conjunction,
    evaluate,
    leaves,
)
from fhiro2.judge.finding import finding
from fhiro2.judge.rulefile import Case, Given, Moment
from fhiro2.judge.turn import Turns
from fhiro2.model import Column
from fhiro2.packaged import rules_folder

PACK = read_pack(rules_folder())
BY_ID = {rule.id: rule for rule in PACK.rules}
BLOOD = "kind of blood"


@dataclass(frozen=True)
class Deletion:
    """The last moment of a case without one input, and with each of its completions."""

    name: str
    without: Moment
    completed: tuple[Moment, ...]


def changed(moment: Moment, without: str = "", **parts: Any) -> Moment:
    """The moment with other parts, and ``without`` one value."""
    own = {name: getattr(moment, name) for name in Moment.model_fields}
    values = {name: value for name, value in moment.values.items() if name != without}
    return Moment.model_validate({**own, **values, **parts})


def completions(name: str, given: Given, rules: tuple[Rule, ...]) -> Iterator[Given]:
    """Values around, between and far beyond the limits that any condition of ``rules`` has for a quantity."""
    conditions = [one for rule in rules for one in (rule.raises, rule.clears, rule.worsens) if one is not None]
    asked = [leaf for condition in conditions for leaf in leaves(condition) if isinstance(leaf, Comparison)]
    limits = sorted({leaf.limit for leaf in asked if leaf.quantity == name}) or [1.0]
    step, far = 10.0 ** -decimals_of(name), 10 * (abs(limits[0]) + abs(limits[-1])) + 1
    around = [limit + side * step for limit in limits for side in (-1, 0, 1)]
    between = [(one + other) / 2 for one, other in pairwise(limits)]
    own = given.uncertainty * canonical(name, given.unit).factor
    for value, doubt in product([*around, *between, limits[0] - far, limits[-1] + far], (0.0, own, far)):
        yield Given(value=value, unit=unit_of(name), uncertainty=doubt)


def deletions(case: Case, rules: tuple[Rule, ...]) -> Iterator[Deletion]:
    last = case.given[-1]
    for name, given in last.values.items():
        completed = tuple(changed(last, **{name: one}) for one in completions(name, given, rules))
        yield Deletion(name, changed(last, without=name), completed)
    for fact in last.facts:
        others = {key: there for key, there in last.facts.items() if key != fact}
        stated = tuple(changed(last, facts={**others, fact: there}) for there in (True, False))
        yield Deletion(fact, changed(last, facts=others), stated)
    if last.age_years is not None:
        scopes = [rule.scope.age_years for rule in rules]
        edges = {float(edge) for scope in scopes for edge in (scope.least, (scope.most or 120) + 1)}
        years = sorted({0.0, 130.0, *edges, *(edge - 0.01 for edge in edges if edge)})
        yield Deletion("age", changed(last, age_years=None), tuple(changed(last, age_years=one) for one in years))
    if last.blood_named_by:
        named = tuple(changed(last, blood_named_by=(one,)) for one in ("specimen", "body-site"))
        yield Deletion(BLOOD, changed(last, blood_named_by=()), named)


def asked_elsewhere(rule: Rule, deleted: str) -> Rule:
    """The rule with its question whether ``deleted`` is unknown put to a quantity that is never given."""
    never = next(name for name in INPUT_BY_NAME if name not in rule.units)

    def replaced(node: Any) -> Any:
        if node == {"unknown": deleted}:
            return {"unknown": never}
        if isinstance(node, dict):
            return {key: replaced(value) for key, value in node.items()}
        return tuple(map(replaced, node)) if isinstance(node, tuple) else node

    return Rule.model_validate(replaced(rule.model_dump(by_alias=True, exclude_unset=True)))


def answers(rules: tuple[Rule, ...], name: str, moment: Moment) -> dict[str, Finding]:
    """What the first of ``rules`` answers at one moment: whether it finds what it seeks, clears, and is worse."""
    timelines, table = laid_out(rules, Case(name=name, given=(moment,), expect="none"))
    found = {
        "finding": conjunction([finding(rule, timelines, table) for rule in rules]),
        "clearing": evaluate(rules[0].clears, table.columns),
    }
    if rules[0].worsens is not None:
        found["worsening"] = evaluate(rules[0].worsens, table.columns)
    return found


def breaches(rules: tuple[Rule, ...], one: Deletion) -> tuple[list[str], set[str]]:
    """Where a law does not hold, and the questions that the deleted input decides."""
    said, decided = [], set()
    without = answers(rules, one.name, one.without)
    completed = [answers(rules, one.name, moment) for moment in one.completed]
    for question, answer in without.items():
        truth = int(answer.truth[0])
        possible = {int(each[question].truth[0]) for each in completed}
        if truth != UNKNOWN and possible != {truth}:
            said.append(f"{question}: {truth} without {one.name}, {possible} with it")
        if possible >= {TRUE, FALSE}:
            decided.add(question)
            named = [name for name, where in answer.missing.items() if where[0]]
            if one.name not in named:
                said.append(f"{question}: missing names {named}, not {one.name}")
    return said, decided


@pytest.mark.parametrize("rule", PACK.rules, ids=lambda rule: rule.id)
def test_what_is_missing_never_decides(rule: Rule) -> None:
    """Each quantity of the raising condition, and the age, decides the finding in one of the rule's cases at least."""
    wrong, deciding = [], set()
    for case in rule.cases:
        rules = (rule, *(BY_ID[name] for name in rule.needs))
        for one in deletions(case, rules):
            if one.name in {fact for each in rules for fact in each.scope.unless}:
                continue
            said, decided = breaches(tuple(asked_elsewhere(each, one.name) for each in rules), one)
            wrong += [f"case {case.name!r}, {text}" for text in said]
            deciding |= {one.name} if "finding" in decided else set()
    assert wrong == []
    compared = {leaf.quantity for leaf in leaves(rule.raises) if isinstance(leaf, Comparison)}
    assert compared | {"age"} <= deciding


@pytest.mark.parametrize("rule", PACK.rules, ids=lambda rule: rule.id)
def test_a_fact_that_leaves_patients_out_is_spoken_of_where_nobody_stated_it(rule: Rule) -> None:
    """Each rule's own facts; a rule without any is given one."""
    facts = rule.scope.unless or ("ecmo",)
    rule, seen = rule.model_copy(update={"scope": rule.scope.model_copy(update={"unless": facts})}), set()
    for case, fact in product(rule.cases, facts):
        unsaid = {key: there for key, there in case.given[-1].facts.items() if key != fact}
        moments = [changed(case.given[-1], facts={**unsaid, **more}) for more in ({}, {fact: False}, {fact: True})]
        silent, absent, there = (int(answers((rule,), fact, one)["finding"].truth[0]) for one in moments)
        assert (silent, there) == (absent, FALSE)
        seen.add(silent)
        timelines, table = laid_out((rule,), case.model_copy(update={"given": (moments[0],)}))
        doubts = Turns(rule, timelines, table, np.array([0])).doubts(0)
        assert any(fact.replace("-", " ") in text for text in doubts if "nobody stated" in text)
    assert TRUE in seen


# --- the laws can fail -------------------------------------------------------------------------------------------


@pytest.mark.parametrize("taken_for", [TRUE, FALSE])
def test_an_evaluator_that_takes_missing_for_an_answer_is_found(
    taken_for: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    def careless(condition: Condition, columns: Mapping[str, Column]) -> Finding:
        found = evaluate(condition, columns)
        return replace(found, truth=np.where(found.truth == UNKNOWN, taken_for, found.truth).astype(np.int8))

    monkeypatch.setattr(judge_finding, "evaluate", careless)
    for rule in PACK.rules:
        rules = (rule, *(BY_ID[name] for name in rule.needs))
        assert any(breaches(rules, one)[0] for case in rule.cases for one in deletions(case, rules))


def test_asking_for_absence_is_told_apart_from_missing_it() -> None:
    """A rule that also asks that the index be unknown: left as it is, its own question would count as a breach."""
    rule = next(rule for rule in PACK.rules if "ci" not in rule.units and not rule.needs)
    document = rule.model_dump(by_alias=True, exclude_unset=True)
    both = {"all": (document["raise"], {"unknown": "ci"})}
    rule = Rule.model_validate({**document, "raise": both, "id": "asks-for-absence"})
    case = next(case for case in rule.cases if case.expect == "flag" and len(case.given) == 1)
    given = Given(value=2.5, unit="L/min/m2", uncertainty=0.2)
    case = case.model_copy(update={"given": (changed(case.given[0], ci=given),)})
    [deleted] = [one for one in deletions(case, (rule,)) if one.name == "ci"]
    assert breaches((rule,), deleted) == ([f"finding: {TRUE} without ci, {{{FALSE}}} with it"], set())
    assert breaches((asked_elsewhere(rule, "ci"),), deleted) == ([], set())

"""The cases of a rule, run through the evaluator and the episodes that judge real patients."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, date, datetime
from pathlib import Path
from typing import get_args

import numpy as np

from fhiro2.catalogue import DERIVED_BY_CODE
from fhiro2.flags import TurnKind
from fhiro2.judge.chain import Chain, chain_of
from fhiro2.judge.condition import UNKNOWN, Truth, canonical, conjunction
from fhiro2.judge.finding import NAMED_BY, YEAR, finding
from fhiro2.judge.judging import judged
from fhiro2.judge.rulefile import Case, Given, Moment, Rule, read_pack
from fhiro2.model import MICROSECONDS, MINUTE, READING, AnchorTable, Column, Names, Origins, Patient, Timelines, Why
from fhiro2.settings import ContextFact

START = int(datetime(2000, 1, 1, tzinfo=UTC).timestamp()) * MICROSECONDS
"""The time of ``after_minutes: 0``."""


@dataclass(frozen=True)
class Report:
    """What checking a pack found: a line for each rule, each case that failed, and each warning."""

    hash: str
    rules: tuple[str, ...]
    failures: tuple[str, ...]
    warnings: tuple[str, ...]

    @property
    def failed(self) -> bool:
        """Whether a case did not find what it expects."""
        return bool(self.failures)

    @property
    def warned(self) -> bool:
        """Whether a person should look at a rule again."""
        return bool(self.warnings)

    def lines(self) -> list[str]:
        """The report as text, failures last."""
        verdict = f"{len(self.failures)} cases FAILED" if self.failures else "all cases passed"
        return [*self.rules, *self.warnings, *self.failures, f"pack {self.hash[:12]}: {verdict}"]


def check_pack(folder: Path, today: date) -> Report:
    """Load the rules below ``folder`` and run every case; a rule due for review by ``today`` is a warning.

    Raises StopError where a file cannot be loaded.
    """
    pack = read_pack(folder)
    by_id, chain = {rule.id: rule for rule in pack.rules}, chain_of(pack.rules)
    rules, failures, warnings = [], [], []
    for rule, file in zip(pack.rules, pack.files, strict=True):
        needed = [by_id[name] for name in rule.needs]
        wrong = [text for case in rule.cases if (text := failure(rule, case, needed, chain))]
        failures += [f"{file}: rule {rule.id}, {text}" for text in wrong]
        passed = len(rule.cases) - len(wrong)
        rules.append(f"{rule.id}/{rule.version} ({rule.state}): {passed} of {len(rule.cases)} cases passed")
        if rule.review_by <= today:
            warnings.append(f"{file}: rule {rule.id} was to be reviewed by {rule.review_by}; {rule.owner} reviews it")
    return Report(pack.hash, tuple(rules), tuple(failures), tuple(warnings))


def failure(rule: Rule, case: Case, needed: Sequence[Rule] = (), chain: Chain | None = None) -> str:
    """What is wrong when ``case`` is run: its name, values, what it expects and what was found; '' if nothing.

    ``needed`` are the rules that ``rule`` needs, ``chain`` that of their pack; without it these rules are the pack.
    """
    rules = (rule, *needed)
    found, message, missing = _outcome(rules, case, chain or chain_of(rules))
    if found == case.expect and message == (case.message or ""):
        return ""
    expected = case.expect + (f" {case.message!r}" if case.message else "")
    got = found + (f" {message!r}" if message else "") + (f" (not known: {', '.join(missing)})" if missing else "")
    used = "; ".join(f"+{moment.after_minutes} min {_said(moment)}" for moment in case.given)
    age = case.given[0].age_years
    years = "unknown" if age is None else f"{age:g}"
    return f"case {case.name!r}: expected {expected}, got {got}; values used: age {years}; {used}"


def _said(moment: Moment) -> str:
    """The values and facts of one moment in a line."""
    values = [f"{name} {one.value:g} {one.unit} (u {one.uncertainty:g})" for name, one in moment.values.items()]
    facts = [f"{fact} {'yes' if there else 'no'}" for fact, there in moment.facts.items()]
    return ", ".join([*values, *facts])


def _outcome(rules: Sequence[Rule], case: Case, chain: Chain) -> tuple[str, str, list[str]]:
    """What the case finds for the first of ``rules``, which needs the others.

    That is: in a word, the message of the flag that stands, and what was not known at the end.
    """
    rule = rules[0]
    timelines, table = laid_out(rules, case)
    flags = [flag for flag in judged(rules, chain, timelines, table, {})[0] if flag.rule == rule.id]
    if flags:
        latest = flags[-1].latest
        if flags[-1].cleared is not None:
            return "cleared", "", []
        return ("worsened" if latest.kind is TurnKind.WORSENED else "flag"), latest.message, []
    asked = conjunction([finding(one, timelines, table) for one in rules])
    if asked.truth[-1] == UNKNOWN:
        return "unknown", "", [name for name, where in asked.missing.items() if where[-1]]
    return "none", "", []


def laid_out(rules: Sequence[Rule], case: Case) -> tuple[Timelines, AnchorTable]:
    """A patient with one anchor for each moment of ``case``, and the columns that ``rules`` ask for."""
    effective = START + MINUTE * np.array([moment.after_minutes for moment in case.given], dtype=np.int64)
    rows = np.arange(len(effective))
    readings = np.zeros(len(rows), READING)
    readings["effective"] = readings["known"] = effective
    readings["origin"], readings["part"] = rows, -1
    readings["evidence"] = [sum(NAMED_BY[one] for one in moment.blood_named_by) for moment in case.given]
    age = case.given[0].age_years
    born = None if age is None else int(effective[0]) - round(age * YEAR)
    people = [Patient("case", "case", "Patient/case", born)]
    origins = Origins([f"moment-{row}" for row in rows], ["1"] * len(rows))
    timelines = Timelines(readings, people, [()], Names(subjects=["Patient/case"]), origins)
    names = {name: None for rule in rules for name in rule.units}
    columns = {name: _column(name, [moment.values.get(name) for moment in case.given]) for name in names}
    facts = {fact: _fact(fact, case.given) for fact in get_args(ContextFact)}
    return timelines, AnchorTable(rules[0].at, rows, readings["patient"], effective, effective, columns, facts)


def _fact(fact: ContextFact, given: Sequence[Moment]) -> Truth:
    """A context fact as stated at each moment; what is not stated is unknown."""
    return np.array([moment.facts.get(fact, UNKNOWN) for moment in given], dtype=np.int8)


def _column(name: str, given: Sequence[Given | None]) -> Column:
    value, uncertainty = np.full((2, len(given)), np.nan)
    for place, one in enumerate(given):
        if one is not None:
            scale = canonical(name, one.unit)
            value[place] = one.value * scale.factor + scale.offset
            uncertainty[place] = one.uncertainty * scale.factor
    known = ~np.isnan(value)
    return Column(
        value=value,
        low=value,
        high=value,
        uncertainty=uncertainty,
        cautions=np.zeros(len(given), np.uint64),
        why=np.where(known, Why.KNOWN, Why.NEVER_RECORDED).astype(np.int8),
        source=np.where(known & (name not in DERIVED_BY_CODE), np.arange(len(given)), -1),
        runner_up=np.full(len(given), -1),
    )

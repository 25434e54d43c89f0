"""A rule told in plain words, made from the rule itself so that the two cannot drift apart."""

from __future__ import annotations

from collections.abc import Iterator

from fhiro2.catalogue import title_of
from fhiro2.judge.clause import Clause
from fhiro2.judge.condition import Operator
from fhiro2.judge.rulefile import Rule, Scope

_OPERATORS = {
    Operator.BELOW: "below",
    Operator.ABOVE: "above",
    Operator.AT_MOST: "at most",
    Operator.AT_LEAST: "at least",
}
_ANCHORS = {
    "arterial": "each arterial sample",
    "mixed-venous": "each mixed venous sample",
    "central-venous": "each central venous sample",
    "pulse-oximetry": "each pulse oximeter reading",
    "cardiac-output": "each cardiac output",
    "body": "each body weight",
}


def told(rule: Rule) -> list[str]:
    """The lines that say what ``rule`` does, for whom, on whose word and until when."""
    return [
        f"{rule.title} ({rule.id}, version {rule.version}, {rule.severity}, {rule.state}; axis: {rule.axis})",
        rule.intent,
        f"Looked at: {_ANCHORS[rule.at]} of {_patients(rule.scope)}.",
        *_limits(rule.scope),
        "Raised when",
        *(f"  {line}" for line in _clause(rule.raise_when)),
        *_course(rule),
        "Cleared when",
        *(f"  {line}" for line in _clause(rule.clear_when)),
        f"Says: {rule.message}",
        *(f"Caution: {caution}" for caution in rule.cautions),
        *(f"Source ({source.kind}, {source.year}): {source.text}" for source in rule.sources),
        f"Cases: {len(rule.cases)}. Owner: {rule.owner}. To be reviewed by {rule.review_by:%d-%b-%Y}.",
    ]


def _patients(scope: Scope) -> str:
    years = scope.age_years
    if years.most is None:
        return f"patients of {years.least} years or more; a patient of unknown age is not evaluated"
    return f"patients of {years.least} to {years.most} years; a patient of unknown age is not evaluated"


def _limits(scope: Scope) -> Iterator[str]:
    for words, facts in (
        ("Only where it is stated that there is", scope.with_facts),
        ("Only where it is stated that there is no", scope.without),
        ("Not where it is stated that there is", scope.unless),
    ):
        if facts:
            yield f"{words}: {', '.join(fact.replace('-', ' ') for fact in facts)}."
    if scope.blood_named_by:
        yield f"Only where the kind of blood is named by {' or '.join(scope.blood_named_by).replace('-', ' ')}."


def _course(rule: Rule) -> Iterator[str]:
    if rule.needs:
        yield f"Only together with: {', '.join(rule.needs)}."
    if rule.lasting:
        yield (
            f"Only after {rule.lasting.minutes} min of it, at samples at most "
            f"{rule.lasting.at_most_apart_minutes} min apart."
        )
    if rule.worse:
        yield f"Worse ({rule.worse.severity}) when"
        yield from (f"  {line}" for line in _clause(rule.worse.when))
    if rule.quiet_minutes:
        yield f"Raised again within {rule.quiet_minutes} min of being cleared it is the same episode."


def _clause(clause: Clause) -> Iterator[str]:
    """One line a comparison, groups indented under their word."""
    if clause.any_of is not None:
        yield "any of these holds:"
    elif clause.all_of is not None:
        yield "all of these hold:"
    elif clause.some_of is not None:
        yield f"at least {clause.some_of.least} of these {len(clause.parts)} hold:"
    elif clause.negated is not None:
        yield "this does not hold:"
    elif clause.unknown is not None:
        yield f"{title_of(clause.unknown)} not known"
    elif clause.quantity is not None:
        yield _comparison(clause, clause.quantity)
    for part in clause.parts:
        yield from (f"  {line}" for line in _clause(part))


def _comparison(clause: Clause, quantity: str) -> str:
    unit = "" if clause.unit == "1" else f" {clause.unit}".replace("mm[Hg]", "mmHg")
    least = "" if clause.certainty is None else f", with a probability of at least {100 * clause.certainty:g} %"
    return f"{title_of(quantity)} {_OPERATORS[clause.operator]} {getattr(clause, clause.operator):g}{unit}{least}"

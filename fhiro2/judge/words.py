"""A rule told in plain words, made from the rule itself so that the two cannot drift apart."""

from __future__ import annotations

from collections.abc import Iterator

from fhiro2.catalogue import title_of
from fhiro2.judge.clause import Clause
from fhiro2.judge.condition import Operator
from fhiro2.judge.rulefile import Rule

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
        f"Looked at: {_ANCHORS[rule.at]} of patients of {rule.scope.age_years.least} years or more; "
        "a patient of unknown age is not evaluated.",
        "Raised when",
        *(f"  {line}" for line in _clause(rule.raise_when)),
        "Cleared when",
        *(f"  {line}" for line in _clause(rule.clear_when)),
        f"Says: {rule.message}",
        *(f"Caution: {caution}" for caution in rule.cautions),
        *(f"Source ({source.kind}, {source.year}): {source.text}" for source in rule.sources),
        f"Cases: {len(rule.cases)}. Owner: {rule.owner}. To be reviewed by {rule.review_by:%d-%b-%Y}.",
    ]


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

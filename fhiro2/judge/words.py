"""A rule told in plain words, made from the rule itself so that the two cannot drift apart."""

from __future__ import annotations

from collections.abc import Iterator

from fhiro2.catalogue import title_of
from fhiro2.judge.condition import Operator
from fhiro2.judge.rulefile import Clause, Rule

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
    for word, parts in (
        ("any of these holds:", clause.any_of),
        ("all of these hold:", clause.all_of),
        ("this does not hold:", (clause.negated,) if clause.negated else None),
    ):
        if parts is not None:
            yield word
            for part in parts:
                yield from (f"  {line}" for line in _clause(part))
    if clause.quantity is not None:
        how = next(one for one in Operator if getattr(clause, one) is not None)
        unit = "" if clause.unit == "1" else f" {clause.unit}".replace("mm[Hg]", "mmHg")
        yield f"{title_of(clause.quantity)} {_OPERATORS[how]} {getattr(clause, how):g}{unit}"

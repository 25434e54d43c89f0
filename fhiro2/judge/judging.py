"""The rules at one kind of anchor, from findings to flags; real patients and the cases of rules go the same way."""

from __future__ import annotations

from collections.abc import Sequence

from fhiro2.flags import Flag
from fhiro2.judge.chain import Chain, Places
from fhiro2.judge.condition import UNKNOWN
from fhiro2.judge.episode import Carried, fold, sustained
from fhiro2.judge.finding import finding, positive
from fhiro2.judge.rulefile import Rule
from fhiro2.model import AnchorTable, Floats, Timelines


def judged(
    rules: Sequence[Rule], chain: Chain, timelines: Timelines, table: AnchorTable, carried: Carried
) -> tuple[list[Flag], Carried, Places]:
    """The flags that ``rules`` raise or change at the anchors of ``table``, and what is carried after them.

    Beside them the anchors on which the evaluators of flags disagree.
    """
    found: dict[str, Floats] = {}
    flags: list[Flag] = []
    for rule in rules:
        what = finding(rule, timelines, table)
        probable = positive(what, rule.severity)
        found[rule.id], carried = sustained(rule, timelines, table, probable, what.truth != UNKNOWN, carried)
    raising, torn = chain.raising(found)
    for rule in rules:
        changed, carried = fold(rule, timelines, table, raising[rule.id], carried, chain.remarks)
        flags += changed
    return flags, carried, torn

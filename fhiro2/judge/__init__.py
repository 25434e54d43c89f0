"""JUDGE: rules over anchor tables give findings (true, false, unknown), findings give flag episodes."""

from __future__ import annotations

from collections.abc import Mapping

from fhiro2.errors import StopError
from fhiro2.judge.cases import Report, check_pack
from fhiro2.judge.chain import chain_of
from fhiro2.judge.condition import quantities
from fhiro2.judge.episode import Carried, OpenEpisode, findings, fold
from fhiro2.judge.rulefile import Pack, Rule, read_pack
from fhiro2.model import AnchorTable, Flag, Floats, Timelines

__all__ = ["Carried", "OpenEpisode", "Pack", "Report", "Rule", "chain_of", "check_pack", "judge", "read_pack"]


def judge(
    pack: Pack, timelines: Timelines, tables: Mapping[str, AnchorTable], carried: Mapping[tuple[str, str], OpenEpisode]
) -> tuple[list[Flag], Carried]:
    """Every flag that the live rules of ``pack`` raise or change at these anchors, and the episodes then open.

    ``carried`` holds the episodes open before and is not changed. Law: judging all anchors equals judging them in
    parts, passing on what was carried, where a later flag of the same rule, patient and anchor replaces the earlier.
    Raises StopError for a rule about a quantity that its kind of anchor does not have, and where the evaluators of
    flags disagree.
    """
    live = [rule for rule in pack.rules if rule.state == "live"]
    for rule in live:
        _check_columns(rule, tables)
    chain = chain_of(pack.rules)
    raising: dict[str, Floats] = {}
    for kind in dict.fromkeys(rule.at for rule in live):
        raising |= chain.raising({r.id: findings(r, timelines, tables[kind]) for r in live if r.at == kind})
    flags: list[Flag] = []
    opened = dict(carried)
    for rule in live:
        changed, opened = fold(rule, timelines, tables[rule.at], raising[rule.id], opened)
        flags += changed
    return flags, opened


def _check_columns(rule: Rule, tables: Mapping[str, AnchorTable]) -> None:
    there = tables[rule.at].columns if rule.at in tables else {}
    lacking = {*quantities(rule.raises), *quantities(rule.clears)} - there.keys()
    if lacking:
        raise StopError(
            f"rule {rule.id}: {rule.at} anchors have no {', '.join(sorted(lacking))}; change 'at' or the conditions"
        )

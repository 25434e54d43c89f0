"""JUDGE: rules over anchor tables give findings (true, false, unknown), findings give flag episodes."""

from __future__ import annotations

from collections.abc import Mapping

from fhiro2.errors import StopError
from fhiro2.flags import Flag
from fhiro2.judge.cases import Report, check_pack
from fhiro2.judge.chain import chain_of
from fhiro2.judge.condition import quantities
from fhiro2.judge.episode import Carried, Standing
from fhiro2.judge.judging import judged
from fhiro2.judge.rulefile import Pack, Rule, read_pack
from fhiro2.model import AnchorTable, Timelines

__all__ = ["Carried", "Pack", "Report", "Rule", "Standing", "chain_of", "check_pack", "judge", "read_pack"]


def judge(
    pack: Pack, timelines: Timelines, tables: Mapping[str, AnchorTable], carried: Carried
) -> tuple[list[Flag], Carried, tuple[str, ...]]:
    """Every flag that the live rules of ``pack`` raise or change at these anchors, what is carried, and who is held.

    ``carried`` is what the anchors before left and is not changed. Law: judging all anchors equals judging them in
    parts, passing on what was carried, where a later flag of the same rule, patient and anchor replaces the earlier.
    A patient on whom the evaluators of flags disagree is held: no flag of theirs is given, and what was carried of
    them stays as it was. Raises StopError for a rule about a quantity that its kind of anchor does not have.
    """
    live = [rule for rule in pack.rules if rule.state == "live"]
    for rule in live:
        _check_columns(rule, tables)
    chain = chain_of(pack.rules)
    flags: list[Flag] = []
    after, held = dict(carried), set[str]()
    for kind in dict.fromkeys(rule.at for rule in live):
        table = tables[kind]
        found, after, torn = judged([rule for rule in live if rule.at == kind], chain, timelines, table, after)
        flags += found
        held |= {timelines.patients[number].key for number in table.patient[torn].tolist()}
    if held:
        flags = [flag for flag in flags if flag.patient not in held]
        after = {key: one for key, one in after.items() if key[0] not in held}
        after |= {key: one for key, one in carried.items() if key[0] in held}
    return flags, after, tuple(sorted(held))


def _check_columns(rule: Rule, tables: Mapping[str, AnchorTable]) -> None:
    there = tables[rule.at].columns if rule.at in tables else {}
    conditions = [one for one in (rule.raises, rule.clears, rule.worsens) if one is not None]
    lacking = {name for one in conditions for name in quantities(one)} - there.keys()
    if lacking:
        raise StopError(
            f"rule {rule.id}: {rule.at} anchors have no {', '.join(sorted(lacking))}; change 'at' or the conditions"
        )

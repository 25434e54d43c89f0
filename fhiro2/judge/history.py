"""History against what stands: which flags that were given before still stand, changed, or are withdrawn.

What stands is always that of a fresh run over all that is now known. What was given before and stands no longer was
right by what was known then: it is withdrawn, with the episode that took its place, and never silently dropped.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

from fhiro2.flags import Flag

FlagKey = tuple[str, str, str, str]


@dataclass(frozen=True)
class Withdrawn:
    """A flag that stands no longer, and the key of the episode that now covers its time, if there is one."""

    flag: Flag
    replaced_by: FlagKey | None


@dataclass(frozen=True)
class Differences:
    """What became of flags between two runs; each flag of either run is in one list, as the later run has it."""

    raised: tuple[Flag, ...]
    changed: tuple[Flag, ...]
    unchanged: tuple[Flag, ...]
    withdrawn: tuple[Withdrawn, ...]


def key_of(flag: Flag) -> FlagKey:
    """What names an episode for good: source, subject as written, the anchor that raised it, and the rule."""
    return flag.anchor.source, flag.anchor.subject, flag.anchor.anchor_id, flag.rule


def differences(before: Iterable[Flag], now: Iterable[Flag]) -> Differences:
    """Compare the flags that were given with those that stand.

    Where episodes join or split, the one that begins earliest keeps its key; the others are withdrawn in its favour.
    """
    given = {key_of(flag): flag for flag in before}
    standing = {key_of(flag): flag for flag in now}
    kept = [(given[key], flag) for key, flag in standing.items() if key in given]
    return Differences(
        tuple(flag for key, flag in standing.items() if key not in given),
        tuple(flag for earlier, flag in kept if earlier != flag),
        tuple(flag for earlier, flag in kept if earlier == flag),
        tuple(Withdrawn(flag, _heir(flag, standing)) for key, flag in given.items() if key not in standing),
    )


def _heir(flag: Flag, standing: dict[FlagKey, Flag]) -> FlagKey | None:
    """The earliest standing episode of the same rule and patient that shares time with ``flag``."""
    sharing = [
        (other.raised, key)
        for key, other in standing.items()
        if (other.rule, other.patient) == (flag.rule, flag.patient)
        and (flag.cleared is None or other.raised <= flag.cleared)
        and (other.cleared is None or other.cleared >= flag.raised)
    ]
    return min(sharing)[1] if sharing else None

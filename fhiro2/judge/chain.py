"""Chaining: from the positive findings at one anchor to the flags they raise, asked of two evaluators that must agree.

One evaluator is a forward chainer inside a fence (the library durable-rules), the other is plain set arithmetic; where
the library is not installed, the second works alone and says so. The fence, since the library, as measured, knows
sessions and facts by a 32-bit hash (two patients can share a memory), ends at 1,024 sessions, compares text and truth
values with numbers, hides errors in actions, lets timer threads of its host run actions, and touches memory that is
not its own when a fact leaves a join of five or more patterns: one session for all, constant texts only, every fact
retracted after its session, no host, and joins of at most four patterns.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from functools import cache, lru_cache
from importlib.metadata import version
from itertools import product
from threading import Lock
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fhiro2.errors import StopError
from fhiro2.judge.rulefile import MOST_NEEDED, Rule
from fhiro2.model import Floats

MOST_RULES = 200
RULES_TOGETHER = 64
SETS_TRIED = 1000
SMALL_PACK = 10
SETS_KEPT = 4096
SESSION = "session"
CATCH_ALL = "any finding"

Places = NDArray[np.intp]
ALONE = "flags chained by the built-in evaluator alone: there was no second one to agree"

Needs = Mapping[str, frozenset[str]]


class DisagreementError(StopError):
    """The two evaluators give different flags for the same findings."""


class Chain:
    """Maps a set of positive findings to the set of flags that they raise; both are ids of rules.

    ``needs`` holds, for each rule, the others whose findings its flag needs beside its own. ``evaluators`` names those
    that answer. Raises StopError where the pack is too large or the evaluators disagree on any set tried.
    """

    def __init__(self, needs: Needs) -> None:
        if len(needs) > MOST_RULES:
            raise StopError(f"a pack of {len(needs)} rules; chaining is proven up to {MOST_RULES}: split the pack")
        for rule, needed in needs.items():
            if len(needed) > MOST_NEEDED or not needed <= needs.keys():
                raise StopError(f"rule {rule}: needs more than {MOST_NEEDED} rules, or one not in the pack; change it")
        engine = _engine()
        self._needs = needs
        self._forward = ForwardChainer(engine, needs) if engine else None
        self.evaluators: tuple[str, ...] = ("built-in",)
        self.flags: Callable[[frozenset[str]], frozenset[str]] = lru_cache(SETS_KEPT)(self._flags)
        if self._forward:
            self.evaluators = (f"durable-rules {version('durable-rules')}", "built-in")
            for findings in _tried(list(needs)):
                self._flags(findings)

    def _flags(self, findings: frozenset[str]) -> frozenset[str]:
        for one in findings:
            if type(one) is not str:
                raise TypeError(f"a finding of type {type(one).__name__}; pass ids of rules")
            if one not in self._needs:
                raise ValueError("a finding that is no rule of the pack; pass ids of rules")
        flags = satisfied(self._needs, findings)
        if self._forward and self._forward.flags(findings) != flags:
            raise DisagreementError(
                f"the two evaluators disagree on {', '.join(sorted(findings))}; the pack is not to be used: report it"
            )
        return flags

    @property
    def remarks(self) -> frozenset[str]:
        """What every flag of this chain says of how it came about."""
        return frozenset() if self._forward else frozenset({ALONE})

    def raising(self, positive: Mapping[str, Floats]) -> tuple[dict[str, Floats], Places]:
        """The findings of rules at the same anchors, each NaN where not positive, without those that raise no flag.

        Beside them the anchors on whose findings the evaluators disagree: nothing is raised there.
        """
        names = np.array(list(positive))
        marks = ~np.isnan(np.stack(list(positive.values())))
        some = np.flatnonzero(marks.any(axis=0))
        marks, kind = marks[:, some], np.zeros(len(some), np.int64)
        first = kind[:0]
        for byte in np.packbits(marks, axis=0):
            _, first, kind = np.unique(256 * kind + byte, return_index=True, return_inverse=True)
        flagged = [self._agreed(frozenset(names[marks[:, place]].tolist())) for place in first]
        raised = {
            name: _only(values, some[np.array([name in (flags or ()) for flags in flagged], dtype=bool)[kind]])
            for name, values in positive.items()
        }
        return raised, some[np.array([flags is None for flags in flagged], dtype=bool)[kind]]

    def _agreed(self, findings: frozenset[str]) -> frozenset[str] | None:
        try:
            return self.flags(findings)
        except DisagreementError:
            return None


def chain_of(rules: Sequence[Rule]) -> Chain:
    """The chain of a pack's rules, made once a process for all packs with the same ids and needs."""
    return _chain(tuple((rule.id, frozenset(rule.needs)) for rule in rules))


def satisfied(needs: Needs, findings: frozenset[str]) -> frozenset[str]:
    """The flags whose own finding and needed findings are all there: the built-in evaluator."""
    return frozenset(rule for rule, needed in needs.items() if rule in findings and needed <= findings)


class ForwardChainer:
    """The same question put to durable-rules; ``engine`` is its module. Raises StopError for whatever goes wrong."""

    def __init__(self, engine: Any, needs: Needs) -> None:
        self._fired: list[str] = []
        self._lock = Lock()
        self._parts: list[tuple[frozenset[str], Any]] = []
        _check_distinct([SESSION, *needs])
        rules = list(needs)
        step = RULES_TOGETHER - 1
        for start in range(0, len(rules), step):
            together = {rule: needs[rule] for rule in rules[start : start + step]}
            definition = {f"flag {rule}": self._rule(rule, needed) for rule, needed in together.items()}
            definition[CATCH_ALL] = {"all": [{"m": {"$ex": {"k": 1}}}], "run": lambda _: None}
            vocabulary = frozenset(together).union(*together.values())
            self._parts.append((vocabulary, engine.Ruleset(f"flags-{start}", None, definition)))

    def _rule(self, rule: str, needed: frozenset[str]) -> dict[str, Any]:
        patterns = [{f"m{number}": {"k": one}} for number, one in enumerate([rule, *sorted(needed)])]
        return {"all": patterns, "run": lambda _: self._fired.append(rule)}

    def flags(self, findings: frozenset[str]) -> frozenset[str]:
        """The flags that ``findings`` raise, in sessions that leave nothing behind."""
        with self._lock:
            self._fired.clear()
            for vocabulary, ruleset in self._parts:
                if asked := sorted(findings & vocabulary):
                    _hold_session(ruleset, asked)
            return frozenset(self._fired)


def _hold_session(ruleset: Any, findings: Sequence[str]) -> None:
    try:
        for one in findings:
            _act(ruleset, ruleset.assert_fact({"sid": SESSION, "id": one, "k": one}))
        for one in findings:
            _act(ruleset, ruleset.retract_fact({"sid": SESSION, "id": one}))
        clean = not ruleset.get_facts(SESSION) and "exception" not in ruleset.get_state(SESSION)
    except Exception as error:
        raise StopError(_trouble(findings, type(error).__name__)) from error
    if not clean:
        raise StopError(_trouble(findings, "a fact or an error was left behind"))


def _act(ruleset: Any, state: Any) -> None:
    """Run the actions that are due, in this thread."""
    errors: list[Exception] = []
    ruleset.do_actions(state, lambda error, _: errors.append(error) if error else None)
    if errors:
        raise errors[0]


def _trouble(findings: Sequence[str], what: str) -> str:
    return f"durable-rules failed on {', '.join(findings)} ({what}); start again, or uninstall it to go on without"


def _engine() -> Any:
    """The module of durable-rules, or None where it is not installed or cannot be loaded."""
    try:
        from durable import engine
    except ImportError:
        return None
    return engine


@cache
def _chain(needs: tuple[tuple[str, frozenset[str]], ...]) -> Chain:
    return Chain(dict(needs))


def _tried(names: Sequence[str]) -> Iterator[frozenset[str]]:
    """Every set of few names, else seeded sets from sparse to nearly full."""
    if len(names) <= SMALL_PACK:
        rows = np.array(list(product([False, True], repeat=len(names))), dtype=bool)
    else:
        chance = np.random.default_rng(0)
        rows = chance.random((SETS_TRIED, len(names))) < chance.random((SETS_TRIED, 1))
    for row in rows:
        yield frozenset(name for name, present in zip(names, row, strict=True) if present)


def fnv1a(text: str) -> int:
    """The 32-bit hash FNV-1a of the UTF-8 of ``text`` (Fowler, Noll and Vo)."""
    found = 2166136261
    for byte in text.encode():
        found = (found ^ byte) * 16777619 % 2**32
    return found


def _check_distinct(names: Sequence[str]) -> None:
    """All that durable-rules tells apart by hash alone must have hashes of their own."""
    by_hash: dict[int, str] = {}
    for name in names:
        other = by_hash.setdefault(fnv1a(name), name)
        if other != name:
            raise StopError(f"the ids {other} and {name} have the same 32-bit hash; rename one of the rules")


def _only(values: Floats, places: Places) -> Floats:
    kept = np.full_like(values, np.nan)
    kept[places] = values[places]
    return kept

"""Rule files: one strict YAML file a rule, with its cases; a pack is a folder of them, hashed."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from datetime import date
from functools import cached_property
from itertools import pairwise
from pathlib import Path
from string import Formatter
from typing import Annotated, Any, Literal, Self

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field, StringConstraints, model_validator

from fhiro2.documents import Marks, parse, validated
from fhiro2.errors import StopError
from fhiro2.judge.clause import Clause, Number, Some, check_unit
from fhiro2.judge.condition import Condition, quantities
from fhiro2.judge.vacuous import objections
from fhiro2.settings import ContextFact

TIME = "time"
SEVERITIES = ("info", "warning", "critical")
MOST_NEEDED = 3
"""How many other rules a flag may need: joins of five patterns were seen to be unsafe in one evaluator of flags."""
Place = tuple[str | int, ...]


def _date(text: Any) -> Any:
    return date.fromisoformat(text) if isinstance(text, str) else text


Text = Annotated[str, StringConstraints(min_length=1)]


class _Frozen(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid", strict=True)


class AgeLimit(_Frozen):
    """Completed years of life from which a rule applies, and up to which (None: without end)."""

    least: int = Field(ge=0, le=130)
    most: int | None = Field(None, ge=0, le=130)

    @model_validator(mode="after")
    def _is_a_range(self) -> Self:
        if self.most is not None and self.most < self.least:
            raise ValueError("most is less than least; exchange them")
        return self


class Scope(_Frozen):
    """Whom a rule speaks of; whatever of it is not known makes the finding unknown, but for ``unless``.

    ``with`` and ``without`` are context facts that must be stated, as present or as absent. ``unless`` are facts that
    leave a patient out where they are stated; where nobody spoke of them the flag says so. ``blood_named_by`` asks
    that specimen or body site, not the code alone, name the kind of blood.
    """

    age_years: AgeLimit
    with_facts: Some[ContextFact] = Field((), alias="with")
    without: Some[ContextFact] = ()
    unless: Some[ContextFact] = ()
    blood_named_by: Some[Literal["specimen", "body-site"]] = ()


class Lasting(_Frozen):
    """How long a rule must have found what it seeks, at samples that are not too far from each other."""

    minutes: int = Field(ge=1)
    at_most_apart_minutes: int = Field(ge=1)


class Worse(_Frozen):
    """When an episode is worse, and the severity that it then has until it ends."""

    severity: Literal["warning", "critical"]
    when: Clause


class Source(_Frozen):
    """Where a limit comes from."""

    text: Text
    year: int = Field(ge=1500, le=2200)
    kind: Literal["published", "common practice", "from memory"]


class Given(_Frozen):
    """A value in a case, with its standard uncertainty, in ``unit``."""

    value: Number
    unit: str
    uncertainty: Number = Field(ge=0)


class Moment(BaseModel):
    """The values of a case at one time, by quantity; whatever is left out (quantity, age, fact) is not known."""

    model_config = ConfigDict(frozen=True, extra="allow", strict=True)
    __pydantic_extra__: dict[str, Given]

    after_minutes: int = Field(ge=0)
    age_years: Number | None = Field(None, ge=0)
    facts: dict[ContextFact, bool] = {}
    blood_named_by: tuple[Literal["specimen", "body-site"], ...] = ()

    @property
    def values(self) -> dict[str, Given]:
        """The values by quantity."""
        return self.__pydantic_extra__


class Case(_Frozen):
    """What a rule must find at the last of some moments; ``message`` is the exact text of a flag that stands."""

    name: Text
    given: Some[Moment]
    expect: Literal["flag", "worsened", "none", "unknown", "cleared"]
    message: Text | None = None


class Rule(_Frozen):
    """One rule as its team wrote it; ``raises`` and ``clears`` are its conditions in canonical units.

    ``needs`` are rules of the same pack and kind of anchor: a flag is raised only where they too find what they seek.
    What is raised again within ``quiet_minutes`` of being cleared goes on as the same episode.
    """

    id: Annotated[str, StringConstraints(pattern=r"^[a-z0-9]+(-[a-z0-9]+)*$")]
    version: int = Field(ge=1)
    title: Text
    axis: Literal["gas", "carrier", "flow", "use", "data-quality"]
    severity: Literal["info", "warning", "critical"]
    state: Literal["draft", "shadow", "limited", "live", "retired"]
    owner: Text
    review_by: Annotated[date, BeforeValidator(_date)]
    intent: Text
    at: Literal["arterial", "mixed-venous", "central-venous", "pulse-oximetry", "cardiac-output", "body"]
    scope: Scope
    needs: Annotated[Some[Text], Field(max_length=MOST_NEEDED)] = ()
    raise_when: Clause = Field(alias="raise")
    lasting: Lasting | None = None
    worse: Worse | None = None
    clear_when: Clause = Field(alias="clear")
    quiet_minutes: int = Field(0, ge=0)
    message: Text
    cautions: Some[Text]
    sources: Some[Source]
    cases: Some[Case]

    @property
    def raises(self) -> Condition:
        """Where the rule raises a flag."""
        return self.raise_when.condition

    @property
    def clears(self) -> Condition:
        """Where the rule clears it."""
        return self.clear_when.condition

    @property
    def worsens(self) -> Condition | None:
        """Where an episode is worse, if the rule says."""
        return self.worse.when.condition if self.worse else None

    @cached_property
    def units(self) -> dict[str, str]:
        """The unit in which each quantity is shown: that of the first condition on it."""
        found: dict[str, str] = {}
        clauses = (self.raise_when, self.clear_when, *((self.worse.when,) if self.worse else ()))
        for quantity, unit in (pair for clause in clauses for pair in clause.units()):
            found.setdefault(quantity, unit)
        return found


@dataclass(frozen=True)
class Pack:
    """The rules of a folder by id, the file of each within it, and the SHA-256 of what they say."""

    rules: tuple[Rule, ...]
    files: tuple[str, ...]
    hash: str


def read_pack(folder: Path) -> Pack:
    """All rules below ``folder``; raises StopError with ``file:line:column`` and what to do for every mistake."""
    if not folder.is_dir():
        raise StopError(f"{folder}: not a folder; name the folder of the rules")
    found: dict[str, tuple[Rule, str]] = {}
    read: list[tuple[Path, Rule, Marks]] = []
    mistakes = [f"{path}:1:1: not read; end the name in .yaml" for path in sorted(folder.rglob("*.yml"))]
    for path in sorted(folder.rglob("*.yaml")):
        name = path.relative_to(folder).as_posix()
        try:
            rule, marks = _read(path)
        except StopError as error:
            mistakes.append(str(error))
            continue
        if rule.id in found:
            mistakes.append(f"{path}:1:1: the rule {rule.id} is also in {found[rule.id][1]}; remove one")
        found[rule.id] = rule, name
        read.append((path, rule, marks))
    rules = {name: found[name][0] for name in sorted(found)}
    if not mistakes:
        for path, rule, marks in read:
            mistakes += [_placed(str(path), marks, place, text) for place, text in _needs(rule, rules)]
    if mistakes:
        raise StopError("\n".join(mistakes))
    if not found:
        raise StopError(f"{folder}: holds no rule; name a folder with rule files (*.yaml)")
    content = [rule.model_dump(mode="json", by_alias=True, exclude_unset=True) for rule in rules.values()]
    canonical_content = json.dumps(content, sort_keys=True, ensure_ascii=False, separators=(",", ":"))
    digest = hashlib.sha256(canonical_content.encode()).hexdigest()
    return Pack(tuple(rules.values()), tuple(found[name][1] for name in rules), digest)


def read_rule(path: Path) -> Rule:
    """The rule in one file; raises StopError with ``file:line:column`` and what to do for every mistake."""
    return _read(path)[0]


def _read(path: Path) -> tuple[Rule, Marks]:
    try:
        content = path.read_bytes()
    except OSError as error:
        raise StopError(f"{path}: cannot be read ({error.strerror}); check the path and its rights") from None
    value, marks = parse(content, str(path))
    rule = validated(value, marks, str(path), Rule)
    mistakes = [*_identity(rule, path.stem), *_conditions(rule), *_message(rule), *_cases(rule)]
    if mistakes:
        raise StopError("\n".join(_placed(str(path), marks, place, text) for place, text in mistakes))
    return rule, marks


def _placed(name: str, marks: Marks, place: Place, text: str) -> str:
    line, column = marks[place]
    return f"{name}:{line}:{column}: {'.'.join(map(str, place))}: {text}"


def _identity(rule: Rule, stem: str) -> Iterator[tuple[Place, str]]:
    if rule.id != stem:
        yield ("id",), f"must be the file's name, {stem!r}; rename one of them"
    if rule.worse and SEVERITIES.index(rule.worse.severity) <= SEVERITIES.index(rule.severity):
        yield ("worse", "severity"), f"must be more than the rule's own, {rule.severity}; change one of them"


def _conditions(rule: Rule) -> Iterator[tuple[Place, str]]:
    yield from ((("raise",), text) for text in objections(rule.raises, finds=True))
    yield from ((("clear",), text) for text in objections(rule.clears, finds=False))
    if rule.worsens is not None:
        yield from ((("worse", "when"), text) for text in objections(rule.worsens, finds=True))


def _message(rule: Rule) -> Iterator[tuple[Place, str]]:
    allowed = {TIME, *quantities(rule.raises)}
    try:
        parts = list(Formatter().parse(rule.message))
    except ValueError as error:
        yield ("message",), f"{error}; write a brace that is meant as such twice"
        return
    for _, name, form, conversion in parts:
        if name is not None and (name not in allowed or form or conversion):
            yield ("message",), f"{{{name}}} is not one of {', '.join(sorted(allowed))}, or is not plain; change it"


def _cases(rule: Rule) -> Iterator[tuple[Place, str]]:
    for kind in ("flag", "none", "unknown"):
        if all(case.expect != kind for case in rule.cases):
            yield ("cases",), f"no case expects {kind!r}; add one"
    if rule.worse and all(case.expect != "worsened" for case in rule.cases):
        yield ("cases",), "no case expects 'worsened'; add one"
    names = [case.name for case in rule.cases]
    for number, case in enumerate(rule.cases):
        place: Place = ("cases", number)
        if case.name in names[:number]:
            yield (*place, "name"), "another case has this name; change one"
        if (case.message is not None) != (case.expect in ("flag", "worsened")):
            yield place, "a case has a message if, and only if, it expects a flag that stands"
        for earlier, later in pairwise(case.given):
            if later.after_minutes <= earlier.after_minutes or later.age_years != earlier.age_years:
                yield (*place, "given"), "the moments must follow each other, all with the same age_years"
        for step, moment in enumerate(case.given):
            for name, given in moment.values.items():
                try:
                    check_unit(name, given.unit)
                except ValueError as error:
                    yield (*place, "given", step, name), f"{error}; change it"


def _needs(rule: Rule, rules: Mapping[str, Rule]) -> Iterator[tuple[Place, str]]:
    """What is wrong between this rule and those of its pack."""
    for number, name in enumerate(rule.needs):
        place: Place = ("needs", number)
        if name not in rules:
            yield place, f"no rule {name!r} in this pack; write the id of one"
        elif rule.id in _reached(name, rules):
            yield place, f"{name} is, or needs, this rule itself; remove one of the needs"
        elif rules[name].at != rule.at:
            yield place, f"{name} is at {rules[name].at} anchors, not at {rule.at}; remove it"
        elif rule.state == "live" != rules[name].state:
            yield place, f"{name} is {rules[name].state}, so that this live rule could raise nothing; remove it"
    asked = dict.fromkeys(unit for name in (rule.id, *rule.needs) if name in rules for unit in rules[name].units)
    for place, name in _given(rule):
        if name not in asked:
            yield place, f"the rule does not ask for it, only for {', '.join(asked)}; change it"


def _reached(name: str, rules: Mapping[str, Rule]) -> set[str]:
    """The rule itself and all that it needs, directly or through others."""
    reached, waiting = {name}, [name]
    while waiting:
        rule = rules.get(waiting.pop())
        further = set(rule.needs) - reached if rule else set()
        reached |= further
        waiting += further
    return reached


def _given(rule: Rule) -> Iterator[tuple[Place, str]]:
    for number, case in enumerate(rule.cases):
        for step, moment in enumerate(case.given):
            for name in moment.values:
                yield ("cases", number, "given", step, name), name

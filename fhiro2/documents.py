"""Strict YAML: the documents that people own (settings, mappings, rules), with line and column of every value.

A safe subset: no tags, anchors, aliases, merge keys, duplicate keys, tabs, NUL or byte-order mark; limited size and
depth. Only JSON-like numbers, ``true``, ``false`` and ``null`` are read as such; all else is text, so that ``no``,
``010`` and ``12:30`` mean what they say.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping
from math import isfinite
from pathlib import Path
from types import MappingProxyType
from typing import Any, TypeVar

import yaml
from pydantic import BaseModel, ValidationError

from fhiro2.errors import StopError

MOST_BYTES = 200_000
MOST_DEPTH = 30
NO_HINTS: Mapping[str, str] = MappingProxyType({})

Model = TypeVar("Model", bound=BaseModel)
Step = str | int
Marks = dict[tuple[Step, ...], tuple[int, int]]

_WHOLE = re.compile(r"-?(0|[1-9][0-9]*)")
_DECIMAL = re.compile(r"-?(0|[1-9][0-9]*)(\.[0-9]+)?([eE][-+]?[0-9]+)?")
_WORDS = {"true": True, "false": False, "null": None, "~": None}


def read_model(path: Path, model: type[Model], hints: Mapping[str, str] = NO_HINTS) -> Model:
    """The document in ``path`` as ``model``; raises StopError with one line ``file:line:column`` a mistake.

    ``hints`` say of keys that do not exist, by name, what to do instead.
    """
    try:
        content = path.read_bytes()
    except OSError as error:
        raise StopError(f"{path}: cannot be read ({error.strerror}); check the path and its rights") from None
    value, marks = parse(content, str(path))
    return validated(value, marks, str(path), model, hints)


def validated(value: Any, marks: Marks, name: str, model: type[Model], hints: Mapping[str, str] = NO_HINTS) -> Model:
    """``value`` as ``model``; raises StopError naming the place of every mistake."""
    try:
        return model.model_validate(value)
    except ValidationError as error:
        lines = [
            f"{name}:{line}:{column}: {'.'.join(map(str, place)) or 'document'}: {message}"
            for place, message in _problems(error, hints)
            for line, column in [_nearest(place, marks)]
        ]
        raise StopError("\n".join(lines)) from None


def parse(content: bytes, name: str) -> tuple[Any, Marks]:
    """The value of one strict YAML document and the (line, column) of each of its paths; raises StopError."""
    _check_bytes(content, name)
    try:
        node = yaml.compose(content.decode("utf-8"), Loader=yaml.SafeLoader)
    except yaml.reader.ReaderError as error:
        place = _place(content.decode("utf-8")[: error.position])
        raise StopError(f"{name}:{place}: a control character; remove it") from None
    except yaml.MarkedYAMLError as error:
        mark = error.problem_mark
        line, column = (mark.line + 1, mark.column + 1) if mark else (1, 1)
        text = ", ".join(filter(None, (error.context, error.problem)))
        raise StopError(f"{name}:{line}:{column}: {text}") from None
    if node is None:
        raise StopError(f"{name}:1:1: the document is empty")
    marks: Marks = {}
    return _value(node, (), marks, name), marks


def _check_bytes(content: bytes, name: str) -> None:
    if len(content) > MOST_BYTES:
        raise StopError(f"{name}:1:1: larger than {MOST_BYTES} bytes; split it")
    if content.startswith(b"\xef\xbb\xbf"):
        raise StopError(f"{name}:1:1: begins with a byte-order mark; save it as plain UTF-8")
    for number, line in enumerate(content.split(b"\n"), 1):
        for sign, word in ((b"\t", "a tab; indent with spaces"), (b"\0", "a NUL byte; remove it")):
            if sign in line:
                raise StopError(f"{name}:{number}:{line.index(sign) + 1}: {word}")
    try:
        text = content.decode("utf-8")
    except UnicodeDecodeError as error:
        place = _place(content[: error.start].decode("utf-8"))
        raise StopError(f"{name}:{place}: not UTF-8; save it as plain UTF-8") from None
    try:
        _check_events(text, name)
    except yaml.YAMLError:
        return  # compose meets the same mistake and says it with its place


def _place(before: str) -> str:
    """``line:column`` of the sign that follows the text ``before``."""
    lines = before.split("\n")
    return f"{len(lines)}:{len(lines[-1]) + 1}"


def _check_events(text: str, name: str) -> None:
    depth = 0
    for event in yaml.parse(text, Loader=yaml.SafeLoader):
        mark = event.start_mark
        place = f"{name}:{mark.line + 1}:{mark.column + 1}" if mark else name
        if isinstance(event, yaml.AliasEvent) or getattr(event, "anchor", None) is not None:
            raise StopError(f"{place}: anchors and aliases are not allowed; write the value out")
        if getattr(event, "tag", None) is not None:
            raise StopError(f"{place}: tags are not allowed; remove it")
        depth += isinstance(event, yaml.CollectionStartEvent) - isinstance(event, yaml.CollectionEndEvent)
        if depth > MOST_DEPTH:
            raise StopError(f"{place}: nested deeper than {MOST_DEPTH}")


def _value(node: yaml.Node, place: tuple[Step, ...], marks: Marks, name: str) -> Any:
    marks[place] = (node.start_mark.line + 1, node.start_mark.column + 1)
    if isinstance(node, yaml.MappingNode):
        found: dict[str, Any] = {}
        for key_node, value_node in node.value:
            where = f"{name}:{key_node.start_mark.line + 1}:{key_node.start_mark.column + 1}"
            if not isinstance(key_node, yaml.ScalarNode) or key_node.value == "<<":
                raise StopError(f"{where}: keys must be plain words")
            if key_node.value in found:
                raise StopError(f"{where}: the key {key_node.value!r} is given twice")
            found[key_node.value] = _value(value_node, (*place, key_node.value), marks, name)
            marks.setdefault((*place, key_node.value), (key_node.start_mark.line + 1, key_node.start_mark.column + 1))
        return found
    if isinstance(node, yaml.SequenceNode):
        return tuple(_value(item, (*place, index), marks, name) for index, item in enumerate(node.value))
    return _scalar(str(node.value), plain=getattr(node, "style", None) is None)


def _scalar(text: str, *, plain: bool) -> Any:
    if not plain:
        return text
    if text in _WORDS:
        return _WORDS[text]
    if text == "":
        return None
    if _WHOLE.fullmatch(text) and len(text) <= 18:
        return int(text)
    if _DECIMAL.fullmatch(text) and isfinite(float(text)):
        return float(text)
    return text


def _problems(error: ValidationError, hints: Mapping[str, str]) -> Iterator[tuple[tuple[Step, ...], str]]:
    for problem in error.errors(include_url=False, include_context=False):
        hint = hints.get(str(problem["loc"][-1])) if problem["type"] == "extra_forbidden" else None
        message = problem["msg"].removeprefix("Value error, ")
        yield tuple(problem["loc"]), f"{message}; {hint}" if hint else message


def _nearest(place: tuple[Step, ...], marks: Marks) -> tuple[int, int]:
    while place not in marks and place:
        place = place[:-1]
    return marks.get(place, (1, 1))

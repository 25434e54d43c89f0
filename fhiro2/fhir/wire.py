"""The door: one raw JSON resource in, a checked structure out, or a reason why not.

Two readers give the same answer wherever both apply. The fast one decodes an Observation into typed structures that
name every R4 element, encodes them again and compares how many colons came in with how many were kept: each key has
one, and typed decoders silently keep the last of two equal keys, so fewer colons mean a doubled key. Whatever it
cannot be sure of (an escape, a ``_`` sibling, many brackets, any decoding error) goes to the strict reader, which
refuses duplicate keys, NaN, numbers out of range, lone surrogates and deep nesting by itself and is the judge.
"""

from __future__ import annotations

import hashlib
import json
import math
from typing import Any, NoReturn

import msgspec

from fhiro2.errors import Reason, SkipError

MOST_BYTES = 5_000_000
MOST_DEPTH = 200


class _Element(msgspec.Struct, frozen=True, forbid_unknown_fields=True, omit_defaults=True, gc=False):
    id: str | None = None
    extension: Any = None


class Coding(_Element, frozen=True, forbid_unknown_fields=True, omit_defaults=True, gc=False):
    """R4 Coding."""

    system: str | None = None
    version: str | None = None
    code: str | None = None
    display: str | None = None
    userSelected: bool | None = None  # noqa: N815


class Concept(_Element, frozen=True, forbid_unknown_fields=True, omit_defaults=True, gc=False):
    """R4 CodeableConcept."""

    coding: tuple[Coding, ...] = ()
    text: str | None = None


class Quantity(_Element, frozen=True, forbid_unknown_fields=True, omit_defaults=True, gc=False):
    """R4 Quantity."""

    value: float | None = None
    comparator: str | None = None
    unit: str | None = None
    system: str | None = None
    code: str | None = None


class Reference(_Element, frozen=True, forbid_unknown_fields=True, omit_defaults=True, gc=False):
    """R4 Reference."""

    reference: str | None = None
    type: str | None = None
    identifier: Any = None
    display: str | None = None


class Period(_Element, frozen=True, forbid_unknown_fields=True, omit_defaults=True, gc=False):
    """R4 Period."""

    start: str | None = None
    end: str | None = None


class Meta(_Element, frozen=True, forbid_unknown_fields=True, omit_defaults=True, gc=False):
    """R4 Meta."""

    versionId: str | None = None  # noqa: N815
    lastUpdated: str | None = None  # noqa: N815
    source: str | None = None
    profile: Any = None
    security: Any = None
    tag: Any = None


class _Valued(_Element, frozen=True, forbid_unknown_fields=True, omit_defaults=True, gc=False):
    modifierExtension: Any = None  # noqa: N815
    code: Concept | None = None
    valueQuantity: Quantity | None = None  # noqa: N815
    valueCodeableConcept: Concept | None = None  # noqa: N815
    valueString: str | None = None  # noqa: N815
    valueBoolean: bool | None = None  # noqa: N815
    valueInteger: int | None = None  # noqa: N815
    valueRange: Any = None  # noqa: N815
    valueRatio: Any = None  # noqa: N815
    valueSampledData: Any = None  # noqa: N815
    valueTime: str | None = None  # noqa: N815
    valueDateTime: str | None = None  # noqa: N815
    valuePeriod: Any = None  # noqa: N815
    dataAbsentReason: Concept | None = None  # noqa: N815
    interpretation: Any = None
    referenceRange: Any = None  # noqa: N815


class Component(_Valued, frozen=True, forbid_unknown_fields=True, omit_defaults=True, gc=False):
    """R4 Observation.component."""


class Observation(_Valued, frozen=True, forbid_unknown_fields=True, omit_defaults=True, gc=False):
    """R4 Observation with every element named; what is not interpreted is kept as it came."""

    resourceType: str = ""  # noqa: N815
    meta: Meta | None = None
    implicitRules: str | None = None  # noqa: N815
    language: str | None = None
    text: Any = None
    contained: tuple[dict[str, Any], ...] = ()
    identifier: tuple[Any, ...] = ()
    basedOn: Any = None  # noqa: N815
    partOf: Any = None  # noqa: N815
    status: str | None = None
    category: tuple[Concept, ...] = ()
    subject: Reference | None = None
    focus: Any = None
    encounter: Reference | None = None
    effectiveDateTime: str | None = None  # noqa: N815
    effectivePeriod: Period | None = None  # noqa: N815
    effectiveTiming: Any = None  # noqa: N815
    effectiveInstant: str | None = None  # noqa: N815
    issued: str | None = None
    performer: Any = None
    note: Any = None
    bodySite: Concept | None = None  # noqa: N815
    method: Concept | None = None
    specimen: Reference | None = None
    device: Reference | None = None
    hasMember: tuple[Reference, ...] = ()  # noqa: N815
    derivedFrom: Any = None  # noqa: N815
    component: tuple[Component, ...] = ()


_OBSERVATION = msgspec.json.Decoder(Observation)
_ANYTHING = msgspec.json.Decoder()
_ENCODER = msgspec.json.Encoder()


class Door:
    """Reads raw resources and counts how many went through the fast and the strict reader."""

    def __init__(self) -> None:
        self.fast = 0
        self.strict = 0

    def observation(self, line: bytes) -> Observation:
        """The Observation in ``line``; raises SkipError with the reason where it cannot be trusted."""
        if _plain(line):
            try:
                found = _OBSERVATION.decode(line)
            except (msgspec.MsgspecError, UnicodeDecodeError, RecursionError):
                pass
            else:
                if _ENCODER.encode(found).count(b":") == line.count(b":"):
                    self.fast += 1
                    return found
        self.strict += 1
        return _convert(read_strictly(line))

    def resource(self, line: bytes) -> dict[str, Any]:
        """Any resource as a dictionary, by the same rules; raises SkipError."""
        if _plain(line):
            try:
                found = _ANYTHING.decode(line)
            except (msgspec.MsgspecError, UnicodeDecodeError, RecursionError):
                pass
            else:
                if type(found) is dict and _ENCODER.encode(found).count(b":") == line.count(b":"):
                    self.fast += 1
                    return found
        self.strict += 1
        return read_strictly(line)


def _plain(line: bytes) -> bool:
    """Whether the fast reader may try: nothing in the line that it could misread without noticing."""
    return (
        b"\\" not in line
        and (b"_" not in line or b'"_' not in line)
        and len(line) - len(line.translate(None, b"{[")) <= MOST_DEPTH
        and len(line) <= MOST_BYTES
    )


def read_strictly(line: bytes) -> dict[str, Any]:
    """One JSON object by the strict rules, ``_`` siblings left out; raises SkipError with the reason."""
    if len(line) > MOST_BYTES:
        raise SkipError(Reason.SIZE, f"{len(line)} bytes; at most {MOST_BYTES} are read")
    try:
        text = line.decode("utf-8")
    except UnicodeDecodeError as error:
        raise SkipError(Reason.ENCODING, f"not UTF-8 at byte {error.start}") from None
    try:
        found = json.loads(
            text,
            object_pairs_hook=_without_doubles,
            parse_constant=_refuse_constant,
            parse_float=_finite,
            parse_int=_whole,
        )
    except RecursionError:
        raise SkipError(Reason.DEPTH, "nested too deeply") from None
    except json.JSONDecodeError as error:
        raise SkipError(Reason.JSON, f"not JSON at character {error.pos}") from None
    if type(found) is not dict:
        raise SkipError(Reason.JSON, "not a JSON object")
    _check_tree(found, 1)
    return found


def canonical(resource: Any) -> bytes:
    """The canonical JSON of a resource as read: sorted keys, no spaces; equal content, equal bytes."""
    return msgspec.json.encode(resource, order="sorted")


def content_hash(line: bytes) -> bytes:
    """SHA-256 of the canonical JSON of a resource; of its bytes where it cannot be read."""
    try:
        return hashlib.sha256(canonical(read_strictly(line))).digest()
    except SkipError:
        return hashlib.sha256(line).digest()


def _convert(resource: dict[str, Any]) -> Observation:
    try:
        return msgspec.convert(resource, Observation)
    except msgspec.ValidationError as error:
        raise SkipError(_reason_of(str(error)), f"does not have the form of an R4 Observation: {error}") from None


def _reason_of(text: str) -> Reason:
    if "unknown field" in text:
        return Reason.VERSION
    if ".value`" in text or "Number" in text:
        return Reason.NUMBER
    return Reason.TYPE


def _without_doubles(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    found = dict(pairs)
    if len(found) != len(pairs):
        raise SkipError(Reason.DUPLICATE_KEY, "one object names the same key twice")
    if any(key.startswith("_") for key in found):
        return {key: value for key, value in found.items() if not key.startswith("_")}
    return found


def _refuse_constant(name: str) -> NoReturn:
    raise SkipError(Reason.NUMBER, f"{name} is not a JSON number")


def _finite(text: str) -> float:
    number = float(text)
    if not math.isfinite(number):
        raise SkipError(Reason.RANGE, "a number is too large to be read")
    return number


def _whole(text: str) -> int:
    if len(text) > 18:
        raise SkipError(Reason.RANGE, "a whole number is too large to be read")
    return int(text)


def _check_tree(node: Any, depth: int) -> None:
    if depth > MOST_DEPTH:
        raise SkipError(Reason.DEPTH, f"nested deeper than {MOST_DEPTH}")
    if type(node) is str:
        if not node.isascii() and any("\ud800" <= sign <= "\udfff" for sign in node):
            raise SkipError(Reason.ENCODING, "half a surrogate pair")
    elif type(node) is dict:
        for key, value in node.items():
            _check_tree(key, depth)
            _check_tree(value, depth + 1)
    elif type(node) is list:
        for value in node:
            _check_tree(value, depth + 1)

"""The unit of the account: one resource version, as a line or as an entry of a Bundle."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import msgspec

from fhiro2.errors import Reason, SkipError
from fhiro2.fhir.wire import Door
from fhiro2.read import Raw

OBSERVATION = b'{"resourceType":"Observation"'
"""How nearly every line with an Observation begins; others are looked into."""

_BUNDLE = b'"Bundle"'
_BUNDLE_WITHIN = 4096
_URN = "urn:uuid:"


def named_id(unit: Raw) -> str:
    """The id that a resource without one takes from its full URL; '' where that is no UUID."""
    return unit.full_url.removeprefix(_URN) if unit.full_url.startswith(_URN) else ""


def resource(unit: Raw, door: Door) -> dict[str, Any]:
    """The resource as a dictionary; raises SkipError."""
    if unit.fault is Reason.SIZE:
        raise SkipError(Reason.SIZE, "larger than what is read")
    try:
        return door.resource(unit.content)
    except SkipError as error:
        raise refusal(unit, error) from None


def refusal(unit: Raw, error: SkipError) -> SkipError:
    """The error with its true cause: what breaks off at the end of a file was cut, not badly written."""
    if unit.fault is Reason.TRUNCATED and error.reason is Reason.JSON:
        return SkipError(Reason.TRUNCATED, "the file ends in the middle of this line")
    return error


class _Entry(msgspec.Struct):
    fullUrl: str | None = None  # noqa: N815
    resource: msgspec.Raw = msgspec.Raw()


class _Bundle(msgspec.Struct):
    resourceType: str = ""  # noqa: N815
    entry: tuple[_Entry, ...] = ()


class _Kind(msgspec.Struct):
    resourceType: str = ""  # noqa: N815


_BUNDLE_OF = msgspec.json.Decoder(_Bundle)
_KIND_OF = msgspec.json.Decoder(_Kind)
_UNREADABLE = (msgspec.MsgspecError, UnicodeDecodeError, RecursionError)


def units(raw: Raw) -> Iterator[Raw]:
    """The resources in one raw line: itself, or the entries of a Bundle."""
    bundle = _bundle(raw)
    if bundle is None:
        yield raw
        return
    for number, entry in enumerate(bundle.entry):
        content = bytes(entry.resource)
        if content:
            yield Raw(content, raw.file, raw.line, None, number, entry.fullUrl or "")


def _bundle(raw: Raw) -> _Bundle | None:
    if raw.fault is Reason.SIZE or _BUNDLE not in raw.content[:_BUNDLE_WITHIN]:
        return None
    try:
        bundle = _BUNDLE_OF.decode(raw.content)
    except _UNREADABLE:
        return None
    return bundle if bundle.resourceType == "Bundle" else None


def observations(raw: Raw) -> Iterator[Raw]:
    """The units of a raw line that are Observations and could be read as a resource at all."""
    for unit in units(raw):
        try:
            if unit.fault is not Reason.SIZE and _KIND_OF.decode(unit.content).resourceType == "Observation":
                resource(unit, Door())
                yield unit
        except (*_UNREADABLE, SkipError):
            continue

"""The rules about addresses: what a base URL, a reference and a link must be before any request is made of it."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Sequence
from typing import NoReturn
from urllib.parse import SplitResult, parse_qsl, unquote, urljoin, urlsplit

from fhiro2.errors import Reason, SkipError, StopError

Origin = tuple[str, str, int]
"""Scheme, host in lower case, port (the scheme's own where none is named)."""

_PORTS = {"http": 80, "https": 443}
_TYPE = re.compile(r"[A-Z][A-Za-z]{1,63}")
_ID = re.compile(r"[A-Za-z0-9.-]{1,64}")
_SIGNS = re.compile(r"[!-\[\]-~]*")  # printable ASCII without the backslash, which readers of addresses disagree on
_LOOPBACK = ("127.0.0.1", "::1", "localhost")
_NOT_FILTERS = {"_count", "_format", "_pretty", "_total", "_summary", "_elements", "_include", "_revinclude"}


def checked_base(url: str) -> str:
    """The base URL without a slash at its end; raises StopError, which does not repeat it: it may hold a secret."""
    try:
        parts = _split(url)
    except ValueError as error:
        raise StopError(f"the server's base URL {error}; correct it in the settings") from None
    if "?" in url or "#" in url:
        raise StopError("the server's base URL has a query or a fragment; give it up to the path of the FHIR service")
    return parts.geturl().rstrip("/")


def origin(url: str) -> Origin:
    """Where requests to ``url`` go; raises ValueError saying what no followed address may have."""
    parts = _split(url)
    return parts.scheme, parts.hostname or "", parts.port or _PORTS[parts.scheme]


def on_this_machine(address: Origin) -> bool:
    """Whether requests stay on this machine, where no TLS is needed to keep a token secret."""
    return address[1] in _LOOPBACK


def checked_type(kind: str) -> str:
    """``kind``, which has the form of a resource type; raises ValueError."""
    if not _TYPE.fullmatch(kind):
        raise ValueError("not the name of a resource type")
    return kind


def is_reference(text: str) -> bool:
    """Whether ``text`` has the form Type/id."""
    kind, _, name = text.partition("/")
    return bool(_TYPE.fullmatch(kind) and _ID.fullmatch(name) and name.strip("."))


def checked_reference(reference: str) -> str:
    """``reference``, which has the form Type/id; raises SkipError, since references come with foreign data."""
    if not is_reference(reference):
        raise SkipError(Reason.TYPE, "a reference that is not of the form Type/id")
    return reference


def followed(link: str, against: str, place: str) -> str:
    """The address of ``link`` as seen from ``against``, on the same origin; raises StopError before it is used.

    ``place`` is what the link belongs to, for the message. The link itself is never repeated: it may hold values.
    """
    try:
        _check_writing(link)
        target = urljoin(against, link).partition("#")[0]
        if origin(target) != origin(against):
            raise ValueError("leads to another origin")
    except ValueError as error:
        _refuse(place, str(error))
    return target


def same_origin(url: str, home: Origin, place: str) -> None:
    """Refuse a request that would leave ``home``; raises StopError."""
    try:
        found = origin(url)
    except ValueError as error:
        _refuse(place, str(error))
    if found != home:
        _refuse(place, "leads to another origin")


def dropped(asked: Sequence[tuple[str, str]], self_link: str) -> str | None:
    """The first filter that was asked for and that the self link, which tells what was searched for, omits.

    Searches for a parameter with a modifier need the same modifier there; without, any will do.
    """
    told = Counter(name for name, _ in parse_qsl(self_link.partition("?")[2].partition("#")[0]))
    for name, count in Counter(name for name, _ in dict.fromkeys(asked)).items():
        found = sum(times for other, times in told.items() if other == name or other.startswith(f"{name}:"))
        if name not in _NOT_FILTERS and found < count:
            return name
    return None


def _split(url: str) -> SplitResult:
    _check_writing(url)
    try:
        parts = urlsplit(url)
        parts.port  # noqa: B018  (read for its ValueError)
    except ValueError:
        raise ValueError("is no valid address") from None
    if parts.scheme not in _PORTS or not parts.hostname:
        raise ValueError("is not of the form http(s)://host[:port]/path")
    if "@" in parts.netloc:
        raise ValueError("names a user before its host")
    return parts


def _check_writing(link: str) -> None:
    """Refuse what readers of addresses understand in different ways; raises ValueError."""
    if not _SIGNS.fullmatch(link):
        raise ValueError("has signs that no address may have")
    path = link.partition("?")[0].partition("#")[0]
    while (plain := unquote(path)) != path:
        path = plain
    if ".." in path.replace("\\", "/").split("/"):
        raise ValueError("climbs by '..'")


def _refuse(place: str, fault: str) -> NoReturn:
    raise StopError(f"security: {place}: an address from the server {fault}; not followed, ask who runs the server")

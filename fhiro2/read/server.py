"""Polling a FHIR server: what is new since a cursor, and single resources that others point to."""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from typing import Any

from fhiro2.errors import RetryError, SkipError
from fhiro2.fhir.answers import Page
from fhiro2.fhir.client import Client
from fhiro2.fhir.wire import Door
from fhiro2.read.label import Label, label

VALUES_AT_ONCE = 50
_NAMELESS = Label("", "", "", "", ())


@dataclass(frozen=True)
class Found:
    """One resource as the server sent it, with its label: '' all over where it cannot be read."""

    content: bytes
    resource: dict[str, Any]
    label: Label


@dataclass
class Poll:
    """What one stream brought: how far it now goes, and how many entries were not what was asked for.

    It goes on from ``updated``, never back, and not beyond ``until``: a moment that is still to come would hide all
    that is written before it.
    """

    until: datetime
    updated: str = ""
    foreign: int = 0

    def note(self, updated: str) -> None:
        """Go as far as the greatest ``lastUpdated``, kept as the server wrote it."""
        at, before = instant(updated), instant(self.updated)
        if at is not None and at <= self.until and (before is None or at > before):
            self.updated = updated


class ServerSource:
    """The resources of one server, read over ``client``; ``code_parameter`` is what finds Observations by code."""

    def __init__(
        self,
        client: Client,
        base_urls: Sequence[str],
        page_size: int,
        overlap: timedelta,
        code_parameter: str = "code",
    ) -> None:
        self._client = client
        self._base_urls = base_urls
        self._page_size = page_size
        self._overlap = overlap
        self._code_parameter = code_parameter
        self.door = Door()

    def changed(self, kind: str, since: str, poll: Poll, codes: Sequence[str] = ()) -> Iterator[list[Found]]:
        """Page after page of what changed since ``since`` ('' for all), read a little further back, oldest first.

        Each entry is looked at again: what is of another kind or has none of ``codes`` is counted and dropped. What
        cannot be read comes without a name. Raises RetryError where the server says that its answer is not whole.
        """
        asked = {"_sort": "_lastUpdated", "_count": str(self._page_size)}
        if since:
            asked["_lastUpdated"] = f"ge{self._from(since)}"
        if codes:
            asked[self._code_parameter] = ",".join(codes)
        for page in self._pages(kind, asked):
            found = list(self._read(page, kind, poll, frozenset(codes)))
            for one in found:
                poll.note(one.label.updated)
            yield found

    def having(self, kind: str, name: str, values: Sequence[str], poll: Poll) -> Iterator[list[Found]]:
        """What has one of ``values`` by the search parameter ``name``, page after page; a server may give more."""
        for start in range(0, len(values), VALUES_AT_ONCE):
            some = values[start : start + VALUES_AT_ONCE]
            for page in self._pages(kind, {name: ",".join(some), "_count": str(self._page_size)}):
                yield list(self._read(page, kind, poll, frozenset()))

    def _pages(self, kind: str, asked: dict[str, str]) -> Iterator[Page]:
        for page in self._client.search(kind, list(asked.items())):
            errors = [str(issue) for issue in page.outcomes if issue.severity in ("fatal", "error")]
            if errors:
                raise RetryError(f"GET {kind}: the server says that its answer is not whole ({', '.join(errors)})")
            yield page

    def _read(self, page: Page, kind: str, poll: Poll, codes: frozenset[str]) -> Iterator[Found]:
        for entry in page.entries:
            content = entry.resource
            try:
                resource = self.door.resource(content)
            except SkipError:
                yield Found(content, {}, _NAMELESS)
                continue
            if resource.get("resourceType") == kind and (not codes or codes & _codes(resource)):
                yield Found(content, resource, label(resource, self._base_urls) or _NAMELESS)
            else:
                poll.foreign += 1

    def _from(self, since: str) -> str:
        at = instant(since)
        return since if at is None else (at - self._overlap).isoformat(timespec="milliseconds").replace("+00:00", "Z")


def instant(text: str) -> datetime | None:
    """A FHIR instant as a moment in UTC; None where it is none."""
    try:
        found = datetime.fromisoformat(text)
    except ValueError:
        return None
    return None if found.tzinfo is None else found.astimezone(UTC)


def escaped(token: str) -> str:
    """``system|value`` fit for a list of tokens in a search."""
    system, _, value = token.partition("|")
    return "|".join(re.sub(r"([\\,|$])", r"\\\1", part) for part in (system, value))


def _codes(resource: dict[str, Any]) -> set[str]:
    """Codes of a resource and of its components, as ``system|code``."""
    concepts = [node.get("code") for node in (resource, *_objects(resource.get("component")))]
    codings = [one.get("coding") for one in concepts if isinstance(one, dict)]
    return {f"{one.get('system', '')}|{one.get('code')}" for some in codings for one in _objects(some)}


def _objects(node: Any) -> list[dict[str, Any]]:
    """The objects of a list; none where ``node`` is something else."""
    return [one for one in node if isinstance(one, dict)] if isinstance(node, list) else []

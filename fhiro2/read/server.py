"""Polling a FHIR server: what is new since a cursor, and single resources that others point to."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from datetime import UTC, datetime, timedelta
from typing import Any

from fhiro2.errors import RetryError, SkipError
from fhiro2.fhir.answers import Page
from fhiro2.fhir.client import Client
from fhiro2.fhir.wire import Door
from fhiro2.read.label import Label, label

IDS_AT_ONCE = 50
CODES_AT_ONCE = 40


@dataclass(frozen=True)
class Found:
    """One resource as the server sent it, with its label."""

    content: bytes
    resource: dict[str, Any]
    label: Label


@dataclass
class Poll:
    """What one stream brought: how far it now goes, and how many entries were not what was asked for."""

    updated: str = ""
    foreign: int = 0
    unreadable: int = 0
    _greatest: datetime | None = field(default=None, repr=False)

    def note(self, updated: str) -> None:
        """Go as far as the greatest ``lastUpdated``, kept as the server wrote it."""
        at = instant(updated)
        if at is not None and (self._greatest is None or at > self._greatest):
            self._greatest, self.updated = at, updated


class ServerSource:
    """The resources of one server, read over ``client``."""

    def __init__(self, client: Client, base_urls: Sequence[str], page_size: int, overlap: timedelta) -> None:
        self._client = client
        self._base_urls = base_urls
        self._page_size = page_size
        self._overlap = overlap
        self.door = Door()

    def changed(self, kind: str, since: str, poll: Poll, codes: Sequence[str] = ()) -> Iterator[list[Found]]:
        """Page after page of what changed since ``since`` ('' for all), read a little further back, oldest first.

        Each entry is looked at again: what is of another kind or has none of ``codes`` is counted and dropped. Raises
        RetryError where the server says that something is missing in its answer.
        """
        asked = {"_sort": "_lastUpdated", "_count": str(self._page_size)}
        if since:
            asked["_lastUpdated"] = f"ge{self._from(since)}"
        for start in range(0, max(len(codes), 1), CODES_AT_ONCE):
            some = codes[start : start + CODES_AT_ONCE]
            for page in self._pages(kind, {**asked, **({"code": ",".join(some)} if some else {})}):
                found = list(self._read(page, kind, poll, frozenset(some)))
                for one in found:
                    poll.note(one.label.updated)
                yield found

    def named(self, keys: Sequence[str]) -> Iterator[Found]:
        """The resources ``keys`` (``Type/id``), as far as the server has them."""
        by_kind: dict[str, list[str]] = {}
        for key in keys:
            kind, _, identity = key.partition("/")
            by_kind.setdefault(kind, []).append(identity)
        for kind, identities in by_kind.items():
            for start in range(0, len(identities), IDS_AT_ONCE):
                some = identities[start : start + IDS_AT_ONCE]
                asked = {"_id": ",".join(some), "_count": str(len(some))}
                for page in self._pages(kind, asked):
                    for one in self._read(page, kind, Poll(), frozenset()):
                        if one.label.key.partition("/")[2] in some:
                            yield one

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
                poll.unreadable += 1
                continue
            named = label(resource, self._base_urls)
            if named is None or not named.key.startswith(f"{kind}/") or (codes and not codes & _codes(resource)):
                poll.foreign += 1
                continue
            yield Found(content, resource, named)

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


def _codes(resource: dict[str, Any]) -> set[str]:
    """Codes of a resource and of its components, as ``system|code``."""
    found = set()
    for node in (resource, *(resource.get("component") or ())):
        concept = node.get("code") if isinstance(node, dict) else None
        for coding in (concept.get("coding") if isinstance(concept, dict) else None) or ():
            if isinstance(coding, dict):
                found.add(f"{coding.get('system', '')}|{coding.get('code')}")
    return found

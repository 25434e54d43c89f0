"""Resources to a FHIR server: each by its own id, so that writing again makes no second one; others' edits stay."""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import dataclass
from enum import StrEnum
from typing import Any

from fhiro2.errors import RetryError, StopError
from fhiro2.fhir.answers import Answer, batch_answers
from fhiro2.fhir.client import Client


class Fate(StrEnum):
    """What became of one write."""

    DONE = "done"
    LATER = "later"
    DEAD = "dead"


@dataclass(frozen=True)
class Delivered:
    """One write: what became of it, the server's ETag, and what is wrong ('' if nothing; never a value)."""

    fate: Fate
    etag: str = ""
    problem: str = ""


class ServerSink:
    """Writes single resources by PUT. ``client`` is the one that may write."""

    def __init__(self, client: Client) -> None:
        self._client = client

    def put(self, reference: str, content: bytes, etag: str, doubtful: Sequence[bytes]) -> Delivered:
        """Make ``reference`` hold ``content``; ``etag`` is what the server last said of it ('' for a first write).

        ``doubtful`` are contents that were sent before without an answer: the server is asked first, and one of them
        is still ours. What somebody else has changed meanwhile is not overwritten. Raises RetryError where the server
        cannot be reached, StopError where it does not let us write at all.
        """
        if doubtful:
            there = self._client.read(reference)
            if there.status == 200 and holds(there.body, content):
                return Delivered(Fate.DONE, there.etag or "")
            if there.status == 200 and any(holds(there.body, one) for one in doubtful):
                etag = there.etag or ""
        return self._judged(reference, content, self._client.update(reference, content, etag or None))

    def put_together(self, writes: Sequence[tuple[str, bytes, str]]) -> list[Delivered | None]:
        """Several resources (reference, content, ETag) in one batch, each on its own merits.

        None is for those that the server did not take: ``put`` finds out why. Raises StopError where it takes no
        batches at all.
        """
        entries = [_entry(reference, content, etag) for reference, content, etag in writes]
        answer = self._client.send_bundle(_BATCH % b",".join(entries))
        if answer.status == 413:
            return [None] * len(writes)
        if answer.status != 200:
            raise StopError(
                f"POST Bundle: the server takes no batches (status {answer.status}); set write_together to 1"
            )
        answers = batch_answers(answer.body)
        if len(answers) != len(writes):
            raise RetryError("POST Bundle: the answer has another number of entries than the request")
        return [Delivered(Fate.DONE, etag) if status in (200, 201) else None for status, etag in answers]

    def _judged(self, reference: str, content: bytes, answer: Answer) -> Delivered:
        if answer.status in (200, 201):
            return Delivered(Fate.DONE, answer.etag or self._client.read(reference).etag or "")
        if answer.status == 412:
            there = self._client.read(reference)
            if there.status == 200 and holds(there.body, content):
                return Delivered(Fate.DONE, there.etag or "")
            return Delivered(Fate.DEAD, problem="changed at the server by somebody else; look at it there")
        if answer.status == 410:
            return Delivered(Fate.DEAD, problem="deleted at the server by somebody else")
        if answer.status == 409:
            return Delivered(Fate.LATER, problem="conflict at the server")
        if answer.status in (404, 405):
            raise StopError(
                f"{reference}: the server does not take a resource with an id of ours (status {answer.status}); "
                "allow update-as-create for this client"
            )
        codes = ", ".join(sorted({issue.code for issue in answer.issues})) or "no reason given"
        return Delivered(Fate.DEAD, problem=f"refused with status {answer.status} ({codes})")


_BATCH = b'{"resourceType":"Bundle","type":"batch","entry":[%s]}'


def _entry(reference: str, content: bytes, etag: str) -> bytes:
    guard = {"ifMatch": etag} if etag else {"ifNoneMatch": "*"}
    request = json.dumps({"method": "PUT", "url": reference, **guard}).encode()
    return b'{"resource":%s,"request":%s}' % (content, request)


def holds(body: bytes, content: bytes) -> bool:
    """Whether the resource in ``body`` has all of ``content``; a server may add to it, and write 7.40 as 7.4."""
    try:
        return _covers(json.loads(body), json.loads(content))
    except ValueError:
        return False


def _covers(there: Any, ours: Any) -> bool:
    if isinstance(ours, dict):
        return isinstance(there, dict) and all(
            name in there and _covers(there[name], value) for name, value in ours.items() if name != "meta"
        )
    if isinstance(ours, list):
        return isinstance(there, list) and len(there) == len(ours) and all(map(_covers, there, ours))
    return (type(there) is type(ours) and there == ours) or (
        isinstance(ours, int | float) and isinstance(there, int | float) and there == ours
    )

"""What a FHIR server said, as plain values: answers, pages of a search, and issues without their free text."""

from __future__ import annotations

import re
from collections.abc import Collection
from dataclasses import dataclass

import msgspec

from fhiro2.errors import RetryError


@dataclass(frozen=True)
class Issue:
    """One issue of an OperationOutcome: severity and code from R4's lists, and simple FHIRPaths of what is meant.

    Texts (diagnostics, details) are left out: they may hold a patient's values.
    """

    severity: str
    code: str
    expression: tuple[str, ...] = ()

    def __str__(self) -> str:
        return " ".join((f"{self.severity}/{self.code}", *self.expression))


@dataclass(frozen=True)
class Answer:
    """One complete answer. Header fields that did not come are None; ``etag`` is as it came, fit for ``match``."""

    status: int
    body: bytes
    etag: str | None
    last_modified: str | None
    location: str | None
    issues: tuple[Issue, ...]


@dataclass(frozen=True)
class Entry:
    """One entry of a search: its resource (b'' where it was left out), its full URL, ``match`` or ``include``."""

    resource: bytes
    full_url: str
    mode: str


@dataclass(frozen=True)
class Page:
    """One page of a search; ``outcomes`` are the server's own remarks, an error among them makes it incomplete.

    ``total`` is what the server claims for the whole search; many count otherwise or not at all.
    """

    entries: tuple[Entry, ...]
    self_link: str | None
    outcomes: tuple[Issue, ...]
    total: int | None


class _Head(msgspec.Struct):
    resourceType: str = ""  # noqa: N815
    id: str | None = None


class _Details(msgspec.Struct):
    text: str | None = None


class _Issue(msgspec.Struct):
    severity: str = ""
    code: str = ""
    diagnostics: str | None = None
    details: _Details | None = None
    expression: tuple[str, ...] | None = None


class _Outcome(msgspec.Struct):
    resourceType: str = ""  # noqa: N815
    issue: tuple[_Issue, ...] = ()


class _Search(msgspec.Struct):
    mode: str | None = None


class _Entry(msgspec.Struct):
    fullUrl: str | None = None  # noqa: N815
    resource: msgspec.Raw = msgspec.Raw()
    search: _Search | None = None


class _Link(msgspec.Struct):
    relation: str = ""
    url: str = ""


class _Searchset(msgspec.Struct):
    resourceType: str = ""  # noqa: N815
    type: str = ""
    total: int | None = None
    link: tuple[_Link, ...] = ()
    entry: tuple[_Entry, ...] = ()


class _Request(msgspec.Struct):
    method: str = ""
    url: str = ""


class _Written(msgspec.Struct):
    request: _Request = msgspec.field(default_factory=_Request)


class _Writes(msgspec.Struct):
    entry: tuple[_Written, ...] = ()


class _Response(msgspec.Struct):
    status: str = ""
    etag: str | None = None


class _Answered(msgspec.Struct):
    response: _Response = msgspec.field(default_factory=_Response)


class _Answers(msgspec.Struct):
    entry: tuple[_Answered, ...] = ()


_OUTCOME = b'"OperationOutcome"'
_UNREADABLE = (msgspec.MsgspecError, UnicodeDecodeError, RecursionError)
_CODE = re.compile(r"[a-z-]{1,30}")
_PATH = re.compile(r"[A-Za-z0-9_.\[\]]{1,200}")
_REFUSAL = re.compile(
    r"unknown|unsupported|unrecogni[sz]ed|ignored|not (?:supported|recogni[sz]ed|implemented|known)", re.I
)
_UNCLEAR = Issue("error", "structure")  # an outcome that cannot be read is no good news


def identity(body: bytes) -> tuple[str, str | None] | None:
    """The resource type and the id of one JSON object; None where ``body`` is none."""
    try:
        head = msgspec.json.decode(body, type=_Head)
    except _UNREADABLE:
        return None
    return head.resourceType, head.id


def told(answer: Answer) -> str:
    """Status and issues of an answer, for messages."""
    return ", ".join((str(answer.status), *map(str, answer.issues)))


def writes(bundle: bytes) -> list[tuple[str, str]]:
    """Method and address of each entry's request; raises ValueError if ``bundle`` cannot be read."""
    try:
        return [(entry.request.method, entry.request.url) for entry in msgspec.json.decode(bundle, type=_Writes).entry]
    except _UNREADABLE:
        raise ValueError("not a Bundle of requests") from None


def issues(body: bytes) -> tuple[Issue, ...]:
    """The issues of an OperationOutcome, none where ``body`` is something else."""
    outcome = _outcome(body)
    return () if outcome is None else tuple(_issue(issue) for issue in outcome.issue)


def refused_parameter(body: bytes, names: Collection[str]) -> str | None:
    """Which of the parameters ``names`` an OperationOutcome says it does not know; '' where it names none of them."""
    outcome = _outcome(body)
    for issue in outcome.issue if outcome else ():
        text = " ".join(
            (issue.diagnostics or "", (issue.details and issue.details.text) or "", *(issue.expression or ()))
        )
        refuses = issue.code == "not-supported" or _REFUSAL.search(text)
        if issue.severity == "information" or not refuses:
            continue
        for name in sorted(names, key=len, reverse=True):
            if re.search(rf"(?<![\w-]){re.escape(name)}(?![\w-])", text):
                return name
        if "parameter" in text.lower():
            return ""
    return None


def page(body: bytes, names: Collection[str], place: str) -> tuple[Page, str | None, str | None]:
    """The page in ``body``, its next link, and a parameter of ``names`` that an outcome in it says was not used.

    Raises RetryError naming ``place`` if ``body`` is no Bundle of type searchset.
    """
    try:
        bundle = msgspec.json.decode(body, type=_Searchset)
    except _UNREADABLE:
        raise RetryError(f"{place}: the answer does not have the form of a Bundle") from None
    if bundle.resourceType != "Bundle" or bundle.type != "searchset":
        raise RetryError(f"{place}: the answer is not a Bundle of type searchset")
    entries, outcomes, refused = [], list[Issue](), None
    for entry in bundle.entry:
        resource, mode = bytes(entry.resource), (entry.search and entry.search.mode) or "match"
        if mode == "outcome" or _outcome(resource):
            outcomes += issues(resource) or (_UNCLEAR,)
            if refused is None:
                refused = refused_parameter(resource, names)
        else:
            entries.append(Entry(resource, entry.fullUrl or "", mode))
    links = {link.relation: link.url for link in reversed(bundle.link)}
    return Page(tuple(entries), links.get("self"), tuple(outcomes), bundle.total), links.get("next"), refused


def batch_answers(body: bytes) -> list[tuple[int, str]]:
    """Status and ETag ('' where there is none) of each entry of a batch's answer; empty if ``body`` is none."""
    try:
        bundle = msgspec.json.decode(body, type=_Answers)
    except _UNREADABLE:
        return []
    found = []
    for entry in bundle.entry:
        status = entry.response.status[:3]
        found.append((int(status) if status.isdigit() else 0, entry.response.etag or ""))
    return found


def _outcome(body: bytes) -> _Outcome | None:
    if _OUTCOME not in body:
        return None
    try:
        outcome = msgspec.json.decode(body, type=_Outcome)
    except _UNREADABLE:
        return None
    return outcome if outcome.resourceType == "OperationOutcome" else None


def _issue(issue: _Issue) -> Issue:
    severity, code = (text if _CODE.fullmatch(text) else "unclear" for text in (issue.severity, issue.code))
    return Issue(severity, code, tuple(path for path in issue.expression or () if _PATH.fullmatch(path)))

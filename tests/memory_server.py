"""A FHIR server in memory behind ``responses``: search with paging, read, guarded writes, and faults where told."""

from __future__ import annotations

import json
import re
from collections.abc import Callable
from dataclasses import dataclass, field
from datetime import UTC, datetime, timedelta
from typing import Any
from urllib.parse import parse_qsl, urlencode, urlsplit

import responses
from requests import PreparedRequest

Resource = dict[str, Any]
Reply = tuple[int, dict[str, str], bytes]
Ordinary = Callable[[], Reply]
Fault = Callable[[PreparedRequest, Ordinary], Reply | Exception]
"""Answers instead of the server; the second argument is what it would have done, and does when called."""

FIRST_SECOND = datetime(2026, 3, 3, 6, tzinfo=UTC)


@dataclass
class _Planted:
    matches: Callable[[str, int], bool]
    fault: Fault
    left: int


@dataclass
class MemoryServer:
    """Each resource with its versions; ``log`` holds method and address of each request that came here.

    Each ``add`` is one second later than the one before. Writes over HTTP do not move the clock, so that what was
    added has the same ``lastUpdated`` however often it was written meanwhile.
    """

    base: str
    versions: dict[str, list[Resource]] = field(default_factory=dict)
    log: list[tuple[str, str]] = field(default_factory=list)
    headers: list[dict[str, str]] = field(default_factory=list)
    seconds: int = 0
    _planted: list[_Planted] = field(default_factory=list)
    _searches: list[list[Resource]] = field(default_factory=list)

    def start(self, mock: responses.RequestsMock) -> None:
        """Answer all requests to the base URL."""
        for method in (responses.GET, responses.PUT):
            mock.add_callback(method, re.compile(re.escape(self.base) + ".*"), self._answer)

    def add(self, *resources: Resource, tick: bool = True) -> None:
        """Store resources of others, each as the next version of its id."""
        for one in resources:
            self.seconds += tick
            self._store(f"{one['resourceType']}/{one['id']}", one)

    def current(self, key: str) -> Resource:
        """The latest version of one resource."""
        return self.versions[key][-1]

    def fault(self, where: str | int, fault: Fault, times: int = 1) -> None:
        """Let ``fault`` answer ``times`` requests: those from the n-th from now on, or that begin with ``where``.

        ``where`` is a method and the beginning of a path, as in ``GET Observation``.
        """
        if isinstance(where, int):
            at = len(self.log) + where
            self._planted.append(_Planted(lambda _, number: number >= at, fault, times))
        else:
            self._planted.append(_Planted(lambda line, _: line.startswith(where), fault, times))

    def repair(self) -> None:
        """Forget all faults."""
        self._planted.clear()

    def requests(self, beginning: str) -> list[str]:
        """All requests so far that begin with this method and path."""
        lines = [f"{method} {url.removeprefix(self.base).lstrip('/')}" for method, url in self.log]
        return [line for line in lines if line.startswith(beginning)]

    def _answer(self, request: PreparedRequest) -> Reply | Exception:
        url, method = str(request.url), str(request.method)
        self.log.append((method, url))
        self.headers.append(dict(request.headers))
        line = f"{method} {url.removeprefix(self.base).lstrip('/')}"

        def ordinary() -> Reply:
            return self._put(request) if method == "PUT" else self._get(url)

        for planted in self._planted:
            if planted.left and planted.matches(line, len(self.log)):
                planted.left -= 1
                return planted.fault(request, ordinary)
        return ordinary()

    def _store(self, key: str, resource: Resource) -> Resource:
        earlier = self.versions.setdefault(key, [])
        updated = FIRST_SECOND + timedelta(seconds=self.seconds)
        meta = {"versionId": str(len(earlier) + 1), "lastUpdated": updated.isoformat().replace("+00:00", "Z")}
        earlier.append({**resource, "meta": {**resource.get("meta", {}), **meta}})
        return earlier[-1]

    def _put(self, request: PreparedRequest) -> Reply:
        key = str(request.url).removeprefix(f"{self.base}/")
        there, headers = self.versions.get(key), request.headers
        unwanted = there and headers.get("If-None-Match") == "*"
        if unwanted or ("If-Match" in headers and (not there or headers["If-Match"] != etag(there[-1]))):
            return outcome(412, "conflict")
        assert isinstance(request.body, bytes)
        return (200 if there else 201), {"ETag": etag(self._store(key, json.loads(request.body)))}, b""

    def _get(self, url: str) -> Reply:
        path, params = urlsplit(url).path, dict(parse_qsl(urlsplit(url).query))
        name = path.removeprefix(urlsplit(self.base).path).strip("/")
        if "/" in name:
            there = self.versions.get(name)
            return found(there[-1], etag(there[-1])) if there else outcome(404, "not-found")
        if "_search" not in params:
            self._searches.append(self._matching(name, params))
            params |= {"_search": str(len(self._searches) - 1), "_from": "0"}
        return found(self._page(url, params))

    def _page(self, url: str, params: dict[str, str]) -> Resource:
        rows, start, count = self._searches[int(params["_search"])], int(params["_from"]), int(params["_count"])
        links = [{"relation": "self", "url": url}]
        if start + count < len(rows):
            more = urlencode({**params, "_from": str(start + count)})
            links.append({"relation": "next", "url": f"{url.partition('?')[0]}?{more}"})
        entries = [
            {"fullUrl": f"{self.base}/{one['resourceType']}/{one['id']}", "resource": one, "search": {"mode": "match"}}
            for one in rows[start : start + count]
        ]
        return {"resourceType": "Bundle", "type": "searchset", "link": links, "entry": entries}

    def _matching(self, kind: str, params: dict[str, str]) -> list[Resource]:
        rows = [rows[-1] for key, rows in self.versions.items() if key.startswith(f"{kind}/")]
        if "_lastUpdated" in params:
            since = datetime.fromisoformat(params["_lastUpdated"].removeprefix("ge"))
            rows = [one for one in rows if updated(one) >= since]
        for name, values in (("_id", _ids), ("code", _codes), ("patient", _patients), ("identifier", _identifiers)):
            if name in params:
                asked = set(params[name].split(","))
                rows = [one for one in rows if asked & set(values(one))]
        return sorted(rows, key=updated) if params.get("_sort") == "_lastUpdated" else rows


def etag(resource: Resource) -> str:
    """The ETag of a version."""
    return f'W/"{resource["meta"]["versionId"]}"'


def updated(resource: Resource) -> datetime:
    """When a version was stored."""
    return datetime.fromisoformat(resource["meta"]["lastUpdated"])


def found(resource: Resource, tag: str = "") -> Reply:
    """An answer with a resource."""
    return 200, {"ETag": tag} if tag else {}, json.dumps(resource, separators=(",", ":")).encode()


def issue(code: str, severity: str = "error", text: str = "") -> Resource:
    """An OperationOutcome."""
    return {"resourceType": "OperationOutcome", "issue": [{"severity": severity, "code": code, "diagnostics": text}]}


def outcome(status: int, code: str, text: str = "") -> Reply:
    """A refusal with its OperationOutcome."""
    return status, {}, json.dumps(issue(code, text=text)).encode()


def _ids(one: Resource) -> list[str]:
    return [one["id"]]


def _codes(one: Resource) -> list[str]:
    return [f"{row.get('system', '')}|{row['code']}" for row in one.get("code", {}).get("coding", [])]


def _patients(one: Resource) -> list[str]:
    return [(one.get(name) or {}).get("reference", "") for name in ("subject", "patient")]


def _identifiers(one: Resource) -> list[str]:
    return [f"{row.get('system', '')}|{row['value']}" for row in one.get("identifier", [])]

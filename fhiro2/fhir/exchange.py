"""One exchange with a FHIR server over HTTP: what may pass is tried again, with growing pauses.

Nothing is read from the environment (proxies, .netrc), no cookie is kept, certificates are always verified, and
nothing is sent to another origin. Messages name method, resource type and id, and status; never a token, a body or an
address with parameters.
"""

from __future__ import annotations

import logging
import random
import re
import ssl
import time
from collections.abc import Callable
from contextlib import closing
from dataclasses import dataclass
from datetime import UTC, datetime
from email.utils import parsedate_to_datetime
from http.client import RemoteDisconnected
from pathlib import Path

import requests

from fhiro2 import __version__
from fhiro2.errors import RetryError, StopError
from fhiro2.fhir import answers, links
from fhiro2.fhir.answers import Answer
from fhiro2.fhir.deadline import connections

FHIR_JSON = "application/fhir+json"

FIRST_WAIT = 0.5
"""Seconds before the first repetition; each further one waits twice as long."""

MOST_AFTER = 3600.0
"""The longest wait in seconds that a server's Retry-After can ask of the worker."""

_CHUNK = 65_536
_MOST_REDIRECTS = 5
_TOKEN = re.compile(r"[A-Za-z0-9._~+/-]+=*")  # RFC 6750, section 2.1
_SECONDS = re.compile(r"[+-]?\d+")
_MARK = b"\xef\xbb\xbf"

logging.getLogger("urllib3").setLevel(logging.ERROR)  # its lower lines name addresses with their parameters


@dataclass(frozen=True)
class Limits:
    """What one client bears. Seconds, bytes (of a body, unpacked) and counts."""

    connect: float = 5.0
    silence: float = 30.0
    deadline: float = 120.0
    most_bytes: int = 50_000_000
    most_pages: int = 10_000
    retries: int = 4
    longest_wait: float = 60.0


@dataclass(frozen=True)
class Clock:
    """The machine's time: seconds that only grow, seconds since 1970, a pause, and a number from 0 to 1 for jitter."""

    monotonic: Callable[[], float] = time.monotonic
    since_1970: Callable[[], float] = time.time
    sleep: Callable[[float], None] = time.sleep
    jitter: Callable[[], float] = random.SystemRandom().random


ORDINARY_LIMITS = Limits()
MACHINE_CLOCK = Clock()


class _Passing(Exception):  # noqa: N818  (becomes a RetryError where it does not pass)
    """One failed try: what happened, what Retry-After said, whether an idle connection had been closed meanwhile."""

    def __init__(self, what: str, after: float | None = None, stale: bool = False) -> None:
        super().__init__(what)
        self.after = after
        self.stale = stale


class Exchange:
    """Requests to the origin of ``base_url``; the arguments are those of ``client.Client``."""

    def __init__(
        self, base_url: str, token: Callable[[], str | None], ca_file: Path | None, limits: Limits, clock: Clock
    ) -> None:
        self._home = links.origin(base_url)
        self._token = token
        self._verify: bool | str = True if ca_file is None else _authorities(ca_file)
        self._limits = limits
        self._clock = clock
        self._adapter = connections(limits.deadline, clock.monotonic)

    def send(
        self, method: str, target: str, place: str, headers: dict[str, str], content: bytes | None = None
    ) -> Answer:
        """The server's answer to ``method`` at ``target``; ``place`` names the request in messages.

        A request must be safe to repeat. Raises RetryError for what did not pass within the tries, and StopError for a
        token that is refused (401, 403), a redirect that is not followed and an answer that is too large.
        """
        failures = redirects = 0
        renewed = reconnected = False
        while True:
            try:
                answer = self._once(method, target, place, headers, content)
            except _Passing as failure:
                if failure.stale and not reconnected:
                    reconnected = True
                    continue
                failures += 1
                self._pause(failures, failure, place)
                continue
            if answer.status == 401 and not renewed:
                renewed = True
            elif 300 <= answer.status < 400:
                redirects += 1
                if method != "GET" or answer.location is None or redirects > _MOST_REDIRECTS:
                    raise StopError(f"{place}: the server redirects ({answer.status}); set its true base URL")
                target = links.followed(answer.location, target, place)
            else:
                _refuse_unauthorised(answer, place)
                return answer

    def _once(self, method: str, target: str, place: str, headers: dict[str, str], content: bytes | None) -> Answer:
        request = requests.Request(method, target, self._headers() | headers, data=content).prepare()
        links.same_origin(request.url or "", self._home, place)
        waits = (self._limits.connect, self._limits.silence)
        try:
            with closing(self._adapter.send(request, stream=True, timeout=waits, verify=self._verify)) as response:
                body = self._body(response, place)
        except requests.RequestException as error:
            raise _failed(error) from None
        status = response.status_code
        if status in (408, 429) or status >= 500:
            raise _Passing(str(status), self._asked_wait(response))
        said = body or (method == "GET" and status == 200)
        if said and (status < 300 or status in (404, 410)) and answers.identity(body) is None:
            raise _Passing(f"{status} with a body that is not FHIR JSON")
        told = response.headers
        return Answer(
            status, body, told.get("ETag"), told.get("Last-Modified"), told.get("Location"), answers.issues(body)
        )

    def _headers(self) -> dict[str, str]:
        found = {
            "Accept": FHIR_JSON,
            "Accept-Encoding": "gzip, deflate",
            "Cache-Control": "no-cache",
            "User-Agent": f"fhiro2/{__version__}",
        }
        token = self._token()
        if token is None:
            return found
        if not _TOKEN.fullmatch(token):
            raise StopError("the token has signs that no bearer token may have; check where it comes from")
        if self._home[0] != "https" and not links.on_this_machine(self._home):
            raise StopError("a token is not sent over plain http to another machine; use an https base URL")
        return found | {"Authorization": f"Bearer {token}"}

    def _body(self, response: requests.Response, place: str) -> bytes:
        chunks, size = [], 0
        for chunk in response.iter_content(_CHUNK):
            size += len(chunk)
            if size > self._limits.most_bytes:
                raise StopError(
                    f"{place}: an answer of more than {self._limits.most_bytes} bytes; ask for smaller pages"
                )
            chunks.append(chunk)
        return b"".join(chunks).removeprefix(_MARK)

    def _pause(self, failures: int, failure: _Passing, place: str) -> None:
        """Wait before the next try, at least as long as the server asks; raises RetryError where that is too long."""
        longest = self._limits.longest_wait
        asked = failure.after
        if failures > self._limits.retries or (asked is not None and asked > longest):
            after = None if asked is None else min(asked, MOST_AFTER)
            raise RetryError(f"{place}: {failure} (tries: {failures}); try again later", after) from None
        growing = min(longest, FIRST_WAIT * 2.0 ** (failures - 1)) * (1 + self._clock.jitter()) / 2
        self._clock.sleep(max(asked or 0.0, growing))

    def _asked_wait(self, response: requests.Response) -> float | None:
        """Seconds that Retry-After asks for; a date is compared with the server's own clock where it tells it."""
        text = response.headers.get("Retry-After", "").strip()
        if _SECONDS.fullmatch(text):
            return max(0.0, float(text))
        until = _instant(text)
        if until is None:
            return None
        now = _instant(response.headers.get("Date", ""))
        return max(0.0, until - (self._clock.since_1970() if now is None else now))


def _authorities(ca_file: Path) -> str:
    try:
        ssl.create_default_context(cafile=ca_file)
    except (OSError, ssl.SSLError):
        raise StopError(
            f"{ca_file}: cannot be read as certificates in PEM form; check the path and the file"
        ) from None
    return str(ca_file)


def _instant(text: str) -> float | None:
    """Seconds since 1970 of an HTTP date."""
    try:
        found: datetime = parsedate_to_datetime(text)
    except (TypeError, ValueError, IndexError, OverflowError):
        return None
    return (found if found.tzinfo else found.replace(tzinfo=UTC)).timestamp()


def _failed(error: requests.RequestException) -> _Passing:
    """What went wrong on the way, without the address that the library's text holds."""
    if isinstance(error, requests.exceptions.SSLError):
        return _Passing("no trusted TLS connection: check the server's certificate, its host name and ca_file")
    causes: list[BaseException] = [error]
    for cause in causes:
        causes += [
            part for part in (*cause.args, cause.__cause__) if isinstance(part, BaseException) and part not in causes
        ]
    if isinstance(error, requests.Timeout) or any(isinstance(cause, TimeoutError) for cause in causes):
        return _Passing("no complete answer in time")
    if isinstance(error, requests.exceptions.ChunkedEncodingError | requests.exceptions.ContentDecodingError):
        return _Passing("the body broke off or cannot be unpacked")
    stale = any(isinstance(cause, RemoteDisconnected | ConnectionResetError | BrokenPipeError) for cause in causes)
    return _Passing("the connection failed", stale=stale)


def _refuse_unauthorised(answer: Answer, place: str) -> None:
    if answer.status == 401:
        raise StopError(
            f"{place}: 401: the token was refused twice; check the token, its audience and this machine's clock"
        )
    if answer.status == 403:
        raise StopError(
            f"{place}: {answers.told(answer)}: not allowed; check the scope of the token for this type and method"
        )

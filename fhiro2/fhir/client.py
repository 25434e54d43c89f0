"""The only door to FHIR over HTTP: bytes and plain values in, plain values out.

What people must put right is a StopError, what may pass later a RetryError. Every other answer goes back to the
caller, who knows what a 404 or a 412 means to it.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from pathlib import Path
from urllib.parse import urlencode

from fhiro2.errors import RetryError, StopError
from fhiro2.fhir import answers, links
from fhiro2.fhir.answers import Answer, Page
from fhiro2.fhir.exchange import FHIR_JSON, MACHINE_CLOCK, ORDINARY_LIMITS, Clock, Exchange, Limits

_MINIMAL = {"Content-Type": FHIR_JSON, "Prefer": "return=minimal"}  # of what was written the ETag is enough


class Client:
    """One FHIR server, at ``base_url`` (http(s)://host[:port]/path).

    ``token`` is asked before each request and gives the bearer token, or None where none is needed; over plain http a
    token goes to this machine only. ``ca_file`` is a PEM file of the authorities to trust instead of the public ones.
    May be used by several threads. Raises StopError for a base URL or a file that cannot be right.
    """

    def __init__(
        self,
        base_url: str,
        token: Callable[[], str | None],
        *,
        ca_file: Path | None = None,
        limits: Limits = ORDINARY_LIMITS,
        clock: Clock = MACHINE_CLOCK,
    ) -> None:
        self.base_url = links.checked_base(base_url)
        self._most_pages = limits.most_pages
        self._send = Exchange(self.base_url, token, ca_file, limits, clock).send

    def read(self, reference: str) -> Answer:
        """The resource ``Type/id``: 200 with it, 404 unknown, 410 deleted; another one's content is a RetryError.

        Raises SkipError where ``reference`` has another form.
        """
        place = f"GET {links.checked_reference(reference)}"
        answer = self._send("GET", f"{self.base_url}/{reference}", place, {})
        return _holding(answer, place, *reference.split("/"))

    def capabilities(self) -> Answer:
        """The server's CapabilityStatement."""
        place = "GET metadata"
        return _holding(self._send("GET", f"{self.base_url}/metadata", place, {}), place, "CapabilityStatement")

    def update(self, reference: str, content: bytes, match: str | None) -> Answer:
        """Write ``content`` as ``Type/id`` if the ETag there is ``match``, for None if there is nothing.

        Tries that fail are repeated: the same content under the same id. Where a first try was stored and its answer
        lost, the repetition gives 412, as for a foreign change: read again and compare. Not every server heeds None.
        """
        place = f"PUT {links.checked_reference(reference)}"
        guard = {"If-None-Match": "*"} if match is None else {"If-Match": match}
        return self._send("PUT", f"{self.base_url}/{reference}", place, _MINIMAL | guard, content)

    def send_bundle(self, content: bytes) -> Answer:
        """Post a batch or transaction of updates by id, which is repeated as ``update`` is.

        Raises ValueError where an entry is something else, since a repetition could then write twice.
        """
        if any(method != "PUT" or not links.is_reference(address) for method, address in answers.writes(content)):
            raise ValueError("a Bundle to send holds updates by id (PUT Type/id) only")
        return self._send("POST", self.base_url, "POST Bundle", _MINIMAL, content)

    def search(self, kind: str, params: Sequence[tuple[str, str]]) -> Iterator[Page]:
        """All pages of a search, in the server's order; a resource may come twice or on a later page than expected.

        StopError: a filter was not used, a next link leads elsewhere or in a circle, too many pages. RetryError also
        where the search expired between two pages: start it again. Entries still need to be checked one by one, since
        a server may claim a filter that it did not use.
        """
        target = f"{self.base_url}/{links.checked_type(kind)}" + (f"?{urlencode(params)}" if params else "")
        names = {name for name, _ in params}
        visited: dict[str, int] = {}
        while True:
            number = len(visited) + 1
            place = f"GET {kind}, page {number}"
            if target in visited:
                raise StopError(
                    f"{place}: the next link leads back to page {visited[target]}; report it to the server's makers"
                )
            if number > self._most_pages:
                raise StopError(f"{place}: more than {number - 1} pages; search a shorter time or raise the limit")
            visited[target] = number
            answer = self._send("GET", target, place, {"Prefer": "handling=strict"})
            if number > 1 and answer.status in (404, 410):
                raise RetryError(f"{place}: {answer.status}: the search has expired on the server; start it again")
            if answer.status != 200:
                _refuse_dropped(place, answers.refused_parameter(answer.body, names))
                raise StopError(
                    f"{place}: {answers.told(answer)}; check the base URL and the parameters of the search"
                )
            page, following, refused = answers.page(answer.body, names, place)
            _refuse_dropped(place, refused)
            if number == 1 and page.self_link is not None:
                _refuse_dropped(place, links.dropped(params, page.self_link))
            yield page
            if following is None:
                return
            target = links.followed(following, f"{self.base_url}/", place)


def _refuse_dropped(place: str, name: str | None) -> None:
    if name is not None:
        raise StopError(
            f"{place}: the server dropped the filter {name or '(not named)'}; search without it or configure it there"
        )


def _holding(answer: Answer, place: str, kind: str, name: str | None = None) -> Answer:
    if answer.status == 200:
        found = answers.identity(answer.body)
        if found is None or found[0] != kind or (name is not None and found[1] != name):
            raise RetryError(f"{place}: the answer holds something else")
    return answer

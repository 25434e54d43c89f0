"""The worker against faults while it reads (C44, C47 to C58 of the failure catalogue).

After each fault the next healthy cycle must end as a run without it does: the same content at the server, each
resource of ours at its first version, and the same ledger.
"""

from __future__ import annotations

import json
from contextlib import suppress
from datetime import timedelta
from email.utils import format_datetime
from itertools import product
from pathlib import Path
from typing import Any
from urllib.parse import parse_qs, urlsplit

import pytest
import requests
import responses

from fhiro2.errors import Fhiro2Error, RetryError, StopError
from fhiro2.live import account_of
from tests.beside import NOW, Beside, Held, beside, held, lactate, person, undisturbed, ward
from tests.feeds import Resource, concept, mapping, observation, specimen
from tests.memory_server import Fault, Reply, found, issue, outcome
from tests.planted import NAME, SECRETS

Mock = responses.RequestsMock

pytest_plugins = ("tests.beside_fixtures",)
pytestmark = pytest.mark.usefixtures("nothing_told")


def same(made: Beside, calm: Held) -> None:
    assert held(made) == calm
    assert len(made.ledger) == 9  # three values and a flag, each with its Provenance, and the Device
    assert {number for number, _ in made.ours().values()} == {1}
    assert made.outbox == []


def answering(reply: Reply) -> Fault:
    return lambda _request, _ordinary: reply


def changed(change: Any) -> Fault:
    """The ordinary answer with its Bundle changed by a function."""

    def fault(_request: Any, ordinary: Any) -> Reply:
        bundle = json.loads(ordinary()[2])
        change(bundle)
        return found(bundle)

    return fault


def torn(_request: Any, ordinary: Any) -> Reply:
    status, headers, body = ordinary()
    return status, headers, body[: len(body) // 2]


def cut(_request: Any, _ordinary: Any) -> Exception:
    return requests.ConnectionError(f"https://fhir.example.org/?name={NAME}")


def without_filter(bundle: Resource) -> None:
    bundle["link"] = [{"relation": "self", "url": "https://fhir.example.org/r4/Observation?code=x"}]


def refused_filter(bundle: Resource) -> None:
    remark = issue("not-supported", "warning", "the parameter code was ignored")
    bundle["entry"].append({"resource": remark, "search": {"mode": "outcome"}})


def not_whole(bundle: Resource) -> None:
    remark = issue("incomplete", "error", f"{NAME} could not be read")
    bundle["entry"].append({"resource": remark, "search": {"mode": "outcome"}})


def foreign_next(bundle: Resource) -> None:
    bundle["link"].append({"relation": "next", "url": "https://evil.example.net/r4/Observation?page=2"})


def looping_next(bundle: Resource) -> None:
    own = next(link["url"] for link in bundle["link"] if link["relation"] == "self")
    bundle["link"].append({"relation": "next", "url": own})


HTML = 200, {"Content-Type": "text/html"}, b"<html>sign in</html>"
PASSING: list[tuple[str, Fault, int, type[Fhiro2Error], str]] = [
    ("503 for ever", answering((503, {}, b"")), 99, RetryError, "503"),
    ("429, an hour", answering((429, {"Retry-After": "3600"}, b"")), 1, RetryError, "429"),
    ("torn", torn, 99, RetryError, "not FHIR JSON"),
    ("html", answering(HTML), 99, RetryError, "not FHIR JSON"),
    ("cut", cut, 99, RetryError, "connection failed"),
    ("incomplete", changed(not_whole), 1, RetryError, "not whole"),
    ("filter dropped", changed(without_filter), 1, StopError, "dropped the filter"),
    ("filter refused", changed(refused_filter), 1, StopError, "dropped the filter code"),
    ("foreign next", changed(foreign_next), 1, StopError, "another origin"),
    ("looping next", changed(looping_next), 1, StopError, "leads back"),
    ("redirected", answering((302, {"Location": "https://evil.example.net/r4"}, b"")), 1, StopError, "another origin"),
    ("401", answering((401, {}, b"")), 2, StopError, "token was refused twice"),
    ("403", answering(outcome(403, "forbidden", NAME)), 1, StopError, "check the scope"),
]
PLACES = ["GET Observation", "GET Condition"]


# --- transport and server ----------------------------------------------------------------------------------------


@pytest.mark.parametrize("place", PLACES)
@pytest.mark.parametrize(
    ("fault", "times", "error", "says"), [row[1:] for row in PASSING], ids=[r[0] for r in PASSING]
)
def test_a_fault_ends_the_cycle_with_its_cursor_kept(
    made: Beside, calm: Held, place: str, fault: Fault, times: int, error: type[Fhiro2Error], says: str
) -> None:
    if "dropped" in says and place != "GET Observation":
        says = "dropped the filter _sort"
        fault = changed(without_filter)
    before = made.cursors
    made.server.fault(place, fault, times)
    with pytest.raises(error, match=says) as raised:
        made.cycle()
    assert not [secret for secret in SECRETS if secret in str(raised.value)]
    assert made.cursors == before
    made.server.repair()
    made.cycle()
    same(made, calm)
    assert all(url.startswith("https://fhir.example.org/") for _, url in made.server.log)


@pytest.mark.parametrize(
    ("place", "fault"),
    [
        *product(["GET Observation", "GET Specimen"], [answering((500, {}, b"")), torn, cut, answering(HTML)]),
        *product(["PUT Observation", "PUT Provenance"], [answering((500, {}, b"")), cut, answering(HTML)]),
    ],
)
def test_what_passes_leaves_no_trace(made: Beside, calm: Held, place: str, fault: Fault) -> None:
    made.server.fault(place, fault)
    assert made.cycle().notices == []
    same(made, calm)


@pytest.mark.parametrize("text", ["20", format_datetime(NOW + timedelta(seconds=20), usegmt=True)])
def test_the_time_that_a_server_asks_for_is_waited(made: Beside, calm: Held, text: str) -> None:
    made.server.fault("GET Observation", answering((429, {"Retry-After": text}, b"")), 2)
    made.cycle()
    assert made.pauses == [20.0, 20.0]
    same(made, calm)


@pytest.mark.parametrize("number", range(1, 40, 3))
def test_a_connection_lost_anywhere_loses_nothing(made: Beside, calm: Held, number: int) -> None:
    made.server.fault(number, cut, 99)
    with suppress(RetryError):
        made.cycle()
    made.server.repair()
    made.cycle()
    same(made, calm)


def test_no_address_outside_is_asked_and_no_token_sent_there(made: Beside, mock: Mock) -> None:
    for where in (changed(foreign_next), answering((307, {"Location": "//evil.example.net/r4"}, b""))):
        made.server.fault("GET Patient", where)
        with pytest.raises(StopError, match="security"):
            made.cycle()
    assert {call.request.url.split("/")[2] for call in mock.calls} == {"fhir.example.org"}


def test_a_search_that_expires_between_two_pages_is_started_again(tmp_path: Path, mock: Mock) -> None:
    rows = [*ward(), *(lactate(f"more-{number}", seconds=number) for number in range(5))]
    calm = undisturbed(tmp_path / "calm", *rows)
    made = beside(tmp_path / "faulty", mock, *rows, page_size=2)
    expired: Fault = lambda request, ordinary: (  # noqa: E731
        outcome(410, "expired") if "_from=2" in str(request.url) else ordinary()
    )
    made.server.fault("GET Observation", expired, 99)
    with pytest.raises(RetryError, match="expired"):
        made.cycle()
    assert not any(made.cursors)
    assert made.stored  # what came before the fault is kept
    made.server.repair()
    made.cycle()
    assert held(made) == calm


# --- cursors -----------------------------------------------------------------------------------------------------


def test_many_of_one_moment_across_a_page_edge(tmp_path: Path, mock: Mock) -> None:
    made = beside(tmp_path / "a", mock, person(), page_size=7)
    made.server.add(*(lactate(f"l{number}", seconds=number) for number in range(100)), tick=False)
    first = made.cycle()
    assert (first.received, first.repeated, len(made.stored)) == (101, 0, 101)
    assert made.cycle().repeated == 101
    assert len(made.stored) == 101


def test_the_same_resource_on_two_pages(made: Beside, calm: Held) -> None:
    def twice(bundle: Resource) -> None:
        bundle["entry"] += bundle["entry"]

    made.server.fault("GET Observation", changed(twice), 9)
    assert made.cycle().repeated == 2
    same(made, calm)


def test_what_arrives_while_other_codes_are_read_is_not_passed_over(made: Beside) -> None:
    """One search asks for some of the codes: what is new for them meanwhile is older than what the last one brings."""
    made.server.fault(1, lambda request, ordinary: _late(made, ordinary))
    made.cycle()
    made.cycle()
    assert {"Observation/late 1", "Observation/later 1"} <= set(made.ends())


def _late(made: Beside, ordinary: Any) -> Reply:
    """After the first search for codes: one that it would have brought, and half an hour later one of other codes."""
    done: Reply = ordinary()
    asked = parse_qs(urlsplit(made.server.log[-1][1]).query)["code"][0].split(",")
    code = next(one.partition("|")[2] for one in asked if one.startswith("http://loinc.org|"))
    made.server.add(observation("late", code, 1.0, "1"))
    made.server.seconds += 1800
    made.server.add(lactate("later", seconds=60))
    return done


def test_a_code_that_is_mapped_later_is_read_from_the_beginning(made: Beside) -> None:
    made.server.add({**lactate("own"), "code": concept(("urn:example:site", "LAK"))})
    made.server.seconds += 3600
    made.server.add(lactate("newer", seconds=600))
    made.cycle()
    assert "Observation/own 1" not in made.ends()
    row = {"system": "urn:example:site", "code": "LAK", "loinc": "2518-9"}
    made.cycle(mapping(codes=[row]))
    assert made.ends()["Observation/own 1"] == "used"


def test_a_cursor_never_goes_back(made: Beside) -> None:
    made.server.add(person("p2"))
    made.cycle()
    made.cycle()  # reads what the first one wrote
    before = made.cursors
    made.server.versions.pop("Patient/p2")
    made.cycle()
    assert made.cursors == before


def test_a_moment_in_the_future_does_not_move_the_cursor(made: Beside) -> None:
    """Else all that comes until then would never be read."""
    made.server.seconds += 10 * 365 * 86_400
    made.server.add(lactate("future", seconds=60))
    made.cycle()
    made.server.seconds = 3600
    made.server.add(lactate("now", seconds=120))
    made.cycle()
    assert {"Observation/future 1", "Observation/now 1"} <= set(made.ends())


# --- entries -----------------------------------------------------------------------------------------------------


def entered(*contents: bytes) -> Fault:
    """The ordinary answer with entries put in as they are, byte for byte."""

    def fault(_request: Any, ordinary: Any) -> Reply:
        status, headers, body = ordinary()
        more = b",".join(b'{"resource":%s}' % content for content in contents)
        assert body.endswith(b"]}")
        comma = b"" if body.endswith(b"[]}") else b","
        return status, headers, body[:-2] + comma + more + b"]}"

    return fault


def as_bytes(resource: Resource) -> bytes:
    return json.dumps(resource, separators=(",", ":")).encode()


ANOTHER = as_bytes({**observation("tested", "2703-7", 91.0), "meta": {"versionId": "1"}})
FOREIGN = [
    as_bytes(specimen("stray")),
    as_bytes(observation("without-code", "0000-0")),
    as_bytes(observation("no-coding", code={"text": "a", "coding": 5}, component=7)),
    b"{}",
    b"[]",
]
UNREADABLE = {
    "duplicate-key": ANOTHER.replace(b'"status"', b'"id":"other","status"'),
    "range": ANOTHER.replace(b"91.0", b"1e999"),
    "invariant": ANOTHER.replace(b'"tested"', b'"a b"'),
}


def test_entries_that_nobody_asked_for_are_counted_and_dropped(made: Beside, calm: Held) -> None:
    made.server.fault("GET Observation", entered(*FOREIGN[:4]), 1)
    assert made.cycle().foreign == 4
    same(made, calm)
    assert account_of(made.store)["reasons"]["out_of_scope"]["not-asked-for"] == 4


@pytest.mark.parametrize("reason", UNREADABLE)
def test_an_entry_that_cannot_be_read_is_kept_aside(made: Beside, calm: Held, reason: str) -> None:
    made.server.fault("GET Observation", entered(UNREADABLE[reason]), 99)
    made.cycle()
    (row,) = [one for one in made.stored if one.bucket == "quarantined"]
    assert (row.reason, bytes(row.content)) == (reason, UNREADABLE[reason])
    assert made.ours() == calm.ours
    with made.store.transaction() as work:
        assert work.pending("north") == []
        assert work.try_again() == 1
    made.cycle()
    assert account_of(made.store)["quarantined"] == 1


def test_what_is_older_than_asked_for_is_kept_and_moves_nothing(made: Beside) -> None:
    made.cycle()
    made.cycle()
    before = made.cursors
    old = {**lactate("old", seconds=-600), "meta": {"versionId": "1", "lastUpdated": "2026-03-02T00:00:00Z"}}
    made.server.fault("GET Observation", entered(as_bytes(old)), 9)
    made.cycle()
    assert made.ends()["Observation/old 1"] == "used"
    assert made.cursors == before


def test_own_output_is_never_stored(made: Beside) -> None:
    for _ in range(3):
        made.cycle()
    own = set(made.ledger)
    assert own
    assert not own & {row.key for row in made.stored}
    assert account_of(made.store)["reasons"]["out_of_scope"]["own-output"] == 6  # two later cycles, three values

"""The client against faults of transport and server (C44 to C66 of the failure catalogue, as far as they are its own).

Time is a test's own where nothing real has to pass.
"""

from __future__ import annotations

import itertools
import json
import logging
import socket
import threading
from dataclasses import dataclass, field
from email.utils import formatdate
from http.server import BaseHTTPRequestHandler
from pathlib import Path
from time import monotonic
from typing import Any

import pytest
import requests
import responses
from responses.matchers import header_matcher

from fhiro2 import __version__
from fhiro2.errors import RetryError, SkipError, StopError
from fhiro2.fhir.client import Client
from fhiro2.fhir.exchange import Clock, Exchange, Limits
from tests.faulty import certificates, drip, reply, serving

pytest_plugins = ("tests.server",)

BASE = "https://fhir.example.org/r4"
PATIENT = b'{"resourceType":"Patient","id":"p1"}'
NOW = 1_772_524_800.0  # 2026-03-03T08:00:00Z
SECRET = "geheim.0815"
NAME = "Muster-Eleonore"


@dataclass
class Time:
    """A clock that only pauses move; keeps each pause."""

    pauses: list[float] = field(default_factory=list)
    jitter: float = 1.0

    def clock(self) -> Clock:
        return Clock(lambda: sum(self.pauses), lambda: NOW + sum(self.pauses), self.pauses.append, lambda: self.jitter)


@pytest.fixture
def time() -> Time:
    return Time()


@pytest.fixture
def client(time: Time) -> Client:
    return Client(BASE, lambda: SECRET, limits=Limits(most_pages=5), clock=time.clock())


@pytest.fixture
def mock() -> Any:
    with responses.RequestsMock() as found:
        yield found


def searchset(*entries: dict[str, Any], following: str | None = None, **content: Any) -> bytes:
    links = [{"relation": "next", "url": following}] if following else []
    return json.dumps(
        {"resourceType": "Bundle", "type": "searchset", "link": links, "entry": entries} | content
    ).encode()


def outcome(severity: str, code: str, text: str = "", **more: Any) -> dict[str, Any]:
    return {
        "resourceType": "OperationOutcome",
        "issue": [{"severity": severity, "code": code, "diagnostics": text} | more],
    }


def pages(client: Client, *params: tuple[str, str]) -> list[Any]:
    return list(client.search("Observation", params))


# --- what is sent -------------------------------------------------------------------------------------------------


def test_the_headers_of_a_read(client: Client, mock: responses.RequestsMock) -> None:
    mock.get(f"{BASE}/Patient/p1", body=PATIENT, headers={"ETag": 'W/"3"', "Last-Modified": formatdate(NOW)})
    answer = client.read("Patient/p1")
    assert (answer.status, answer.body, answer.etag, answer.issues) == (200, PATIENT, 'W/"3"', ())
    assert answer.last_modified == formatdate(NOW)
    sent = mock.calls[0].request
    expected = {
        "Accept": "application/fhir+json",
        "Cache-Control": "no-cache",
        "User-Agent": f"fhiro2/{__version__}",
        "Authorization": f"Bearer {SECRET}",
    }
    assert {name: sent.headers[name] for name in expected} == expected
    assert mock.calls[0].request.req_kwargs["verify"] is True


def test_nothing_of_the_environment_is_used(
    mock: responses.RequestsMock, monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    (tmp_path / "netrc").write_text("machine fhir.example.org login somebody password else\n")
    (tmp_path / "netrc").chmod(0o600)
    monkeypatch.setenv("NETRC", str(tmp_path / "netrc"))
    monkeypatch.setenv("HTTPS_PROXY", "http://127.0.0.1:9")
    monkeypatch.setenv("REQUESTS_CA_BUNDLE", str(tmp_path / "netrc"))
    mock.get(f"{BASE}/Patient/p1", body=PATIENT, headers={"Set-Cookie": "seen=1; Path=/"})
    client = Client(BASE, lambda: None)
    for _ in range(2):
        client.read("Patient/p1")
        sent = mock.calls[-1].request
        assert "Authorization" not in sent.headers
        assert "Cookie" not in sent.headers
        assert sent.req_kwargs["verify"] is True
        assert not sent.req_kwargs.get("proxies")


@pytest.mark.parametrize(
    ("match", "guard"), [(None, {"If-None-Match": "*"}), ('W/"7"', {"If-Match": 'W/"7"'})], ids=["first", "again"]
)
def test_a_write_is_guarded(
    client: Client, mock: responses.RequestsMock, match: str | None, guard: dict[str, str]
) -> None:
    expected = guard | {"Content-Type": "application/fhir+json", "Prefer": "return=minimal"}
    mock.put(f"{BASE}/Patient/p1", status=201, headers={"ETag": 'W/"8"'}, match=[header_matcher(expected)])
    answer = client.update("Patient/p1", PATIENT, match)
    assert (answer.status, answer.etag, answer.body) == (201, 'W/"8"', b"")
    sent = mock.calls[0].request
    assert sent.body == PATIENT
    assert len({"If-Match", "If-None-Match"} & set(sent.headers)) == 1


def test_a_search_asks_for_strict_handling(client: Client, mock: responses.RequestsMock) -> None:
    mock.get(f"{BASE}/Observation", body=searchset(), match=[header_matcher({"Prefer": "handling=strict"})])
    assert pages(client, ("_lastUpdated", "ge2026-03-03T08:00:00+01:00"), ("code", "a|b,c|d"))[0].entries == ()
    assert mock.calls[0].request.params == {"_lastUpdated": "ge2026-03-03T08:00:00+01:00", "code": "a|b,c|d"}


@pytest.mark.parametrize(
    "base_url",
    [
        "ftp://fhir.example.org/r4", "file:///etc", "fhir.example.org/r4", "https:///r4", "https://me:pw@fhir.example.org/r4",
        "https://fhir.example.org/r4?x=1", "https://fhir.example.org/r4#x", "https://fhir.example.org:port/r4",
        "https://fhir.example.org\\@x/r4", "https://fhir.example.org/r4\n", "https://fhir.example.org/a/../b",
    ],
)  # fmt: skip
def test_a_base_url_that_cannot_be_right_is_refused(base_url: str) -> None:
    with pytest.raises(StopError, match="the server's base URL") as found:
        Client(base_url, lambda: None)
    assert "pw" not in str(found.value)


def test_a_slash_at_the_end_of_the_base_url_is_no_other_address(mock: responses.RequestsMock) -> None:
    mock.get(f"{BASE}/Patient/p1", body=PATIENT)
    assert Client(f"{BASE}/", lambda: None).read("Patient/p1").status == 200


@pytest.mark.parametrize(
    "reference",
    ["Patient", "Patient/", "/p1", "Patient/..", "Patient/a/b", "Patient/a?b", "patient/a", "javascript:alert(1)",
     "http://169.254.169.254/latest", "Patient/a\n", "Patient/" + "a" * 65, "#p1"],
)  # fmt: skip
def test_a_reference_of_another_form_is_skipped(client: Client, reference: str) -> None:
    with pytest.raises(SkipError, match="not of the form Type/id"):
        client.read(reference)
    with pytest.raises(SkipError, match="not of the form Type/id"):
        client.update(reference, b"{}", None)


@pytest.mark.parametrize("kind", ["", "observation", "Observation/x", "../Observation", "Observation?x"])
def test_a_search_for_no_resource_type_is_refused(client: Client, kind: str) -> None:
    with pytest.raises(ValueError, match="resource type"):
        next(client.search(kind, []))


@pytest.mark.parametrize("token", ["", "two words", "a\r\nX-Evil: 1", "\u00fcber"])
def test_a_token_that_is_none_is_not_sent(token: str) -> None:
    with pytest.raises(StopError, match="no bearer token may have") as found:
        Client(BASE, lambda: token).read("Patient/p1")
    assert token == "" or token not in str(found.value)


def test_a_token_goes_over_plain_http_to_this_machine_only() -> None:
    with pytest.raises(StopError, match="use an https base URL"):
        Client("http://fhir.example.org/r4", lambda: SECRET).read("Patient/p1")


@pytest.mark.parametrize(
    "request_line",
    [{"method": "POST", "url": "Observation"}, {"method": "DELETE", "url": "Observation/a"},
     {"method": "PUT", "url": "Observation?identifier=a"}, {"method": "PUT", "url": "http://other.example/Observation/a"}],
)  # fmt: skip
def test_a_bundle_that_could_write_twice_is_refused(client: Client, request_line: dict[str, str]) -> None:
    good = {"request": {"method": "PUT", "url": "Observation/a"}}
    with pytest.raises(ValueError, match="updates by id"):
        client.send_bundle(json.dumps({"resourceType": "Bundle", "entry": [good, {"request": request_line}]}).encode())
    with pytest.raises(ValueError, match="not a Bundle"):
        client.send_bundle(b"[]")


# --- what comes back ----------------------------------------------------------------------------------------------


@pytest.mark.parametrize("status", [400, 404, 409, 410, 412, 413, 422])
def test_c66_refusals_come_back_as_answers_with_issues_and_without_texts(
    client: Client, mock: responses.RequestsMock, status: int, time: Time
) -> None:
    said = outcome("error", "processing", f"{NAME} is too high", expression=["Observation.status", f"name = '{NAME}'"])
    mock.put(f"{BASE}/Observation/o1", json=said, status=status)
    answer = client.update("Observation/o1", b"{}", None)
    assert answer.status == status
    assert [str(issue) for issue in answer.issues] == ["error/processing Observation.status"]
    assert time.pauses == []


@pytest.mark.parametrize("status", [400, 413])
def test_c66_a_refusal_by_a_proxy_is_an_answer_too(client: Client, mock: responses.RequestsMock, status: int) -> None:
    mock.put(f"{BASE}/Observation/o1", body="<html>too large</html>", status=status)
    answer = client.update("Observation/o1", b"{}", None)
    assert (answer.status, answer.issues) == (status, ())


@pytest.mark.parametrize("status", [404, 410])
def test_a_proxy_s_page_for_what_is_missing_is_no_deletion(
    client: Client, mock: responses.RequestsMock, status: int
) -> None:
    mock.get(f"{BASE}/Patient/p1", body="<html>no such backend</html>", status=status)
    with pytest.raises(RetryError, match=f"{status} with a body that is not FHIR JSON"):
        client.read("Patient/p1")


@pytest.mark.parametrize(
    ("status", "advice"), [(401, "check the token, its audience and this machine's clock"), (403, "check the scope")]
)
def test_a_refused_token_says_what_to_check(
    client: Client, mock: responses.RequestsMock, status: int, advice: str, time: Time
) -> None:
    mock.get(f"{BASE}/Patient/p1", json=outcome("error", "forbidden", NAME), status=status)
    with pytest.raises(StopError, match=f"GET Patient/p1: {status}.*{advice}"):
        client.read("Patient/p1")
    assert len(mock.calls) == (2 if status == 401 else 1)
    assert time.pauses == []


def test_c57_a_token_that_expires_between_two_pages_is_renewed_once(mock: responses.RequestsMock) -> None:
    tokens = iter(["first", "first", "second"])
    mock.get(f"{BASE}/Observation", body=searchset(following="?page=2"))
    for token, answer in (("first", {"status": 401}), ("second", {"body": searchset(total=0)})):
        matcher = header_matcher({"Authorization": f"Bearer {token}"})
        mock.get(f"{BASE}/?page=2", match=[matcher], **answer)
    assert len(pages(Client(BASE, lambda: next(tokens)))) == 2


@pytest.mark.parametrize("body", [b'{"resourceType":"Patient","id":"p2"}', b'{"resourceType":"Group","id":"p1"}'])
def test_another_resource_than_the_asked_one_is_no_answer(
    client: Client, mock: responses.RequestsMock, body: bytes
) -> None:
    mock.get(f"{BASE}/Patient/p1", body=body)
    with pytest.raises(RetryError, match="GET Patient/p1: the answer holds something else"):
        client.read("Patient/p1")


def test_an_answer_that_is_too_large_stops(mock: responses.RequestsMock) -> None:
    mock.get(f"{BASE}/Observation", body=searchset() + b" " * 1000)
    with pytest.raises(StopError, match="more than 900 bytes; ask for smaller pages"):
        pages(Client(BASE, lambda: None, limits=Limits(most_bytes=900)))


# --- tried again --------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("status", [429, 503])
@pytest.mark.parametrize(
    ("asked", "waited"),
    [("7", 7.0), (formatdate(NOW + 9, usegmt=True), 9.0), ("-3", 0.5), ("0", 0.5), ("soon", 0.5),
     (formatdate(NOW - 9, usegmt=True), 0.5), ("60", 60.0)],
    ids=["seconds", "date", "negative", "zero", "unreadable", "past", "longest"],
)  # fmt: skip
def test_c44_retry_after_is_honoured(
    client: Client, mock: responses.RequestsMock, time: Time, status: int, asked: str, waited: float
) -> None:
    mock.get(f"{BASE}/Patient/p1", status=status, headers={"Retry-After": asked})
    mock.get(f"{BASE}/Patient/p1", body=PATIENT)
    assert client.read("Patient/p1").status == 200
    assert time.pauses == [waited]


def test_c44_a_date_is_compared_with_the_server_s_own_clock(
    client: Client, mock: responses.RequestsMock, time: Time
) -> None:
    ahead = NOW + 6 * 60
    told = {"Retry-After": formatdate(ahead + 9, usegmt=True), "Date": formatdate(ahead, usegmt=True)}
    mock.get(f"{BASE}/Patient/p1", status=503, headers=told)
    mock.get(f"{BASE}/Patient/p1", body=PATIENT)
    client.read("Patient/p1")
    assert time.pauses == [9.0]


@pytest.mark.parametrize(("asked", "after"), [("61", 61.0), ("86400", 3600.0), ("9" * 400, 3600.0)])
def test_c44_a_wait_that_is_too_long_is_left_to_the_caller(
    client: Client, mock: responses.RequestsMock, time: Time, asked: str, after: float
) -> None:
    mock.put(f"{BASE}/Patient/p1", status=429, headers={"Retry-After": asked})
    with pytest.raises(RetryError, match="PUT Patient/p1: 429") as found:
        client.update("Patient/p1", PATIENT, None)
    assert found.value.after == after
    assert (len(mock.calls), time.pauses) == (1, [])


@pytest.mark.parametrize("jitter", [0.0, 1.0])
def test_c44_c45_a_failing_server_is_asked_less_and_less_often(
    client: Client, mock: responses.RequestsMock, time: Time, jitter: float
) -> None:
    time.jitter = jitter
    mock.get(f"{BASE}/Patient/p1", status=500)
    with pytest.raises(RetryError, match=r"GET Patient/p1: 500 \(tries: 5\)") as found:
        client.read("Patient/p1")
    assert found.value.after is None
    assert len(mock.calls) == 5
    assert time.pauses == [wait * (1 + jitter) / 2 for wait in (0.5, 1.0, 2.0, 4.0)]


def test_c44_a_short_wait_asked_for_does_not_shorten_the_growing_ones(
    client: Client, mock: responses.RequestsMock, time: Time
) -> None:
    mock.get(f"{BASE}/Patient/p1", status=503, headers={"Retry-After": "1"})
    with pytest.raises(RetryError) as found:
        client.read("Patient/p1")
    assert time.pauses == [1.0, 1.0, 2.0, 4.0]
    assert found.value.after == 1.0


def test_c45_a_name_that_is_not_resolved_and_a_refused_connection_are_tried_again(
    mock: responses.RequestsMock, time: Time
) -> None:
    mock.get(f"{BASE}/Patient/p1", body=requests.ConnectionError(f"no address for /r4?name={NAME}"))
    mock.get(f"{BASE}/Patient/p1", body=PATIENT)
    assert Client(BASE, lambda: None, clock=time.clock()).read("Patient/p1").status == 200
    assert time.pauses == [0.5]
    with socket.socket() as closed:
        closed.bind(("127.0.0.1", 0))
        mock.add_passthru("http://127.0.0.1")
        client = Client(f"http://127.0.0.1:{closed.getsockname()[1]}/fhir", lambda: None, clock=time.clock())
        with pytest.raises(RetryError, match="GET Patient/p1: the connection failed"):
            client.read("Patient/p1")


@pytest.fixture(scope="module")
def pem(server_python: str, tmp_path_factory: pytest.TempPathFactory) -> Path:
    return certificates(server_python, tmp_path_factory.mktemp("certificates"))


def test_c45_a_private_authority_is_trusted_by_its_file_only(pem: Path, time: Time) -> None:
    with serving(lambda handler, _: reply(handler, 200, PATIENT), pem / "good.pem") as (server, base_url):
        assert Client(base_url, lambda: SECRET, ca_file=pem / "good.pem").read("Patient/p1").status == 200
        assert len(server.seen) == 1
        with pytest.raises(RetryError, match=r"no trusted TLS connection.*ca_file"):
            Client(base_url, lambda: SECRET, clock=time.clock()).read("Patient/p1")
        assert len(server.seen) == 1


@pytest.mark.parametrize("name", ["expired", "other"])
def test_c45_a_certificate_that_is_not_good_is_never_bypassed(pem: Path, time: Time, name: str) -> None:
    file = pem / f"{name}.pem"
    with serving(lambda handler, _: reply(handler, 200, PATIENT), file) as (server, base_url):
        with pytest.raises(RetryError, match="no trusted TLS connection"):
            Client(base_url, lambda: SECRET, ca_file=file, clock=time.clock()).read("Patient/p1")
        assert server.seen == []
        assert len(time.pauses) == 4


def test_a_file_without_certificates_is_refused(tmp_path: Path) -> None:
    (tmp_path / "ca.pem").write_text("nothing")
    for name in ("ca.pem", "missing.pem"):
        with pytest.raises(StopError, match=rf"{name}: cannot be read as certificates"):
            Client(BASE, lambda: None, ca_file=tmp_path / name)


HEAD = b"HTTP/1.1 200 OK\r\nContent-Length: 36\r\n\r\n"


@pytest.mark.parametrize(
    ("head", "dripping", "silence", "deadline"),
    [(b"HTTP/1.1 200 OK\r\nX-Slow: ", b"x" * 200, 5.0, 0.1), (HEAD, PATIENT * 5, 5.0, 0.1), (HEAD, b"", 5.0, 0.1),
     (HEAD, b"", 0.1, 5.0), (b"HTTP/1.1 200 OK\r\nTransfer-Encoding: chunked\r\n\r\n", b"1\r\n{\r\n" * 40, 5.0, 0.1)],
    ids=["headers", "body", "silence to the deadline", "silence", "chunks"],
)  # fmt: skip
def test_c46_an_answer_that_only_drips_is_given_up(
    head: bytes, dripping: bytes, silence: float, deadline: float
) -> None:
    over = threading.Event()

    def answering(handler: BaseHTTPRequestHandler, _: int) -> None:
        drip(handler, head, dripping, over)
        over.wait(5)

    with serving(answering) as (server, base_url):
        client = Client(base_url, lambda: None, limits=Limits(silence=silence, deadline=deadline, retries=0))
        started = monotonic()
        with pytest.raises(RetryError, match="no complete answer in time"):
            client.read("Patient/p1")
        took = monotonic() - started
        over.set()
    assert len(server.seen) == 1
    assert 0.1 <= took < 1.0


def test_c46_the_deadline_holds_for_bytes_that_wait_already() -> None:
    ticks = itertools.count()
    clock = Clock(monotonic=lambda: float(next(ticks)))
    with serving(lambda handler, _: reply(handler, 200, PATIENT)) as (_, base_url):
        assert Client(base_url, lambda: None, limits=Limits(deadline=99), clock=clock).read("Patient/p1").status == 200
        with pytest.raises(RetryError, match="no complete answer in time"):
            Client(base_url, lambda: None, limits=Limits(deadline=1, retries=0), clock=clock).read("Patient/p1")


def test_c46_an_answer_that_comes_slowly_but_in_time_is_taken() -> None:
    def answering(handler: BaseHTTPRequestHandler, _: int) -> None:
        drip(handler, HEAD + PATIENT[:-5], PATIENT[-5:], threading.Event())

    with serving(answering) as (server, base_url):
        assert Client(base_url, lambda: None).read("Patient/p1").body == PATIENT
    assert len(server.seen) == 1


@pytest.mark.parametrize(
    "raw",
    [b"HTTP/1.1 200 OK\r\nContent-Length: 90\r\n\r\n" + PATIENT,
     b"HTTP/1.1 200 OK\r\nContent-Length: 30\r\n\r\n" + PATIENT,
     b"HTTP/1.1 200 OK\r\nTransfer-Encoding: chunked\r\n\r\n24\r\n" + PATIENT[:9],
     b"HTTP/1.1 200 OK\r\nContent-Length: 0\r\n\r\n", b"HTTP/1.1 200 OK\r\n\r\n" + PATIENT[:9],
     b"HTTP/1.1 200 OK\r\nContent-Encoding: gzip\r\nContent-Length: 36\r\n\r\n" + PATIENT,
     b"\x16\x03\x01 nonsense\r\n\r\n",
     b"HTTP/1.1 200 OK\r\nContent-Type: text/html\r\nContent-Length: 17\r\n\r\n<html>log in</html>"],
    ids=["torn", "cut short", "torn chunk", "empty", "torn without length", "not packed", "not HTTP", "login page"],
)  # fmt: skip
def test_c47_a_broken_body_is_asked_for_again(raw: bytes, time: Time) -> None:
    def answering(handler: BaseHTTPRequestHandler, number: int) -> None:
        if number == 2:
            reply(handler, 200, PATIENT)
            return
        handler.wfile.write(raw)
        handler.close_connection = True

    with serving(answering) as (server, base_url):
        assert Client(base_url, lambda: None, clock=time.clock()).read("Patient/p1").body == PATIENT
    assert len(server.seen) == 2
    assert time.pauses == [0.5]


def test_c47_what_stays_broken_is_left_for_later(client: Client, mock: responses.RequestsMock) -> None:
    mock.get(f"{BASE}/Observation", body="<html>log in</html>")
    with pytest.raises(RetryError, match="GET Observation, page 1: 200 with a body that is not FHIR JSON"):
        pages(client)


@pytest.mark.parametrize(
    "body", [PATIENT, b'{"resourceType":"Bundle","type":"batch-response"}', b'{"resourceType":"Bundle","entry":7}'],
)  # fmt: skip
def test_c47_a_search_is_answered_by_a_searchset_only(
    client: Client, mock: responses.RequestsMock, body: bytes
) -> None:
    mock.get(f"{BASE}/Observation", body=body)
    with pytest.raises(RetryError, match="Bundle"):
        pages(client)


@pytest.mark.parametrize("method", ["GET", "PUT"])
def test_a_connection_closed_while_idle_is_opened_again_at_once(method: str, time: Time) -> None:
    connections = []

    def answering(handler: BaseHTTPRequestHandler, number: int) -> None:
        connections.append(handler.client_address)
        if number == 2:
            handler.close_connection = True  # the end without response
        else:
            reply(handler, 200, PATIENT)

    with serving(answering) as (server, base_url):
        client = Client(base_url, lambda: None, clock=time.clock())
        for _ in range(2):
            if method == "GET":
                assert client.read("Patient/p1").status == 200
            else:
                assert client.update("Patient/p1", PATIENT, None).status == 200
    assert [seen[0] for seen in server.seen] == [method] * 3
    assert server.bodies == [PATIENT if method == "PUT" else b""] * 3
    assert connections[0] == connections[1] != connections[2]
    assert time.pauses == []


def test_c66_a_write_whose_answer_was_lost_is_repeated_and_told_by_412(time: Time) -> None:
    stored: list[bytes] = []

    def answering(handler: BaseHTTPRequestHandler, number: int) -> None:
        if not stored:
            stored.append(b"stored")
            handler.wfile.write(b"HTTP/1.1 201 Created\r\nContent-Length: 90\r\n\r\n{")
            handler.close_connection = True
        elif handler.command == "PUT":
            reply(handler, 412, b"")
        else:
            reply(handler, 200, PATIENT, ETag='W/"1"')

    with serving(answering) as (server, base_url):
        client = Client(base_url, lambda: None, clock=time.clock())
        assert client.update("Patient/p1", PATIENT, None).status == 412
        assert client.read("Patient/p1").etag == 'W/"1"'
    assert server.bodies == [PATIENT, PATIENT, b""]
    assert [dict(seen[2]).get("If-None-Match") for seen in server.seen] == ["*", "*", None]


# --- pages --------------------------------------------------------------------------------------------------------


def test_c48_outcomes_are_told_apart_from_resources(client: Client, mock: responses.RequestsMock) -> None:
    entries = [
        {"fullUrl": f"{BASE}/Patient/p1", "resource": json.loads(PATIENT), "search": {"mode": "match"}},
        {"resource": outcome("error", "timeout", f"{NAME} left out"), "search": {"mode": "outcome"}},
        {"resource": outcome("warning", "processing")},
        {"resource": {"resourceType": "OperationOutcome", "issue": 3}, "search": {"mode": "outcome"}},
        {"resource": {"resourceType": "Device", "id": "d1"}, "search": {"mode": "include"}},
        {"fullUrl": f"{BASE}/Patient/p2"},
    ]
    mock.get(f"{BASE}/Observation", body=searchset(*entries, total=9))
    (page,) = pages(client)
    assert [(entry.full_url, entry.mode) for entry in page.entries] == [
        (f"{BASE}/Patient/p1", "match"), ("", "include"), (f"{BASE}/Patient/p2", "match")
    ]  # fmt: skip
    assert [json.loads(entry.resource or b"{}").get("id") for entry in page.entries] == ["p1", "d1", None]
    assert [str(issue) for issue in page.outcomes] == ["error/timeout", "warning/processing", "error/structure"]
    assert (page.total, page.self_link) == (9, None)


ASKED = (
    ("code", "2703-7"),
    ("_lastUpdated", "ge2026"),
    ("_lastUpdated", "lt2027"),
    ("_sort", "_lastUpdated"),
    ("_count", "20"),
)


@pytest.mark.parametrize(
    ("told", "missing"),
    [("_lastUpdated=ge2026&_lastUpdated=lt2027&_sort=_lastUpdated", "code"),
     ("code=2703-7&_sort=_lastUpdated", "_lastUpdated"),
     ("code=2703-7&_lastUpdated=ge2026&_sort=_lastUpdated", "_lastUpdated"),
     ("code=2703-7&_lastUpdated=ge2026&_lastUpdated=lt2027", "_sort"),
     ("code=&_lastUpdated=ge2026&_lastUpdated=lt2027&_sort=_lastUpdated", "code"), ("", "code")],
)  # fmt: skip
def test_c49_a_filter_that_the_self_link_omits_stops_the_search(
    client: Client, mock: responses.RequestsMock, told: str, missing: str
) -> None:
    link = [{"relation": "self", "url": f"{BASE}/Observation?{told}"}]
    mock.get(f"{BASE}/Observation", body=searchset(link=link))
    with pytest.raises(StopError, match=f"page 1: the server dropped the filter {missing};"):
        pages(client, *ASKED)


def test_c49_a_self_link_with_all_filters_is_fine(client: Client, mock: responses.RequestsMock) -> None:
    told = "_sort=_lastUpdated&code%3Atext=x&_lastUpdated=ge2026-01-01&_lastUpdated=lt2027-01-01&_offset=0"
    link = [{"relation": "self", "url": f"{BASE}/Observation?{told}"}]
    mock.get(f"{BASE}/Observation", body=searchset(link=link))
    assert pages(client, *ASKED)[0].self_link == f"{BASE}/Observation?{told}"


@pytest.mark.parametrize(
    ("said", "named"),
    [(outcome("warning", "not-supported", "Unknown search parameter '_lastUpdated'; ignored"), "_lastUpdated"),
     (outcome("error", "invalid", "", details={"text": "code is not recognised here"}), "code"),
     (outcome("warning", "not-supported", "", expression=["http.code"]), "code"),
     (outcome("warning", "processing", "some parameters were ignored"), r"\(not named\)")],
)  # fmt: skip
@pytest.mark.parametrize("way", ["inside", "instead"])
def test_c49_an_outcome_about_a_parameter_stops_the_search(
    client: Client, mock: responses.RequestsMock, said: dict[str, Any], named: str, way: str
) -> None:
    if way == "inside":
        mock.get(f"{BASE}/Observation", body=searchset({"resource": said, "search": {"mode": "outcome"}}))
    else:
        mock.get(f"{BASE}/Observation", json=said, status=400)
    with pytest.raises(StopError, match=f"the server dropped the filter {named};"):
        pages(client, *ASKED)


def test_a_remark_about_a_parameter_that_was_used_does_not_stop(client: Client, mock: responses.RequestsMock) -> None:
    said = outcome("information", "informational", "code: unknown codes are looked for too")
    mock.get(f"{BASE}/Observation", body=searchset({"resource": said, "search": {"mode": "outcome"}}))
    assert [str(issue) for issue in pages(client, *ASKED)[0].outcomes] == ["information/informational"]


def test_a_refused_search_says_status_and_issues(client: Client, mock: responses.RequestsMock) -> None:
    mock.get(f"{BASE}/Observation", json=outcome("error", "too-costly", NAME), status=400)
    with pytest.raises(StopError, match="GET Observation, page 1: 400, error/too-costly; check the base URL"):
        pages(client)


@pytest.mark.parametrize(
    "link",
    ["https://elsewhere.example/r4?page=2", "http://fhir.example.org/r4?page=2",
     "https://fhir.example.org:8443/r4?page=2", "https://me@fhir.example.org/r4?page=2", "https://fhir.example.org@elsewhere.example/r4",
     "//elsewhere.example/r4", " https://fhir.example.org/r4", "https://fhir.example.org/r4\n",
     "https://fhir.example.org/r4/../admin?page=2", "../admin?page=2", "https://fhir.example.org/r4/%2e%2e/admin",
     "https://fhir.example.org/r4/%252e%252e%252fadmin", "https://fhir.example.org/r4/..%5cadmin",
     "http://169.254.169.254/latest/meta-data", "file:///etc/passwd", "javascript:alert(1)",
     "https://fhir.example.org\\@elsewhere.example/r4", "https://fhir.example.org/r4\r\nX: y",
     "https://fhir.example.org:443:443/r4?page=2", "https://fhir.example.org:99999/r4", "https://[fhir/r4",
     "https://fhir.example.org./r4?page=2", "https://f\u04bbir.example.org/r4"],
)  # fmt: skip
def test_c52_c53_a_next_link_to_elsewhere_is_refused_before_any_request(
    client: Client, mock: responses.RequestsMock, link: str
) -> None:
    mock.get(f"{BASE}/Observation", body=searchset(following=link))
    found = client.search("Observation", [])
    assert next(found).entries == ()
    with pytest.raises(StopError, match="security: GET Observation, page 1: an address from the server") as refused:
        next(found)
    assert len(mock.calls) == 1
    assert "page=2" not in str(refused.value)


@pytest.mark.parametrize(
    "target", ["https://elsewhere.example/r4", "file:///etc/passwd", "https://fhir.example.org:8443/"]
)
def test_c52_no_request_of_any_kind_leaves_the_origin(target: str) -> None:
    exchange = Exchange(BASE, lambda: SECRET, None, Limits(), Clock())
    with responses.RequestsMock(assert_all_requests_are_fired=False) as mock:
        mock.get(target)
        with pytest.raises(StopError, match="security: GET x: an address from the server"):
            exchange.send("GET", target, "GET x", {})
        assert len(mock.calls) == 0


@pytest.mark.parametrize(
    ("link", "asked"),
    [("Observation?page=2", f"{BASE}/Observation?page=2"), ("?_getpages=7", f"{BASE}/?_getpages=7"),
     ("/r4/Observation?page=2", f"{BASE}/Observation?page=2"), ("/other?page=2", "https://fhir.example.org/other?page=2"),
     ("https://fhir.example.org:443/r4/Observation?page=2", "https://fhir.example.org:443/r4/Observation?page=2"),
     ("https://FHIR.example.org/r4/Observation?page=2", "https://fhir.example.org/r4/Observation?page=2"),
     (f"{BASE}/Observation?ct=a%252Fb%7Cc&until=..", f"{BASE}/Observation?ct=a%252Fb%7Cc&until=..")],
)  # fmt: skip
def test_c53_a_next_link_on_the_same_origin_is_followed_as_it_is(
    client: Client, mock: responses.RequestsMock, link: str, asked: str
) -> None:
    mock.get(f"{BASE}/Observation", body=searchset(following=link), match=[responses.matchers.query_param_matcher({})])
    mock.get(asked, body=searchset(total=2), match_querystring=None)
    assert [page.total for page in pages(client)] == [None, 2]
    assert mock.calls[1].request.url == asked


def test_c54_a_next_link_in_a_circle_stops(client: Client, mock: responses.RequestsMock) -> None:
    mock.get(f"{BASE}/Observation", body=searchset(following="?page=2"))
    mock.get(f"{BASE}/?page=2", body=searchset(following="?page=3"))
    mock.get(f"{BASE}/?page=3", body=searchset(following="?page=2"))
    with pytest.raises(StopError, match="page 4: the next link leads back to page 2"):
        pages(client)
    assert len(mock.calls) == 3


def test_c54_pages_without_end_stop(client: Client, mock: responses.RequestsMock) -> None:
    for number in range(1, 6):
        mock.get(f"{BASE}/?page={number}", body=searchset(following=f"?page={number + 1}"))
    mock.get(f"{BASE}/Observation", body=searchset(following="?page=1"))
    found = client.search("Observation", [])
    for _ in range(5):
        next(found)
    with pytest.raises(StopError, match="more than 5 pages"):
        next(found)
    assert len(mock.calls) == 5
    mock.assert_all_requests_are_fired = False


def test_c54_an_empty_page_is_a_page(client: Client, mock: responses.RequestsMock) -> None:
    body = json.loads(searchset(following="?page=2"))
    del body["entry"]
    mock.get(f"{BASE}/Observation", json=body)
    mock.get(f"{BASE}/?page=2", body=searchset({"resource": json.loads(PATIENT)}))
    assert [len(page.entries) for page in pages(client)] == [0, 1]


@pytest.mark.parametrize("status", [404, 410])
def test_c55_an_expired_search_is_to_be_started_again(
    client: Client, mock: responses.RequestsMock, status: int
) -> None:
    mock.get(f"{BASE}/Observation", body=searchset(following="?page=2"))
    mock.get(f"{BASE}/?page=2", json=outcome("error", "not-found"), status=status)
    with pytest.raises(RetryError, match=f"page 2: {status}: the search has expired on the server; start it again"):
        pages(client)


# --- nothing leaves -----------------------------------------------------------------------------------------------


@pytest.mark.parametrize("status", [301, 302, 303, 307, 308])
def test_c56_a_redirect_to_another_origin_is_not_followed_and_gets_no_token(status: int, time: Time) -> None:
    with serving(lambda handler, _: reply(handler, 200, PATIENT)) as (thief, other):
        redirecting = lambda handler, _: reply(handler, status, b"", Location=f"{other}/Patient/p1")  # noqa: E731
        with serving(redirecting) as (server, base_url):
            client = Client(base_url, lambda: SECRET, clock=time.clock())
            with pytest.raises(StopError, match=r"security: GET Patient/p1: .* leads to another origin"):
                client.read("Patient/p1")
            with pytest.raises(StopError, match="redirects"):
                client.update("Patient/p1", PATIENT, None)
            with pytest.raises(StopError, match="redirects"):
                client.send_bundle(b'{"resourceType":"Bundle","entry":[]}')
    assert [seen[2]["Authorization"] for seen in server.seen] == [f"Bearer {SECRET}"] * 3
    assert thief.seen == []


def test_c56_a_redirect_on_the_same_origin_is_followed_for_a_read_a_few_times() -> None:
    def answering(handler: BaseHTTPRequestHandler, number: int) -> None:
        if handler.path == "/moved/Patient/p1":
            reply(handler, 200, PATIENT)
        else:
            reply(
                handler, 307, b"", Location="/moved/Patient/p1" if handler.path == "/fhir/Patient/p1" else handler.path
            )

    with serving(answering) as (server, base_url):
        client = Client(base_url, lambda: SECRET)
        assert client.read("Patient/p1").status == 200
        with pytest.raises(StopError, match="redirects"):
            client.read("Patient/p2")
    assert len(server.seen) == 2 + 6


def test_c56_a_redirect_without_an_address_stops(client: Client, mock: responses.RequestsMock) -> None:
    mock.get(f"{BASE}/Patient/p1", status=302)
    with pytest.raises(StopError, match="redirects"):
        client.read("Patient/p1")


def test_no_message_and_no_log_line_holds_a_token_a_name_or_parameters(
    time: Time, caplog: pytest.LogCaptureFixture
) -> None:
    """Each fault once, by its number, with everything logged that the libraries can log."""
    said = json.dumps(outcome("error", "invalid", f"{NAME} unknown")).encode()
    caplog.set_level(logging.DEBUG)
    faults = [
        lambda handler: reply(handler, 500, said),
        lambda handler: reply(handler, 403, said),
        lambda handler: reply(handler, 401, said),
        lambda handler: reply(handler, 400, said),
        lambda handler: reply(handler, 200, f"<html>{NAME}</html>".encode()),
        lambda handler: reply(handler, 302, b"", Location=f"http://elsewhere.example/?name={NAME}"),
        lambda handler: reply(handler, 200, searchset(following=f"http://elsewhere.example/?name={NAME}")),
        lambda handler: reply(
            handler, 200, b"{", **{"Content-Length": "9", "Bad Header": NAME, "Connection": "close"}
        ),
        lambda handler: setattr(handler, "close_connection", True),
    ]
    told = []
    for fault in faults:
        with serving(lambda handler, _, fault=fault: fault(handler)) as (_, base_url):
            client = Client(base_url, lambda: SECRET, limits=Limits(retries=1), clock=time.clock())
            with pytest.raises((StopError, RetryError)) as found:
                list(client.search("Patient", [("name", NAME)]))
            told.append(f"{found.value!r}")
    client = Client(base_url, lambda: SECRET, limits=Limits(retries=1), clock=time.clock())
    with pytest.raises(RetryError) as found:
        list(client.search("Patient", [("name", NAME)]))
    told += [f"{found.value!r}", caplog.text]
    assert all("Patient" in text for text in told[:-1])
    for text in told:
        assert SECRET not in text
        assert NAME not in text
        assert "?" not in text


def test_a_token_that_reached_the_other_server_would_be_seen() -> None:
    with serving(lambda handler, _: reply(handler, 200, PATIENT)) as (server, base_url):
        requests.get(f"{base_url}/x", headers={"Authorization": "Bearer a"}, timeout=5)
    assert [(seen[0], seen[2]["Authorization"]) for seen in server.seen] == [("GET", "Bearer a")]

"""The worker against faults while it writes (C66, C67 of the failure catalogue): nothing twice, nothing lost."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pytest
import requests
import responses

from fhiro2.errors import StopError
from fhiro2.store.entry import DEAD, IN_FLIGHT
from fhiro2.worker import Cycle
from tests.beside import Beside, Held, beside, gas, held, lactate
from tests.feeds import Resource
from tests.memory_server import Fault, Reply, outcome
from tests.planted import NAME, SECRETS, VALUE

Mock = responses.RequestsMock
pytest_plugins = ("tests.beside_fixtures",)
pytestmark = pytest.mark.usefixtures("nothing_told")
KINDS = ["PUT Device", "PUT Observation", "PUT Flag", "PUT Provenance"]


def answering(reply: Reply) -> Fault:
    return lambda _request, _ordinary: reply


def unanswered(_request: Any, ordinary: Any) -> Exception:
    """The server does what is asked, and its answer is lost."""
    ordinary()
    return requests.ReadTimeout()


def cut(_request: Any, _ordinary: Any) -> Exception:
    return requests.ConnectionError()


def once(made: Beside) -> None:
    """Each resource of ours has one version at the server."""
    assert {number for number, _ in made.ours().values()} == {1}


def quiet(made: Beside, done: Cycle) -> None:
    """No name, value or token in what is told."""
    told = " ".join([*done.notices, *(one.problem for one in made.outbox)])
    assert not [secret for secret in SECRETS if secret in told]


def unmarked(_request: Any, ordinary: Any) -> Reply:
    """The server does what is asked, and answers a write without the ETag that a read has."""
    status, headers, body = ordinary()
    return status, {name: value for name, value in headers.items() if name.lower() != "etag"}, body


def test_an_etag_that_a_write_does_not_bring_is_asked_for(made: Beside) -> None:
    made.server.fault("PUT", unmarked, 99)
    assert made.cycle().dead == 0
    made.server.add(gas(saturation=77.0))
    done = made.cycle()
    assert (done.dead, done.written > 0, made.outbox) == (0, True, [])


# --- answers that are lost ---------------------------------------------------------------------------------------


@pytest.mark.parametrize("times", [1, 99], ids=["once", "for the whole cycle"])
@pytest.mark.parametrize("place", KINDS)
def test_an_answer_that_is_lost_writes_nothing_twice(made: Beside, calm: Held, place: str, times: int) -> None:
    made.server.fault(place, unanswered, times)
    done = made.cycle()
    assert bool(done.notices) is (times > 1)
    quiet(made, done)
    made.server.repair()
    puts = len(made.server.requests("PUT"))
    made.cycle()
    assert held(made) == calm
    once(made)
    assert len(made.server.requests("PUT")) - puts == (0 if times == 1 else done.waiting - 1)


@pytest.mark.parametrize("fault", [unanswered, cut])
def test_new_content_after_a_lost_answer(tmp_path: Path, mock: Mock, made: Beside, fault: Fault) -> None:
    """Whether the first content arrived or not: in the end the server has the second one."""
    made.server.fault("PUT Observation", fault, 99)
    made.cycle()
    made.server.repair()
    made.server.add(gas(saturation=77.0))
    made.cycle()
    calm = beside(tmp_path / "calm", mock)
    calm.server.add(gas(saturation=77.0))
    calm.cycle()
    numbers = sorted(number for number, _ in made.ours().values())
    assert numbers == ([1] * 8 + [2] if fault is unanswered else [1] * 9)
    assert {key: one for key, (_, one) in made.ours().items()} == {key: one for key, (_, one) in calm.ours().items()}
    assert made.outbox == []


def test_what_no_longer_stands_after_a_lost_answer_is_withdrawn(made: Beside) -> None:
    made.server.fault("PUT Observation", unanswered, 99)
    made.cycle()
    made.server.repair()
    made.server.add(gas(status="entered-in-error"))
    made.cycle()
    values = [one for key, (_, one) in made.ours().items() if key.startswith("Observation/")]
    assert {one["status"] for one in values} == {"entered-in-error"}
    assert made.outbox == []


@pytest.mark.parametrize("number", range(1, 10))
def test_a_connection_lost_at_any_write(made: Beside, calm: Held, number: int) -> None:
    puts = 0

    def from_then_on(_request: Any, ordinary: Any) -> Reply | Exception:
        nonlocal puts
        puts += 1
        result: Reply | Exception = requests.ConnectionError() if puts >= number else ordinary()
        return result

    made.server.fault("PUT", from_then_on, 99)
    done = made.cycle()
    assert (done.written, done.waiting, len(done.notices)) == (number - 1, 10 - number, 1)
    made.server.repair()
    made.cycle()
    assert held(made) == calm
    once(made)


# --- refusals ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("place", KINDS)
def test_a_conflict_that_passes(made: Beside, calm: Held, place: str) -> None:
    made.server.fault(place, answering(outcome(409, "conflict", NAME)))
    done = made.cycle()
    assert done.waiting >= 1
    [waiting] = [one for one in made.outbox if one.problem]
    assert (waiting.state, waiting.problem) == (IN_FLIGHT, "conflict at the server")
    assert not [key for key in made.server.versions if _follows(made, key, waiting.reference)]
    made.cycle()
    assert held(made) == calm
    once(made)


def _follows(made: Beside, key: str, target: str) -> bool:
    """Whether ``key`` is the Provenance of ``target``."""
    if not key.startswith("Provenance/"):
        return False
    return bool(made.server.current(key)["target"][0]["reference"] == target)


REFUSED: list[tuple[Reply, str]] = [
    (outcome(422, "processing", f"{NAME} {VALUE}"), "refused with status 422 (processing)"),
    (outcome(413, "too-long"), "refused with status 413 (too-long)"),
    (outcome(400, NAME), "refused with status 400 (unclear)"),
    ((422, {}, b"<html>no</html>"), "refused with status 422 (no reason given)"),
    (outcome(410, "deleted"), "deleted at the server by somebody else"),
]


@pytest.mark.parametrize(("reply", "problem"), REFUSED, ids=["422", "413", "400", "422 without outcome", "410"])
def test_what_is_refused_is_left_for_a_person_and_the_rest_written(
    made: Beside, calm: Held, reply: Reply, problem: str
) -> None:
    made.server.fault("PUT Observation", answering(reply))
    done = made.cycle()
    [dead] = [one for one in made.outbox if one.state == DEAD]
    assert dead.problem == problem
    quiet(made, done)
    assert (done.dead, done.waiting, done.written) == (1, 0, 7)  # its Provenance cannot go without it
    assert not [key for key in made.server.versions if _follows(made, key, dead.reference)]
    made.server.add(lactate("more", seconds=60))  # the same patient is computed again
    puts = len(made.server.requests("PUT"))
    assert made.cycle().dead == 1
    assert dead.reference not in made.server.versions
    assert len(made.server.requests("PUT")) == puts
    made.server.add(gas(saturation=77.0))
    assert made.cycle().dead == 0  # its content changed: it is tried again
    assert made.outbox == []
    assert dead.reference in made.ledger


@pytest.mark.parametrize("status", [401, 403, 404, 405])
def test_a_server_that_lets_nobody_write_stops_the_worker(made: Beside, calm: Held, status: int) -> None:
    made.server.fault("PUT Flag", answering(outcome(status, "forbidden", f"{NAME} {VALUE}")), 2)
    with pytest.raises(StopError, match=r"allow update-as-create|check the (scope of the )?token") as raised:
        made.cycle()
    assert not [secret for secret in SECRETS if secret in str(raised.value)]
    made.server.repair()
    made.cycle()
    assert held(made) == calm
    once(made)


# --- others at work on our resources -----------------------------------------------------------------------------


def edited(made: Beside) -> str:
    """Somebody else changes the value of the oxygen content; returns its reference."""
    [key] = [
        key for key, (_, one) in made.ours().items()
        if one.get("code", {}).get("text") == "Arterial oxygen content"
    ]  # fmt: skip
    theirs = made.server.current(key)
    made.server.add({**theirs, "valueQuantity": {**theirs["valueQuantity"], "value": 1.0}})
    return key


def test_what_somebody_else_changed_stays(made: Beside) -> None:
    made.cycle()
    key = edited(made)
    made.server.add(gas(saturation=77.0))
    done = made.cycle()
    assert done.dead == 1
    assert made.server.current(key)["valueQuantity"]["value"] == 1.0
    [dead] = [one for one in made.outbox if one.state == DEAD]
    assert (dead.reference, dead.problem) == (key, "changed at the server by somebody else; look at it there")
    assert done.written == 6  # two values and the flag, with their Provenance
    before = made.server.log.copy()
    made.server.add(lactate("more", seconds=60))
    assert made.cycle().dead == 1
    assert made.server.requests("PUT") == [f"PUT {url.partition('/made/')[2]}" for m, url in before if m == "PUT"]
    made.server.add(gas(saturation=76.0))
    assert made.cycle().dead == 1
    assert made.server.current(key)["valueQuantity"]["value"] == 1.0


def test_a_first_write_does_not_overwrite_what_is_there(made: Beside, calm: Held) -> None:
    [key] = [key for key in calm.ours if key.startswith("Flag/")]
    theirs: Resource = {"resourceType": "Flag", "id": key.partition("/")[2], "status": "inactive"}
    made.server.add(theirs)
    done = made.cycle()
    assert (done.dead, made.server.current(key)["status"], len(made.server.versions[key])) == (1, "inactive", 1)


def test_a_server_that_rewrites_what_it_stores(made: Beside, calm: Held) -> None:
    """It adds an element and writes numbers in its own way, and its answer is lost: that is still ours."""

    def rewriting(request: Any, ordinary: Any) -> Exception:
        ordinary()
        key = "/".join(str(request.url).split("/")[-2:])
        stored = made.server.current(key)
        stored["text"] = {"status": "generated", "div": "<div/>"}
        made.server.versions[key][-1] = json.loads(json.dumps(stored).replace("15.10", "15.1"))
        return requests.ReadTimeout()

    made.server.fault("PUT Observation", rewriting, 99)
    made.cycle()
    made.server.repair()
    done = made.cycle()
    assert (done.dead, done.waiting) == (0, 0)
    assert set(made.ledger) == set(calm.ledger)
    once(made)

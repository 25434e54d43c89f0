"""The client against a real server of other authors (sekmet-fhir): what its answers and pages are made of."""

from __future__ import annotations

import json
from concurrent.futures import ThreadPoolExecutor
from typing import Any
from uuid import uuid4

import pytest
import requests
import responses

from fhiro2.errors import StopError
from fhiro2.fhir.client import Client

pytest_plugins = ("tests.server",)

FROM_THE_START = ("_lastUpdated", "ge2020-01-01T00:00:00Z")


@pytest.fixture(scope="module")
def client(open_server: str) -> Client:
    return Client(open_server, lambda: None)


def observation(name: str, **changes: Any) -> bytes:
    """A final oxygen pressure (LOINC 2703-7) with an id."""
    content = {
        "resourceType": "Observation",
        "id": name,
        "status": "final",
        "code": {"coding": [{"system": "http://loinc.org", "code": "2703-7"}]},
        "subject": {"reference": "Patient/someone"},
        "effectiveDateTime": "2026-03-03T08:00:00Z",
        "valueQuantity": {"value": 92, "system": "http://unitsofmeasure.org", "code": "mm[Hg]"},
    }
    return json.dumps(content | changes).encode()


def bundle(names: list[str], kind: str = "batch") -> bytes:
    entries = [
        {"resource": json.loads(observation(name)), "request": {"method": "PUT", "url": f"Observation/{name}"}}
        for name in names
    ]
    return json.dumps({"resourceType": "Bundle", "type": kind, "entry": entries}).encode()


def test_what_the_server_can_do(client: Client) -> None:
    statement = json.loads(client.capabilities().body)
    assert statement["resourceType"] == "CapabilityStatement"
    assert statement["fhirVersion"] == "4.0.1"


def test_a_resource_is_written_read_and_written_again_by_its_etag(client: Client) -> None:
    reference = f"Observation/{uuid4()}"
    name = reference.partition("/")[2]
    created = client.update(reference, observation(name), None)
    assert (created.status, created.etag, created.body) == (201, 'W/"1"', b"")
    assert created.location is not None
    assert created.location.endswith(f"{reference}/_history/1")
    again = client.update(reference, observation(name, status="amended"), created.etag)
    assert (again.status, again.etag) == (200, 'W/"2"')
    stale = client.update(reference, observation(name), created.etag)
    assert stale.status == 412
    assert [issue.severity for issue in stale.issues] == ["error"]
    read = client.read(reference)
    assert (read.status, read.etag) == (200, 'W/"2"')
    assert read.last_modified is not None
    assert json.loads(read.body)["status"] == "amended"


def test_of_several_threads_with_one_etag_one_writes(client: Client) -> None:
    name = str(uuid4())
    etag = client.update(f"Observation/{name}", observation(name), None).etag
    with ThreadPoolExecutor(6) as pool:
        found = pool.map(lambda _: client.update(f"Observation/{name}", observation(name), etag).status, range(6))
        assert sorted(found) == [200, 412, 412, 412, 412, 412]


def test_unknown_deleted_and_refused_come_back_as_answers(client: Client) -> None:
    name = str(uuid4())
    reference = f"Observation/{name}"
    assert client.read(reference).status == 404
    client.update(reference, observation(name), None)
    assert requests.delete(f"{client.base_url}/{reference}", timeout=10).status_code == 200
    assert client.read(reference).status == 410
    refused = client.update(f"Observation/{uuid4()}", b'{"resourceType":"Observation"}', None)
    assert refused.status in (400, 422)
    assert refused.issues[0].severity == "error"


def test_sixty_observations_come_once_each_over_pages_of_twenty(client: Client) -> None:
    run = uuid4().hex[:20]
    names = [f"{run}-{number}" for number in range(60)]
    for start in range(0, 60, 30):
        assert client.send_bundle(bundle(names[start : start + 30], "transaction")).status == 200
    pages = list(
        client.search("Observation", [("_count", "20"), ("_sort", "_lastUpdated"), FROM_THE_START, ("code", "2703-7")])
    )
    found = [json.loads(entry.resource) for page in pages for entry in page.entries]
    assert [resource["id"] for resource in found if resource["id"].startswith(run)] == names
    assert all(len(page.entries) == 20 for page in pages[:-1])
    assert len(pages) >= 3
    moments = [resource["meta"]["lastUpdated"] for resource in found]
    assert moments == sorted(moments)
    assert pages[0].total == len(found)
    assert {entry.mode for page in pages for entry in page.entries} == {"match"}
    assert all(entry.full_url.startswith(client.base_url) for page in pages for entry in page.entries)
    assert not any(page.outcomes for page in pages)


def test_a_batch_tells_each_entry_s_fate(client: Client) -> None:
    name = str(uuid4())
    answer = client.send_bundle(bundle([name, f"{name}-b"]))
    assert answer.status == 200
    fates = [entry["response"] for entry in json.loads(answer.body)["entry"]]
    assert [fate["status"][:3] for fate in fates] == ["201", "201"]
    assert [fate["etag"] for fate in fates] == ['W/"1"', 'W/"1"']


def test_an_unknown_parameter_stops_the_search(client: Client) -> None:
    with pytest.raises(StopError, match=r"page 1: the server dropped the filter blood-side"):
        list(client.search("Observation", [("code", "2703-7"), ("blood-side", "arterial-value")]))


def test_an_unknown_parameter_is_noticed_where_the_server_is_lenient(client: Client) -> None:
    """The server's own lenient answer, as servers give it that do not heed the wish for strict handling."""
    address = f"{client.base_url}/DetectedIssue?patient=someone"
    body = requests.get(address, timeout=10).content
    assert b'"mode":"outcome"' in body
    with responses.RequestsMock() as mock:
        mock.get(address, body=body)
        with pytest.raises(StopError, match="dropped the filter patient"):
            list(client.search("DetectedIssue", [("patient", "someone")]))
    remark = json.loads(body)
    remark["entry"] = []
    with responses.RequestsMock() as mock:
        mock.get(address, json=remark)
        with pytest.raises(StopError, match="dropped the filter patient"):
            list(client.search("DetectedIssue", [("patient", "someone")]))


def test_only_the_right_token_opens_a_guarded_server(guarded_server: tuple[str, str]) -> None:
    base_url, token = guarded_server
    name = str(uuid4())
    allowed = Client(base_url, lambda: token)
    assert allowed.update(f"Observation/{name}", observation(name), None).status == 201
    (page,) = allowed.search("Observation", [("_id", name)])
    assert len(page.entries) == 1
    with pytest.raises(StopError, match=r"401.*check the token"):
        Client(base_url, lambda: "another").read(f"Observation/{name}")
    with pytest.raises(StopError, match=r"401.*check the token"):
        Client(base_url, lambda: None).update(f"Observation/{name}", observation(name), None)


def test_a_token_renewed_between_two_tries_is_used(guarded_server: tuple[str, str]) -> None:
    base_url, token = guarded_server
    tokens = iter(["expired", token])
    assert Client(base_url, lambda: next(tokens)).read("Observation/nobody").status == 404
    assert next(tokens, None) is None

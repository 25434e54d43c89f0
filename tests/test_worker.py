"""One cycle beside a real FHIR server of other authors: what stands there is what a replay gives, however it came."""

from __future__ import annotations

import json
import os
import random
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest
import requests

from fhiro2.judge import Pack, read_pack
from fhiro2.live import run_once
from fhiro2.packaged import rules_folder
from fhiro2.read.ndjson import NdjsonSource
from fhiro2.replay import replay
from fhiro2.settings import Mapping, Server, Settings, read_mapping
from fhiro2.store import Store
from fhiro2.store.entry import STANDING, WITHDRAWN, Entry
from fhiro2.worker import Cycle
from fhiro2.write.provenance import STANDS_NO_LONGER
from fhiro2.write.server import holds
from tests.feeds import Resource, component, concept, observation, panel, patient, specimen
from tests.fhir_server import running
from tests.validators import JUDGES

WARD = Path(__file__).parent.parent / "fixtures" / "ward"
CONTEXT = ("patients", "encounters", "devices", "specimens", "conditions", "procedures")
PACK = read_pack(rules_folder())
HEADERS = {"Content-Type": "application/fhir+json"}
SOURCE = "ward-nine"
KILLS = 30
KILLS_IN_CI = 4


def mapping() -> Mapping:
    return read_mapping(WARD / "mapping.yaml")


def ward(beds: tuple[int, ...], most: int = 10_000) -> list[Resource]:
    """Context and Observations of some beds that this server takes, as they first came."""
    names = {f"w9-p{bed:02d}" for bed in beds}
    found: list[Resource] = []
    for name in (*CONTEXT, "observations"):
        seen: set[str] = set()
        for line in (WARD / f"{name}.ndjson").read_text(encoding="utf-8").splitlines():
            row = json.loads(line)
            of = row["id"] if row["resourceType"] == "Patient" else row.get("subject", {}).get("reference", "")
            timed = row.get("effectiveDateTime", "T12:00:00Z")[-6:]
            if row["id"] in seen or not (of.rpartition("/")[2] in names or row["resourceType"] == "Device"):
                continue
            if "Z" in timed or "+" in timed:
                seen.add(row["id"])
                found.append(row)
    observations = [row for row in found if row["resourceType"] == "Observation"]
    return [row for row in found if row["resourceType"] != "Observation"] + observations[:most]


@dataclass
class Site:
    """A real server with a store beside it."""

    base: str
    store: Path
    token: str = ""

    def settings(self, **given: Any) -> Settings:
        server = Server(name=SOURCE, url=self.base, **given.pop("server", {}))
        return Settings(station_pressure_kpa=101.0, server=server, store=self.store, **{"write": True, **given})

    def cycle(self, **given: Any) -> Cycle:
        return run_once(self.settings(**given), mapping(), PACK)

    def call(self, method: str, path: str, resource: Resource | None = None) -> requests.Response:
        headers = HEADERS | ({"Authorization": f"Bearer {self.token}"} if self.token else {})
        body = None if resource is None else json.dumps(resource).encode()
        return requests.request(method, f"{self.base}/{path}", data=body, headers=headers, timeout=30)

    def put(self, *resources: Resource) -> None:
        for one in resources:
            answer = self.call("PUT", f"{one['resourceType']}/{one['id']}", one)
            assert answer.status_code in (200, 201), answer.text

    def get(self, reference: str) -> Resource:
        found: Resource = self.call("GET", reference).json()
        return found

    def ledger(self) -> dict[str, Entry]:
        store = Store(self.store)
        try:
            with store.transaction() as work:
                assert work.outbox() == []
                return {one.reference: one for one in work.written()}
        finally:
            store.close()

    def standing(self) -> dict[str, bytes]:
        """Values and flags of ours that stand, as the ledger has them; the server is asked whether it holds them."""
        found = {}
        for reference, one in self.ledger().items():
            there = self.call("GET", reference)
            assert holds(there.content, one.content), reference
            if one.state == STANDING and reference.startswith(("Observation/", "Flag/")):
                assert there.json()["status"] != "entered-in-error"
                found[reference] = one.content
        return found

    def versions(self) -> dict[str, str]:
        """The version that the server has of each resource of ours."""
        return {reference: self.get(reference)["meta"]["versionId"] for reference in self.ledger()}


@pytest.fixture
def site(tmp_path: Path) -> Iterator[Site]:
    with running(tmp_path / "server") as base:
        yield Site(base, tmp_path / "store.sqlite")


def replayed(site: Site, inputs: list[Resource], folder: Path) -> dict[str, bytes]:
    """What a replay gives of the inputs as the server now has them."""
    folder.mkdir()
    lines = [json.dumps(site.get(f"{one['resourceType']}/{one['id']}")) for one in inputs]
    (folder / "feed.ndjson").write_text("\n".join(lines) + "\n", encoding="utf-8")
    replay([NdjsonSource(SOURCE, [folder / "feed.ndjson"])], folder / "out", site.settings(), mapping(), PACK)
    found = {}
    for name in ("observations", "flags"):
        for line in (folder / "out" / f"{name}.ndjson").read_bytes().splitlines():
            row = json.loads(line)
            found[f"{row['resourceType']}/{row['id']}"] = line
    return found


def flags_of(standing: dict[str, bytes], rule: str) -> list[Resource]:
    """The flags of one rule, the earliest first."""
    found = [json.loads(line) for reference, line in standing.items() if reference.startswith("Flag/")]
    mine = [one for one in found if one["code"]["coding"][0]["code"] == rule]
    return sorted(mine, key=lambda one: str(one["period"]["start"]))


def test_a_cycle_writes_what_a_replay_gives_and_a_second_one_nothing(site: Site, tmp_path: Path) -> None:
    inputs = ward((2, 5), 500)
    assert sum(one["resourceType"] == "Observation" for one in inputs) == 500
    site.put(*inputs)
    done = site.cycle()
    assert (done.dead, done.waiting, done.held, done.notices) == (0, 0, (), [])
    expected = replayed(site, inputs, tmp_path / "replay")
    assert len(expected) > 150
    assert site.standing() == expected
    before = site.versions()
    again = site.cycle()
    assert (again.to_write, again.written, again.patients) == (0, 0, 0)
    assert site.versions() == before
    assert set(before.values()) == {"1"}
    assert again.repeated > 0
    own = site.call("GET", "Observation?code=http://loinc.org|59274-1&_summary=count").json()["total"]
    assert own > 10
    check_account(site)


def check_account(site: Site) -> None:
    """Received is the sum of where everything went, own output among it."""
    command = [sys.executable, "-m", "fhiro2", "account", "--store", str(site.store), "--json"]
    account = json.loads(subprocess.run(command, capture_output=True, text=True, check=True).stdout)
    buckets = ("used", "repeated", "waiting", "quarantined", "out_of_scope", "pending")
    assert account["received"] == sum(account[name] for name in buckets)
    assert account["pending"] == 0
    assert account["reasons"]["out_of_scope"]["own-output"] > 0


def test_everything_written_is_valid_as_the_server_returns_it(site: Site) -> None:
    site.put(*ward((2,), 250))
    site.cycle()
    ours = [site.get(reference) for reference in site.ledger()]
    assert {one["resourceType"] for one in ours} >= {"Observation", "Provenance", "Device"}
    for resource in ours:
        for judge in JUDGES:
            assert not judge(resource), (judge.__name__, resource["resourceType"], resource["id"])


def first_gas(inputs: list[Resource], bed: int, *codes: str) -> list[Resource]:
    """The first Observations of a bed with these codes."""
    found = []
    for code in codes:
        mine = [
            one
            for one in inputs
            if one["resourceType"] == "Observation"
            and one["subject"]["reference"].endswith(f"p{bed:02d}")
            and any(coding["code"] == code for coding in one["code"]["coding"])
        ]
        found.append(min(mine, key=lambda one: one["effectiveDateTime"]))
    return found


def test_a_corrected_gas_withdraws_a_flag_and_another_one_takes_its_place(site: Site, tmp_path: Path) -> None:
    """Bed 5 is low from its first gas on; corrected to a normal gas, the episode begins with the next one."""
    inputs = ward((5,))
    site.put(*inputs)
    site.cycle()
    flag = flags_of(site.standing(), "low-arterial-oxygen")[0]
    pressure, saturation = first_gas(inputs, 5, "2703-7", "2708-6")
    for one, value in ((pressure, 95.0), (saturation, 97.0)):
        one["status"] = "corrected"
        one["valueQuantity"]["value"] = value
    site.put(pressure, saturation)
    done = site.cycle()
    assert done.written > 0
    assert done.withdrawn > 0
    assert site.standing() == replayed(site, inputs, tmp_path / "replay")
    later = flags_of(site.standing(), "low-arterial-oxygen")[0]
    assert later["id"] != flag["id"]
    assert later["period"]["start"] > flag["period"]["start"]
    old = site.get(f"Flag/{flag['id']}")
    assert (old["status"], old["meta"]["versionId"]) == ("entered-in-error", "2")
    assert site.ledger()[f"Flag/{flag['id']}"].state == WITHDRAWN
    found = [site.get(reference) for reference in site.ledger() if reference.startswith("Provenance/")]
    (why,) = [
        one["reason"][0]["text"]
        for one in found
        if one["target"][0]["reference"] == f"Flag/{flag['id']}" and "reason" in one
    ]
    assert why == f"{STANDS_NO_LONGER}; replaced by Flag/{later['id']}"


def test_a_retracted_haemoglobin_ends_its_content_entered_in_error(site: Site, tmp_path: Path) -> None:
    inputs = ward((2,), 250)
    site.put(*inputs)
    site.cycle()
    before = site.standing()
    (haemoglobin,) = first_gas(inputs, 2, "14775-1")
    haemoglobin["status"] = "entered-in-error"
    site.put(haemoglobin)
    done = site.cycle()
    assert done.withdrawn > 0
    after = site.standing()
    assert after == replayed(site, inputs, tmp_path / "replay")
    gone = before.keys() - after.keys()
    assert gone
    assert {site.get(reference)["status"] for reference in gone} == {"entered-in-error"}
    haemoglobin["status"] = "corrected"
    site.put(haemoglobin)
    site.cycle()
    assert gone <= site.standing().keys()


def test_a_late_specimen_makes_unknown_blood_arterial(site: Site) -> None:
    blood = {"specimen": {"reference": "Specimen/late"}}
    gas = [
        observation("po2", "11556-8", 90, "mm[Hg]", **blood),
        observation("so2", "20564-1", 97, "%", **blood),
        observation("hb", "718-7", 12, "g/dL", **blood),
    ]
    born = patient(birthDate="1970-01-01")
    for one in (*gas, born):
        del one["meta"]
    site.put(born, *gas)
    assert site.cycle().written == 0
    assert site.cycle().patients == 0
    drawn = specimen("late", "BLDA")
    del drawn["meta"]
    site.put(drawn)
    assert site.cycle().written > 0
    contents = [json.loads(line) for line in site.standing().values() if b'"oxygen-content-arterial"' in line]
    (value,) = [one["valueQuantity"]["value"] for one in contents]
    assert value == pytest.approx(1.34 * 12 * 0.97 + 0.0225 * 90 * 0.133322, abs=0.1)  # by definition, in mL/dL


@pytest.mark.parametrize(("parameter", "number"), [("combo-code", 1), ("code", 0)])
def test_a_panel_of_an_unknown_code_is_found_by_its_components(site: Site, parameter: str, number: int) -> None:
    """Asked by ``code`` alone a server does not give it, which the settings say."""
    parts = [component("2703-7", 90, "mm[Hg]"), component("2019-8", 40, "mm[Hg]"), component("2744-1", 7.4, "[pH]")]
    gas = {**panel("gas", *parts), "code": concept(("urn:example:site", "GAS"))}
    born = patient(birthDate="1970-01-01")
    for one in (gas, born):
        del one["meta"]
    site.put(born, gas)
    site.cycle(server={"code_parameter": parameter})
    assert sum(b'"saturation-predicted"' in line for line in site.standing().values()) == number


def test_with_a_token_and_without(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    with running(tmp_path / "server", FHIR_TOKEN="let-in") as base:
        site = Site(base, tmp_path / "store.sqlite", "let-in")
        site.put(*ward((2,), 60))
        secret = tmp_path / "token"
        secret.write_text("let-in\n")
        secret.chmod(0o600)
        assert site.cycle(server={"token_file": secret}).written > 0
        monkeypatch.setenv("FHIRO2_TOKEN", "let-in")
        assert site.cycle().written == 0


def test_where_the_rules_changed_all_patients_are_computed_again(site: Site) -> None:
    inputs = ward((5,))
    site.put(*inputs)
    site.cycle()
    raised = {one["code"]["coding"][0]["code"] for one in flags(site)}
    assert "low-arterial-oxygen" in raised
    fewer = Pack(tuple(rule for rule in PACK.rules if rule.id != "low-arterial-oxygen"), PACK.files, "fewer")
    done = run_once(site.settings(), mapping(), fewer)
    assert done.withdrawn > 0
    assert {one["code"]["coding"][0]["code"] for one in flags(site)} == raised - {"low-arterial-oxygen"}
    assert run_once(site.settings(), mapping(), fewer).patients == 0


def flags(site: Site) -> list[Resource]:
    return [json.loads(line) for reference, line in site.standing().items() if reference.startswith("Flag/")]


def test_in_batches_the_same_is_written(site: Site, tmp_path: Path) -> None:
    inputs = ward((2,), 120)
    site.put(*inputs)
    assert site.cycle(write_together=50).dead == 0
    assert site.standing() == replayed(site, inputs, tmp_path / "replay")
    assert set(site.versions().values()) == {"1"}
    again = site.cycle(write_together=1)
    assert (again.written, again.patients) == (0, 0)  # how it is written changes nothing of what is
    (haemoglobin,) = first_gas(inputs, 2, "14775-1")
    haemoglobin["status"] = "corrected"
    haemoglobin["valueQuantity"]["value"] = 9.5
    site.put(haemoglobin)
    assert site.cycle(write_together=50).written > 0
    assert site.standing() == replayed(site, inputs, tmp_path / "again")


def test_a_dry_run_sends_nothing_and_a_real_one_then_all(site: Site) -> None:
    site.put(*ward((2,), 120))
    dry = site.cycle(write=False)
    assert dry.to_write > 0
    assert dry.written == 0
    assert site.call("GET", "Provenance?_summary=count").json()["total"] == 0
    assert site.cycle().written == dry.waiting


KILLED = """
import sys
from pathlib import Path
from fhiro2.live import run_once
from tests.test_worker import PACK, Site, mapping
site = Site(sys.argv[1], Path(sys.argv[2]))
print("ready", flush=True)
site.cycle()
print("done", flush=True)
"""


def cycle_in_a_process(site: Site, most: float) -> float:
    """Run one cycle in a process, killed after ``most`` seconds; how long it ran, or less than nothing if killed."""
    command = [sys.executable, "-c", KILLED, site.base, str(site.store)]
    folder = Path(__file__).parent.parent
    with subprocess.Popen(command, stdout=subprocess.PIPE, cwd=folder, text=True) as process:
        assert process.stdout is not None
        assert process.stdout.readline() == "ready\n"
        began = time.monotonic()
        try:
            process.wait(most)
        except subprocess.TimeoutExpired:
            os.kill(process.pid, signal.SIGKILL)
            return -1.0
    return time.monotonic() - began


def test_killed_anywhere_the_next_cycle_ends_the_same_and_writes_nothing_twice(
    tmp_path: Path, request: pytest.FixtureRequest
) -> None:
    inputs = ward((2,), 100)
    with running(tmp_path / "whole") as base:
        whole = Site(base, tmp_path / "whole.sqlite")
        whole.put(*inputs)
        length = cycle_in_a_process(whole, 60.0)
        assert set(whole.versions().values()) == {"1"}
    chance, inside = random.Random(1), 0
    for number in range(KILLS if request.config.getoption("--full") else KILLS_IN_CI):
        with running(tmp_path / f"server-{number}") as base:
            site = Site(base, tmp_path / f"{number}.sqlite")
            site.put(*inputs)
            inside += cycle_in_a_process(site, chance.uniform(0, length)) < 0
            site.cycle()
            assert site.standing() == replayed(site, inputs, tmp_path / f"replay-{number}")
            assert set(site.versions().values()) == {"1"}
    assert inside > 0

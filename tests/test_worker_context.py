"""What a worker reads beside Observations: late, missing, merged, retried; and one worker to a store."""

from __future__ import annotations

from pathlib import Path

import pytest
import responses

from fhiro2.errors import StopError
from fhiro2.live import account_of, run_once
from fhiro2.read.server import escaped
from fhiro2.settings import NO_MAPPING, Settings
from fhiro2.store import Store
from tests.beside import BASE, SOURCE, Beside, beside, gas, held, lactate, pack, person, undisturbed, ward
from tests.feeds import SITE, component, concept, mapping, panel, specimen
from tests.memory_server import MemoryServer

Mock = responses.RequestsMock
ECMO = mapping(facts=[{"system": SITE, "code": "ecmo", "fact": "ecmo"}])


pytest_plugins = ("tests.beside_fixtures",)
pytestmark = pytest.mark.usefixtures("nothing_told")


def contents(made: Beside) -> list[str]:
    """The arterial oxygen contents in force at the server."""
    rows = [made.server.current(key) for key in made.ledger if key.startswith("Observation/")]
    return [
        f"{one['subject']['reference']} {one['valueQuantity']['value']}"
        for one in rows
        if one["status"] == "final" and one["code"]["text"] == "Arterial oxygen content"
    ]


# --- what others refer to ----------------------------------------------------------------------------------------


def test_a_missing_specimen_is_asked_for_each_cycle_and_brings_values_when_it_comes(
    tmp_path: Path, mock: Mock
) -> None:
    """Codes of any blood: only the specimen says that it is arterial. It comes with a date before the stream's."""
    parts = (
        component("11556-8", 60.0, "mm[Hg]"),
        component("20564-1", 78.0, "%"),
        component("718-7", 14.0, "g/dL"),
    )
    drawn = panel("any", *parts, specimen={"reference": "Specimen/drawn"})
    made = beside(tmp_path / "a", mock, person(), specimen("other"), drawn)
    for _ in range(3):
        made.cycle()
    assert len(made.server.requests("GET Specimen?_id=drawn")) == 3
    assert contents(made) == []
    meta = {"versionId": "1", "lastUpdated": "2026-03-02T00:00:00Z"}
    made.server.versions["Specimen/drawn"] = [{**specimen("drawn"), "meta": meta}]
    made.cycle()
    assert len(contents(made)) == 1
    made.cycle()
    assert len(made.server.requests("GET Specimen?_id=drawn")) == 4


def test_what_was_stated_before_the_first_observation_is_known(tmp_path: Path, mock: Mock) -> None:
    """A Condition of a patient who is not known yet is not kept; it is asked for when the patient is."""
    made = beside(tmp_path / "a", mock, lactate())
    stated = {"resourceType": "Condition", "id": "e", "code": concept((SITE, "ecmo"))}
    made.server.add({**stated, "subject": {"reference": "Patient/p2"}})
    made.cycle(ECMO)
    assert "Condition/e 1" not in made.ends()
    made.server.seconds += 3600
    made.server.add(person("p2"), gas("second", subject={"reference": "Patient/p2"}))
    made.cycle(ECMO)
    assert made.ends()["Condition/e 1"] == "used"
    assert not [key for key in made.ledger if key.startswith("Flag/")]  # the rule asks for none under ECMO
    asked = len(made.server.requests("GET Condition?patient=Patient%2Fp2"))
    made.cycle(ECMO)
    assert len(made.server.requests("GET Condition?patient=Patient%2Fp2")) == asked == 1


def test_a_subject_by_identifier_is_looked_up(tmp_path: Path, mock: Mock) -> None:
    number = {"system": "urn:example:mrn", "value": "7"}
    made = beside(tmp_path / "a", mock, {**person(), "identifier": [number]})
    made.server.seconds += 3600
    made.server.add(person("p2"))
    made.cycle()
    assert made.stored == []
    made.server.seconds += 3600
    made.server.add(specimen("drawn", subject=None), gas(subject={"identifier": number}))
    made.cycle()
    assert [one.partition(" ")[0] for one in contents(made)] == ["Patient/p1"]
    made.cycle()
    assert len(made.server.requests("GET Patient?identifier=")) == 1


def test_a_token_with_signs_of_its_own_is_escaped() -> None:
    """Source: FHIR R4, Search, Escaping Search Parameters: a backslash before ``$``, ``,``, ``|`` and itself."""
    assert escaped("urn:x|7,a$b|c\\d") == "urn:x|7\\,a\\$b\\|c\\\\d"


def test_rows_without_a_patient_are_resolved_among_all_their_versions(tmp_path: Path, mock: Mock) -> None:
    made = beside(tmp_path / "a", mock, lactate(subject=None))
    made.cycle()
    made.server.add(lactate(subject=None, value=2.0))
    made.cycle()
    assert made.ends() == {"Observation/lactate 1": "superseded", "Observation/lactate 2": "subject"}
    with made.store.transaction() as work:
        assert work.pending(SOURCE) == []


def test_a_merge_moves_values_and_leaves_their_ids(made: Beside) -> None:
    made.cycle()
    before = set(made.ledger)
    [content] = contents(made)
    assert content.startswith("Patient/p1 ")
    made.server.add({**person("p2"), "link": [{"other": {"reference": "Patient/p1"}, "type": "replaces"}]})
    made.cycle()
    assert contents(made) == [content.replace("Patient/p1", "Patient/p2")]
    values = {key for key in before if not key.startswith("Provenance/")}
    assert values == {key for key in made.ledger if not key.startswith("Provenance/")}
    assert {made.ours()[key][0] for key in values if key.startswith(("Observation/", "Flag/"))} == {2}


def test_a_changed_subject_withdraws_and_writes_anew(made: Beside) -> None:
    made.cycle()
    old = {key for key in made.ledger if key.startswith(("Observation/", "Flag/"))}
    made.server.add(
        person("p2"),
        gas(subject={"reference": "Patient/p2"}),
        {**specimen("drawn"), "subject": {"reference": "Patient/p2"}},
    )
    done = made.cycle()
    assert {made.server.current(key)["status"] for key in old} == {"entered-in-error"}
    assert done.withdrawn == len(old) == 4
    [content] = contents(made)
    assert content.startswith("Patient/p2 ")
    assert made.ends()["Observation/gas 1"] == "superseded"


def test_a_new_mapping_brings_back_what_was_quarantined(tmp_path: Path, mock: Mock) -> None:
    unitless = {**lactate(), "valueQuantity": {"value": 1.5}}
    made = beside(tmp_path / "a", mock, person(), unitless)
    made.cycle()
    assert made.ends()["Observation/lactate 1"] == "unit"
    with made.store.transaction() as work:
        assert work.try_again() == 1
    stated = mapping(default_units=[{"source": SOURCE, "loinc": "2518-9", "unit": "mmol/L"}])
    made.cycle(stated)
    assert made.ends()["Observation/lactate 1"] == "used"


# --- one worker, one store ---------------------------------------------------------------------------------------


def test_a_dry_run_writes_nothing_and_the_next_cycle_all(tmp_path: Path, mock: Mock) -> None:
    made = beside(tmp_path / "a", mock)
    done = made.cycle(write=False)
    assert (done.written, done.waiting, len(made.outbox)) == (0, 9, 9)
    assert made.server.requests("PUT") == []
    assert made.cycle(write=False).waiting == 9
    assert made.cycle().written == 9
    assert held(made) == undisturbed(tmp_path / "b")


def site(server: MemoryServer, folder: Path) -> Settings:
    stated = {
        "server": {"url": server.base, "name": SOURCE}, "store": str(folder / "store.sqlite"), "write": True,
        "station_pressure_kpa": 101.3,
    }  # fmt: skip
    return Settings.model_validate(stated)


def test_absolute_references_to_the_server_are_its_own(tmp_path: Path, mock: Mock) -> None:
    server = MemoryServer(BASE)
    server.start(mock)
    absolute = {"subject": {"reference": f"{BASE}/Patient/p1"}, "specimen": {"reference": f"{BASE}/Specimen/drawn"}}
    server.add(person(), specimen("drawn", subject=absolute["subject"]), gas(**absolute))
    assert run_once(site(server, tmp_path), NO_MAPPING, pack()).written == 9
    with Store(tmp_path / "store.sqlite").transaction() as work:
        assert {one.patient for one in work.written()} == {"Patient/p1", ""}


def test_a_lease_is_given_up_after_a_stop(tmp_path: Path, mock: Mock) -> None:
    server = MemoryServer(BASE)
    server.start(mock)
    server.add(*ward())
    server.fault("GET Patient", lambda _request, _ordinary: (403, {}, b""))
    with pytest.raises(StopError, match="403"):
        run_once(site(server, tmp_path), NO_MAPPING, pack())
    store = Store(tmp_path / "store.sqlite")
    with store.leased("another", lambda: 0, 10):
        pass
    store.take_lease("another", now=2**60, until=2**61)
    with pytest.raises(StopError, match="worker another has this store"):
        run_once(site(server, tmp_path), NO_MAPPING, pack())
    store.give_up_lease("another")
    assert run_once(site(server, tmp_path), NO_MAPPING, pack()).written == 9


def test_a_long_cycle_prolongs_its_lease_and_ends_when_another_took_over(made: Beside) -> None:
    moment = 0
    other = Store(made.store.path)

    def later() -> int:
        nonlocal moment
        moment += 6
        return moment

    with made.store.leased("one", later, 10):
        made.cycle()
        assert moment > 100
        with pytest.raises(StopError, match="worker one has this store"):
            other.take_lease("two", now=moment, until=moment + 10)
        with other._engine.begin() as connection:
            connection.exec_driver_sql("UPDATE lease SET holder = 'two'")
        before = made.stored
        made.server.add(lactate("new", seconds=60))
        with pytest.raises(StopError, match="another worker took this store over"):
            made.cycle()
        assert made.stored == before
    with pytest.raises(StopError, match="worker two has this store"):
        other.take_lease("three", now=moment, until=moment + 10)


def test_a_store_of_a_newer_schema_is_refused(tmp_path: Path, mock: Mock) -> None:
    server = MemoryServer(BASE)
    server.start(mock)
    store = Store(tmp_path / "store.sqlite")
    with store._engine.begin() as connection:
        connection.exec_driver_sql("UPDATE schema_version SET number = 9")
    with pytest.raises(StopError, match="schema 9"):
        run_once(site(server, tmp_path), NO_MAPPING, pack())
    assert server.log == []


def test_the_account_of_a_store_balances(made: Beside) -> None:
    for _ in range(2):
        made.cycle()
    account = account_of(made.store)
    parts = ("used", "repeated", "waiting", "quarantined", "out_of_scope")
    assert account["received"] == sum(account[part] for part in parts) == 4 + 4 + 3

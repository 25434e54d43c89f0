"""The whole way: the same bytes in any order, nothing counted twice, published numbers from NDJSON to Observation."""

import copy
import json
import random
import subprocess
import sys
from dataclasses import replace
from functools import cache
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from fhir.resources.R4B import get_fhir_model_class
from hypothesis import given
from hypothesis import strategies as st

from fhiro2.assess import assess
from fhiro2.bulk.intake import take_in
from fhiro2.flags import Flag
from fhiro2.judge import Carried, Pack, read_pack
from fhiro2.model import Outcome, Timelines
from fhiro2.packaged import rules_folder, ward_folder
from fhiro2.read.ndjson import NdjsonSource
from fhiro2.replay import COMPARED, replay
from fhiro2.settings import NO_MAPPING, Mapping, Settings, read_mapping
from fhiro2.timeline import batches
from fhiro2.write import Run
from fhiro2.write.ndjson import NdjsonSink
from tests.validators import problems

WARD = ward_folder()
RUN = Run("2026-03-05T00:00:00.000Z", "0" * 64, "test")


@cache
def pack() -> Pack:
    return read_pack(rules_folder())


@cache
def mapping() -> Mapping:
    return read_mapping(WARD / "mapping.yaml")


def run(folder: Path, out: Path, given_mapping: Mapping | None = None) -> dict[str, bytes]:
    replay([NdjsonSource("ward-nine", [folder])], out, Settings(), given_mapping or mapping(), pack())
    return {name: (out / name).read_bytes() for name in COMPARED}


@pytest.fixture(scope="module")
def once(tmp_path_factory: pytest.TempPathFactory) -> Path:
    out = tmp_path_factory.mktemp("once")
    run(WARD, out)
    return out


def outputs(out: Path) -> dict[str, bytes]:
    return {name: (out / name).read_bytes() for name in COMPARED}


def account(out: Path) -> dict[str, Any]:
    found: dict[str, Any] = json.loads((out / "account.json").read_text())
    return found


def ward_lines() -> list[bytes]:
    """All lines of the ward, but for the one that breaks off: it is only told apart as the last of its file."""
    found = []
    for file in sorted(WARD.glob("*.ndjson")):
        content = file.read_bytes()
        whole, _, broken = content.rpartition(b"\n")
        assert not broken or file.name == "late.ndjson"
        found += whole.split(b"\n")
    return found


def write_lines(folder: Path, lines: list[bytes], files: int) -> None:
    folder.mkdir()
    for number in range(files):
        (folder / f"part-{number}.ndjson").write_bytes(b"".join(line + b"\n" for line in lines[number::files]))


# --- the same bytes ----------------------------------------------------------------------------------------------


def test_the_account_balances(once: Path) -> None:
    found = account(once)
    parts = ("used", "repeated", "waiting", "quarantined", "out_of_scope")
    assert found["received"] == sum(found[part] for part in parts)
    lines = sum(file.read_bytes().rstrip(b"\n").count(b"\n") + 1 for file in WARD.glob("*.ndjson"))
    assert found["received"] == lines


def test_a_second_replay_gives_the_same_bytes(once: Path, tmp_path: Path) -> None:
    assert run(WARD, tmp_path / "again") == outputs(once)


@pytest.mark.parametrize("seed", [1, 2])
def test_shuffled_and_split_lines_give_the_same_bytes(tmp_path: Path, seed: int) -> None:
    lines = ward_lines()
    write_lines(tmp_path / "whole", lines, 1)
    first = run(tmp_path / "whole", tmp_path / "first")
    random.Random(seed).shuffle(lines)
    write_lines(tmp_path / "split", lines, 5)
    assert run(tmp_path / "split", tmp_path / "second") == first


def test_own_output_fed_back_changes_nothing(once: Path, tmp_path: Path) -> None:
    folder = tmp_path / "fed"
    folder.mkdir()
    added = 0
    for file in WARD.glob("*.ndjson"):
        (folder / file.name).write_bytes(file.read_bytes())
    for name in ("observations", "flags", "provenance", "devices"):
        content = (once / f"{name}.ndjson").read_bytes()
        (folder / f"own-{name}.ndjson").write_bytes(content)
        added += content.count(b"\n")
    fed = run(folder, tmp_path / "out")
    for name in ("observations.ndjson", "flags.ndjson"):
        assert fed[name] == outputs(once)[name]
    before, after = account(once), account(tmp_path / "out")
    assert added > 0
    assert after["received"] - before["received"] == added
    own = after["reasons"]["out_of_scope"]["own-output"] - before["reasons"]["out_of_scope"].get("own-output", 0)
    assert own == added == after["out_of_scope"] - before["out_of_scope"]


# --- published numbers -------------------------------------------------------------------------------------------


def observation(name: str, loinc: str, value: float, unit: str, minute: int = 0, **more: Any) -> dict[str, Any]:
    return {
        "resourceType": "Observation",
        "id": name,
        "meta": {"versionId": "1", "lastUpdated": "2026-03-01T09:00:00Z"},
        "status": "final",
        "category": [
            {
                "coding": [
                    {"system": "http://terminology.hl7.org/CodeSystem/observation-category", "code": "laboratory"}
                ]
            }
        ],
        "code": {"coding": [{"system": "http://loinc.org", "code": loinc}]},
        "subject": {"reference": "Patient/p1"},
        "effectiveDateTime": f"2026-03-01T08:{minute:02d}:00Z",
        "valueQuantity": {"value": value, "unit": unit, "system": "http://unitsofmeasure.org", "code": unit},
        **more,
    }


def derived(folder: Path, resources: list[dict[str, Any]]) -> dict[str, float]:
    """The derived values of some resources by code, read back from what was written."""
    source = folder / "in"
    source.mkdir(parents=True)
    (source / "gas.ndjson").write_text("".join(json.dumps(one) + "\n" for one in resources))
    run(source, folder / "out", NO_MAPPING)
    found = {}
    for line in (folder / "out" / "observations.ndjson").read_text().splitlines():
        resource = json.loads(line)
        own = next(row for row in resource["code"]["coding"] if "fhiro2" in row["system"])
        found[own["code"]] = resource["valueQuantity"]["value"]
        loinc = next((row["code"] for row in resource["code"]["coding"] if row["system"] == "http://loinc.org"), "")
        found[loinc] = resource["valueQuantity"]["value"]
    return found


MMHG_PER_KPA = 7.50062  # NIST SP 811: 1 mmHg = 0.1333224 kPa


def arterial(hb: tuple[float, str], pressure: tuple[float, str], saturation: float = 100) -> list[dict[str, Any]]:
    return [
        observation("pao2", "2703-7", *pressure),
        observation("sao2", "2708-6", saturation, "%"),
        observation("hb", "718-7", *hb),
    ]


@pytest.mark.parametrize("hb", [(15, "g/dL"), (150, "g/L")])
@pytest.mark.parametrize("pressure", [(13.3, "kPa"), (round(13.3 * MMHG_PER_KPA, 2), "mm[Hg]")])
def test_arterial_content_by_the_tutorial(tmp_path: Path, hb: tuple[float, str], pressure: tuple[float, str]) -> None:
    """Hb 15 g/dL, 100 %, 13.3 kPa: 20.1 bound + 0.3 dissolved = 20.4 (AnaesthesiaUK, Oxygen content of blood)."""
    assert derived(tmp_path, arterial(hb, pressure))["59274-1"] == 20.4


def pair() -> list[dict[str, Any]]:
    return [
        *arterial((15, "g/dL"), (13.3, "kPa")),
        observation("pvo2", "19211-2", 6, "kPa", 2),
        observation("svo2", "19224-5", 75, "%", 2),
        observation("co", "8737-9", 5, "L/min", 5),
    ]


def test_venous_content_delivery_uptake_and_extraction_by_the_tutorial(tmp_path: Path) -> None:
    """Venous 75 %, 6 kPa: 15.2; with 5 L/min about 1000 mL/min delivered, 250 taken up, a quarter (same source)."""
    found = derived(tmp_path, pair())
    assert found["64798-2"] == 15.2
    assert found["oxygen-delivery"] == pytest.approx(1000, rel=0.03)
    assert found["oxygen-consumption"] == pytest.approx(250, rel=0.05)
    assert found["oxygen-extraction-ratio"] == pytest.approx(0.25, abs=0.01)


def test_carbon_monoxide_is_taken_off_once(tmp_path: Path) -> None:
    """Hb 15, sO2 98 %, COHb 30 %, 90 mmHg: 1.39 x 15 x 0.98 x 0.7 + dissolved = 14.6 (definition), not 20.0."""
    gas = arterial((15, "g/dL"), (90, "mm[Hg]"), 98)
    cohb, methb = observation("cohb", "2030-5", 30, "%"), observation("methb", "2615-3", 0, "%")
    assert derived(tmp_path / "one", [*gas, cohb, methb])["59274-1"] == 14.6
    assert derived(tmp_path / "two", gas)["59274-1"] == 20.0


# --- laws --------------------------------------------------------------------------------------------------------


@cache
def ward_timelines() -> tuple[Timelines, ...]:
    intake = take_in([NdjsonSource("ward-nine", [WARD])], Settings(), mapping())
    return tuple(batches(intake.readings, intake.rows.names, intake.rows.origins, intake.roster))


def rendered(tmp_path: Path, found: list[Outcome]) -> list[bytes]:
    """All values and flags as written; a later state of a flag replaces the earlier."""
    with NdjsonSink(tmp_path, RUN) as sink:
        for outcome in found:
            sink.write(outcome)
    values = (tmp_path / "observations.ndjson").read_bytes().splitlines()
    flags = {json.loads(line)["id"]: line for line in (tmp_path / "flags.ndjson").read_bytes().splitlines()}
    return sorted([*values, *flags.values()])


def chosen(timelines: Timelines, keep: float, seed: int) -> Timelines:
    """The timelines with a share of the readings left out at random."""
    mask = np.random.default_rng(seed).random(len(timelines.readings)) < keep
    return replace(timelines, readings=timelines.readings[mask])


@given(st.lists(st.floats(0, 1), max_size=4), st.floats(0.3, 1), st.integers(0, 1000))
def test_folding_over_any_cut_in_time_equals_the_whole(
    tmp_path_factory: pytest.TempPathFactory, cuts: list[float], keep: float, seed: int
) -> None:
    (whole,) = ward_timelines()
    timelines = chosen(whole, keep, seed)
    first, last = int(timelines.readings["effective"].min()), int(timelines.readings["effective"].max())
    edges = [timelines.start, *sorted(first + round(cut * (last - first)) for cut in cuts), timelines.stop]
    parts, carried = [], Carried()
    for start, stop in pairwise(edges):
        outcome, carried = assess(replace(timelines, start=start, stop=stop), Settings(), pack(), carried)
        parts.append(outcome)
    everything, at_end = assess(timelines, Settings(), pack())
    folder = tmp_path_factory.mktemp("law")
    assert rendered(folder / "parts", parts) == rendered(folder / "whole", [everything])
    assert set(carried) == set(at_end)


@pytest.mark.parametrize("most_readings", [1, 500])
def test_any_cut_by_patient_equals_the_whole(tmp_path: Path, most_readings: int) -> None:
    intake = take_in([NdjsonSource("ward-nine", [WARD])], Settings(), mapping())
    parts = [
        assess(timelines, Settings(), pack())[0]
        for timelines in batches(intake.readings, intake.rows.names, intake.rows.origins, intake.roster, most_readings)
    ]
    assert len(parts) > 1
    whole = [assess(timelines, Settings(), pack())[0] for timelines in ward_timelines()]
    assert rendered(tmp_path / "parts", parts) == rendered(tmp_path / "whole", whole)


def flags_of(found: list[Outcome]) -> list[Flag]:
    return [flag for outcome in found for flag in outcome.flags]


def test_the_planted_states_raise_flags() -> None:
    """Bed 5 has a low arterial oxygen that clears; bed 2 bleeds to a low haemoglobin with raised extraction."""
    found = {(flag.rule, flag.patient.rpartition("/")[2]): flag for flag in flags_of([
        assess(timelines, Settings(), pack())[0] for timelines in ward_timelines()
    ])}  # fmt: skip
    assert found["low-arterial-oxygen", "w9-p05"].cleared is not None
    assert ("low-haemoglobin-raised-extraction", "w9-p02") in found
    quiet = {f"w9-p{bed:02d}" for bed in range(7, 13)}
    assert not {patient for _, patient in found} & quiet


# --- any mutation is accounted for -------------------------------------------------------------------------------

WHOLE_LINES = [line for line in ward_lines() if line.startswith(b"{")]
JUNK: list[Any] = [None, True, 7, -1.5, "x", "", [], {}, [{}], {"coding": [{}]}, "2026-99-99", {"value": "7"}]


def places(node: Any, place: tuple[Any, ...] = ()) -> list[tuple[Any, ...]]:
    found = [place] if place else []
    if isinstance(node, dict):
        for key, value in node.items():
            found += places(value, (*place, key))
    elif isinstance(node, list):
        for number, value in enumerate(node):
            found += places(value, (*place, number))
    return found


def mutated(resource: Any, choose: random.Random) -> Any:
    place = choose.choice(places(resource))
    node = resource
    for step in place[:-1]:
        node = node[step]
    if choose.random() < 0.4:
        del node[place[-1]]
    else:
        node[place[-1]] = copy.deepcopy(choose.choice(JUNK))
    return resource


@given(st.integers(0, 10**9))
def test_any_mutated_resource_is_accounted_for(tmp_path_factory: pytest.TempPathFactory, seed: int) -> None:
    choose = random.Random(seed)
    lines = []
    for line in choose.sample(WHOLE_LINES, 25):
        try:
            resource = json.loads(line)
        except ValueError:
            continue
        for _ in range(choose.randint(1, 3)):
            resource = mutated(resource, choose) if resource else resource
        lines.append(json.dumps(resource).encode())
    if choose.random() < 0.5:
        lines.append(bytes(choose.randrange(256) for _ in range(40)).replace(b"\n", b" ") or b"x")
    folder = tmp_path_factory.mktemp("mutated")
    (folder / "feed.ndjson").write_bytes(b"".join(line + b"\n" for line in lines))
    out = folder / "out"
    replay([NdjsonSource("feed", [folder / "feed.ndjson"])], out, Settings(), mapping(), pack())
    found = account(out)
    assert found["received"] == sum(1 for line in lines if line.strip())
    kept = [json.loads(line) for line in (out / "quarantine.ndjson").read_text().splitlines()]
    assert len([line for line in kept if "component" not in line]) == found["quarantined"]
    assert len([line for line in kept if "component" in line]) == found["parts_quarantined"]


# --- what is written ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["observations", "flags", "provenance", "devices"])
def test_every_written_resource_passes_the_validators(once: Path, name: str) -> None:
    assert (once / f"{name}.ndjson").stat().st_size > 0
    assert problems(once / f"{name}.ndjson") == []


@pytest.mark.parametrize("name", ["observations", "flags", "provenance", "devices"])
def test_every_written_line_is_what_the_model_library_renders(once: Path, name: str) -> None:
    for line in (once / f"{name}.ndjson").read_text().splitlines():
        mine = json.loads(line)
        model = get_fhir_model_class(mine["resourceType"])
        theirs = json.loads(model.model_validate_json(line).model_dump_json())
        assert list(mine) == list(theirs)
        assert without_times(mine) == without_times(theirs)


def without_times(node: Any) -> Any:
    """Times aside: the library writes microseconds where we write milliseconds."""
    if isinstance(node, dict):
        return {
            key: without_times(value)
            for key, value in node.items()
            if key not in ("issued", "effectiveDateTime", "occurredDateTime", "recorded", "start", "end")
        }
    return [without_times(one) for one in node] if isinstance(node, list) else node


# --- as a newcomer starts it -------------------------------------------------------------------------------------


def command(*words: str, cwd: Path | None = None) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", "fhiro2", *words], capture_output=True, text=True, cwd=cwd, timeout=120, check=False
    )


def test_the_demo_says_what_a_clinician_can_read() -> None:
    found = command("demo", "--once")
    assert found.returncode == 0, found.stderr
    for words in ("received", "quarantined", "Arterial oxygen content", "Low arterial oxygen", "Cautions:", "w9-p02"):
        assert words in found.stdout
    assert "Traceback" not in found.stderr


@pytest.mark.parametrize(
    ("words", "says"),
    [
        (["replay", "no-such-folder", "--out", "out"], "no such file or folder"),
        (["replay", ".", "--out", "out"], "holds no"),
        (["account", "--in", "."], "account.json: cannot be read"),
        (["quarantine", "list", "--in", "."], "quarantine.ndjson: cannot be read"),
        (["rules", "check", "."], ""),
        (["replay", ".", "--out", "out", "--settings", "missing.yaml"], "missing.yaml: cannot be read"),
    ],
)
def test_wrong_files_are_refused_in_words(tmp_path: Path, words: list[str], says: str) -> None:
    found = command(*words, cwd=tmp_path)
    assert found.returncode == 2
    assert says in found.stderr + found.stdout
    assert "Traceback" not in found.stderr


def test_a_failed_replay_leaves_no_files(tmp_path: Path) -> None:
    source = NdjsonSource("ward-nine", [WARD])

    def fail(outcome: Outcome, share: float) -> None:
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        replay([source], tmp_path / "out", Settings(), mapping(), pack(), fail)
    assert list((tmp_path / "out").iterdir()) == []

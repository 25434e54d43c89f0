"""Input that others made, through replay and census: what a real ward's dialect does to us.

Every expected number is counted here by plain JSON over the export itself.
"""

from __future__ import annotations

import json
import random
import re
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass, field
from datetime import datetime
from functools import cache
from io import StringIO
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from rich.console import Console

from fhiro2.catalogue import INPUT_BY_NAME, QUANTITY
from fhiro2.census import BRINGS, Census, advice, census, notices
from fhiro2.codes import LOINC, code_table
from fhiro2.judge import Pack, read_pack
from fhiro2.model import AnchorTable, Caution, Outcome, Readings, Specimen, Why
from fhiro2.packaged import rules_folder
from fhiro2.read.ndjson import NdjsonSource
from fhiro2.replay import COMPARED, replay
from fhiro2.settings import NO_MAPPING, Mapping, Settings, SiteAnswer
from fhiro2.terminal import show_census
from tests.validators import problems

pytest_plugins = ("tests.simulator",)

GASES = ("2703-7", "2019-8", "2744-1")  # arterial pO2, pCO2, pH
NEEDS_INSPIRED_OXYGEN = {
    "pf-ratio": "2703-7",
    "alveolar-oxygen-pressure": "2703-7",
    "alveolar-arterial-gradient": "2703-7",
    "sf-ratio": "2708-6",
}
CONTEXT = ("Patient", "Specimen", "Encounter", "Device")  # used whatever they say
FACTS = ("Condition", "Procedure", "MedicationAdministration")  # used where a site maps their codes
MINUTE = 60 * 1_000_000
HAEMOGLOBIN_AGE = 4 * 60 * MINUTE  # the default window; within a minute it is the same sample
ADULT = 18 * 365.25 * 24 * 3600 * 1e6

Line = dict[str, Any]


@dataclass
class Feed:
    """One export, its resources by plain JSON, and what a replay of it made."""

    folder: Path
    out: Path
    resources: list[Line]
    outcomes: list[Outcome] = field(default_factory=list)

    def observations(self, *codes: str) -> list[Line]:
        return [line for line in self.resources if line["resourceType"] == "Observation" and code(line) in codes]

    def account(self) -> dict[str, Any]:
        found: dict[str, Any] = json.loads((self.out / "account.json").read_text())
        return found

    def written(self, name: str) -> list[Line]:
        return [json.loads(line) for line in (self.out / name).read_text().splitlines()]

    def readings(self) -> Readings:
        return np.concatenate([outcome.timelines.readings for outcome in self.outcomes])

    def tables(self, kind: str) -> Iterator[tuple[Outcome, AnchorTable]]:
        for outcome in self.outcomes:
            yield outcome, outcome.tables[kind]


def code(line: Line) -> str:
    found: str = line["code"]["coding"][0]["code"]
    return found


def moment(text: str) -> int:
    return round(datetime.fromisoformat(text).timestamp() * 1_000_000)


@cache
def pack() -> Pack:
    return read_pack(rules_folder())


def run(folder: Path, out: Path, seen: list[Outcome]) -> None:
    replay(
        [NdjsonSource("feed", [folder])], out, Settings(), NO_MAPPING, pack(), lambda outcome, _: seen.append(outcome)
    )


def census_of(folder: Path, mapping: Mapping = NO_MAPPING) -> Census:
    return census([NdjsonSource("feed", [folder])], Settings(), mapping, pack())


def shown(found: Census) -> str:
    console = Console(width=4000, file=StringIO())
    show_census(console, found)
    return console.file.getvalue()  # type: ignore[attr-defined, no-any-return]


@pytest.fixture(scope="module")
def feed(export: Path, tmp_path_factory: pytest.TempPathFactory) -> Feed:
    lines = [line for file in sorted(export.glob("*.ndjson")) for line in file.read_text().splitlines() if line]
    found = Feed(export, tmp_path_factory.mktemp("out"), [json.loads(line) for line in lines])
    run(export, found.out, found.outcomes)
    return found


@pytest.fixture(scope="module")
def counted(feed: Feed) -> Census:
    return census_of(feed.folder)


# The account


def test_every_resource_has_its_place(feed: Feed) -> None:
    account, kinds = feed.account(), Counter(line["resourceType"] for line in feed.resources)
    whole_files = len(list(feed.folder.glob("*.json")))  # manifest and metadata of the export: no resources
    assert account["received"] == len(feed.resources) + whole_files
    places = ("used", "repeated", "waiting", "quarantined", "out_of_scope")
    assert account["received"] == sum(account[place] for place in places)
    others = sum(number for kind, number in kinds.items() if kind not in ("Observation", *CONTEXT, *FACTS))
    assert account["reasons"]["out_of_scope"]["other-type"] == others > 0
    assert account["repeated"] == account["waiting"] == account["parts_quarantined"] == 0


def test_what_is_refused_is_named_and_nothing_else(feed: Feed) -> None:
    levels = feed.observations("80288-4")
    assert {row["system"] for line in levels for row in line["valueCodeableConcept"]["coding"]} == {
        "http://snomed.info/sct"
    }
    kept = feed.written("quarantine.ndjson")
    refused = {line["resource"] for line in kept if line["file"].endswith(".ndjson")}
    assert refused == {line["id"] for line in levels}
    whole = {line["file"] for line in kept if not line["file"].endswith(".ndjson")}
    assert whole == {file.name for file in feed.folder.glob("*.json")}
    assert {line["reason"] for line in kept} == {"type"}


# Pulse oximetry


def test_pulse_oximetry_is_never_taken_for_co_oximetry(feed: Feed) -> None:
    saturations = feed.observations("2708-6")
    assert {row["code"] for line in saturations for one in line["category"] for row in one["coding"]} == {
        "vital-signs"
    }
    readings = feed.readings()
    pulse = readings[readings["quantity"] == QUANTITY["spo2"]]
    assert len(pulse) == len(saturations) > 0
    assert (pulse["cautions"] & np.uint64(Caution.METHOD_NOT_STATED) != 0).all()
    assert (pulse["specimen"] == Specimen.NONE).all()
    assert np.allclose(sorted(pulse["value"]), sorted(line["valueQuantity"]["value"] / 100 for line in saturations))
    assert not np.isin(readings["quantity"], [QUANTITY["so2"], QUANTITY["fo2hb"]]).any()


# The arterial gas


def test_values_of_one_gas_meet_by_time_although_each_has_its_own_specimen(feed: Feed) -> None:
    specimens = {f"Specimen/{line['id']}": line for line in feed.resources if line["resourceType"] == "Specimen"}
    expected: dict[tuple[str, int], dict[str, float]] = {}
    own = Counter[str]()
    for line in feed.observations(*GASES):
        key = line["subject"]["reference"], moment(line["effectiveDateTime"])
        expected.setdefault(key, {})[code(line)] = line["valueQuantity"]["value"]
        own[line["specimen"]["reference"]] += 1
        assert code({"code": specimens[line["specimen"]["reference"]]["type"]}) == "119297000"  # blood, not said which
    assert max(own.values()) == 1
    assert all(set(gas) == set(GASES) for gas in expected.values())
    found = {}
    for outcome, table in feed.tables("arterial"):
        names = outcome.timelines.names.subjects
        subjects = [
            names[subject].partition("|")[2] for subject in outcome.timelines.readings["subject"][table.reading]
        ]
        columns = [table.columns[name] for name in ("pao2", "paco2", "pha")]
        values = [column.value.tolist() for column in columns]
        for subject, at, *gas in zip(subjects, table.effective.tolist(), *values, strict=True):
            found[subject, at] = dict(zip(GASES, gas, strict=True))
        for column in columns:
            assert (column.why == Why.KNOWN).all()
            assert not (column.cautions & np.uint64(Caution.DISCORDANT)).any()
    assert found.keys() == expected.keys()
    assert all(found[key] == pytest.approx(expected[key]) for key in expected)


def test_ratios_say_that_inspired_oxygen_is_missing(feed: Feed) -> None:
    assert feed.observations("3151-8")
    assert not feed.observations(*BRINGS["fio2"])
    account = feed.account()
    for value, anchor in NEEDS_INSPIRED_OXYGEN.items():
        assert account["derived_by_code"][value] == 0
        ((words, number),) = account["not_computable_by_code"][value].items()
        assert words.endswith("inspired oxygen fraction")
        assert "," not in words
        assert number == len(feed.observations(anchor)) > 0


def test_saturation_is_predicted_for_each_gas_and_near_another_equation(feed: Feed) -> None:
    """Against Severinghaus JW, J Appl Physiol 1979;46:599 with its Bohr factor 0.48 (from memory)."""
    values = {line["id"]: line["valueQuantity"]["value"] for line in feed.observations(*GASES)}
    codes = {line["id"]: code(line) for line in feed.observations(*GASES)}
    predicted = [line for line in feed.written("observations.ndjson") if own_code(line) == "saturation-predicted"]
    assert len(predicted) == len(feed.observations("2703-7")) > 0
    for line in predicted:
        sources = [row["reference"].removeprefix("Observation/") for row in line["derivedFrom"]]
        gas = {codes[source]: values[source] for source in sources}
        assert gas.keys() == set(GASES)
        pressure = gas["2703-7"] * 10 ** (0.48 * (gas["2744-1"] - 7.4))
        expected = 100 / (23_400 / (pressure**3 + 150 * pressure) + 1)
        doubt = next(row["valueDecimal"] for row in line["extension"] if row["url"].endswith("standard-uncertainty"))
        assert abs(line["valueQuantity"]["value"] - expected) <= 2 * doubt


def test_each_gas_with_a_pulse_reading_within_two_minutes_has_its_gap(feed: Feed) -> None:
    """Counted on the plain JSON; each gap is the reading less the predicted saturation that was written beside it."""
    pulses = {line["id"]: line for line in feed.observations("2708-6")}
    near = [
        gas["id"]
        for gas in feed.observations("2703-7")
        if any(
            pulse["subject"] == gas["subject"]
            and abs(moment(pulse["effectiveDateTime"]) - moment(gas["effectiveDateTime"])) <= 2 * MINUTE
            for pulse in pulses.values()
        )
    ]
    written = [line for line in feed.written("observations.ndjson") if "valueQuantity" in line]
    predicted, gaps = (
        {anchor_of(line): line for line in written if own_code(line) == name}
        for name in ("saturation-predicted", "saturation-gap-pulse")
    )
    assert sorted(gaps) == sorted(near)
    assert near
    for anchor, line in gaps.items():
        sources = [row["reference"].removeprefix("Observation/") for row in line["derivedFrom"]]
        (pulse,) = (pulses[source] for source in sources if source in pulses)
        expected = pulse["valueQuantity"]["value"] - predicted[anchor]["valueQuantity"]["value"]
        assert line["valueQuantity"]["value"] == pytest.approx(expected, abs=0.051)  # each rounded to one decimal


def anchor_of(line: Line) -> str:
    """The oxygen pressure that a value at an arterial gas rests on."""
    (anchor,) = (row["reference"] for row in line["derivedFrom"] if row["display"].startswith("pao2"))
    found: str = anchor.removeprefix("Observation/")
    return found


def own_code(line: Line) -> str:
    found: str = line["code"]["coding"][-1]["code"]
    return found


def test_haemoglobin_is_mostly_too_old(feed: Feed) -> None:
    taken: dict[str, list[int]] = {}
    for line in feed.observations("718-7"):
        taken.setdefault(line["subject"]["reference"], []).append(moment(line["effectiveDateTime"]))
    near = sum(
        any(
            -MINUTE <= moment(line["effectiveDateTime"]) - at <= HAEMOGLOBIN_AGE
            for at in taken[line["subject"]["reference"]]
        )
        for line in feed.observations("2703-7")
    )
    whys = Counter(Why(why) for _, table in feed.tables("arterial") for why in table.columns["hb"].why.tolist())
    gases = len(feed.observations("2703-7"))
    assert whys == {Why.KNOWN: near, Why.OUTSIDE_WINDOW: gases - near}
    assert near < gases / 2
    reasons = feed.account()["not_computable_by_code"]["oxygen-content-arterial"]
    assert all("measured arterial saturation" in words for words in reasons)
    assert sum(reasons.values()) == gases
    assert sum(number for words, number in reasons.items() if "haemoglobin" in words) == gases - near


def test_body_surface_is_computed_for_every_adult(feed: Feed) -> None:
    born = {
        f"Patient/{line['id']}": moment(f"{line['birthDate']}T12:00:00+00:00")
        for line in feed.resources
        if line["resourceType"] == "Patient"
    }
    measured = {
        which: {(line["subject"]["reference"], line["effectiveDateTime"]) for line in feed.observations(which)}
        for which in ("29463-7", "8302-2")
    }
    adults = {
        (subject, at)
        for subject, at in measured["29463-7"] & measured["8302-2"]
        if moment(at) - born[subject] >= ADULT
    }
    surfaces = [line for line in feed.written("observations.ndjson") if own_code(line) == "body-surface-area"]
    assert {line["subject"]["reference"] for line in surfaces} == {subject for subject, _ in adults}
    assert len(surfaces) == len(adults) > 0


# What is written


def test_unversioned_input_is_pinned_by_its_content(feed: Feed, tmp_path: Path) -> None:
    """Each source is named with a hash of its own, and only the one whose content changed gets another."""
    assert all("versionId" not in line.get("meta", {}) for line in feed.resources)
    history = feed.written("provenance.ndjson")
    assert len(history) == len(feed.written("observations.ndjson")) + len(feed.written("flags.ndjson"))
    before = content_hashes(history)
    gases = {f"Observation/{line['id']}" for line in feed.observations(*GASES)}
    assert gases <= before.keys()
    assert all("/_history/" not in reference for reference in before)
    assert all(re.fullmatch(r"[0-9a-f]{64}", content_hash) for content_hash in before.values())
    assert len(set(before.values())) == len(before)
    changed = feed.observations("2703-7")[0]["id"]
    lines = [json.loads(json.dumps(line)) for line in feed.resources]
    for line in lines:
        if line["id"] == changed:
            line["method"] = {"text": "another analyser"}
    (tmp_path / "changed.ndjson").write_text("".join(f"{json.dumps(line)}\n" for line in lines))
    run(tmp_path, tmp_path / "out", [])
    again = [json.loads(line) for line in (tmp_path / "out" / "provenance.ndjson").read_text().splitlines()]
    after = content_hashes(again)
    assert {name for name in before if after[name] != before[name]} == {f"Observation/{changed}"}


def content_hashes(history: list[Line]) -> dict[str, str]:
    found: dict[str, str] = {}
    for what in (row["what"] for line in history for row in line["entity"]):
        content_hash = what["identifier"]["value"]
        assert found.setdefault(what["reference"], content_hash) == content_hash
    return found


def test_every_line_of_output_is_valid(feed: Feed) -> None:
    assert problems(feed.out / "observations.ndjson") == []
    assert problems(feed.out / "flags.ndjson") == []
    assert problems(feed.out / "provenance.ndjson") == []
    assert problems(feed.out / "devices.ndjson") == []


@pytest.mark.parametrize("shuffled", [False, True])
def test_a_second_replay_gives_the_same_bytes(feed: Feed, tmp_path: Path, shuffled: bool) -> None:
    folder = tmp_path / "in" if shuffled else feed.folder
    if shuffled:
        folder.mkdir()
        for file in feed.folder.glob("*.json"):
            (folder / file.name).write_bytes(file.read_bytes())
        for file in feed.folder.glob("*.ndjson"):
            lines = file.read_bytes().splitlines(keepends=True)
            random.Random(file.name).shuffle(lines)
            (folder / file.name).write_bytes(b"".join(lines))
        name = "Observation.ndjson"
        assert (folder / name).read_bytes() != (feed.folder / name).read_bytes()
    run(folder, tmp_path / "out", [])
    for name in COMPARED:
        assert (tmp_path / "out" / name).read_bytes() == (feed.out / name).read_bytes()
    assert without_clock(tmp_path / "out") == without_clock(feed.out)


def without_clock(out: Path) -> str:
    text = (out / "provenance.ndjson").read_text()
    clockless, times = re.subn(r'"recorded":"[^"]+"', '"recorded":""', text)
    assert times == text.count("\n")
    return clockless


# The census


def test_census_names_what_this_feed_allows_and_what_not(feed: Feed, counted: Census) -> None:
    gases, pulses = len(feed.observations("2703-7")), len(feed.observations("2708-6"))
    verdicts = {value: prospect.verdict() for value, prospect in counted.prospects.items()}
    assert [value for value, verdict in verdicts.items() if verdict != "no-go"] == [
        "saturation-predicted",
        "saturation-gap-pulse",
        "body-surface-area",
    ]
    page = shown(counted)
    assert re.search(
        rf"^go +Saturation predicted from the oxygen pressure +{gases} of {gases} arterial gases", page, re.M
    )
    assert re.search(
        rf"^no-go +PaO2/FiO2 ratio +0 of {gases} arterial gases +not recorded: inspired oxygen", page, re.M
    )
    assert re.search(
        rf"^no-go +SpO2/FiO2 ratio +0 of {pulses} SpO2 readings +not recorded: inspired oxygen", page, re.M
    )
    assert re.search(
        rf"^no-go +Arterial oxygen content +0 of {gases} arterial gases +not recorded: measured arterial saturation; "
        rf"no record near enough in time: haemoglobin \(\d+ of {gases}\)",
        page,
        re.M,
    )
    assert re.search(r"^no-go +Mixed venous oxygen content +no mixed venous gases", page, re.M)
    headings = re.findall(
        r"^(What this feed|What would unlock|Codes that|Codes seen|Readings|What came in)", page, re.M
    )
    assert headings == [
        "What this feed",
        "What would unlock",
        "Codes that",
        "Codes seen",
        "Readings",
        "What came in",
    ]


def test_census_says_what_would_unlock_most(feed: Feed, counted: Census) -> None:
    gases, pulses = len(feed.observations("2703-7")), len(feed.observations("2708-6"))
    flows, haemoglobins = len(feed.observations("3151-8")), len(feed.observations("718-7"))
    first, second, *_ = advice(counted)
    assert first.startswith(f"Inspired oxygen fraction: up to {3 * gases + pulses} more values (")
    assert "No code for inspired oxygen fraction was seen: send 3150-0 or 19994-3" in first
    assert f"Oxygen flow was seen (3151-8, {flows} times); a flow is not a fraction" in first
    assert second.startswith(
        f"Then haemoglobin and measured arterial saturation together: up to {2 * gases} more values "
        "(Arterial oxygen content; Measured minus predicted arterial saturation)"
    )
    assert f"Haemoglobin was read {haemoglobins} times; elsewhere no record near enough in time (up to " in second
    assert f"2708-6 was seen {pulses} times, but as a vital sign: that is pulse oximetry" in second
    numbers = [step.number for step in counted.steps]
    assert max(numbers) == numbers[0]


def test_census_says_that_consciousness_needs_a_mapping(feed: Feed, counted: Census) -> None:
    levels = len(feed.observations("80288-4"))
    sentence = next(one for one in notices(counted) if one.startswith("80288-4"))
    assert f"{levels} of {levels} could not be read" in sentence
    assert "Its answers are coded in SNOMED CT" in sentence
    assert "say under answers in the site's mapping" in sentence


def test_a_mapping_of_the_answers_unlocks_consciousness(feed: Feed) -> None:
    words = {"Alert": "alert", "Verbal": "voice", "Voice": "voice", "Pain": "pain", "Unresponsive": "unresponsive"}
    answers: dict[tuple[str, str], str] = {}
    for line in feed.observations("80288-4"):
        coding = line["valueCodeableConcept"]["coding"][0]
        answers[coding["system"], coding["code"]] = words.get(line["valueCodeableConcept"]["text"], "confused")
    mapping = Mapping(
        mapping="answers of this feed",
        version=1,
        owner="test",
        signed="test",
        answers=tuple(
            SiteAnswer(system=system, code=answer, quantity="consciousness", answer=meaning)  # type: ignore[arg-type]
            for (system, answer), meaning in answers.items()
        ),
    )
    found = census_of(feed.folder, mapping)
    assert found.quantities["consciousness", "none"] == len(feed.observations("80288-4")) > 0
    assert not any(one.startswith("80288-4") for one in notices(found))


def test_census_lists_codes_with_units_and_unmapped_ones_with_an_example(feed: Feed, counted: Census) -> None:
    expected = Counter[tuple[str, str]]()
    examples: dict[tuple[str, str], set[str]] = {}
    for line in feed.resources:
        if line["resourceType"] == "Observation":
            for part in (line, *line.get("component", [])):
                for coding in part["code"].get("coding", []):
                    expected[coding["system"], coding["code"]] += 1
                    examples.setdefault((coding["system"], coding["code"]), set()).add(line["id"])
    seen = {pair: found.count for pair, found in counted.codes.items() if pair != ("", "")}
    assert seen == expected
    unmapped = {pair for pair, found in counted.codes.items() if not found.mapped()}
    assert unmapped == set(expected) - set(code_table())
    assert (LOINC, "107117-4") in unmapped
    page = shown(counted)
    after = page.partition("Codes seen but not mapped")[2]
    for pair in unmapped:
        assert counted.codes[pair].example == min(examples[pair])
    method = counted.codes[LOINC, "107117-4"]
    assert re.search(rf"^ *{method.count}  LOINC 107117-4 .*Observation/{method.example}", after, re.M)
    before = page.partition("Codes seen but not mapped")[0]
    assert re.search(rf"^ *{expected[LOINC, '2744-1']}  LOINC 2744-1 .*\[pH\] +used", before, re.M)


def test_census_says_that_lateness_cannot_be_learned(feed: Feed, counted: Census) -> None:
    observations = [line for line in feed.resources if line["resourceType"] == "Observation"]
    assert all(line["meta"]["lastUpdated"] == line["effectiveDateTime"] for line in observations)
    assert any("how late results arrive cannot be learned from this feed" in one for one in notices(counted))


def test_census_names_deprecated_and_own_codes(feed: Feed, tmp_path: Path) -> None:
    """A feed that also sends a deprecated code, a code of its own whose words look like markup, and a bare text."""
    changed = [json.loads(json.dumps(line)) for line in feed.observations("2708-6")[:3]]
    changed[0]["code"] = {"coding": [{"system": LOINC, "code": "2710-2", "display": "Oxygen saturation"}]}
    changed[1]["code"] = {"coding": [{"system": "urn:example:ward", "code": "o2[/b]", "display": "[red]flow[/x]"}]}
    changed[2]["code"] = {"text": "saturation by hand"}
    (tmp_path / "three.ndjson").write_text("".join(f"{json.dumps(line)}\n" for line in changed))
    found = census_of(tmp_path)
    assert "2710-2 (Oxygen saturation) is a deprecated code, seen 1 times: ask the sender for its successor." in (
        notices(found)
    )
    page = shown(found)
    assert re.search(r"LOINC 2710-2 +Oxygen saturation \(deprecated\) +% +used", page)
    assert f"urn:example:ward o2[/b]  [red]flow[/x]       %      Observation/{changed[1]['id']}" in page
    assert re.search(rf"saturation by hand +% +Observation/{changed[2]['id']}", page)


def test_census_for_machines_says_the_same(counted: Census) -> None:
    found = json.loads(json.dumps(counted.as_json()))
    assert found["advice"] == advice(counted)
    assert found["notices"] == notices(counted)
    assert {row["code"]: row["verdict"] for row in found["values"]} == {
        value: prospect.verdict() for value, prospect in counted.prospects.items()
    }
    assert found["unlocks"][0]["inputs"] == ["fio2"]


def test_codes_that_the_census_asks_for_are_read_as_what_it_says() -> None:
    table = code_table()
    blood = {"sao2": Specimen.ARTERIAL, "pvo2": Specimen.MIXED_VENOUS, "svo2": Specimen.MIXED_VENOUS}
    blood |= {"pao2": Specimen.ARTERIAL, "paco2": Specimen.ARTERIAL, "scvo2": Specimen.CENTRAL_VENOUS}
    for name, wanted in BRINGS.items():
        for loinc in wanted:
            row = table[LOINC, loinc]
            assert (row.use, row.quantity) == ("value", INPUT_BY_NAME[name].quantity)
            assert row.specimen is blood.get(name, row.specimen)


def test_an_empty_feed_has_a_census(tmp_path: Path) -> None:
    (tmp_path / "nothing.ndjson").write_text("")
    found = census_of(tmp_path)
    assert advice(found) == notices(found) == []
    assert {prospect.verdict() for prospect in found.prospects.values()} == {"no-go"}
    assert "What this feed allows (0 patients with readings)" in shown(found)

"""The synthetic ward: the same bytes from the same seed, the courses that it promises, and every blemish it counts.

Expected numbers are the ward's own plan (its README and the course descriptions), read back from the JSON by other
means than those that wrote it.
"""

from __future__ import annotations

import json
import re
from collections import Counter, defaultdict
from collections.abc import Callable, Iterator
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import pytest
from fhir.resources.R4B import get_fhir_model_class

from fhiro2.settings import read_mapping
from fhiro2.ward import write_ward
from tests.validators import JUDGES

WARD = Path(__file__).parent.parent / "fixtures" / "ward"
START = datetime(2026, 3, 1, 6, tzinfo=UTC)
END = START + timedelta(hours=48)
VENOUS_UNDER_ARTERIAL = {"2703-7", "2019-8", "2744-1"}
QUANTITY_UNITS = {"kPa": {"kPa"}, "mm[Hg]": {"mm[Hg]", "mmHg"}}

Json = dict[str, Any]


def lines(name: str) -> list[str]:
    return (WARD / name).read_text(encoding="utf-8").splitlines()


def whole(name: str) -> Iterator[Json]:
    for line in lines(name):
        try:
            yield json.loads(line)
        except json.JSONDecodeError:
            assert name == "late.ndjson"


OBSERVATIONS: list[Json] = [*whole("observations.ndjson"), *whole("late.ndjson")]
SPECIMENS: dict[str, Json] = {f"Specimen/{row['id']}": row for row in whole("specimens.ndjson")}


def codes(row: Json) -> set[str]:
    return {coding["code"] for coding in row["code"]["coding"]}


def bed(row: Json) -> int:
    return int(row["encounter"]["reference"][-2:])


def moment(text: str) -> datetime:
    return datetime.fromisoformat(text)


def timed(row: Json) -> bool:
    return bool(re.search(r"T.*(Z|[+-]\d\d:\d\d)$", row["effectiveDateTime"]))


def standing() -> list[Json]:
    """The last final or corrected version of each Observation, without pairs that contradict each other."""
    last: dict[str, Json] = {}
    for row in OBSERVATIONS:
        if row["id"] not in last or int(row["meta"]["versionId"]) > int(last[row["id"]]["meta"]["versionId"]):
            last[row["id"]] = row
    return [row for row in last.values() if row["status"] in ("final", "corrected")]


def course(number: int, code: str) -> list[tuple[float, float]]:
    """Hours and values of one code at one bed, from values and components alike."""
    found = []
    for row in standing():
        if bed(row) != number or not timed(row):
            continue
        hour = (moment(row["effectiveDateTime"]) - START) / timedelta(hours=1)
        for part in (row, *row.get("component", ())):
            if code in codes(part) and "valueQuantity" in part:
                found.append((hour, part["valueQuantity"]["value"]))
    return sorted(found)


def between(low: float, high: float, values: list[tuple[float, float]]) -> list[float]:
    return [value for hour, value in values if low <= hour < high]


def versions() -> dict[str, list[Json]]:
    found: dict[str, list[Json]] = defaultdict(list)
    for row in OBSERVATIONS:
        found[row["id"]].append(row)
    return {identity: sorted(rows, key=lambda row: row["meta"]["versionId"]) for identity, rows in found.items()}


def histories(*statuses: str) -> list[list[Json]]:
    return [rows for rows in versions().values() if [row["status"] for row in rows] == list(statuses)]


def quantities(test: Callable[[Json, set[str]], bool]) -> int:
    return sum(test(row["valueQuantity"], codes(row)) for row in OBSERVATIONS if "valueQuantity" in row)


def lag(row: Json) -> timedelta:
    return moment(row["meta"]["lastUpdated"]) - moment(row["effectiveDateTime"])


def doubled_keys() -> int:
    seen: list[bool] = []

    def note(pairs: list[tuple[str, Any]]) -> Json:
        seen.append(len(dict(pairs)) != len(pairs))
        return dict(pairs)

    for line in lines("observations.ndjson"):
        json.loads(line, object_pairs_hook=note)
    return sum(seen)


def contradicting(quantity: Json, _: set[str]) -> bool:
    return "code" in quantity and quantity["unit"] not in QUANTITY_UNITS.get(quantity["code"], {quantity["code"]})


def specimen_type(row: Json) -> str:
    specimen = SPECIMENS.get(row.get("specimen", {}).get("reference", ""), {})
    return str(specimen["type"]["coding"][0]["code"]) if specimen else ""


BLEMISHES: dict[str, Callable[[], int]] = {
    "value without a unit": lambda: quantities(lambda quantity, _: not {"unit", "code"} & quantity.keys()),
    "unit and unit code contradict each other (kPa, mm[Hg])": lambda: quantities(contradicting),
    "an oxygen flow of 15 typed as FiO2 in %": lambda: quantities(
        lambda quantity, code: code == {"3150-0"} and quantity["unit"] == "%" and quantity["value"] == 15
    ),
    "an oxygen flow of 15 L/min under the FiO2 code": lambda: quantities(
        lambda quantity, code: code == {"3150-0"} and quantity["unit"] == "L/min" and quantity["value"] == 15
    ),
    "FiO2 40 with unit 1": lambda: quantities(
        lambda quantity, code: code == {"3150-0"} and quantity.get("code") == "1" and quantity["value"] == 40
    ),
    "blood not specified and its Specimen missing": lambda: sum(
        codes(row) == {"11556-8"} and row["specimen"]["reference"] not in SPECIMENS for row in OBSERVATIONS
    ),
    "venous Specimen under an arterial code": lambda: sum(
        bool(codes(row) & VENOUS_UNDER_ARTERIAL) and specimen_type(row) == "BLDV" for row in OBSERVATIONS
    ),
    "preliminary, then final": lambda: len(histories("preliminary", "final")),
    "final, then corrected with another value": lambda: sum(
        first["valueQuantity"] != second["valueQuantity"] for first, second in histories("final", "corrected")
    ),
    "final, then entered in error": lambda: len(histories("final", "entered-in-error")),
    "same version, two contents (pairs)": lambda: sum(
        len(rows) == 2 and rows[0]["meta"] == rows[1]["meta"] and rows[0] != rows[1] for rows in versions().values()
    ),
    "inspired oxygen charted 95 min late": lambda: sum(
        codes(row) == {"3150-0"} and timedelta(minutes=95) < lag(row) < timedelta(minutes=105) for row in OBSERVATIONS
    ),
    "result known 6 h late": lambda: sum(timed(row) and lag(row) > timedelta(hours=6) for row in OBSERVATIONS),
    "the same line sent again": lambda: sum(
        count - 1 for count in Counter(lines("observations.ndjson") + lines("late.ndjson")).values()
    ),
    "lactate below the limit of quantification (<)": lambda: quantities(
        lambda quantity, code: code == {"2518-9"} and quantity.get("comparator") == "<"
    ),
    "no value but a reason (clotted sample)": lambda: sum("dataAbsentReason" in row for row in OBSERVATIONS),
    "local code without a mapping": lambda: sum(codes(row) == {"NU-1473"} for row in OBSERVATIONS),
    "local code with a mapping": lambda: sum(codes(row) == {"BG-PO2A"} for row in OBSERVATIONS),
    "saturation 0.97 with %": lambda: quantities(
        lambda quantity, code: code == {"2708-6"} and quantity["value"] == 0.97 and quantity["code"] == "%"
    ),
    "one key twice in one object": doubled_keys,
    "last line breaks off": lambda: int(not (WARD / "late.ndjson").read_bytes().endswith(b"\n")),
    "filed under a record that was merged away": lambda: sum(
        row["subject"]["reference"] == "Patient/w9-p13" for row in OBSERVATIONS
    ),
    "date without time": lambda: sum("T" not in row["effectiveDateTime"] for row in OBSERVATIONS),
    "time in the future": lambda: sum(timed(row) and lag(row) < timedelta(0) for row in OBSERVATIONS),
    "time without offset": lambda: sum("T" in row["effectiveDateTime"] and not timed(row) for row in OBSERVATIONS),
    "saturation calculated from the pressure": lambda: sum(codes(row) == {"2713-6"} for row in OBSERVATIONS),
}


def told() -> dict[str, int]:
    """The counts of blemishes in the ward's README."""
    table = (WARD / "README.md").read_text(encoding="utf-8").partition("on purpose")[2].partition("## Notice")[0]
    return {what: int(count) for what, count in re.findall(r"^\| (.+) \| (\d+) \|$", table, re.MULTILINE)}


def test_the_same_seed_writes_the_same_bytes_and_another_seed_does_not(tmp_path: Path) -> None:
    write_ward(tmp_path / "again")
    names = sorted(file.name for file in WARD.iterdir())
    assert sorted(file.name for file in (tmp_path / "again").iterdir()) == names
    for name in names:
        assert (tmp_path / "again" / name).read_bytes() == (WARD / name).read_bytes(), name
    write_ward(tmp_path / "other", seed=1)
    other = (tmp_path / "other" / "observations.ndjson").read_bytes()
    assert other != (WARD / "observations.ndjson").read_bytes()


@pytest.mark.parametrize("what", sorted(BLEMISHES))
def test_a_blemish_is_there_as_often_as_the_readme_says(what: str) -> None:
    assert BLEMISHES[what]() == told()[what] > 0


def test_the_readme_tells_of_every_blemish_and_line_that_is_counted() -> None:
    assert told().keys() == BLEMISHES.keys()
    text = (WARD / "README.md").read_text(encoding="utf-8")
    counts = dict(re.findall(r"^\| `(\w+\.ndjson)` \| (\d+) \|$", text, re.MULTILINE))
    assert counts == {file.name: str(len(lines(file.name))) for file in WARD.glob("*.ndjson")}


def test_an_id_comes_twice_only_where_it_is_planned() -> None:
    twice = [what for what in told() if what.startswith(("preliminary,", "final,", "same version", "the same line"))]
    assert len(twice) == 5
    assert sum(len(rows) > 1 for rows in versions().values()) == sum(told()[what] for what in twice)


def test_the_broken_line_is_the_last_of_the_late_file_and_the_only_one() -> None:
    *kept, broken = lines("late.ndjson")
    assert all(json.loads(line)["resourceType"] == "Observation" for line in kept)
    with pytest.raises(json.JSONDecodeError):
        json.loads(broken)


def test_size_stays_small() -> None:
    files = list(WARD.glob("*.ndjson"))
    sizes = [len(line.encode()) for file in files for line in lines(file.name)]
    assert 3000 <= len(sizes) <= 4500
    assert sum(file.stat().st_size for file in WARD.iterdir()) < 4_500_000
    assert 500 <= sum(sizes) / len(sizes) <= 1200
    assert max(sizes) < 2500  # a gas panel with ten components


def test_twelve_beds_over_forty_eight_hours() -> None:
    inside = [row for row in OBSERVATIONS if timed(row) and lag(row) > timedelta(0)]
    assert {bed(row) for row in inside} == set(range(1, 13))
    for number in range(1, 13):
        times = [moment(row["effectiveDateTime"]) for row in inside if bed(row) == number]
        assert START <= min(times) < START + timedelta(hours=1)
        assert END - timedelta(hours=1) <= max(times) < END
        hours = {time.replace(minute=0) for time in times}
        assert len(hours) == 48, "a value in every hour"


def test_every_version_says_which_and_when() -> None:
    for name in (file.name for file in WARD.glob("*.ndjson")):
        for row in whole(name):
            assert row["meta"]["versionId"] in ("1", "2")
            assert re.fullmatch(r"2026-0[23]-\d\dT\d\d:\d\d:\d\d\.\d{3}Z", row["meta"]["lastUpdated"])


def test_references_resolve_except_the_planned_one() -> None:
    known = {f"{row['resourceType']}/{row['id']}" for file in WARD.glob("*.ndjson") for row in whole(file.name)}
    text = "\n".join(line for file in WARD.glob("*.ndjson") for line in lines(file.name)[: -1 or None])
    assert set(re.findall(r'"reference":"([^"]+)"', text)) - known == {"Specimen/w9-s9999"}


def test_all_resources_are_r4_except_the_planned_ones() -> None:
    for file in WARD.glob("*.ndjson"):
        for row in whole(file.name):
            if row["resourceType"] != "Observation" or timed(row) or "T" not in row["effectiveDateTime"]:
                get_fhir_model_class(row["resourceType"]).model_validate(row)


def test_one_of_each_shape_passes_the_judges() -> None:
    shapes: dict[tuple[Any, ...], Json] = {}
    for row in OBSERVATIONS:
        if timed(row):
            shapes.setdefault((row["status"], *sorted(codes(row)), *row), row)
    devices = next(whole("devices.ndjson"))
    assert len(shapes) > 40
    for row in (devices, *shapes.values()):
        assert [text for judge in JUDGES for text in judge(row)] == [], row["id"]


def test_carbon_monoxide_hides_from_pressure_and_pulse_oximetry() -> None:
    first = {code: course(1, code)[0][1] for code in ("2703-7", "2708-6", "2714-4", "2030-5", "59408-5")}
    assert 28 <= first["2030-5"] <= 32
    assert 85 <= first["2703-7"] <= 100
    assert first["2708-6"] > 96
    assert first["59408-5"] > 96
    assert first["2714-4"] < 72
    fractions = course(1, "2030-5")
    assert between(12, 48, fractions)
    assert max(between(12, 48, fractions)) < 3


def test_the_bleed_takes_haemoglobin_and_mixed_venous_saturation_and_gives_them_back() -> None:
    haemoglobin, venous = course(2, "14775-1"), course(2, "19224-5")
    assert 12.8 <= haemoglobin[0][1] <= 13.2
    assert 6.4 <= min(value for _, value in haemoglobin) <= 6.6
    assert haemoglobin[-1][1] > 9.5
    arterial = dict(course(2, "2708-6"))
    hour, lowest = min(venous, key=lambda row: row[1])
    beside = arterial[min(arterial, key=lambda other: abs(other - hour))]
    assert (beside - lowest) / beside > 0.45  # extraction from saturations alone, by definition
    assert max(value for _, value in course(2, "8867-4")) > 120


def test_low_output_and_septic_flow() -> None:
    # body surface by Mosteller 1987 (sqrt(H W / 3600)), another formula than the product's default
    surface = (172 * 74 / 3600) ** 0.5
    low = [flow / surface for flow in between(0, 28, course(3, "8737-9"))]
    assert 1.75 <= min(low) <= max(low) <= 2.05
    assert all(47 <= value <= 54 for value in between(0, 28, course(3, "19224-5")))
    assert all(9 <= value <= 10 for _, value in course(4, "8737-9"))
    assert all(76 <= value <= 80 for _, value in course(4, "19224-5"))
    assert all(4 <= value <= 6 for _, value in course(4, "2518-9"))
    assert all(99 <= value <= 101 for _, value in course(4, "14775-1")), "g/L"


def test_pneumonia_clears_and_obstruction_stays() -> None:
    pressures = course(5, "2703-7")
    assert all(50 <= value <= 58 for value in between(0, 17, pressures))
    assert all(value > 75 for value in between(24, 48, pressures))
    assert set(between(0, 17, course(5, "19994-3"))) == {50, 60}
    assert not course(5, "19224-5"), "no mixed venous blood"
    assert len(course(5, "97549-0")) == len(course(5, "11556-8")) == 8
    assert all(58 <= value <= 62 for _, value in course(6, "2703-7"))
    assert all(value > 55 for _, value in course(6, "2019-8"))


def test_a_mixed_venous_sample_has_an_arterial_one_within_five_minutes() -> None:
    for number in (2, 3, 4):
        arterial = [hour for hour, _ in course(number, "2703-7")]
        venous = [hour for hour, _ in course(number, "19224-5")]
        assert len(venous) >= 12
        assert all(min(abs(hour - other) for other in arterial) <= 5 / 60 for hour in venous)


def test_the_quiet_majority_has_oxygen_flow_and_no_inspired_fraction() -> None:
    planned = {7: 1, 10: 1, 12: 1}  # the blemishes under the code of inspired oxygen
    for number in range(7, 13):
        assert len(course(number, "3151-8")) == 48
        assert len(course(number, "3150-0")) == planned.get(number, 0)
        assert not course(number, "19994-3")


def test_three_dialects_differ_in_what_they_write() -> None:
    first, second, third = ([row for row in OBSERVATIONS if bed(row) == number] for number in (1, 3, 6))
    assert not [row for row in first if "component" in row or "hasMember" in row]
    assert {row["effectiveDateTime"][-6:] for row in first} == {"+00:00"}
    panels = [row for row in second if "24336-0" in codes(row)]
    assert panels
    assert all(len(row["component"]) == 10 and "specimen" in row for row in panels)
    assert {row["effectiveDateTime"][-6:] for row in second} == {"+01:00"}
    assert {part["valueQuantity"]["unit"] for row in panels for part in row["component"]} >= {"kPa", "g/L"}
    assert [row for row in third if "hasMember" in row]
    assert not [row for row in third if "specimen" in row]
    assert {row["valueQuantity"]["unit"] for row in third if "valueQuantity" in row} >= {"mmHg", "gm/dL"}
    assert {"150456", "147842", "150017", "150018", "150019"} <= {code for row in third for code in codes(row)}


def test_the_mapping_reads_and_names_what_the_ward_states() -> None:
    mapping = read_mapping(WARD / "mapping.yaml")
    assert {(row.code, row.loinc) for row in mapping.codes} == {("BG-PO2A", "2703-7")}
    stated = {
        row["code"]["coding"][0]["code"] for name in ("conditions", "procedures") for row in whole(f"{name}.ndjson")
    }
    assert stated - {row.code for row in mapping.facts} == {"COPD"}
    sites = {
        row["collection"]["bodySite"]["coding"][0]["code"]
        for row in SPECIMENS.values()
        if "bodySite" in row["collection"]
    }
    assert sites == {row.code for row in mapping.specimens}


def test_only_invented_people_and_no_place_of_the_making() -> None:
    families = {name["family"] for row in whole("patients.ndjson") for name in row["name"]}
    assert families == {"Testperson"}
    text = "".join(file.read_text(encoding="utf-8") for file in WARD.iterdir())
    assert not re.findall(r"/work|/tmp|/home|localhost|\b\d+\.\d+\.\d+\.\d+\b", text)
    addresses = set(re.findall(r"https?://([^/\"\s),]+)", text))
    assert addresses == {"loinc.org", "unitsofmeasure.org", "terminology.hl7.org"}

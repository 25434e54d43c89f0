"""What the documents say is what the code does: commands, stages, tables, and words for all of the vocabulary."""

import csv
import re
from pathlib import Path

import pytest
from typer.main import get_command

from fhiro2.catalogue import BASES, DERIVED, DERIVED_BY_CODE, INPUTS, MEASURED_BY_NAME
from fhiro2.cli import app
from fhiro2.codes import LOINC_NOTICE
from fhiro2.derive import codes_of
from fhiro2.derive.constants import ORDINARY_CARDIAC_INDEX, ORDINARY_CONSUMPTION_INDEX
from fhiro2.errors import Reason
from fhiro2.model import CAUTION_TEXT, WHY_TEXT, Caution, Why
from fhiro2.settings import Mapping, Server, Settings, Windows
from tests.test_way import ward_timelines

ROOT = Path(__file__).parent.parent
README = (ROOT / "README.md").read_text(encoding="utf-8")
DEVELOPERS = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
SOURCES = {file: file.read_text(encoding="utf-8") for file in (ROOT / "fhiro2").rglob("*.py")}


def commands() -> set[str]:
    found = set()
    for name, command in get_command(app).commands.items():  # type: ignore[attr-defined]
        inner = getattr(command, "commands", None)
        found |= {f"{name} {part}" for part in inner} if inner else {name}
    return found


def test_every_command_is_in_the_readme_and_every_command_there_exists() -> None:
    told = set(re.findall(r"fhiro2 ((?:rules |quarantine |written )?[a-z]+)(?= |\n|`)", README))
    assert commands() <= told
    assert {word for word in told if word.split()[0] in {name.split()[0] for name in commands()}} == commands()


def test_the_two_commands_are_one_liners_and_ci_runs_the_second() -> None:
    lines = [line for line in README.splitlines() if line.startswith("python3 -m venv .venv &&")]
    assert len(lines) == 2
    assert "'.[durable]' ||" in lines[0]
    assert lines[0].endswith("fhiro2 demo --once")
    assert lines[1].endswith("-m pytest")
    assert "grep -m1 -E '^python3 -m venv .*pytest' README.md" in (ROOT / ".ci" / "run").read_text(encoding="utf-8")


def test_every_module_of_the_way_is_named_in_developers() -> None:
    for entry in (ROOT / "fhiro2").iterdir():
        name = entry.stem
        if entry.suffix not in (".py", "") or name.startswith("_") or name == "packaged_data":
            continue
        assert re.search(rf"\b{name}\b", DEVELOPERS), f"DEVELOPERS.md does not name {entry.name}"


def test_every_file_named_in_developers_exists() -> None:
    for name in re.findall(r"`((?:fhiro2|tests|fixtures|rules|\.ci)/[\w./-]+)`", DEVELOPERS):
        assert (ROOT / name).exists(), name
    for name in re.findall(r"`(test_\w+\.py)`", DEVELOPERS):
        assert (ROOT / "tests" / name).exists(), name


def test_every_caution_reason_and_why_has_its_words() -> None:
    assert set(CAUTION_TEXT) == set(Caution)
    assert set(WHY_TEXT) == set(Why) - {Why.KNOWN}
    assert all(text and not text.endswith(".") for text in (*CAUTION_TEXT.values(), *WHY_TEXT.values()))


@pytest.mark.parametrize("words", [*Caution, *Why, *Reason], ids=repr)
def test_every_word_of_the_vocabulary_is_used(words: Caution | Why | Reason) -> None:
    name = f"{type(words).__name__}.{words.name}"
    uses = sum(text.count(name) for file, text in SOURCES.items() if file.name not in ("model.py", "errors.py"))
    assert uses, f"{name} is declared and never used"


def test_every_derived_value_is_computed_by_one_table() -> None:
    from fhiro2.assess import assess
    from tests.test_way import pack

    (timelines,) = ward_timelines()
    outcome, _ = assess(timelines, Settings(), pack())
    found = [code for table in outcome.tables.values() for code in codes_of(table)]
    assert sorted(found) == sorted(row.code for row in DERIVED)


def test_every_formula_has_outside_evidence() -> None:
    """Each derived value's formula has a check value that was published or is common practice, or a definition."""
    formula = {
        "oxygen-content": "o2_content", "content-difference": "o2_content", "oxygen-delivery": "do2",
        "oxygen-delivery-index": "index_by_surface", "reverse-fick": "vo2_fick",
        "reverse-fick-index": "index_by_surface",
        "extraction-ratio": "o2er", "extraction-excess": "extraction_excess",
        "saturation-gap": "saturation_gap", "alveolar-air": "pao2_alveolar_full",
        "alveolar-arterial-gradient": "aa_gradient", "pf-ratio": "pf_ratio", "sf-ratio": "sf_ratio",
        "dissociation-tanh-1990": "p50_siggaard_andersen_1990",
        "cardiac-index": "index_by_surface",
        "body-surface-du-bois": "bsa_dubois",
    }  # fmt: skip
    with (ROOT / "fixtures" / "reference" / "check_values.csv").open(encoding="utf-8") as stream:
        checked = {row["formula"] for row in csv.DictReader(stream) if row["kind"] != "computed"}
    for row in DERIVED:
        assert formula[row.formula.rpartition("/")[0]] in checked, row.code


def test_the_method_of_the_extraction_excess_says_what_is_ordinary() -> None:
    told = DERIVED_BY_CODE["oxygen-extraction-excess"].source
    for constant in (ORDINARY_CONSUMPTION_INDEX, ORDINARY_CARDIAC_INDEX):
        assert f"{constant.value:g} {constant.unit}" in told


def test_inputs_and_bases_are_sound() -> None:
    assert all(row.quantity in MEASURED_BY_NAME for row in INPUTS)
    assert BASES[0] == ""
    assert len({row.name for row in INPUTS}) == len(INPUTS)


@pytest.mark.parametrize("model", [Settings, Server, Windows])
def test_every_setting_says_what_it_is(model: type[Settings | Server | Windows]) -> None:
    for name, field in model.model_fields.items():
        assert name == "windows" or field.description, name


def test_the_mapping_of_the_ward_uses_the_fields_that_exist() -> None:
    text = (ROOT / "fixtures" / "ward" / "mapping.yaml").read_text(encoding="utf-8")
    keys = set(re.findall(r"^(\w+):", text, re.MULTILINE))
    assert keys <= set(Mapping.model_fields)


def test_the_loinc_notice_stands_where_codes_are_shown() -> None:
    assert "Regenstrief" in README
    assert LOINC_NOTICE in (ROOT / "fhiro2" / "codes.csv").read_text(encoding="utf-8")

"""The shipped rules: every case, each limit matters to a case, what texts may say; and the flags of the ward."""

from __future__ import annotations

import re
from collections import Counter
from datetime import date
from functools import cache
from pathlib import Path

import pytest

from fhiro2 import packaged
from fhiro2.assess import assess
from fhiro2.errors import StopError
from fhiro2.flags import Flag
from fhiro2.judge import Rule, check_pack, read_pack
from fhiro2.judge.cases import failure
from fhiro2.judge.rulefile import Case
from fhiro2.model import MICROSECONDS
from fhiro2.packaged import rules_folder, ward_folder
from fhiro2.settings import Settings
from fhiro2.ward.scenario import BEDS, HOURS, START
from tests.bench_judge import USUAL
from tests.test_way import ward_timelines

TODAY = date(2026, 12, 1)
PACK = read_pack(rules_folder())
FILES = dict(zip([rule.id for rule in PACK.rules], PACK.files, strict=True))
CASES = [pytest.param(rule, case, id=f"{rule.id}: {case.name}") for rule in PACK.rules for case in rule.cases]
ADVICE = re.compile(
    r"\b(give|administer|transfuse|start|stop|increase|decrease|titrate|intubate|prescribe|dose|should|must|consider)\b",
    re.IGNORECASE,
)
LIMIT = re.compile(r"\b(below|above|at_most|at_least): (-?[0-9.]+)")
OPPOSITE = {"below": "above", "above": "below", "at_most": "at_least", "at_least": "at_most"}


@pytest.mark.parametrize(("rule", "case"), CASES)
def test_case(rule: Rule, case: Case) -> None:
    assert failure(rule, case) == ""


def limits() -> list[tuple[str, int, int]]:
    """Rule, start and end of every limit in the conditions of the shipped files."""
    found = []
    for name, file in FILES.items():
        text = (rules_folder() / file).read_text(encoding="utf-8")
        found += [(name, *match.span()) for match in LIMIT.finditer(text, 0, text.index("\nmessage:"))]
    return found


@pytest.mark.parametrize(("name", "begin", "end"), limits())
@pytest.mark.parametrize("fault", ["operator turned", "a tenth higher", "a tenth lower"])
def test_every_limit_matters_to_a_case(name: str, begin: int, end: int, fault: str, tmp_path: Path) -> None:
    text = (rules_folder() / FILES[name]).read_text(encoding="utf-8")
    match = LIMIT.fullmatch(text, begin, end)
    assert match is not None
    word, number = match[1], float(match[2])
    wrong = {
        "operator turned": f"{OPPOSITE[word]}: {number:g}",
        "a tenth higher": f"{word}: {number * 1.1:g}",
        "a tenth lower": f"{word}: {number * 0.9:g}",
    }[fault]
    (tmp_path / f"{name}.yaml").write_text(text[:begin] + wrong + text[end:], encoding="utf-8")
    assert check_pack(tmp_path, TODAY).failed


@pytest.mark.parametrize("rule", PACK.rules, ids=lambda rule: rule.id)
def test_texts_advise_no_treatment_and_defer_to_local_policy(rule: Rule) -> None:
    for text in (rule.title, rule.intent, rule.message, *rule.cautions):
        assert not ADVICE.search(text), text
    assert "not an alarm; local policy and licensed practice decide" in rule.cautions
    assert any(source.kind in ("published", "common practice") for source in rule.sources)


def test_checking_the_shipped_rules() -> None:
    report = check_pack(rules_folder(), TODAY)
    assert (report.failed, report.warned) == (False, False)
    assert report.lines()[:-1] == [
        f"{rule.id}/{rule.version} (live): {len(rule.cases)} of {len(rule.cases)} cases passed" for rule in PACK.rules
    ]
    assert report.lines()[-1] == f"pack {PACK.hash[:12]}: all cases passed"


def test_a_failing_case_says_where_with_what_expected_and_got(tmp_path: Path) -> None:
    text = (rules_folder() / FILES["low-arterial-oxygen"]).read_text(encoding="utf-8")
    (tmp_path / "gas").mkdir()
    (tmp_path / "gas" / "low-arterial-oxygen.yaml").write_text(text.replace('"PaO2 7.00 kPa,', '"PaO2 7.01 kPa,'))
    report = check_pack(tmp_path, TODAY)
    (line,) = report.failures
    assert line == (
        "gas/low-arterial-oxygen.yaml: rule low-arterial-oxygen, case 'low pressure': "
        "expected flag 'PaO2 7.01 kPa, measured arterial saturation 86.0 % at 2000-01-01 00:00 UTC', "
        "got flag 'PaO2 7.00 kPa, measured arterial saturation 86.0 % at 2000-01-01 00:00 UTC'; "
        "values used: age 60; +0 min pao2 7 kPa (u 0.3), sao2 86 % (u 1)"
    )
    assert report.failed
    assert line in report.lines()
    assert "1 cases FAILED" in report.lines()[-1]


def test_a_failing_case_says_what_was_missing(tmp_path: Path) -> None:
    text = (rules_folder() / FILES["low-arterial-oxygen"]).read_text(encoding="utf-8")
    marker = "saturation not measured\n"
    begin = text.index("expect: unknown", text.index(marker))
    wrong = text[:begin] + "expect: none" + text[begin + len("expect: unknown") :]
    (tmp_path / "low-arterial-oxygen.yaml").write_text(wrong)
    (line,) = check_pack(tmp_path, TODAY).failures
    assert "expected none, got unknown (not known: sao2)" in line


def test_a_rule_due_for_review_is_a_warning() -> None:
    due = PACK.rules[0].review_by
    report = check_pack(rules_folder(), due)
    assert (report.failed, report.warned) == (False, True)
    assert any(f"was to be reviewed by {due}" in line for line in report.lines())


def test_shipped_folders(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The package's own data goes first, else what lies beside it, else an error that says so."""
    package = tmp_path / "fhiro2"
    monkeypatch.setattr(packaged, "_PACKAGE", package)
    for find in (rules_folder, ward_folder):
        with pytest.raises(StopError, match="install the package again"):
            find()
    (tmp_path / "rules").mkdir()
    (tmp_path / "fixtures" / "ward").mkdir(parents=True)
    assert (rules_folder(), ward_folder()) == (tmp_path / "rules", tmp_path / "fixtures" / "ward")
    inside = package / "packaged_data"
    (inside / "rules").mkdir(parents=True)
    (inside / "ward").mkdir()
    assert (rules_folder(), ward_folder()) == (inside / "rules", inside / "ward")


# --- what the ward's courses must raise (fixtures/ward/README.md and the scenario's text) ------------------------


@cache
def ward_flags() -> dict[tuple[str, int], list[Flag]]:
    """The flags of the ward by rule and bed."""
    found: dict[tuple[str, int], list[Flag]] = {}
    for timelines in ward_timelines():
        for flag in assess(timelines, Settings(), PACK)[0].flags:
            found.setdefault((flag.rule, int(flag.patient.rpartition("/w9-p")[2])), []).append(flag)
    return found


def hour(microseconds: int) -> float:
    return (microseconds / MICROSECONDS - START.timestamp()) / 3600


def test_the_bed_with_carbon_monoxide_is_raised_on_arrival_and_cleared() -> None:
    """COHb 31 % on arrival, falling to 4 % by hour 9.4; the rule's own limits are 10 and 8 %."""
    (flag,) = ward_flags()["raised-carboxyhaemoglobin", 1]
    (evidence,) = flag.turns[0].evidence
    assert 0.28 <= evidence.value <= 0.32
    assert hour(flag.raised) < 1
    assert flag.cleared is not None
    assert 3.4 < hour(flag.cleared) < 10


def test_the_bed_with_low_output_is_raised_by_its_extraction() -> None:
    """Hb 11.6, 97.4 and 51 %, COHb 1.3, MetHb 0.8 %, 98 and 30.3 mmHg: by definition (15.67 - 8.14) / 15.67 = 0.48."""
    flag = ward_flags()["high-extraction-flow-or-demand", 3][0]
    evidence = {one.name: one.value for one in flag.turns[0].evidence}
    assert evidence["oxygen-extraction-ratio"] == pytest.approx(0.48, abs=0.04)
    assert evidence["hb"] == pytest.approx(11.6, abs=0.6)
    assert hour(flag.raised) < 28


def test_an_extraction_that_low_haemoglobin_explains_is_not_called_flow_or_demand() -> None:
    """Bed 2 bleeds to 6.5 g/dL: its extraction is above 0.40 only while its haemoglobin is below 100 g/L."""
    assert ("low-haemoglobin-raised-extraction", 2) in ward_flags()
    assert ("high-extraction-flow-or-demand", 2) not in ward_flags()


def test_the_quiet_beds_raise_nothing_and_the_majority_little() -> None:
    """Beds 7 to 12 are quiet; the seven beds of twelve with the fewest flags have at most 0.3 a patient-day."""
    count = Counter({bed.number: 0 for bed in BEDS})
    for (_, bed), flags in ward_flags().items():
        count[bed] += len(flags)
    assert {bed: count[bed] for bed in range(7, 13)} == dict.fromkeys(range(7, 13), 0)
    majority = sorted(count.values())[: len(BEDS) // 2 + 1]
    assert sum(majority) <= 0.3 * len(majority) * HOURS / 24


def test_the_benchmark_has_a_column_for_every_quantity_of_the_pack() -> None:
    asked = {name for rule in read_pack(rules_folder()).rules for name in rule.units}
    assert asked <= set(USUAL)

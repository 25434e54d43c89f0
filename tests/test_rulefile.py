"""Rule files: one small fault for each way to be wrong, each named with its line and column."""

from __future__ import annotations

from datetime import date
from pathlib import Path

import pytest

from fhiro2.errors import StopError
from fhiro2.judge import check_pack
from fhiro2.judge.condition import AllOf, AnyOf, Comparison, Not, NotKnown, Operator, SomeOf
from fhiro2.judge.rulefile import read_pack, read_rule

RULE = """\
id: low-pressure
version: 1
title: Low pressure
axis: gas
severity: warning
state: live
owner: a team
review_by: 2027-12-01
intent: a test
at: arterial
scope: {age_years: {least: 18}}
raise:
  any:
    - {quantity: pao2, below: 8, unit: kPa}
    - not: {quantity: hb, at_least: 70, unit: g/L}
clear:
  all:
    - {quantity: pao2, at_least: 8.7, unit: kPa}
message: "PaO2 {pao2} at {time}"
cautions: [not an alarm]
sources: [{text: a convention, year: 2017, kind: common practice}]
cases:
  - name: low
    given: [{after_minutes: 0, pao2: {value: 7, unit: kPa, uncertainty: 0.3}, age_years: 60}]
    expect: flag
    message: "PaO2 7.00 kPa at 2000-01-01 00:00 UTC"
  - name: high
    given: [{after_minutes: 0, pao2: {value: 9, unit: kPa, uncertainty: 0.3}, age_years: 61}]
    expect: none
  - name: missing
    given: [{after_minutes: 0, age_years: 62}]
    expect: unknown
"""

GROUP = "    - not: {quantity: hb, at_least: 70, unit: g/L}\n"
SOME = "some: {{least: {}, of: [{{quantity: pao2, below: 8, unit: kPa}}, {{unknown: sao2}}]}}"
FAULTS: dict[str, tuple[str, str, str, str]] = {
    # what is replaced, by what, where the fault is then found, what is said of it
    "unknown key": ("title:", "titel: x\ntitle:", "x\ntitle", "Extra inputs"),
    "missing key": ("axis: gas\n", "", "id:", "axis: Field required"),
    "empty key": ("owner: a team", "owner:", "\nreview_by", "valid string"),
    "duplicate key": ("version: 1", "version: 1\nversion: 2", "version: 2", "given twice"),
    "duplicate limit": ("below: 8,", "below: 8, below: 9,", "below: 9", "given twice"),
    "anchor": ("owner: a team", "owner: &team a team", "&team", "anchors"),
    "alias": ("owner: a team", "owner: *team", "*team", "anchors"),
    "tag": ("version: 1", "version: !!int 1", "!!int", "tags"),
    "merge key": ("scope: {", "scope: {<<: {}, ", "<<", "plain words"),
    "tab": ("    - {quantity: pao2, below", "\t- {quantity: pao2, below", "\t-", "a tab"),
    "NUL": ("a team", "a\0team", "\0", "NUL"),
    "not YAML": ("cautions: [not an alarm]", "cautions: [not an alarm", ": [{text", "expected"),
    "text for a limit": ("below: 8,", 'below: "8",', '"8"', "valid number"),
    "octal-looking limit": ("below: 8,", "below: 010,", "010", "valid number"),
    "minutes-looking limit": ("below: 8,", "below: 12:30,", "12:30", "valid number"),
    "boolean for a limit": ("below: 8,", "below: true,", "true", "valid number"),
    "infinite limit": ("below: 8,", "below: 1e999,", "1e999", "valid number"),
    "no limit": ("below: 8, ", "", "{quantity: pao2, unit", "comparison needs"),
    "two limits": ("below: 8,", "below: 8, above: 9,", "{quantity: pao2, below", "comparison needs"),
    "empty limit": ("below: 8,", "below: ,", "{quantity: pao2, below", "without a value"),
    "unknown operator": ("below: 8,", "under: 8,", "8, unit", "Extra inputs"),
    "no unit": ("below: 8, unit: kPa", "below: 8", "{quantity: pao2, below", "comparison needs"),
    "wrong dimension": ("below: 8, unit: kPa", "below: 8, unit: g/L", "{quantity: pao2, below", "unit of pao2"),
    "unknown unit": ("below: 8, unit: kPa", "below: 8, unit: kpa", "{quantity: pao2, below", "unit of pao2"),
    "unknown quantity": ("quantity: hb", "quantity: hbb", "{quantity: hbb", "write one of hb"),
    "certainty without a comparison": (
        "{quantity: pao2, below: 8, unit: kPa}",
        "{quantity: pao2, unit: kPa, certainty: 0.95}",
        "{quantity: pao2, unit",
        "may have a certainty",
    ),
    "certainty of no more than even": ("below: 8,", "below: 8, certainty: 0.5,", "0.5, unit", "greater than 0.5"),
    "certainty of a percentage": ("below: 8,", "below: 8, certainty: 95,", "95, unit", "less than 1"),
    "certainty that nothing has": ("below: 8,", "below: 8, certainty: 1,", "1, unit", "less than 1"),
    "certainty of a group": (GROUP, f"{GROUP}  certainty: 0.9\n", "any:\n", "stands alone"),
    "some without a number": (
        "{quantity: pao2, below: 8, unit: kPa}",
        "some: {of: [{quantity: pao2, below: 8, unit: kPa}]}",
        "{of:",
        "least: Field required",
    ),
    "none of some": ("{quantity: pao2, below: 8, unit: kPa}", SOME.format(0), "0, of", "write a number from 1 to 2"),
    "three of two": ("{quantity: pao2, below: 8, unit: kPa}", SOME.format(3), "3, of", "write a number from 1 to 2"),
    "fault within some": (
        "{quantity: pao2, below: 8, unit: kPa}",
        SOME.format(2).replace("unknown: sao2", "unknown: sao3"),
        "{unknown: sao3",
        "write one of sao2",
    ),
    "unknown of no quantity": ("quantity: hb, at_least: 70, unit: g/L", "unknown: hbb", "{unknown", "write one of hb"),
    "unknown beside a limit": ("quantity: hb,", "unknown: hb, quantity: hb,", "{unknown", "stands alone"),
    "always true": (
        "not: {quantity: hb, at_least: 70, unit: g/L}",
        "{quantity: pao2, at_least: 8, unit: kPa}",
        "any:\n",
        "true whatever",
    ),
    "never true": ("at_least: 8.7, unit: kPa", "at_least: 870, unit: kPa", "all:\n", "never true"),
    "true where nothing is known": (
        "not: {quantity: hb, at_least: 70, unit: g/L}",
        "unknown: hb",
        "any:\n",
        "no evidence",
    ),
    "group beside a limit": ("  any:\n", "  quantity: pao2\n  any:\n", "quantity: pao2\n", "stands alone"),
    "empty group": (
        "  all:\n    - {quantity: pao2, at_least: 8.7, unit: kPa}",
        "  all: []",
        "[]\nmessage",
        "empty list",
    ),
    "no scope": ("scope: {age_years: {least: 18}}", "scope: {}", "{}", "Field required"),
    "unknown anchor kind": ("at: arterial", "at: capillary", "capillary", "Input should be"),
    "unknown severity": ("severity: warning", "severity: red", "red", "Input should be"),
    "no date": ("2027-12-01", "next year", "next year", "isoformat"),
    "no caution": ("cautions: [not an alarm]", "cautions: []", "[]\nsources", "empty list"),
    "no source": (
        "sources: [{text: a convention, year: 2017, kind: common practice}]",
        "sources: []",
        "[]\ncases",
        "empty",
    ),
    "name of another file": ("id: low-pressure", "id: other", "other", "file's name"),
    "unknown name in the message": ("{pao2} at {time}", "{sao2}", '"PaO2 {sao2', "not one of hb, pao2, time"),
    "format in the message": ("{pao2} at", "{pao2:.1f} at", '"PaO2 {pao2:', "not plain"),
    "attribute in the message": ("{pao2} at", "{pao2.real} at", '"PaO2 {pao2.', "not one of"),
    "stray brace": ("{pao2} at", "{pao2 at", '"PaO2 {pao2 at', "twice"),
    "single brace": ("{pao2} at {time}", "{pao2} }", '"PaO2 {pao2} }', "twice"),
    "no case": (RULE[RULE.index("cases:") :], "cases: []\n", "[]\n", "empty list"),
    "no case that is unknown": ("expect: unknown", "expect: none", "- name: low", "no case expects 'unknown'"),
    "no case without a flag": ("expect: none", "expect: unknown", "- name: low", "no case expects 'none'"),
    "flag case without its message": (
        '    message: "PaO2 7.00 kPa at 2000-01-01 00:00 UTC"\n',
        "",
        "name: low\n",
        "only if",
    ),
    "two cases of one name": (
        "name: high",
        "name: low",
        "low\n    given: [{after_minutes: 0, pao2: {value: 9",
        "name",
    ),
    "value not asked for": (
        "9, unit: kPa, uncertainty: 0.3}",
        "9, unit: kPa, uncertainty: 0.3}, sao2: {value: 90, unit: '%', uncertainty: 1}",
        "{value: 90",
        "only for pao2, hb",
    ),
    "value in a foreign unit": ("value: 9, unit: kPa", "value: 9, unit: g/L", "{value: 9", "unit of pao2"),
    "value without uncertainty": (
        "value: 9, unit: kPa, uncertainty: 0.3",
        "value: 9, unit: kPa",
        "{value: 9",
        "required",
    ),
    "negative uncertainty": (
        "kPa, uncertainty: 0.3}, age_years: 61",
        "kPa, uncertainty: -1}, age_years: 61",
        "-1}, age",
        "than or equal",
    ),
    "moments out of order": (
        "given: [{after_minutes: 0, age_years: 62}]",
        "given: [{after_minutes: 5, age_years: 62}, {after_minutes: 5, age_years: 62}]",
        "[{after_minutes: 5",
        "follow",
    ),
    "ages that differ": (
        "given: [{after_minutes: 0, age_years: 62}]",
        "given: [{after_minutes: 0, age_years: 62}, {after_minutes: 5}]",
        "[{after_minutes: 0, age_years: 62",
        "same age_years",
    ),
}


def written(folder: Path, text: str, name: str = "low-pressure.yaml") -> Path:
    path = folder / name
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_bytes(text.encode())
    return path


def test_a_sound_rule_is_read(tmp_path: Path) -> None:
    """60.0 mm[Hg] is 8 kPa, 65.3 is 8.7 kPa (0.133322, UCUM) and 7.0 g/dL is 70 g/L."""
    rule = read_rule(written(tmp_path, RULE))
    low, haemoglobin = Comparison("pao2", Operator.BELOW, 60.0), Comparison("hb", Operator.AT_LEAST, 7.0)
    assert rule.raises == AnyOf((low, Not(haemoglobin)))
    assert rule.clears == AllOf((Comparison("pao2", Operator.AT_LEAST, 65.3),))
    assert rule.units == {"pao2": "kPa", "hb": "g/L"}
    assert rule.review_by == date(2027, 12, 1)
    assert [case.expect for case in rule.cases] == ["flag", "none", "unknown"]


@pytest.mark.parametrize("fault", FAULTS)
def test_each_fault_is_named_with_its_place(fault: str, tmp_path: Path) -> None:
    old, new, at, said = FAULTS[fault]
    assert RULE.count(old) == 1
    text = RULE.replace(old, new)
    before = text[: text.index(at)]
    line, column = before.count("\n") + 1, len(before) - before.rfind("\n")
    path = written(tmp_path, text)
    with pytest.raises(StopError) as caught:
        read_pack(tmp_path)
    places = [one for one in str(caught.value).splitlines() if one.startswith(f"{path}:{line}:{column}: ")]
    assert places, f"{caught.value} should be at {line}:{column}"
    assert said in "\n".join(places)


EVERY_FORM = """\
  some:
    least: 2
    of:
      - {quantity: pao2, below: 8, unit: kPa, certainty: 0.95}
      - {quantity: hb, below: 70, unit: g/L}
      - unknown: cardiac-index
"""


def test_some_certainty_and_unknown_are_read(tmp_path: Path) -> None:
    begin, end = RULE.index("  any:"), RULE.index("clear:")
    text = RULE[:begin] + EVERY_FORM + RULE[end:]
    rule = read_rule(written(tmp_path, text))
    certain = Comparison("pao2", Operator.BELOW, 60.0, 0.95)
    low = Comparison("hb", Operator.BELOW, 7.0)
    assert rule.raises == SomeOf(2, (certain, low, NotKnown("cardiac-index")))
    assert rule.units == {"pao2": "kPa", "hb": "g/L", "cardiac-index": "L/min/m2"}
    assert read_pack(tmp_path).hash != read_pack(written(tmp_path / "other", text.replace("0.95", "0.9")).parent).hash


def test_a_quantity_asked_whether_it_is_known_keeps_the_unit_of_its_comparison(tmp_path: Path) -> None:
    low = "    - {quantity: pao2, below"
    text = RULE.replace(low, "    - all: [{unknown: pao2}, {quantity: hb, below: 9, unit: g/dL}]\n" + low)
    assert read_rule(written(tmp_path, text)).units == {"hb": "g/dL", "pao2": "kPa"}


def test_cases_give_and_leave_out_what_a_rule_asks_whether_it_is_known(tmp_path: Path) -> None:
    """The flag needs the index to be missing; with an index given, or a pressure within its doubt, there is none."""
    begin, end = RULE.index("  any:"), RULE.index("clear:")
    raising = "  all:\n    - {quantity: pao2, below: 8, unit: kPa, certainty: 0.95}\n    - unknown: cardiac-index\n"
    index = "cardiac-index: {value: 2500, unit: mL/min/m2, uncertainty: 300}"
    more = f"""\
  - name: index known
    given: [{{after_minutes: 0, {index}, pao2: {{value: 7, unit: kPa, uncertainty: 0.3}}, age_years: 60}}]
    expect: none
  - name: within its doubt
    given: [{{after_minutes: 0, pao2: {{value: 7.7, unit: kPa, uncertainty: 0.3}}, age_years: 60}}]
    expect: none
"""
    path = written(tmp_path, RULE[:begin] + raising + RULE[end:] + more)
    assert check_pack(tmp_path, date(2026, 12, 1)).failures == ()
    path.write_text(path.read_text().replace(", cardiac-index: {value: 2500, unit: mL/min/m2, uncertainty: 300}", ""))
    (failed,) = check_pack(tmp_path, date(2026, 12, 1)).failures
    assert "index known" in failed


def test_a_fault_within_some_is_not_told_of_its_number_too(tmp_path: Path) -> None:
    old, new, _, said = FAULTS["fault within some"]
    with pytest.raises(StopError) as caught:
        read_rule(written(tmp_path, RULE.replace(old, new)))
    (line,) = str(caught.value).splitlines()
    assert said in line


def test_byte_faults(tmp_path: Path) -> None:
    for content, said in (
        (b"\xef\xbb\xbf" + RULE.encode(), "byte-order mark"),
        (RULE.encode() + b"# \xff\n", "UTF-8"),
        (RULE.encode() + b"# " + b"x" * 200_000, "larger than"),
        (b"", "empty"),
        (b"a: " + b"[" * 40 + b"]" * 40, "deeper"),
    ):
        (tmp_path / "low-pressure.yaml").write_bytes(content)
        with pytest.raises(StopError, match=said):
            read_pack(tmp_path)


def test_all_mistakes_of_a_pack_are_told_at_once(tmp_path: Path) -> None:
    written(tmp_path, RULE.replace("kPa", "g/L"), "gas/low-pressure.yaml")
    written(tmp_path, RULE.replace("version: 1", "version: one"), "carrier/low-pressure.yaml")
    written(tmp_path, RULE, "flow/low-pressure.yaml")
    written(tmp_path, RULE, "use/low-pressure.yaml")
    written(tmp_path, RULE, "use/low-pressure.yml")
    with pytest.raises(StopError) as caught:
        read_pack(tmp_path)
    text = str(caught.value)
    assert text.count("unit of pao2") == 2
    assert "carrier/low-pressure.yaml:2:10: version" in text
    assert "is also in flow/low-pressure.yaml" in text
    assert "end the name in .yaml" in text


def test_nothing_found_is_an_error(tmp_path: Path) -> None:
    with pytest.raises(StopError, match="holds no rule"):
        read_pack(tmp_path)
    with pytest.raises(StopError, match="not a folder"):
        read_pack(tmp_path / "rulse")


def test_the_hash_follows_what_is_said_not_how(tmp_path: Path) -> None:
    def hashed(folder: str, text: str) -> str:
        return read_pack(written(tmp_path / folder, text).parent).hash

    first = hashed("a", RULE)
    assert first == hashed("b", "# a remark\n" + RULE.replace("below: 8,", "below: 8.0,"))
    for number, (old, new) in enumerate((("below: 8,", "below: 8.1,"), ("age_years: 62", "age_years: 63"))):
        assert first != hashed(f"c{number}", RULE.replace(old, new))


def test_a_pack_names_files_within_its_folder_only(tmp_path: Path) -> None:
    written(tmp_path, RULE, "gas/low-pressure.yaml")
    assert read_pack(tmp_path).files == ("gas/low-pressure.yaml",)

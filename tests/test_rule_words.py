"""A rule told in words: every comparison with its unit, every caution and source, nested groups indented."""

from pathlib import Path

import pytest

from fhiro2.catalogue import title_of
from fhiro2.judge import read_pack
from fhiro2.judge.clause import Clause
from fhiro2.judge.words import _clause, told
from fhiro2.packaged import rules_folder


@pytest.mark.parametrize("rule", read_pack(rules_folder()).rules, ids=lambda rule: rule.id)
def test_everything_a_reader_needs_is_told(rule) -> None:  # type: ignore[no-untyped-def]
    text = "\n".join(told(rule))
    for caution in rule.cautions:
        assert f"Caution: {caution}" in text
    for source in rule.sources:
        assert source.text in text
    assert rule.intent in text
    assert rule.owner in text
    for quantity, unit in (*rule.raise_when.units(), *rule.clear_when.units()):
        told_so = f"{title_of(quantity)} not known" in text
        assert unit.replace("mm[Hg]", "mmHg") in text or unit == "1" or told_so, quantity


def test_nested_groups_are_indented() -> None:
    clause = Clause.model_validate(
        {
            "all": (
                {"quantity": "hb", "below": 70, "unit": "g/L"},
                {"not": {"any": ({"quantity": "pao2", "at_least": 60, "unit": "mm[Hg]"},)}},
            )
        }
    )
    assert list(_clause(clause)) == [
        "all of these hold:",
        "  haemoglobin below 70 g/L",
        "  this does not hold:",
        "    any of these holds:",
        "      PaO2 at least 60 mmHg",
    ]


def test_some_certainty_and_unknown_are_told() -> None:
    clause = Clause.model_validate(
        {
            "some": {
                "least": 2,
                "of": (
                    {"quantity": "hb", "below": 70, "unit": "g/L", "certainty": 0.975},
                    {"quantity": "lactate", "above": 4, "unit": "mmol/L"},
                    {"unknown": "cardiac-index"},
                ),
            }
        }
    )
    assert list(_clause(clause)) == [
        "at least 2 of these 3 hold:",
        "  haemoglobin below 70 g/L, with a probability of at least 97.5 %",
        "  lactate above 4 mmol/L",
        "  Cardiac index not known",
    ]


def test_a_limit_of_zero_is_told() -> None:
    clause = Clause.model_validate({"quantity": "alveolar-arterial-gradient", "below": 0, "unit": "mm[Hg]"})
    assert list(_clause(clause)) == ["Alveolar-arterial oxygen gradient below 0 mmHg"]


def test_the_shipped_rules_lie_where_they_are_told_from() -> None:
    assert {path.stem for path in Path(rules_folder()).rglob("*.yaml")} == {
        rule.id for rule in read_pack(rules_folder()).rules
    }

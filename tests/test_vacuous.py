"""Conditions that tell nothing apart: by name, and against every value that a quantity can be shown with."""

from __future__ import annotations

from itertools import product

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fhiro2.assess import assess
from fhiro2.catalogue import DERIVED, INPUTS, decimals_of
from fhiro2.judge import read_pack
from fhiro2.judge.condition import (
    TRUE,
    AllOf,
    AnyOf,
    Comparison,
    Condition,
    Not,
    NotKnown,
    Operator,
    SomeOf,
    evaluate,
    leaves,
)
from fhiro2.judge.vacuous import MOST_COMBINATIONS, _plausible, objections
from fhiro2.packaged import rules_folder
from fhiro2.settings import Settings
from tests.test_condition import column
from tests.test_way import pack, ward_timelines

NAN = float("nan")
BELOW, ABOVE, AT_MOST, AT_LEAST = Operator.BELOW, Operator.ABOVE, Operator.AT_MOST, Operator.AT_LEAST
LOW = Comparison("pao2", BELOW, 60.0)
SURELY_LOW = Comparison("pao2", BELOW, 60.0, 0.95)
GRADIENT, DIFFERENCE, EXTRACTION = (
    "alveolar-arterial-gradient", "oxygen-content-difference", "oxygen-extraction-ratio",
)  # fmt: skip


def said(condition: Condition, *, finds: bool = True) -> str:
    return " ".join(objections(condition, finds=finds))


ALWAYS: dict[str, Condition] = {
    "one or the other": AnyOf((LOW, Comparison("pao2", AT_LEAST, 60.0))),
    "haemoglobin above less than nothing": Comparison("hb", ABOVE, -0.1),
    "saturation below what there is": Comparison("sao2", BELOW, 2.0),
    "not what never is": Not(Comparison("co", ABOVE, 100.0)),
    "known and one or the other, or not known": AnyOf((LOW, Comparison("pao2", AT_LEAST, 60.0), NotKnown("pao2"))),
    "known or not": AnyOf((NotKnown("hb"), Not(NotKnown("hb")))),
    "an extraction of no less than nothing": Comparison(EXTRACTION, AT_LEAST, 0.0),
    "one of two that exclude each other's opposite": SomeOf(1, (Not(LOW), Comparison("pao2", AT_MOST, 60.0))),
}
NEVER: dict[str, Condition] = {
    "below less and above more": AllOf((Comparison("hb", BELOW, 6.0), Comparison("hb", ABOVE, 7.0))),
    "saturation above what there is": Comparison("sao2", ABOVE, 2.0),
    "between two neighbouring decimals": AllOf((Comparison("lactate", ABOVE, 2.0), Comparison("lactate", BELOW, 2.1))),
    "two of two that exclude each other": SomeOf(2, (LOW, Comparison("pao2", ABOVE, 60.0))),
    "not known and low": AllOf((NotKnown("pao2"), LOW)),
    "surely low and not low": AllOf((SURELY_LOW, Not(LOW))),
    "surely lower than less, not surely lower than more": AllOf(
        (SURELY_LOW, Not(Comparison("pao2", BELOW, 70.0, 0.95)))
    ),
    "a negative extraction": Comparison(EXTRACTION, BELOW, 0.0),
    "surely on the end of what there is": Comparison("pao2", AT_LEAST, 800.0, 0.95),
}
SOUND: dict[str, Condition] = {
    "a band": AllOf((Comparison("hb", ABOVE, 6.0), Comparison("hb", BELOW, 7.0))),
    "the one decimal between": AllOf((Comparison("lactate", ABOVE, 2.0), Comparison("lactate", BELOW, 2.2))),
    "exactly": AllOf((Comparison("hb", AT_LEAST, 7.0), Comparison("hb", AT_MOST, 7.0))),
    "on the end of what there is": Comparison("pao2", AT_LEAST, 800.0),
    "two quantities": AnyOf((LOW, Comparison("sao2", AT_LEAST, 0.9))),
    "two of three": SomeOf(2, (LOW, Comparison("sao2", BELOW, 0.9), Comparison("hb", BELOW, 7.0))),
    "not known beside a value": AllOf((NotKnown("cardiac-index"), Comparison(EXTRACTION, ABOVE, 0.4))),
    "not known beside anything known": AllOf((NotKnown("fio2"), Not(NotKnown("pao2")))),
    "surely": SURELY_LOW,
    "low, but not surely": AllOf((LOW, Not(SURELY_LOW))),
    "surely low, or not low": AnyOf((SURELY_LOW, Not(LOW))),
    "surely, but not quite surely": AllOf((SURELY_LOW, Not(Comparison("pao2", BELOW, 60.0, 0.99)))),
    "surely below more, not surely below less": AllOf(
        (LOW, Comparison("pao2", BELOW, 70.0, 0.95), Not(SURELY_LOW)),
    ),
    "a negative gradient": Comparison(GRADIENT, BELOW, -5.0),
    "a negative difference": Comparison(DIFFERENCE, BELOW, 0.0),
}  # fmt: skip


@pytest.mark.parametrize("name", ALWAYS)
def test_always_true(name: str) -> None:
    assert said(ALWAYS[name]).startswith("true whatever the values are; change")


@pytest.mark.parametrize("name", NEVER)
def test_never_true(name: str) -> None:
    assert said(NEVER[name]).startswith("never true, whatever plausible values there are; change")


@pytest.mark.parametrize("name", SOUND)
def test_sound(name: str) -> None:
    assert said(SOUND[name]) == ""


@pytest.mark.parametrize("rule", read_pack(rules_folder()).rules, ids=lambda rule: rule.id)
def test_the_shipped_rules_are_sound(rule) -> None:  # type: ignore[no-untyped-def]
    assert (said(rule.raises), said(rule.clears)) == ("", "")


def test_what_finds_needs_a_value() -> None:
    """What is true where nothing is known can clear, but a flag would have no evidence."""
    for condition in (NotKnown("hb"), AnyOf((LOW, NotKnown("pao2"))), AllOf((NotKnown("hb"), NotKnown("pao2")))):
        assert "no evidence; ask" in said(condition)
        assert said(condition, finds=False) == ""


def test_too_many_combinations_are_refused() -> None:
    """Ten inputs with one limit each have 3^10 = 59049 combinations; one more limit for two of them makes 164025."""
    one_each = [Comparison(row.name, BELOW, np.mean(_plausible(row.name, []))) for row in INPUTS[:10]]
    assert said(AnyOf(tuple(one_each))) == ""
    more = [Comparison(one.quantity, ABOVE, one.limit * 0.9) for one in one_each[:2]]
    text = said(AnyOf((*one_each, *more)))
    assert f"164025 combinations, of which {MOST_COMBINATIONS} can be checked; split the rule" in text


# --- against every value that can be shown -------------------------------------------------------------------------

PEEP, INDEX = "peep", "cardiac-index"  # an input from 0 to 40 cm[H2O] and a derived value, each with one decimal
SHOWN = {PEEP: np.arange(0, 401) / 10, INDEX: np.arange(0, 61) / 10}
LEAF = st.one_of(
    st.builds(Comparison, st.just(PEEP), st.sampled_from(Operator), st.sampled_from([-1.0, 0.0, 9.9, 10, 10.1, 40])),
    st.builds(Comparison, st.just(INDEX), st.sampled_from(Operator), st.sampled_from([0.0, 2.0, 2.2, 5.0])),
    st.sampled_from([NotKnown(PEEP), NotKnown(INDEX)]),
)
GROUP = st.lists(LEAF, min_size=1, max_size=4).map(tuple)
CONDITION = st.one_of(
    GROUP.map(AnyOf), GROUP.map(AllOf), GROUP.map(lambda parts: SomeOf((len(parts) + 1) // 2, parts)),
    st.tuples(GROUP.map(AnyOf), GROUP.map(AllOf).map(Not)).map(AllOf),
    st.tuples(GROUP.map(AnyOf).map(Not), GROUP.map(AllOf)).map(AnyOf),
)  # fmt: skip


@given(CONDITION)
def test_the_stand_ins_say_what_all_values_say(condition: Condition) -> None:
    """By definition: each value that can be shown, and none where it is asked whether there is one."""
    asked = {leaf.quantity for leaf in leaves(condition) if isinstance(leaf, NotKnown)}
    values = [np.r_[SHOWN[name], NAN] if name in asked else SHOWN[name] for name in (PEEP, INDEX)]
    rows = np.array(list(product(*values)))
    true = evaluate(condition, {PEEP: column(rows[:, 0], 0.0), INDEX: column(rows[:, 1], 0.0)}).truth == TRUE
    text = said(condition, finds=False)
    assert text.startswith("true whatever") == bool(true.all())
    assert text.startswith("never true") == (not true.any())


# --- what is plausible ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize("row", INPUTS, ids=lambda row: row.name)
def test_every_input_has_a_plausible_range(row) -> None:  # type: ignore[no-untyped-def]
    low, high = _plausible(row.name, [])
    assert 0 <= low < high
    assert np.round(low, decimals_of(row.name)) < np.round(high, decimals_of(row.name))


def test_only_signed_values_are_ever_negative() -> None:
    """The ward's derived values; what is signed is a difference, by its formula."""
    signed = {row.code for row in DERIVED if row.signed}
    assert signed == {
        "oxygen-content-difference", "oxygen-content-difference-central", "alveolar-oxygen-pressure", GRADIENT,
        "oxygen-extraction-excess", "saturation-gap-measured", "saturation-gap-pulse",
    }  # fmt: skip
    seen = 0
    for timelines in ward_timelines():
        for table in assess(timelines, Settings(), pack())[0].tables.values():
            for row in DERIVED:
                if row.code in table.columns and not row.signed:
                    values = table.columns[row.code].value
                    seen += int((values >= 0).sum())
                    assert not (values < 0).any(), row.code
    assert seen > 100

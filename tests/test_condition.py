"""Conditions: three-valued logic against SQL's, probabilities against another library, bounds and limits."""

from __future__ import annotations

import sqlite3
from itertools import combinations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fhiro2.judge.condition import (
    FALSE,
    TRUE,
    UNKNOWN,
    AllOf,
    AnyOf,
    Comparison,
    Condition,
    Finding,
    Not,
    NotKnown,
    Operator,
    SomeOf,
    _counted,
    comparison,
    evaluate,
    quantities,
)
from fhiro2.model import Column, Why

NAMES = ("pao2", "sao2", "hb")
NAN = float("nan")


def column(value: object, uncertainty: object = 1.0, low: object = None, high: object = None) -> Column:
    """A column that is known where it has a value or a bound."""
    values = np.atleast_1d(np.array(value, dtype=np.float64))
    lows = values if low is None else np.atleast_1d(np.array(low, dtype=np.float64))
    highs = values if high is None else np.atleast_1d(np.array(high, dtype=np.float64))
    known = ~np.isnan(values) | (lows < highs)
    size = len(values)
    return Column(
        values,
        lows,
        highs,
        np.broadcast_to(np.array(uncertainty, dtype=np.float64), size).copy(),
        np.zeros(size, np.uint64),
        np.where(known, Why.KNOWN, Why.NEVER_RECORDED).astype(np.int8),
        np.full(size, -1),
        np.full(size, -1),
    )


def truth_of(condition: Condition, **columns: Column) -> list[int]:
    return evaluate(condition, columns).truth.tolist()


# --- three-valued logic ------------------------------------------------------------------------------------------
# The tables of Kleene 1952, section 64, are those of SQL's AND, OR and NOT with NULL: SQLite is the other computer.


def some_of(parts: list[Condition]) -> st.SearchStrategy[Condition]:
    return st.integers(1, len(parts)).map(lambda least: SomeOf(least, tuple(parts)))


def trees(leaf: st.SearchStrategy[Condition]) -> st.SearchStrategy[Condition]:
    return st.recursive(
        leaf,
        lambda part: st.one_of(
            st.lists(part, min_size=1, max_size=3).map(lambda parts: AnyOf(tuple(parts))),
            st.lists(part, min_size=1, max_size=3).map(lambda parts: AllOf(tuple(parts))),
            st.lists(part, min_size=1, max_size=4).flatmap(some_of),
            part.map(Not),
        ),
        max_leaves=8,
    )


BELOW_ONE = [Comparison(name, Operator.BELOW, 1.0) for name in NAMES]
TREE = trees(st.sampled_from([*BELOW_ONE, *map(NotKnown, NAMES)]))
STATE = {TRUE: 0.0, FALSE: 2.0, UNKNOWN: NAN}
SQL = {TRUE: 1, FALSE: 0, UNKNOWN: None}


def as_sql(condition: Condition) -> str:
    match condition:
        case Comparison():
            return condition.quantity
        case NotKnown():
            return f"({condition.quantity} IS NULL)"
        case Not():
            return f"(NOT {as_sql(condition.part)})"
        case AnyOf():
            return "(" + " OR ".join(as_sql(part) for part in condition.parts) + ")"
        case AllOf():
            return "(" + " AND ".join(as_sql(part) for part in condition.parts) + ")"
        case SomeOf():
            chosen = combinations(condition.parts, condition.least)
            return as_sql(AnyOf(tuple(AllOf(parts) for parts in chosen)))


@given(TREE)
def test_groups_agree_with_sql(condition: Condition) -> None:
    states = [(a, b, c) for a in STATE for b in STATE for c in STATE]
    columns = {name: column([STATE[row[place]] for row in states], 0.1) for place, name in enumerate(NAMES)}
    with sqlite3.connect(":memory:") as base:
        base.execute("CREATE TABLE anchor (pao2, sao2, hb)")
        base.executemany("INSERT INTO anchor VALUES (?, ?, ?)", [[SQL[one] for one in row] for row in states])
        rows = base.execute(f"SELECT {as_sql(condition)} FROM anchor ORDER BY rowid").fetchall()  # noqa: S608
    base.close()
    expected = [UNKNOWN if row[0] is None else row[0] for row in rows]
    assert evaluate(condition, columns).truth.tolist() == expected


@given(TREE, st.lists(st.sampled_from([TRUE, FALSE, UNKNOWN]), min_size=3, max_size=3))
def test_what_is_missing_is_what_made_it_unknown(condition: Condition, states: list[int]) -> None:
    """By definition: only an unknown finding misses something, and only what is not known."""
    columns = {name: column([STATE[state]]) for name, state in zip(NAMES, states, strict=True)}
    found = evaluate(condition, columns)
    missing = {name for name, where in found.missing.items() if where[0]}
    assert (found.truth[0] == UNKNOWN) == bool(missing)
    assert missing <= {name for name, state in zip(NAMES, states, strict=True) if state == UNKNOWN}
    assert set(found.missing) == set(quantities(condition))


@given(TREE, st.lists(st.floats(-5, 5), min_size=3, max_size=3))
def test_a_true_finding_holds_more_likely_than_not(condition: Condition, values: list[float]) -> None:
    """By definition of a symmetric doubt: a comparison and its probability lie on the same side of one half."""
    found = evaluate(condition, {name: column([value]) for name, value in zip(NAMES, values, strict=True)})
    assert (found.probability[0] - 0.5) * (found.truth[0] - 0.5) >= 0


COMPARISON = st.builds(
    Comparison,
    st.sampled_from(NAMES),
    st.sampled_from(Operator),
    st.sampled_from([-1.0, 0.0, 0.5, 1.0]),
    st.sampled_from([0.5, 0.8, 0.95]),
)
VALUE = st.sampled_from([NAN, -2.0, -1.0, 0.0, 0.2, 0.5, 0.7, 1.0, 3.0])
DOUBT = st.sampled_from([NAN, 0.0, 0.1, 1.0])
COMPLETIONS = np.array([(value, doubt) for value in np.linspace(-2, 2, 21) for doubt in (NAN, 0.0, 0.1, 0.5, 2.0)])


@given(trees(COMPARISON), st.lists(st.tuples(VALUE, DOUBT), min_size=3, max_size=3), st.sampled_from(NAMES))
def test_without_a_value_it_is_only_what_it_is_with_every_value(
    condition: Condition, values: list[tuple[float, float]], deleted: str
) -> None:
    """Kleene 1952, section 64: regular tables. What is found without a value stands whatever the value would be."""
    rows = 1 + len(COMPLETIONS)
    columns = {name: column([one] * rows, doubt) for name, (one, doubt) in zip(NAMES, values, strict=True)}
    columns[deleted] = column(np.r_[NAN, COMPLETIONS[:, 0]], np.r_[NAN, COMPLETIONS[:, 1]])
    without, *completed = evaluate(condition, columns).truth.tolist()
    if without != UNKNOWN:
        assert set(completed) == {without}


def test_missing_is_reported_only_for_what_decides() -> None:
    both = AllOf((Comparison("hb", Operator.BELOW, 7.0), Comparison("oxygen-extraction-ratio", Operator.ABOVE, 0.4)))
    found = evaluate(both, {"hb": column([6.5, 12.0]), "oxygen-extraction-ratio": column([NAN, NAN])})
    assert found.truth.tolist() == [UNKNOWN, FALSE]
    assert {name: where.tolist() for name, where in found.missing.items()} == {
        "hb": [False, False],
        "oxygen-extraction-ratio": [True, False],
    }


# --- limits ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("how", "expected"),
    [
        (Operator.BELOW, [TRUE, FALSE, FALSE]),
        (Operator.AT_MOST, [TRUE, TRUE, FALSE]),
        (Operator.AT_LEAST, [FALSE, TRUE, TRUE]),
        (Operator.ABOVE, [FALSE, FALSE, TRUE]),
    ],
)
def test_operators_at_a_limit_in_another_unit(how: Operator, expected: list[int]) -> None:
    """7.9, 8 and 8.1 kPa in mm[Hg] (0.133322 kPa, UCUM) against a limit of 8 kPa: equal is equal in both units."""
    values = column([7.9 / 0.133322, 8 / 0.133322, 8.1 / 0.133322])
    assert truth_of(comparison("pao2", how, 8, "kPa"), pao2=values) == expected


def test_a_limit_of_8_kpa_is_one_of_60_mmhg() -> None:
    """60 mm[Hg] is 7.99932 kPa (UCUM): with the declared decimal both are 60.0."""
    assert truth_of(comparison("pao2", Operator.BELOW, 8, "kPa"), pao2=column([60.0, 59.9])) == [FALSE, TRUE]
    assert comparison("pao2", Operator.BELOW, 8, "kPa") == comparison("pao2", Operator.BELOW, 60, "mm[Hg]")


def test_values_are_compared_as_they_are_shown() -> None:
    """Declared decimals: 59.96 mm[Hg] is written 60.0, thus not below 60."""
    assert truth_of(comparison("pao2", Operator.BELOW, 60, "mm[Hg]"), pao2=column([59.96, 59.94])) == [FALSE, TRUE]


def test_haemoglobin_by_amount() -> None:
    """0.6206 mmol/L of monomer per g/dL (Jordan & Kratz): 4.3 mmol/L is 6.93 g/dL, with one decimal 6.9."""
    assert comparison("hb", Operator.BELOW, 4.3, "mmol/L").limit == 6.9


# --- certainty and what is not known -----------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("value", "uncertainty", "expected"),
    [
        (6.8, 0.1, TRUE),  # 2 standard uncertainties below: 0.977 by the normal table
        (6.8, 0.125, FALSE),  # 1.60: 0.945
        (6.8, 0.12, TRUE),  # 1.67: 0.952
        (7.2, 0.1, FALSE),
        (6.8, 0.0, TRUE),
        (1.0, NAN, FALSE),  # nothing is known of its doubt
        (NAN, NAN, UNKNOWN),
    ],
)
def test_a_comparison_with_certainty_is_true_only_beyond_doubt(
    value: float, uncertainty: float, expected: int
) -> None:
    """One-sided 0.95 is 1.645 standard uncertainties (normal table)."""
    low = Comparison("hb", Operator.BELOW, 7.0, 0.95)
    assert truth_of(low, hb=column([value], uncertainty)) == [expected]
    assert truth_of(Comparison("hb", Operator.ABOVE, -7.0, 0.95), hb=column([-value], uncertainty)) == [expected]
    assert truth_of(Not(low), hb=column([value], uncertainty)) == [UNKNOWN if expected == UNKNOWN else TRUE - expected]


def test_too_little_certainty_leaves_the_probability_as_it_is() -> None:
    """0.8413 one standard uncertainty below the limit (normal table)."""
    found = evaluate(Comparison("hb", Operator.BELOW, 7.0, 0.95), {"hb": column([6.9], 0.1)})
    assert found.truth.tolist() == [FALSE]
    assert found.probability[0] == pytest.approx(0.8413, abs=5e-5)
    assert not found.missing["hb"].any()


def test_a_bound_that_decides_is_certain() -> None:
    bounds = column([NAN, NAN], NAN, [0, 50], [40, 70])
    assert truth_of(Comparison("pao2", Operator.BELOW, 60.0, 0.99), pao2=bounds) == [TRUE, UNKNOWN]


def test_not_known_is_true_or_false_and_certain() -> None:
    """By definition: a value or a bound is known, also a bound too wide to decide a comparison."""
    found = evaluate(NotKnown("pao2"), {"pao2": column([NAN, 50, NAN], NAN, [NAN, 50, 0], [NAN, 50, 90])})
    assert found.truth.tolist() == [TRUE, FALSE, FALSE]
    assert found.probability.tolist() == [1, 0, 0]
    assert found.missing["pao2"].tolist() == [False, False, False]


# --- bounds ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("low", "high", "below", "at_least"),
    [
        (0, 40, TRUE, FALSE),
        (60, np.inf, FALSE, TRUE),
        (0, 60, UNKNOWN, UNKNOWN),
        (50, 70, UNKNOWN, UNKNOWN),
        (61, 70, FALSE, TRUE),
        (-np.inf, 59.9, TRUE, FALSE),
    ],
)
def test_a_bound_decides_only_as_a_whole(low: float, high: float, below: int, at_least: int) -> None:
    """By definition, against a limit of 60: the limit inside the interval, or on its edge, is unknown."""
    bound = column([NAN], NAN, [low], [high])
    assert truth_of(Comparison("pao2", Operator.BELOW, 60.0), pao2=bound) == [below]
    assert truth_of(Comparison("pao2", Operator.AT_LEAST, 60.0), pao2=bound) == [at_least]
    probability = evaluate(Comparison("pao2", Operator.BELOW, 60.0), {"pao2": bound}).probability[0]
    assert probability == below if below != UNKNOWN else np.isnan(probability)


def test_a_value_said_to_be_known_without_number_is_unknown() -> None:
    hollow = column([NAN])
    hollow.why[:] = Why.KNOWN
    assert truth_of(Comparison("pao2", Operator.BELOW, 60.0), pao2=hollow) == [UNKNOWN]
    assert truth_of(NotKnown("pao2"), pao2=hollow) == [TRUE]


# --- probability -------------------------------------------------------------------------------------------------


def test_probability_that_the_limit_is_crossed() -> None:
    """Standard normal table: 0.9772 two standard uncertainties below a limit, 0.8413 one above."""
    low = evaluate(Comparison("hb", Operator.BELOW, 7.0), {"hb": column([6.8], 0.1)})
    high = evaluate(Comparison("hb", Operator.ABOVE, 7.0), {"hb": column([7.1], 0.1)})
    assert low.probability[0] == pytest.approx(0.9772, abs=5e-5)
    assert high.probability[0] == pytest.approx(0.8413, abs=5e-5)


def test_probability_of_groups() -> None:
    """Bounds of Frechet: all, at most its least likely part; any, at least its likeliest known one."""
    parts = (Comparison("hb", Operator.BELOW, 7.0), Comparison("sao2", Operator.BELOW, 0.9))
    columns = {"hb": column([6.8, 6.8], 0.1), "sao2": column([0.88, NAN], 0.02)}
    least, most = evaluate(AllOf(parts), columns).probability, evaluate(AnyOf(parts), columns).probability
    assert least[0] == pytest.approx(0.8413, abs=5e-5)
    assert most.tolist() == pytest.approx([0.9772, 0.9772], abs=5e-5)
    assert evaluate(Not(parts[0]), columns).probability[0] == pytest.approx(0.0228, abs=5e-5)


PARTS = st.lists(COMPARISON, min_size=1, max_size=4).map(tuple)
STATES = st.lists(st.tuples(VALUE, DOUBT), min_size=3, max_size=3)


def likely(condition: Condition, states: list[tuple[float, float]]) -> tuple[int, float]:
    columns = {name: column([value], doubt) for name, (value, doubt) in zip(NAMES, states, strict=True)}
    found = evaluate(condition, columns)
    assert np.isnan(found.probability[0]) == (found.truth[0] == UNKNOWN)
    return int(found.truth[0]), float(found.probability[0])


@given(PARTS, STATES)
def test_one_of_them_is_any_and_each_of_them_is_all(
    parts: tuple[Condition, ...], states: list[tuple[float, float]]
) -> None:
    """Any is as likely as its likeliest known part, all as its least likely known part."""
    known = [chance for truth, chance in (likely(part, states) for part in parts) if truth != UNKNOWN]
    for least, group, bound in ((1, AnyOf(parts), max), (len(parts), AllOf(parts), min)):
        truth, chance = likely(SomeOf(least, parts), states)
        np.testing.assert_equal((truth, chance), likely(group, states))
        assert truth == UNKNOWN or chance == bound(known)


@given(PARTS, st.data())
def test_not_some_is_some_not(parts: tuple[Condition, ...], data: st.DataObject) -> None:
    """De Morgan: that fewer than k of n hold is that at least n - k + 1 do not."""
    states, least = data.draw(STATES), data.draw(st.integers(1, len(parts)))
    dual = SomeOf(len(parts) - least + 1, tuple(map(Not, parts)))
    np.testing.assert_allclose(likely(Not(SomeOf(least, parts)), states), likely(dual, states), rtol=0, atol=1e-12)


@given(st.lists(st.integers(0, 20), min_size=1, max_size=5), st.data())
def test_probability_of_some_is_exact_where_doubts_rise_and_fall_together(
    twentieths: list[int], data: st.DataObject
) -> None:
    """By definition: with one uniform number for all, the share of numbers that lie below at least k probabilities."""
    least = data.draw(st.integers(1, len(twentieths)))
    parts = [Finding(np.array([int(one > 10)], np.int8), np.array([one / 20]), {}) for one in twentieths]
    share = sum(sum(number < one for one in twentieths) >= least for number in range(20)) / 20
    assert _counted(parts, least).probability[0] == pytest.approx(share, abs=1e-12)


def test_a_part_that_is_unknown_lends_a_group_no_probability() -> None:
    """All of (0.9772, unknown) may be 0: any of it and 0.8413 is at least 0.8413, not 0.9772."""
    doubtful = AllOf((Comparison("hb", Operator.BELOW, 7.0), Comparison("pao2", Operator.BELOW, 60.0)))
    either = AnyOf((doubtful, Comparison("sao2", Operator.BELOW, 0.9)))
    columns = {"hb": column([6.8], 0.1), "pao2": column([NAN]), "sao2": column([0.88], 0.02)}
    found = evaluate(either, columns)
    assert found.truth.tolist() == [TRUE]
    assert found.probability[0] == pytest.approx(0.8413, abs=5e-5)


def test_a_value_of_unknown_doubt_is_not_called_certain() -> None:
    found = evaluate(Comparison("hb", Operator.BELOW, 7.0), {"hb": column([6.0], NAN)})
    assert (found.truth[0], found.probability[0]) == (TRUE, 0.5)

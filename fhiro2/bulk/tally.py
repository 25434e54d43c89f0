"""Counts of an outcome for the account: what was derived, what was not computable and why, which flags were raised."""

from __future__ import annotations

import numpy as np

from fhiro2.account import Account
from fhiro2.catalogue import DERIVED, title_of
from fhiro2.model import WHY_TEXT, Column, Outcome, Why

_SAMPLES = {
    "mixed venous sample near enough": {"svo2", "pvo2"},
    "central venous sample near enough": {"scvo2", "pcvo2"},
}
"""Words for inputs that are missing together because their whole sample is."""


def tally(account: Account, outcome: Outcome) -> None:
    """Add one batch to the account."""
    for table in outcome.tables.values():
        for row in DERIVED:
            if row.code in table.columns:
                column = table.columns[row.code]
                account.derived[row.code] += int(np.count_nonzero(column.known()))
                for why, number in absences(column):
                    account.not_computable[row.code, why] += number
    for flag in outcome.flags:
        account.flags[flag.rule] += 1
    account.held += len(outcome.held)
    account.notices += [
        f"{patient}: flags withheld, since the two evaluators of flags disagree; report this"
        for patient in outcome.held
    ]


def absences(column: Column) -> list[tuple[str, int]]:
    """Why a derived column has no value, in words, and how often."""
    lacking = ~column.known()
    masks = column.missing if column.missing is not None else np.zeros(len(column.why), dtype=np.int64)
    pairs = np.stack([column.why[lacking], np.where(column.why[lacking] == Why.INPUT_MISSING, masks[lacking], 0)])
    kinds, numbers = np.unique(pairs, axis=1, return_counts=True)
    return [
        (_words(column, Why(why), mask), number)
        for (why, mask), number in zip(kinds.T.tolist(), numbers.tolist(), strict=True)
    ]


def missing_inputs(column: Column, mask: int) -> list[str]:
    """The names of the inputs in a ``missing`` bit mask."""
    return [name for number, name in enumerate(column.inputs) if mask >> number & 1]


def _words(column: Column, why: Why, mask: int) -> str:
    if why is not Why.INPUT_MISSING:
        return WHY_TEXT[why]
    names, words = missing_inputs(column, mask), []
    for sample, inputs in _SAMPLES.items():
        if inputs <= set(names):
            names = [name for name in names if name not in inputs]
            words.append(sample)
    return "no " + ", no ".join([*(title_of(name) for name in names), *words])

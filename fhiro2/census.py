"""CENSUS: what does this feed hold, which values does it allow, and what is missing most. Reads only."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from fhiro2.account import Account
from fhiro2.admit import Admission
from fhiro2.assess import assess
from fhiro2.bulk.intake import take_in
from fhiro2.bulk.tally import missing_inputs, tally
from fhiro2.catalogue import DERIVED, MEASURED, title_of
from fhiro2.errors import Bucket, Reason
from fhiro2.fhir.wire import Observation
from fhiro2.judge import Pack
from fhiro2.model import MINUTE, Outcome, Readings, Specimen, Why
from fhiro2.read import Source
from fhiro2.settings import Mapping, Settings
from fhiro2.timeline import batches


@dataclass
class CodeSeen:
    """One code of the feed: how often, in which units, what became of it, and an example id."""

    words: str = ""
    count: int = 0
    units: Counter[str] = field(default_factory=Counter)
    ends: Counter[str] = field(default_factory=Counter)
    example: str = ""


@dataclass
class Census:
    """What a feed holds and allows. ``unlocks`` counts values for which one thing alone is missing."""

    account: Account
    codes: dict[tuple[str, str], CodeSeen]
    quantities: dict[tuple[str, str], int]
    lags: dict[str, tuple[float, float]]
    anchors: int
    unlocks: Counter[tuple[str, str]]

    def possible(self) -> list[tuple[str, int, int]]:
        """For each derived code that had an anchor: code, how many were computed, how many were not."""
        refused: Counter[str] = Counter()
        for (code, _), number in self.account.not_computable.items():
            refused[code] += number
        return [
            (row.code, self.account.derived[row.code], refused[row.code])
            for row in DERIVED
            if self.account.derived[row.code] or refused[row.code]
        ]


def census(sources: Sequence[Source], settings: Settings, mapping: Mapping, pack: Pack) -> Census:
    """Count what ``sources`` hold and run the core over it once, writing nothing."""
    codes: dict[tuple[str, str], CodeSeen] = {}
    intake = take_in(sources, settings, mapping, watch=lambda found, admission: _see(codes, found, admission))
    unlocks: Counter[tuple[str, str]] = Counter()
    anchors = 0
    for timelines in batches(intake.readings, intake.rows.names(), intake.rows.origins, intake.roster):
        outcome, _ = assess(timelines, settings, pack)
        tally(intake.account, outcome)
        anchors += sum(len(table.reading) for table in outcome.tables.values())
        _count_unlocks(unlocks, outcome)
    return Census(intake.account, codes, _quantities(intake.readings), _lags(intake.readings), anchors, unlocks)


def _see(codes: dict[tuple[str, str], CodeSeen], found: Observation, admission: Admission) -> None:
    end = str(admission.reason or Bucket.USED)
    for part in (found, *found.component):
        for coding in part.code.coding if part.code else ():
            seen = codes.setdefault((coding.system or "", coding.code or ""), CodeSeen())
            seen.words = seen.words or coding.display or (part.code.text if part.code else "") or ""
            seen.count += 1
            seen.ends[end] += 1
            seen.example = min(seen.example, found.id or "") if seen.example else found.id or ""
            if part.valueQuantity is not None:
                seen.units[part.valueQuantity.code or part.valueQuantity.unit or "no unit"] += 1


def _quantities(readings: Readings) -> dict[tuple[str, str], int]:
    pairs, numbers = np.unique(np.stack([readings["quantity"], readings["specimen"]]), axis=1, return_counts=True)
    return {
        (MEASURED[quantity].name, Specimen(specimen).name.lower()): number
        for (quantity, specimen), number in zip(pairs.T.tolist(), numbers.tolist(), strict=True)
    }


def _lags(readings: Readings) -> dict[str, tuple[float, float]]:
    """Median and 90th percentile, in minutes, from happening to being known, by quantity."""
    found = {}
    for quantity in np.unique(readings["quantity"]).tolist():
        rows = readings[readings["quantity"] == quantity]
        middle, late = np.percentile((rows["known"] - rows["effective"]) / MINUTE, [50, 90])
        found[MEASURED[quantity].name] = round(float(middle), 1), round(float(late), 1)
    return found


def _count_unlocks(unlocks: Counter[tuple[str, str]], outcome: Outcome) -> None:
    for table in outcome.tables.values():
        for row in DERIVED:
            column = table.columns.get(row.code)
            if column is None or column.missing is None:
                continue
            masks, numbers = np.unique(column.missing[column.why == Why.INPUT_MISSING], return_counts=True)
            for mask, number in zip(masks.tolist(), numbers.tolist(), strict=True):
                names = missing_inputs(column, mask)
                if len(names) == 1:
                    unlocks[names[0], row.code] += number


def advice(found: Census) -> list[str]:
    """What would unlock most, in sentences, most first."""
    by_input: Counter[str] = Counter()
    for (name, _), number in found.unlocks.items():
        by_input[name] += number
    sentences = []
    for name, number in by_input.most_common(6):
        codes = sorted({code for (missing, code) in found.unlocks if missing == name})
        sentences.append(
            f"{title_of(name)} alone is missing for {number} values ({', '.join(codes)}): send it, map its code, "
            "or check its time window."
        )
    unmapped = sum(
        number for (bucket, reason), number in found.account.reasons.items() if reason is Reason.UNMAPPED_CODE
    )
    if unmapped:
        sentences.append(f"{unmapped} resources carry codes that are not mapped: see the list of codes.")
    return sentences

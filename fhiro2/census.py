"""CENSUS: what does this feed hold, which values does it allow, and what is missing most. Reads only."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator, Sequence
from dataclasses import asdict, dataclass, field
from typing import Any

import numpy as np

from fhiro2.account import Account
from fhiro2.admit import Admission
from fhiro2.assess import assess
from fhiro2.bulk.intake import take_in
from fhiro2.bulk.tally import missing_inputs, tally
from fhiro2.catalogue import DERIVED, DERIVED_BY_CODE, INPUT_BY_NAME, INPUTS, MEASURED, title_of
from fhiro2.codes import LOINC, code_table
from fhiro2.errors import Bucket, Reason
from fhiro2.fhir.wire import Concept, Observation
from fhiro2.judge import Pack
from fhiro2.model import MINUTE, WHY_TEXT, Column, Outcome, Readings, Specimen, Why
from fhiro2.read import Source
from fhiro2.settings import Mapping, Settings
from fhiro2.timeline import batches

MOST_STEPS = 5
_TOGETHER = 2  # inputs asked for in one step, unless every value lacks more
BRINGS: dict[str, tuple[str, ...]] = {
    "pao2": ("2703-7",),
    "paco2": ("2019-8",),
    "sao2": ("2708-6",),
    "hb": ("14775-1", "718-7"),
    "fio2": ("3150-0", "19994-3"),
    "co": ("8737-9", "8741-1"),
    "weight": ("29463-7",),
    "height": ("8302-2",),
    "spo2": ("59408-5",),
    "pvo2": ("19211-2",),
    "svo2": ("19224-5",),
    "pcvo2": ("2705-2",),
    "scvo2": ("97549-0",),
}
"""LOINC codes that commonly bring an input; 2705-2 is plain venous, so its Specimen must say central venous."""
_BLOOD = (
    dict.fromkeys(("pao2", "paco2", "sao2"), "arterial")
    | dict.fromkeys(("pvo2", "svo2"), "mixed_venous")
    | dict.fromkeys(("pcvo2", "scvo2"), "central_venous")
)


@dataclass
class CodeSeen:
    """One code of the feed. Observations and their components are counted alike, every version received.

    ``ends`` says what became of them, ``refused`` counts those kept aside by reason, ``answers`` coded values as
    (system, code, words); ``example`` is the least id.
    """

    words: str = ""
    status: str = ""
    count: int = 0
    units: Counter[str] = field(default_factory=Counter)
    answers: Counter[tuple[str, str, str]] = field(default_factory=Counter)
    ends: Counter[str] = field(default_factory=Counter)
    refused: Counter[Reason] = field(default_factory=Counter)
    example: str = ""

    def mapped(self) -> bool:
        """Whether any of them carried a code that is known."""
        return set(self.ends) != {Reason.UNMAPPED_CODE.value}


@dataclass
class Prospect:
    """One derived value in this feed: at how many anchors (of which table) it was computed, and what others lack.

    ``lacking`` counts anchors by (input, why it is absent), ``other`` anchors by any other reason.
    """

    code: str
    table: str = ""
    anchors: int = 0
    computed: int = 0
    lacking: Counter[tuple[str, Why]] = field(default_factory=Counter)
    other: Counter[Why] = field(default_factory=Counter)

    def verdict(self) -> str:
        """go: computed at half of its anchors or more; part: at fewer; no-go: at none."""
        if not self.computed:
            return "no-go"
        return "go" if 2 * self.computed >= self.anchors else "part"


@dataclass(frozen=True)
class Step:
    """Inputs that, added to the feed at every anchor, would allow up to ``number`` more values of ``codes``."""

    inputs: tuple[str, ...]
    number: int
    codes: tuple[str, ...]


@dataclass
class Census:
    """What a feed holds and allows. ``lags`` are minutes until known, as (median, 90th percentile) by quantity."""

    account: Account
    patients: int
    codes: dict[tuple[str, str], CodeSeen]
    quantities: dict[tuple[str, str], int]
    lags: dict[str, tuple[float, float]]
    prospects: dict[str, Prospect]
    steps: list[Step]

    def readings(self, quantity: str, blood: str | None = None) -> int:
        """How many readings of a quantity were admitted, of one kind of blood or of any."""
        return sum(
            number for (name, of), number in self.quantities.items() if name == quantity and blood in (None, of)
        )

    def ranked(self) -> list[tuple[tuple[str, str], CodeSeen]]:
        """The codes seen as ((system, code), what was seen), the most frequent first."""
        return sorted(self.codes.items(), key=lambda row: (-row[1].count, row[0]))

    def as_json(self) -> dict[str, Any]:
        """The census for machines, most important first; ``lag_minutes`` is (median, 90th percentile)."""
        return {
            "advice": advice(self),
            "notices": notices(self),
            "values": [_prospect_json(prospect) for prospect in self.prospects.values()],
            "unlocks": [asdict(step) for step in self.steps],
            "patients": self.patients,
            "codes": [_code_json(*pair, seen) for pair, seen in self.ranked()],
            "readings": [
                {"quantity": quantity, "blood": blood, "readings": number, "lag_minutes": self.lags[quantity]}
                for (quantity, blood), number in sorted(self.quantities.items())
            ],
            "account": self.account.as_json(),
        }


def census(sources: Sequence[Source], settings: Settings, mapping: Mapping, pack: Pack) -> Census:
    """Count what ``sources`` hold and run the core over it once, writing nothing."""
    codes: dict[tuple[str, str], CodeSeen] = {}
    known = {*code_table(), *((row.system, row.code) for row in mapping.codes)}
    intake = take_in(sources, settings, mapping, watch=lambda found, admission: _see(codes, known, found, admission))
    prospects = {row.code: Prospect(row.code) for row in DERIVED}
    lacking: Counter[tuple[frozenset[str], str]] = Counter()
    patients = 0
    for timelines in batches(intake.readings, intake.rows.names, intake.rows.origins, intake.roster):
        outcome, _ = assess(timelines, settings, pack)
        tally(intake.account, outcome)
        patients += len(timelines.patients)
        _look_forward(prospects, lacking, outcome)
    quantities, lags = _quantities(intake.readings), _lags(intake.readings)
    return Census(intake.account, patients, codes, quantities, lags, prospects, list(_steps(lacking)))


def advice(found: Census) -> list[str]:
    """What would unlock most, in sentences, each step counted on top of the steps before it."""
    sentences = []
    for place, step in enumerate(found.steps):
        names = " and ".join(title_of(name) for name in step.inputs)
        begin = _capital(names) if place == 0 else f"Then {names}"
        together = " together" if len(step.inputs) > 1 else ""
        values = "; ".join(DERIVED_BY_CODE[code].title for code in step.codes)
        hints = " ".join(_hint(found, name) for name in step.inputs)
        sentences.append(f"{begin}{together}: up to {step.number} more values ({values}). {hints}")
    return sentences


def notices(found: Census) -> list[str]:
    """What else a reader of the feed must know, in sentences: refused and deprecated codes, lags that say nothing."""
    sentences = [_refusal(code, seen) for (_, code), seen in found.ranked() if seen.refused]
    sentences += [
        f"{code} ({seen.words}) is a deprecated code, seen {seen.count} times: ask the sender for its successor."
        for (_, code), seen in found.ranked()
        if seen.status == "deprecated"
    ]
    if found.lags and all(late <= 0 for _, late in found.lags.values()):
        sentences.append(
            "Every value counts as known at the instant it was taken (meta.lastUpdated says so): how late results "
            "arrive cannot be learned from this feed."
        )
    unmapped = [seen.count for seen in found.codes.values() if not seen.mapped()]
    if unmapped:
        sentences.append(
            f"{len(unmapped)} codes ({sum(unmapped)} times) are not mapped and were left alone: see the list below; "
            "a site's own codes are mapped under codes in its mapping."
        )
    return sentences


def _hint(found: Census, name: str) -> str:
    """Why an input is absent most often, and what to do about it."""
    quantity, title = INPUT_BY_NAME[name].quantity, title_of(name)
    readings = found.readings(quantity, _BLOOD.get(name))
    if readings:
        most = [(why, max(one.lacking[name, why] for one in found.prospects.values())) for why in WHY_TEXT]
        absent = ", ".join(f"{WHY_TEXT[why]} (up to {number} anchors)" for why, number in most if number)
        return (
            f"{_capital(title)} was read {readings} times; elsewhere {absent}: send it more often, or see its window."
        )
    if name == "sao2" and found.readings("spo2") and (LOINC, "2708-6") in found.codes:
        return (
            f"2708-6 was seen {found.codes[LOINC, '2708-6'].count} times, but as a vital sign: that is pulse oximetry "
            "and never stands for the saturation measured in the gas, which needs 2708-6 from the laboratory or with "
            "a Specimen."
        )
    codes = [loinc for loinc in BRINGS.get(name, ()) if (LOINC, loinc) in found.codes]
    if codes:
        return f"{' and '.join(codes)} was seen, but no {title} could be read from it: see below why it was refused."
    wanted = " or ".join(BRINGS.get(name, ())) or "its code"
    blood = " with a Specimen that says central venous" if name == "pcvo2" else ""
    flow = ""
    if name == "fio2" and found.readings("o2_flow"):
        flow = (
            f" Oxygen flow was seen (3151-8, {found.readings('o2_flow')} times); a flow is not a fraction and is not "
            "taken for one: have the fraction charted beside it."
        )
    return f"No code for {title} was seen: send {wanted}{blood}, or map your own code to it.{flow}"


def _refusal(code: str, seen: CodeSeen) -> str:
    reasons = ", ".join(reason for reason, _ in _ranked(seen.refused))
    text = f"{code} ({seen.words}): {seen.refused.total()} of {seen.count} could not be read (reason: {reasons})."
    if Reason.UNIT in seen.refused:
        text += f" Units sent: {', '.join(unit for unit, _ in _ranked(seen.units))}."
    if not seen.answers:
        return f"{text} Look at one with quarantine list after a replay, for example {seen.example}."
    (system, answer, words), _ = _ranked(seen.answers)[0]
    terms = "SNOMED CT" if system == "http://snomed.info/sct" else system or "no system"
    text += f" Its answers are coded in {terms} (such as {answer} {words}): say under answers in the site's mapping "
    text += "what each of them means."
    row = code_table().get((LOINC, code))
    if row is not None and all(one.quantity != row.quantity for one in INPUTS):
        text += " No value of this version needs it."
    return text


def _capital(text: str) -> str:
    return text[:1].upper() + text[1:]


def _ranked(counts: Counter[Any]) -> list[tuple[Any, int]]:
    return sorted(counts.items(), key=lambda row: (-row[1], row[0]))


def _see(
    codes: dict[tuple[str, str], CodeSeen],
    known: set[tuple[str, str]],
    found: Observation,
    admission: Admission,
) -> None:
    refused = {number: error.reason for number, error in admission.parts}
    if admission.bucket is Bucket.QUARANTINED and admission.reason is not None:
        refused[-1] = admission.reason
    for number, part in enumerate((found, *found.component), -1):
        concept = part.code or Concept()
        pairs = [(coding.system or "", coding.code or "") for coding in concept.coding] or [("", "")]
        reason = refused.get(number)
        if reason is not None:
            end = reason.value
        elif known.isdisjoint(pairs):
            end = Reason.UNMAPPED_CODE.value
        else:
            end = (admission.reason or admission.bucket).value
        for place, pair in enumerate(pairs):
            seen = codes.setdefault(pair, CodeSeen(status=code_table()[pair].status if pair in code_table() else ""))
            seen.words = (
                seen.words or (concept.coding[place].display if concept.coding else None) or concept.text or ""
            )
            seen.count += 1
            seen.ends[end] += 1
            if reason is not None:
                seen.refused[reason] += 1
            seen.example = min(seen.example or "~", found.id or "~")
            if part.valueQuantity is not None:
                seen.units[part.valueQuantity.code or part.valueQuantity.unit or "no unit"] += 1
            if part.valueCodeableConcept is not None:
                for answer in part.valueCodeableConcept.coding:
                    seen.answers[answer.system or "", answer.code or "", answer.display or ""] += 1


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


def _look_forward(
    prospects: dict[str, Prospect], lacking: Counter[tuple[frozenset[str], str]], outcome: Outcome
) -> None:
    """Add one batch to the prospects, and to ``lacking`` what each absent value lacks as a whole."""
    for kind, table in outcome.tables.items():
        for row in DERIVED:
            if row.code not in table.columns:
                continue
            column, prospect = table.columns[row.code], prospects[row.code]
            prospect.table = kind
            prospect.anchors += len(table.reading)
            prospect.computed += int(np.count_nonzero(column.known()))
            for why, number in _counts(column.why):
                if why not in (Why.KNOWN, Why.INPUT_MISSING):
                    prospect.other[Why(why)] += number
            for names, where in _missing_sets(column):
                lacking[names, row.code] += int(np.count_nonzero(where))
                for name in names:
                    for why, number in _counts(table.columns[name].why[where]):
                        prospect.lacking[name, Why(why)] += number


def _missing_sets(column: Column) -> Iterator[tuple[frozenset[str], np.ndarray[tuple[int], np.dtype[np.bool_]]]]:
    """Each set of inputs that some anchors lack together, with those anchors."""
    if column.missing is None:
        return
    absent = column.why == Why.INPUT_MISSING
    for mask in np.unique(column.missing[absent]).tolist():
        yield frozenset(missing_inputs(column, mask)), absent & (column.missing == mask)


def _counts(values: np.ndarray[Any, Any]) -> Iterator[tuple[int, int]]:
    kinds, numbers = np.unique(values, return_counts=True)
    yield from zip(kinds.tolist(), numbers.tolist(), strict=True)


def _steps(lacking: Counter[tuple[frozenset[str], str]]) -> Iterator[Step]:
    """What to add first, second, ...: each time the few inputs that allow most values beyond the steps before."""
    left = {key: number for key, number in lacking.items() if key[0]}
    for _ in range(MOST_STEPS):
        if not left:
            return
        few = max(_TOGETHER, min(len(names) for names, _ in left))
        added = min(
            {names for names, _ in left if len(names) <= few},
            key=lambda names: (-_allowed(left, names).total(), len(names), sorted(names)),
        )
        allowed = _allowed(left, added)
        yield Step(tuple(sorted(added)), allowed.total(), tuple(row.code for row in DERIVED if row.code in allowed))
        remaining: Counter[tuple[frozenset[str], str]] = Counter()
        for (names, code), number in left.items():
            if names - added:
                remaining[names - added, code] += number
        left = dict(remaining)


def _allowed(left: dict[tuple[frozenset[str], str], int], added: frozenset[str]) -> Counter[str]:
    """How many values of each code lack nothing but what is in ``added``."""
    found: Counter[str] = Counter()
    for (names, code), number in left.items():
        if names <= added:
            found[code] += number
    return found


def _prospect_json(prospect: Prospect) -> dict[str, Any]:
    return {
        "code": prospect.code,
        "verdict": prospect.verdict(),
        "anchors": prospect.anchors,
        "anchor_kind": prospect.table,
        "computed": prospect.computed,
        "lacking": [
            {"input": name, "why": why.name.lower().replace("_", "-"), "anchors": number}
            for (name, why), number in _ranked(prospect.lacking)
        ],
        "other_reasons": {why.name.lower().replace("_", "-"): number for why, number in _ranked(prospect.other)},
    }


def _code_json(system: str, code: str, seen: CodeSeen) -> dict[str, Any]:
    return {
        "system": system,
        "code": code,
        "words": seen.words,
        "status": seen.status,
        "count": seen.count,
        "mapped": seen.mapped(),
        "units": dict(_ranked(seen.units)),
        "answers": [
            {"system": system, "code": answer, "words": words, "count": number}
            for (system, answer, words), number in _ranked(seen.answers)
        ],
        "ends": dict(_ranked(seen.ends)),
        "example": seen.example,
    }

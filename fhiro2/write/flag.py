"""Flag episodes as FHIR Flags with their evidence, each with its Provenance."""

from __future__ import annotations

import hashlib
import html
import math
import unicodedata
from functools import cache

import numpy as np

from fhiro2.catalogue import INPUT_BY_NAME, decimals_of, title_of
from fhiro2.errors import StopError
from fhiro2.fhir import systems
from fhiro2.fhir.resources import Shape, date_times, quoted, shape, text_slot, time_slot
from fhiro2.model import Evidence, Flag, Outcome, Patient, Timelines
from fhiro2.write import Run
from fhiro2.write.identity import SOFTWARE_REFERENCE, about, anchor_id, provenance_of
from fhiro2.write.observation import unit_text
from fhiro2.write.provenance import Entities, References, entity, provenance_shape
from fhiro2.write.values import age_text

LONGEST_TEXT = 1_000

_PRIORITY = {
    "critical": ("PH", "High priority"),
    "warning": ("PM", "Medium priority"),
    "info": ("PL", "Low priority"),
}
_UNSEEN = {"Cc", "Cf", "Cn", "Co", "Cs", "Zl", "Zp"}
_SPACES = {"\n", "\r", "\t"}


def flags(outcome: Outcome, run: Run, hashes: dict[str, str]) -> list[tuple[bytes, str]]:
    """The flags of a batch as lines with their Provenance, by patient, time raised, rule and anchor.

    ``hashes`` holds the content hash of each derived value that was written. Raises StopError for a flag whose rows
    are not those of this batch: its evidence could not be named.
    """
    numbers = {patient.key: number for number, patient in enumerate(outcome.timelines.patients)}
    references = References(outcome.timelines.origins)
    entities = Entities(references)
    ordered = sorted(outcome.flags, key=lambda flag: (numbers[flag.patient], flag.raised, flag.rule, flag.anchor_id))
    return [
        _rendered(outcome, run, flag, outcome.timelines.patients[numbers[flag.patient]], entities, hashes)
        for flag in ordered
    ]


def inert(text: str) -> str:
    """``text`` without power over its surroundings: signs that are not seen or that turn the line become U+FFFD.

    Line ends and tabs become spaces; what is longer than ``LONGEST_TEXT`` is cut, with an ellipsis as the mark.
    """
    shown = "".join(
        " " if sign in _SPACES else "\ufffd" if unicodedata.category(sign) in _UNSEEN else sign
        for sign in text[: LONGEST_TEXT + 1]
    )
    return shown if len(shown) <= LONGEST_TEXT else f"{shown[: LONGEST_TEXT - 1]}…"


def _rendered(
    outcome: Outcome, run: Run, flag: Flag, patient: Patient, entities: Entities, hashes: dict[str, str]
) -> tuple[bytes, str]:
    timelines = outcome.timelines
    if not _is_here(timelines, flag):
        raise StopError(
            f"flag of rule {flag.rule} at Observation {flag.anchor_id}: its evidence is not in this batch; "
            "assess the patient's whole timeline again"
        )
    rows = [flag.anchor, *(found.reading for found in flag.evidence if _is_read(found))]
    origins = list(dict.fromkeys(timelines.readings["origin"][rows].tolist()))
    derived = [_value_id(timelines, patient, flag, found) for found in flag.evidence if not _is_read(found)]
    values = [f"Observation/{value}" for value in derived]
    identity = about(patient.source, flag.subject, flag.anchor_id, flag.rule)
    times = [flag.raised] if flag.cleared is None else [flag.raised, flag.cleared]
    period = date_times(np.array(times, dtype=np.int64))
    details = [
        _detail_shape().filled((text,)) for text in (*(entities.references[origin] for origin in origins), *values)
    ]
    line = (
        _shape(flag.rule, flag.rule_version, flag.title, flag.severity, flag.cleared is None).filled(
            (identity, quoted(_narrative(flag)), ",".join(details), identity, quoted(patient.reference), *period)
        )
    ).encode()
    content_hash = hashlib.sha256(line).hexdigest()
    sources = [entities[origin] for origin in origins]
    sources += [entity(text, hashes.get(value, "")) for text, value in zip(values, derived, strict=True)]
    policy = f"{systems.RULE}/{flag.rule}/{flag.rule_version}"
    origin = provenance_shape(run, "Flag", policy)
    return line, origin.filled((provenance_of(identity, content_hash), identity, period[0], ",".join(sources)))


def _is_read(found: Evidence) -> bool:
    return found.reading >= 0 and not found.derived


def _value_id(timelines: Timelines, patient: Patient, flag: Flag, found: Evidence) -> str:
    """Id of the derived value that is evidence, at the flag's own anchor or at another of the same patient."""
    if found.reading < 0:
        return about(patient.source, flag.subject, flag.anchor_id, found.name)
    row = timelines.readings[found.reading]
    anchor = anchor_id(timelines.origins.ids[int(row["origin"])], int(row["part"]))
    return about(patient.source, timelines.names.subjects[int(row["subject"])], anchor, found.derived)


def _is_here(timelines: Timelines, flag: Flag) -> bool:
    if not 0 <= flag.anchor < len(timelines.readings):
        return False
    row = timelines.readings[flag.anchor]
    return anchor_id(timelines.origins.ids[int(row["origin"])], int(row["part"])) == flag.anchor_id


def _narrative(flag: Flag) -> str:
    def listed(texts: list[str]) -> str:
        return "<ul>" + "".join(f"<li>{_escaped(text)}</li>" for text in texts) + "</ul>" if texts else ""

    return (
        f"<p>{_escaped(flag.message)}</p>"
        f"<p>Probability that the limit is truly crossed: {probability_text(flag.probability)}</p>"
        f"<p>Evidence</p>{listed([evidence_text(found) for found in flag.evidence])}"
        f"<p>Cautions</p>{listed(list(flag.cautions))}"
    )


def _escaped(text: str) -> str:
    return html.escape(inert(text))


def probability_text(probability: float) -> str:
    """A probability in words that claim no more than it holds."""
    if probability > 0.99:
        return "more than 0.99"
    return "less than 0.01" if probability < 0.01 else f"{probability:.2f}"


def evidence_text(found: Evidence) -> str:
    """One value as evidence: title, value with standard uncertainty and unit, age; measured fractions in percent."""
    decimals, factor, unit = decimals_of(found.name), 1, f" {unit_text(found.unit)}"
    if found.unit == "1":
        percent = found.name in INPUT_BY_NAME
        decimals, factor, unit = (max(decimals - 2, 0), 100, " %") if percent else (decimals, 1, "")
    if not math.isfinite(found.value):
        return f"{title_of(found.name)}: known only as a bound, {age_text(found.age)}"
    doubt = f" ± {factor * found.uncertainty:.{decimals + 1}f}" if math.isfinite(found.uncertainty) else ""
    return f"{title_of(found.name)}: {factor * found.value:.{decimals}f}{doubt}{unit}, {age_text(found.age)}"


@cache
def _detail_shape() -> Shape:
    content = {"url": systems.FLAG_DETAIL, "valueReference": {"reference": text_slot("detail")}}
    return shape("Extension", content, [text_slot("detail")])


@cache
def _shape(rule: str, version: int, title: str, severity: str, active: bool) -> Shape:
    words = inert(title)
    priority, priority_words = _PRIORITY[severity]
    urgency = {"system": systems.FLAG_PRIORITY_CODE, "code": priority, "display": priority_words}
    detail = {"url": systems.FLAG_DETAIL, "valueReference": {"reference": text_slot("detail")}}
    category = {"system": systems.FLAG_CATEGORY, "code": "clinical", "display": "Clinical"}
    code = {"system": systems.RULE, "version": str(version), "code": rule, "display": words}
    content = {
        "resourceType": "Flag",
        "id": text_slot("id"),
        "text": {"status": "generated", "div": f'<div xmlns="{systems.XHTML}">{text_slot("narrative")}</div>'},
        "extension": [detail, {"url": systems.FLAG_PRIORITY, "valueCodeableConcept": {"coding": [urgency]}}],
        "identifier": [{"system": systems.FLAG_IDENTIFIER, "value": text_slot("identifier")}],
        "status": "active" if active else "inactive",
        "category": [{"coding": [category]}],
        "code": {"coding": [code], "text": words},
        "subject": {"reference": text_slot("subject")},
        "period": {"start": time_slot(1)} if active else {"start": time_slot(1), "end": time_slot(2)},
        "author": {"reference": SOFTWARE_REFERENCE},
    }
    slots = [
        text_slot("id"),
        text_slot("narrative"),
        detail,
        text_slot("identifier"),
        text_slot("subject"),
        *([time_slot(1)] if active else [time_slot(1), time_slot(2)]),
    ]
    return shape("Flag", content, slots)

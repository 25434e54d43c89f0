"""Flag episodes as FHIR Flags with their evidence, each with its Provenance."""

from __future__ import annotations

import hashlib
import html
import unicodedata
from collections.abc import Sequence
from datetime import UTC, datetime
from functools import cache

import numpy as np

from fhiro2.catalogue import INPUT_BY_NAME, decimals_of, title_of
from fhiro2.fhir import systems
from fhiro2.fhir.resources import Shape, date_times, quoted, shape, text_slot, time_slot
from fhiro2.flags import Evidence, Flag
from fhiro2.model import MICROSECONDS, Outcome, Patient
from fhiro2.write import Run
from fhiro2.write.identity import SOFTWARE_REFERENCE, about, provenance_of
from fhiro2.write.observation import unit_text
from fhiro2.write.provenance import entity, provenance_shape
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

    ``hashes`` holds the content hash of each derived value that was written in this batch.
    """
    numbers = {patient.key: number for number, patient in enumerate(outcome.timelines.patients)}
    ordered = sorted(
        outcome.flags, key=lambda flag: (numbers[flag.patient], flag.raised, flag.rule, flag.anchor.anchor_id)
    )
    return [_rendered(flag, outcome.timelines.patients[numbers[flag.patient]], run, hashes) for flag in ordered]


def identity_of(flag: Flag) -> str:
    """The id of the resource of an episode, the same whatever becomes of it."""
    return about(flag.anchor.source, flag.anchor.subject, flag.anchor.anchor_id, flag.rule)


def inert(text: str) -> str:
    """``text`` without power over its surroundings: signs that are not seen or that turn the line become U+FFFD.

    Line ends and tabs become spaces; what is longer than ``LONGEST_TEXT`` is cut, with an ellipsis as the mark.
    """
    shown = "".join(
        " " if sign in _SPACES else "\ufffd" if unicodedata.category(sign) in _UNSEEN else sign
        for sign in text[: LONGEST_TEXT + 1]
    )
    return shown if len(shown) <= LONGEST_TEXT else f"{shown[: LONGEST_TEXT - 1]}…"


def _rendered(flag: Flag, patient: Patient, run: Run, hashes: dict[str, str]) -> tuple[bytes, str]:
    sources = _sources(flag, hashes)
    identity = identity_of(flag)
    times = [flag.raised] if flag.cleared is None else [flag.raised, flag.cleared]
    period = date_times(np.array(times, dtype=np.int64))
    details = [_detail_shape().filled((reference,)) for reference in sources]
    line = (
        _shape(flag.rule, flag.rule_version, flag.title, flag.severity, flag.cleared is None).filled(
            (identity, quoted(_narrative(flag)), ",".join(details), identity, quoted(patient.reference), *period)
        )
    ).encode()
    content_hash = hashlib.sha256(line).hexdigest()
    entities = [entity(reference, which) for reference, which in sources.items()]
    policy = f"{systems.RULE}/{flag.rule}/{flag.rule_version}"
    origin = provenance_shape(run, "Flag", policy)
    return line, origin.filled((provenance_of(identity, content_hash), identity, period[0], ",".join(entities)))


def _sources(flag: Flag, hashes: dict[str, str]) -> dict[str, str]:
    """What the turns of an episode rest on, each once: the reference, and the hash of its content without a version.

    Received Observations come first, the anchors before what else was read at them, then derived values.
    """
    cited = [one for turn in flag.turns for one in (turn.anchor, *(found.cited for found in turn.evidence))]
    sources: dict[str, str] = {}
    for one in cited:
        if not one.derived:
            version = f"/_history/{one.version}" if one.version else ""
            sources[quoted(f"Observation/{one.observation}{version}")] = one.content_hash
    for one in cited:
        if one.derived:
            identity = about(one.source, one.subject, one.anchor_id, one.derived)
            sources[f"Observation/{identity}"] = hashes.get(identity, "")
    return sources


def _narrative(flag: Flag) -> str:
    def listed(texts: Sequence[str]) -> str:
        return "<ul>" + "".join(f"<li>{_escaped(text)}</li>" for text in texts) + "</ul>" if texts else ""

    message, *rest = sections(flag)
    return f"<p>{_escaped(message[0])}</p>" + "".join(
        f"<p>{_escaped(title)}</p>{listed(texts)}" for title, texts in rest
    )


def sections(flag: Flag) -> list[tuple[str, Sequence[str]]]:
    """What a reader is told of a flag: the message, then titles with their lines, in terminal and narrative alike."""
    latest, closed = flag.latest, flag.turns[-1]
    told: list[tuple[str, Sequence[str]]] = [
        (latest.message, ()),
        (f"Probability that the limit is truly crossed: {probability_text(latest.probability)}", ()),
        ("Course", [f"{turn.kind} {moment_text(turn.at)}" for turn in flag.turns]),
        ("Evidence", [evidence_text(found) for found in latest.evidence]),
    ]
    if latest is not flag.turns[0]:
        told.append(("Evidence when raised", [evidence_text(found) for found in flag.turns[0].evidence]))
    if closed is not latest and closed.evidence:
        told.append(("Evidence when cleared", [evidence_text(found) for found in closed.evidence]))
    if latest.axes:
        chain = [f"{name}: {state}" + (f" ({reason})" if reason else "") for name, state, reason in latest.axes]
        told.append(("Oxygen chain", chain))
    return [*told, ("Cautions", flag.cautions)]


def moment_text(moment: int) -> str:
    """A time in microseconds as 05-Mar-2026 14:05 UTC."""
    return datetime.fromtimestamp(moment / MICROSECONDS, UTC).strftime("%d-%b-%Y %H:%M UTC")


def _escaped(text: str) -> str:
    return html.escape(inert(text))


def probability_text(probability: float | None) -> str:
    """A probability in words that claim no more than it holds."""
    if probability is None:
        return "not known"
    if probability > 0.99:
        return "more than 0.99"
    return "less than 0.01" if probability < 0.01 else f"{probability:.2f}"


def evidence_text(found: Evidence) -> str:
    """One value as evidence: title, value with standard uncertainty and unit, age; measured fractions in percent."""
    decimals, factor, unit = decimals_of(found.name), 1, f" {unit_text(found.unit)}"
    if found.unit == "1":
        percent = found.name in INPUT_BY_NAME
        decimals, factor, unit = (max(decimals - 2, 0), 100, " %") if percent else (decimals, 1, "")
    if found.value is None:
        return f"{title_of(found.name)}: known only as a bound, {age_text(found.age)}"
    doubt = "" if found.uncertainty is None else f" ± {factor * found.uncertainty:.{decimals + 1}f}"
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

"""The shape of a derived value as an Observation: everything of it that does not vary from value to value.

The required bindings and invariants hold by construction: status is ``final``, a value is always there and
``dataAbsentReason`` never (obs-6), there are no components (obs-7), each unit code has its system (qty-3).
"""

from __future__ import annotations

from enum import IntEnum
from functools import cache, lru_cache

from fhiro2.catalogue import BASES, DERIVED_BY_CODE, Derived
from fhiro2.fhir import systems
from fhiro2.fhir.resources import Shape, number_slot, quoted, shape, text_slot, time_slot
from fhiro2.model import CAUTION_TEXT, Caution
from fhiro2.write.identity import SOFTWARE_REFERENCE

_UNIT_TEXT = {
    "mm[Hg]": "mmHg",
    "cm[H2O]": "cmH2O",
    "Cel": "°C",
    "1": "ratio",
    "m2": "m²",
    "mL/min/m2": "mL/min/m²",
    "L/min/m2": "L/min/m²",
    "[pH]": "pH",
}
_CATEGORY_TEXT = {"laboratory": "Laboratory", "exam": "Exam"}


class Form(IntEnum):
    """How much is known of a value."""

    VALUE = 0
    AT_LEAST = 1
    AT_MOST = 2
    BETWEEN = 3


def unit_text(unit: str) -> str:
    """The words for a UCUM unit."""
    return _UNIT_TEXT.get(unit, unit)


@cache
def source_shape() -> Shape:
    """One entry of ``derivedFrom``. Slots: reference, display."""
    slots = [text_slot("reference"), text_slot("display")]
    return shape("Reference", {"reference": slots[0], "display": slots[1]}, slots)


@lru_cache(maxsize=8_192)
def notes(cautions: int) -> tuple[str, ...]:
    """The notes of a set of cautions in the order of their bits, fit for a slot; nothing where there is none."""
    if not cautions:
        return ()
    note = shape("Annotation", {"text": text_slot("note")}, [text_slot("note")])
    return (",".join(note.filled((quoted(CAUTION_TEXT[caution]),)) for caution in Caution(cautions)),)


@cache
def observation_shape(code: str, basis: int, encounter: bool, form: int, doubtful: bool, noted: bool) -> Shape:
    """The shape of a value of ``code``; ``basis`` is a row of ``BASES``.

    Slots: id, uncertainty if ``doubtful``, id again, subject, encounter if there is one, effective, issued, number
    (two for a range), notes if ``noted``, sources.
    """
    derived = DERIVED_BY_CODE[code]
    number, slots = _measure(derived.unit, Form(form))
    note, source = {"text": text_slot("note")}, {"reference": text_slot("source")}
    extensions: list[dict[str, object]] = []
    if doubtful:
        extensions.append({"url": systems.STANDARD_UNCERTAINTY, "valueDecimal": number_slot(1)})
    if basis:
        extensions.append({"url": systems.CONSTANTS, "valueString": BASES[basis]})
    content = {
        "resourceType": "Observation",
        "id": text_slot("id"),
        "extension": extensions or None,
        "identifier": [{"system": systems.VALUE_IDENTIFIER, "value": text_slot("identifier")}],
        "status": "final",
        "category": _category(derived),
        "code": _code(derived),
        "subject": {"reference": text_slot("subject")},
        "encounter": {"reference": text_slot("encounter")} if encounter else None,
        "effectiveDateTime": time_slot(1),
        "issued": time_slot(2),
        **number,
        "note": [note] if noted else None,
        "method": _method(derived),
        "device": {"reference": SOFTWARE_REFERENCE},
        "derivedFrom": [source],
    }
    return shape(
        "Observation",
        content,
        [
            text_slot("id"),
            *([number_slot(1)] if doubtful else []),
            text_slot("identifier"),
            text_slot("subject"),
            *([text_slot("encounter")] if encounter else []),
            time_slot(1),
            time_slot(2),
            *slots,
            *([note] if noted else []),
            source,
        ],
    )


def _measure(unit: str, form: Form) -> tuple[dict[str, object], list[float]]:
    """The value element of a form, and its slots."""
    words = {"unit": unit_text(unit), "system": systems.UCUM, "code": unit}
    low, high = number_slot(2), number_slot(3)
    if form is Form.BETWEEN:
        return {"valueRange": {"low": {"value": low, **words}, "high": {"value": high, **words}}}, [low, high]
    comparator = {Form.VALUE: None, Form.AT_LEAST: ">=", Form.AT_MOST: "<="}[form]
    return {"valueQuantity": {"value": low, "comparator": comparator, **words}}, [low]


def _category(derived: Derived) -> list[dict[str, object]]:
    general = {
        "system": systems.OBSERVATION_CATEGORY,
        "code": derived.category,
        "display": _CATEGORY_TEXT[derived.category],
    }
    own = {"system": systems.CATEGORY, "code": "derived-oxygen-transport", "display": "Derived oxygen transport"}
    return [{"coding": [general]}, {"coding": [own]}]


def _code(derived: Derived) -> dict[str, object]:
    own = {"system": systems.DERIVED_VALUE, "code": derived.code, "display": derived.title}
    public = {"system": systems.LOINC, "code": derived.loinc, "display": derived.loinc_name}
    return {"coding": [public, own] if derived.loinc else [own], "text": derived.title}


def _method(derived: Derived) -> dict[str, object]:
    name, version = derived.formula.rsplit("/", 1)
    coding = {"system": systems.FORMULA, "version": version, "code": name}
    return {"coding": [coding], "text": f"{name}, version {version}. {derived.source}"}

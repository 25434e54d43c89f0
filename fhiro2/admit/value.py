"""One value[x] to a number in the canonical unit, a bound, a coded answer or a stated absence; never a guess."""

from __future__ import annotations

import re
from collections.abc import Mapping as Map
from typing import Final

import msgspec

from fhiro2.admit.rows import Interner
from fhiro2.catalogue import MEASURED_BY_NAME
from fhiro2.codes import ANSWERS, Code
from fhiro2.errors import Reason, SkipError
from fhiro2.fhir.wire import Component, Observation, Quantity
from fhiro2.model import Caution
from fhiro2.units import Scale, read_unit, substance_scale

NAN: Final = float("nan")
INFINITE: Final = float("inf")
ROOM_AIR: Final = 0.205  # below it inspired oxygen is hypoxic gas, which no shipped code names
_MOST_FRACTION: Final = {"fio2": 1.03, "so2": 1.02, "fo2hb": 1.02}
_SLACK: Final = 1e-9  # a limit given in another unit may come out a last digit beyond
_TETRAMER_LIMIT: Final = 3.3  # mmol/L; below it the unit of haemoglobin is in doubt
_COMPARATORS: Final = frozenset({"<", "<=", ">", ">="})
_NOT_MEASURED: Final = re.compile(
    r"clotted|err(or)?|-{2,}|nan|n/?a|not measured|no result|insufficient", re.IGNORECASE
)


class Value(msgspec.Struct, frozen=True, gc=False):
    """A value in canonical units: ``low`` < ``high`` where only a bound is known; all NaN for a stated absence.

    ``unit`` is the number of the unit in which it was sent, -1 for none.
    """

    value: float = NAN
    low: float = NAN
    high: float = NAN
    answer: int = -1
    cautions: int = 0
    unit: int = -1

    def numbers(self) -> tuple[float, float, float, int]:
        """What was said, however it was written."""
        return self.value, self.low, self.high, self.answer


ABSENT: Final = Value()


class Valuer:
    """Reads values by the shipped units, a site's answers and its signed default units.

    ``units`` numbers each code with the unit it comes in, as ``code|unit``; units of one size are one.
    """

    def __init__(
        self, answers: Map[tuple[str, str], tuple[str, int]], default_units: Map[str, str], units: Interner
    ) -> None:
        self._answers = dict(ANSWERS) | dict(answers)
        self._default_units = default_units
        self._units = units
        self._scales: dict[tuple[str, str | None, str | None, str | None], tuple[Scale, int, int] | SkipError] = {}

    def value(self, part: Observation | Component, code: Code) -> Value | None:
        """The value of ``part``; None where it has none and says nothing; raises SkipError with the reason."""
        quantity = part.valueQuantity
        if quantity is None:
            return self._other(part, code)
        if part.dataAbsentReason is not None:
            raise SkipError(Reason.INVARIANT, "a value together with dataAbsentReason")
        if part.valueString is not None or part.valueCodeableConcept is not None or _other_type(part):
            raise SkipError(Reason.INVARIANT, "more than one value[x]")
        if MEASURED_BY_NAME[code.quantity].coded:
            raise SkipError(Reason.TYPE, "a quantity where a coded answer is due")
        return self._number(quantity, code)

    def _number(self, quantity: Quantity, code: Code) -> Value:
        if quantity.value is None:
            return ABSENT
        scale, unit, cautions = self._scale(quantity, code)
        number = quantity.value * scale.factor + scale.offset
        if code.negate:
            number, cautions = 0.0 - number, cautions | int(Caution.SIGN_FLIPPED)
        number, cautions = _within(number, code, cautions)
        if code.quantity == "hb" and quantity.code == "mmol/L" and quantity.value < _TETRAMER_LIMIT:
            cautions |= int(Caution.SEVERE_ANAEMIA_OR_TETRAMER)
        if quantity.comparator is None:
            return Value(number, number, number, -1, cautions, unit)
        return _bound(number, quantity.comparator, code, cautions, unit)

    def _scale(self, quantity: Quantity, code: Code) -> tuple[Scale, int, int]:
        key = (code.loinc, quantity.system, quantity.code, quantity.unit)
        found = self._scales.get(key)
        if found is None:
            try:
                found = self._find_scale(quantity, code)
            except SkipError as error:
                found = error
            self._scales[key] = found
        if isinstance(found, SkipError):
            raise found
        return found

    def _find_scale(self, quantity: Quantity, code: Code) -> tuple[Scale, int, int]:
        """The conversion to the canonical unit, the number of the unit, and the cautions that reading it earns."""
        default = self._default_units.get(code.loinc, "")
        try:
            unit, legacy = read_unit(
                quantity.system, quantity.code, quantity.unit, code.units, code.unit_if_absent or default
            )
        except SkipError:
            if code.quantity == "fio2" and not quantity.unit and not quantity.code:
                raise SkipError(Reason.AMBIGUOUS, "inspired oxygen without a unit: fraction or percent") from None
            raise
        caution = int(Caution.UNIT_SPELLING) if legacy else 0
        if default and not quantity.unit and not quantity.code and not code.unit_if_absent:
            caution |= int(Caution.SITE_DEFAULT_UNIT)
        canonical = MEASURED_BY_NAME[code.quantity].unit
        found = substance_scale(code.quantity, unit, canonical)
        same = (one for one in code.units if substance_scale(code.quantity, one, canonical) == found)
        return found, self._units.number(f"{code.loinc}|{next(same, unit)}"), caution

    def _other(self, part: Observation | Component, code: Code) -> Value | None:
        concept, text = part.valueCodeableConcept, part.valueString
        if _other_type(part):
            raise SkipError(Reason.TYPE, "not a Quantity")
        if part.dataAbsentReason is not None:
            if concept is not None or text is not None:
                raise SkipError(Reason.INVARIANT, "a value together with dataAbsentReason")
            return ABSENT
        if concept is not None:
            for coding in concept.coding:
                found = self._answers.get((coding.system or "", coding.code or ""))
                if found is not None and found[0] == code.quantity:
                    return Value(answer=found[1])
            raise SkipError(Reason.TYPE, "a coded answer that is not mapped")
        if text is None:
            return None
        if _NOT_MEASURED.fullmatch(text.strip()):
            return ABSENT
        if text.lstrip()[:1] in ("<", ">"):
            raise SkipError(Reason.COMPARATOR, "a bound written as text")
        if any(sign.isdigit() for sign in text):
            raise SkipError(Reason.NUMBER, "a number written as text")
        raise SkipError(Reason.TYPE, "text where a Quantity is due")


def _other_type(part: Observation | Component) -> bool:
    return not (
        part.valueBoolean is None
        and part.valueInteger is None
        and part.valueRange is None
        and part.valueRatio is None
        and part.valueSampledData is None
        and part.valueTime is None
        and part.valueDateTime is None
        and part.valuePeriod is None
    )


def _within(number: float, code: Code, cautions: int) -> tuple[float, int]:
    most = _MOST_FRACTION.get(code.quantity)
    if most is not None and 1.0 < number <= most + 1e-9:
        return 1.0, cautions | int(Caution.CLIPPED_TO_FULL)
    if code.quantity == "fio2" and number < ROOM_AIR:
        raise SkipError(Reason.RANGE, "inspired oxygen below room air without a code for hypoxic gas")
    if not code.low - _SLACK <= number <= code.high + _SLACK:
        raise SkipError(Reason.RANGE, f"outside the plausible range of {code.quantity}")
    return number, cautions


def _bound(number: float, comparator: str, code: Code, cautions: int, unit: int) -> Value:
    if comparator not in _COMPARATORS:
        raise SkipError(Reason.COMPARATOR, "a comparator that R4 does not have")
    if code.negate:
        comparator = comparator.translate(str.maketrans("<>", "><"))
    cautions |= int(Caution.INTERVAL)
    if comparator.startswith("<"):
        return Value(NAN, 0.0 if code.low >= 0 else -INFINITE, number, -1, cautions, unit)
    return Value(NAN, number, 1.0 if code.high <= 1.03 else INFINITE, -1, cautions, unit)

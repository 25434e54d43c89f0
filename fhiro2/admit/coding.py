"""Which shipped code a resource's codings mean: matched on (system, code) alone, never on words."""

from __future__ import annotations

from collections.abc import Mapping as Map

from fhiro2.codes import LOINC, Code
from fhiro2.errors import Reason, SkipError
from fhiro2.fhir.wire import Concept
from fhiro2.model import Specimen

SATURATION_OR_PULSE = "2708-6"
_LOOSER_VENOUS = {Specimen.MIXED_VENOUS, Specimen.CENTRAL_VENOUS}

Table = Map[tuple[str, str], Code]
Key = tuple[tuple[str | None, str | None], ...]


class Coder:
    """Finds the code that all codings of a concept agree on; answers are kept, since feeds repeat themselves."""

    def __init__(self, table: Table) -> None:
        self._table = table
        self._known: dict[Key, Code | SkipError] = {}

    def code(self, concept: Concept | None) -> Code:
        """The code meant by ``concept``; raises SkipError (unmapped, refused or in conflict)."""
        if concept is None:
            raise SkipError(Reason.INVARIANT, "no code")
        codings = concept.coding
        if len(codings) == 1:
            key: Key = ((codings[0].system, codings[0].code),)
        else:
            key = tuple([(coding.system, coding.code) for coding in codings])
        found = self._known.get(key)
        if found is None:
            try:
                found = self._agree(key)
            except SkipError as error:
                found = error
            self._known[key] = found
        if isinstance(found, SkipError):
            raise found
        return found

    def _agree(self, key: Key) -> Code:
        found = [self._table[pair] for pair in key if pair in self._table]  # type: ignore[index]
        if not found:
            raise SkipError(Reason.UNMAPPED_CODE, "no coding of a known system and code")
        usable = [code for code in found if code.use != "refuse"]
        if not usable:
            reason = Reason.ORDER_ONLY if "order only" in found[0].status else Reason.NOT_USED_CODE
            raise SkipError(reason, f"LOINC {found[0].loinc} is not a result that is read")
        best = usable[0]
        for other in usable[1:]:
            best = _narrower(best, other)
        return best


def _narrower(one: Code, other: Code) -> Code:
    if one.use == "panel" or other.use == "panel":
        return other if one.use == "panel" else one
    if {one.quantity, other.quantity} == {"spo2", "so2"} and SATURATION_OR_PULSE in (one.loinc, other.loinc):
        return one if one.quantity == "spo2" else other
    if one.quantity != other.quantity or one.corrected != other.corrected or one.negate != other.negate:
        raise SkipError(Reason.CONFLICT, f"codings {one.loinc} and {other.loinc} name different quantities")
    if one.specimen == other.specimen:
        return one if one.kind <= other.kind and (one.method or not other.method) else other
    if one.specimen == Specimen.UNKNOWN or (one.specimen == Specimen.VENOUS and other.specimen in _LOOSER_VENOUS):
        return other
    if other.specimen == Specimen.UNKNOWN or (other.specimen == Specimen.VENOUS and one.specimen in _LOOSER_VENOUS):
        return one
    raise SkipError(Reason.CONFLICT, f"codings {one.loinc} and {other.loinc} name different blood")


def site_table(shipped: Table, site: Map[tuple[str, str], str]) -> Table:
    """The shipped table with a site's own codes added; ``site`` maps (system, code) to a shipped LOINC code."""
    table = dict(shipped)
    for key, loinc in site.items():
        table[key] = shipped[LOINC, loinc]
    return table

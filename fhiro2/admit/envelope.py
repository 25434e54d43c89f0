"""The envelope of an Observation: identity, origin, modifiers and status, before anything in it is interpreted."""

from __future__ import annotations

import re
from typing import Any, Final

from fhiro2.errors import Reason, SkipError
from fhiro2.fhir.systems import IDENTIFIERS
from fhiro2.fhir.wire import Observation

_ACCEPTED: Final = frozenset({"final", "amended", "corrected"})
_WAITING: Final = frozenset({"preliminary", "registered"})
_RETRACTED: Final = frozenset({"entered-in-error", "cancelled"})
ID: Final = re.compile(r"[A-Za-z0-9\-.]{1,64}", re.ASCII)


def check_envelope(found: Observation) -> None:
    """Raise SkipError for an Observation that is not to be read, whatever it holds."""
    if found.resourceType != "Observation":
        raise SkipError(Reason.OTHER_TYPE, "not an Observation")
    if found.id is None or not ID.fullmatch(found.id):
        raise SkipError(Reason.INVARIANT, "no valid id")
    if found.identifier and is_own(found.identifier):
        raise SkipError(Reason.OWN_OUTPUT, "written by this program")
    if found.modifierExtension is not None:
        raise SkipError(Reason.MODIFIER, "an unknown modifier extension")
    if found.implicitRules is not None:
        raise SkipError(Reason.VERSION, "implicit rules that are not known")
    if found.status not in _ACCEPTED:
        if found.status in _WAITING:
            raise SkipError(Reason.PRELIMINARY, "not final yet")
        if found.status in _RETRACTED:
            raise SkipError(Reason.RETRACTED, "withdrawn by its source")
        raise SkipError(Reason.STATUS, "a status that is not known or says unknown")


def is_own(identifiers: Any) -> bool:
    """Whether one of a resource's identifiers is of this program's own systems."""
    if isinstance(identifiers, (list, tuple)):
        for row in identifiers:
            if type(row) is dict and str(row.get("system")).startswith(IDENTIFIERS):
                return True
    return False

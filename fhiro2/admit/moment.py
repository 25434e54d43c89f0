"""FHIR times to microseconds since 1970, exact, with what had to be assumed."""

from __future__ import annotations

import re
from datetime import UTC, datetime, timedelta, timezone
from functools import lru_cache
from zoneinfo import ZoneInfo

from fhiro2.errors import Reason, SkipError
from fhiro2.model import MICROSECONDS, Caution

_FORM = re.compile(
    r"(\d{4})-(\d\d)-(\d\d)T(\d\d):(\d\d):(\d\d)(?:\.(\d{1,12}))?(?:(Z)|([+-])(\d\d):(\d\d))?", re.ASCII
)
_PARTIAL = re.compile(r"\d{4}(-\d\d(-\d\d)?)?", re.ASCII)
_EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
_FIRST_YEAR = 1950
_WIDEST_OFFSET = 14 * 60


@lru_cache(maxsize=65536)
def moment(text: str, zone: str | None) -> tuple[int, int]:
    """Microseconds since 1970 UTC of a FHIR dateTime or instant, and the caution bits that it earns.

    A leap second is read as the next second; more than six decimals are cut. Raises SkipError(TIME) for a date
    alone, 24:00, an impossible date or offset, a year before 1950, and a time without offset unless ``zone`` (an
    IANA name) places it; a local time that never was is refused, one that occurs twice takes the first and a caution.
    """
    found = _FORM.fullmatch(text)
    if found is None:
        kind = "a date alone cannot be paired" if _PARTIAL.fullmatch(text) else "not a FHIR dateTime with seconds"
        raise SkipError(Reason.TIME, kind)
    year, month, day, hour, minute, second = (int(part) for part in found.group(1, 2, 3, 4, 5, 6))
    if year < _FIRST_YEAR:
        raise SkipError(Reason.TIME, f"the year is before {_FIRST_YEAR}")
    micro = int((found.group(7) or "0").ljust(6, "0")[:6])
    leap = second == 60
    try:
        local = datetime(year, month, day, hour, minute, 59 if leap else second)  # noqa: DTZ001 - zone follows
    except ValueError:
        raise SkipError(Reason.TIME, "no such date or time") from None
    if found.group(8):
        aware, caution = local.replace(tzinfo=UTC), 0
    elif found.group(9):
        aware, caution = local.replace(tzinfo=_offset(found)), 0
    else:
        aware, caution = _placed(local, zone)
    seconds = (aware - _EPOCH) // timedelta(seconds=1) + (1 if leap else 0)
    return seconds * MICROSECONDS + (0 if leap else micro), caution


def _offset(found: re.Match[str]) -> timezone:
    minutes = int(found.group(10)) * 60 + int(found.group(11))
    if minutes > _WIDEST_OFFSET or int(found.group(11)) > 59:
        raise SkipError(Reason.TIME, "the offset is wider than 14 hours")
    return timezone(timedelta(minutes=minutes if found.group(9) == "+" else -minutes))


def _placed(local: datetime, zone: str | None) -> tuple[datetime, int]:
    if zone is None:
        raise SkipError(Reason.TIME, "no offset, and no zone declared for this site")
    first = local.replace(tzinfo=ZoneInfo(zone), fold=0)
    second = local.replace(tzinfo=ZoneInfo(zone), fold=1)
    if first.utcoffset() == second.utcoffset():
        return first, int(Caution.TIME_ZONE_DECLARED)
    if first.astimezone(UTC).astimezone(ZoneInfo(zone)).replace(tzinfo=None) != local:
        raise SkipError(Reason.TIME, "this local time does not exist on that night")
    return first, int(Caution.TIME_ZONE_DECLARED | Caution.TIME_AMBIGUOUS)

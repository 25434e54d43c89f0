"""FHIR times: exact instants, offsets and leap seconds; refusals for what cannot be placed.

Expected instants: RFC 3339 and POSIX time (seconds since 1970-01-01T00:00:00Z without leap seconds); the nights of the
clock changes: EU Directive 2000/84/EC (last Sundays of March and October, 01:00 UTC).
"""

import pytest

from fhiro2.admit.moment import moment
from fhiro2.errors import Reason, SkipError
from fhiro2.model import Caution

NEW_YEAR = 1_767_225_600_000_000  # 2026-01-01T00:00:00Z, 20454 days after 1970-01-01


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("2026-01-01T00:00:00Z", NEW_YEAR),
        ("2026-01-01T00:00:00-00:00", NEW_YEAR),
        ("2026-01-01T01:00:00+01:00", NEW_YEAR),
        ("2026-01-01T14:00:00+14:00", NEW_YEAR),
        ("2026-01-01T00:00:00.123456789Z", NEW_YEAR + 123_456),
        ("2025-12-31T23:59:60Z", NEW_YEAR),
    ],
)
def test_instants_are_exact(text: str, expected: int) -> None:
    assert moment(text, None) == (expected, 0)


@pytest.mark.parametrize(
    "text",
    [
        "2026", "2026-03", "2026-03-01", "2026-03-01T24:00:00Z", "2026-02-30T10:00:00Z", "2026-13-01T10:00:00Z",
        "0001-01-01T00:00:00Z", "1900-01-01T00:00:00Z", "2026-03-01T10:00:00+15:00", "2026-03-01T10:00Z",
        "2026-W09-1T10:00:00Z", "20260301T100000Z", "2026-03-01 10:00:00Z", "1772359200", "",
        "2026-03-01T10:00:00", "٢٠٢٦-03-01T10:00:00Z",
    ],
)  # fmt: skip
def test_what_cannot_be_placed_is_refused(text: str) -> None:
    with pytest.raises(SkipError) as refused:
        moment(text, None)
    assert refused.value.reason is Reason.TIME


def test_a_declared_zone_places_local_time() -> None:
    assert moment("2026-01-01T01:00:00", "Europe/Berlin") == (NEW_YEAR, Caution.TIME_ZONE_DECLARED)


def test_the_hour_that_occurs_twice_is_marked() -> None:
    found, caution = moment("2026-10-25T02:30:00", "Europe/Berlin")
    assert found == moment("2026-10-25T00:30:00Z", None)[0]
    assert caution == Caution.TIME_ZONE_DECLARED | Caution.TIME_AMBIGUOUS


def test_the_hour_that_never_was_is_refused() -> None:
    with pytest.raises(SkipError) as refused:
        moment("2026-03-29T02:30:00", "Europe/Berlin")
    assert refused.value.reason is Reason.TIME


def test_an_offset_makes_both_nights_plain() -> None:
    assert moment("2026-10-25T02:30:00+01:00", "Europe/Berlin")[1] == 0

"""What can go wrong, grouped by what the caller does next, and the closed list of reasons.

``SkipError``: one resource (or one part of it) is not usable: count it, keep it, go on.
``RetryError``: the same call may work later. ``StopError``: refuse to start or to go on (exit code 2).
Texts carry resource ids and file positions, never a patient's values or name.
"""

from __future__ import annotations

from enum import StrEnum


class Bucket(StrEnum):
    """Where one received resource version ended; the account is the sum over these."""

    USED = "used"
    REPEATED = "repeated"
    WAITING = "waiting"
    QUARANTINED = "quarantined"
    OUT_OF_SCOPE = "out_of_scope"


class Reason(StrEnum):
    """Why a resource (or a part of it) was not used. The value is the code shown to people."""

    # quarantined: content that cannot be trusted or understood
    JSON = "json"
    TRUNCATED = "truncated"
    SIZE = "size"
    DEPTH = "depth"
    ENCODING = "encoding"
    DUPLICATE_KEY = "duplicate-key"
    TYPE = "type"
    NUMBER = "number"
    RANGE = "range"
    COMPARATOR = "comparator"
    UNIT = "unit"
    AMBIGUOUS = "ambiguous"
    STATUS = "status"
    INVARIANT = "invariant"
    CONFLICT = "conflict"
    SUBJECT = "subject"
    SPECIMEN = "specimen"
    TIME = "time"
    MODIFIER = "modifier"
    VERSION = "version"
    # waiting
    PRELIMINARY = "preliminary"
    # out of scope
    RETRACTED = "retracted"
    OWN_OUTPUT = "own-output"
    GROUPING_ONLY = "grouping-only"
    OTHER_TYPE = "other-type"
    UNMAPPED_CODE = "unmapped-code"
    ORDER_ONLY = "order-only"
    EXCLUDED_PATIENT = "excluded-patient"
    NOT_USED_CODE = "not-used-code"
    # repeated
    SAME_VERSION = "same-version"
    SUPERSEDED = "superseded"


_BUCKETS = {
    Reason.PRELIMINARY: Bucket.WAITING,
    Reason.RETRACTED: Bucket.OUT_OF_SCOPE,
    Reason.OWN_OUTPUT: Bucket.OUT_OF_SCOPE,
    Reason.GROUPING_ONLY: Bucket.OUT_OF_SCOPE,
    Reason.OTHER_TYPE: Bucket.OUT_OF_SCOPE,
    Reason.UNMAPPED_CODE: Bucket.OUT_OF_SCOPE,
    Reason.ORDER_ONLY: Bucket.OUT_OF_SCOPE,
    Reason.EXCLUDED_PATIENT: Bucket.OUT_OF_SCOPE,
    Reason.NOT_USED_CODE: Bucket.OUT_OF_SCOPE,
    Reason.SAME_VERSION: Bucket.REPEATED,
    Reason.SUPERSEDED: Bucket.REPEATED,
}


class Fhiro2Error(Exception):
    """Root of all errors that this program raises on purpose."""


class SkipError(Fhiro2Error):
    """One resource or part is unusable for ``reason``; ``detail`` says what and where, without values."""

    def __init__(self, reason: Reason, detail: str) -> None:
        super().__init__(f"{reason}: {detail}")
        self.reason = reason
        self.detail = detail

    @property
    def bucket(self) -> Bucket:
        """The bucket that the reason belongs to."""
        return _BUCKETS.get(self.reason, Bucket.QUARANTINED)


class RetryError(Fhiro2Error):
    """The call failed in a way that may pass: repeat it later, where known not before ``after`` seconds."""

    def __init__(self, message: str, after: float | None = None) -> None:
        super().__init__(message)
        self.after = after


class StopError(Fhiro2Error):
    """Refused to start or to go on: the message says what, where and what to do."""

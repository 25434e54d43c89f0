"""The account: every received resource version is in exactly one bucket, and the sum is always checked."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, field
from typing import Any

from fhiro2.errors import Bucket, Reason, StopError


@dataclass
class Account:
    """Counts over one run: resources by bucket and reason, ``parts`` components, ``held`` patients."""

    buckets: Counter[Bucket] = field(default_factory=Counter)
    reasons: Counter[tuple[Bucket, Reason]] = field(default_factory=Counter)
    parts: Counter[Reason] = field(default_factory=Counter)
    derived: Counter[str] = field(default_factory=Counter)
    not_computable: Counter[tuple[str, str]] = field(default_factory=Counter)
    flags: Counter[str] = field(default_factory=Counter)
    held: int = 0
    notices: list[str] = field(default_factory=list)

    def place(self, bucket: Bucket, reason: Reason | None, number: int = 1) -> None:
        """Count ``number`` resource versions into their final bucket."""
        self.buckets[bucket] += number
        if reason is not None:
            self.reasons[bucket, reason] += number

    def check(self, received: int) -> None:
        """Raise StopError unless the buckets add up to what was received."""
        placed = sum(self.buckets.values())
        if placed != received:
            raise StopError(f"the account does not balance: {received} received, {placed} placed; report this defect")

    def as_json(self) -> dict[str, Any]:
        """The account as a dictionary with sorted keys, free of times and file names."""
        return {
            "received": sum(self.buckets.values()),
            **{bucket.value: self.buckets[bucket] for bucket in Bucket},
            "parts_quarantined": sum(self.parts.values()),
            "derived": sum(self.derived.values()),
            "not_computable": sum(self.not_computable.values()),
            "flags_raised": sum(self.flags.values()),
            "patients_held": self.held,
            "reasons": {
                bucket.value: {
                    reason.value: count for (where, reason), count in sorted(self.reasons.items()) if where is bucket
                }
                for bucket in Bucket
            },
            "parts_quarantined_by_reason": {reason.value: count for reason, count in sorted(self.parts.items())},
            "derived_by_code": dict(sorted(self.derived.items())),
            "not_computable_by_code": _nested(self.not_computable),
            "flags_by_rule": dict(sorted(self.flags.items())),
            "notices": sorted(self.notices),
        }


def _nested(counts: Counter[tuple[str, str]]) -> dict[str, dict[str, int]]:
    found: dict[str, dict[str, int]] = {}
    for (code, why), count in sorted(counts.items()):
        found.setdefault(code, {})[why] = count
    return found

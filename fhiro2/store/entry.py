"""Something of ours: as it is to be written (outbox), or as the server has it (ledger)."""

from __future__ import annotations

from dataclasses import dataclass

NEW, IN_FLIGHT, DEAD = "new", "in-flight", "dead"
STANDING, WITHDRAWN = "standing", "withdrawn"


@dataclass(frozen=True)
class Entry:
    """One resource of ours. ``after`` must be written before it; ``withdrawal`` says that it takes back its target."""

    reference: str
    patient: str
    hash: str
    content: bytes
    etag: str = ""
    state: str = NEW
    after: str = ""
    withdrawal: bool = False
    sequence: int = 0
    attempts: int = 0
    problem: str = ""

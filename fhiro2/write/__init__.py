"""Outcomes written: a sink takes what the core found and keeps it, the same input always as the same resources."""

from __future__ import annotations

from dataclasses import dataclass
from types import TracebackType
from typing import Protocol, Self

from fhiro2.model import Outcome


@dataclass(frozen=True)
class Run:
    """What is stamped on all that one run writes, and is never part of what is compared.

    ``recorded`` is the run's clock as a FHIR instant, ``pack_hash`` the SHA-256 of the rules in hexadecimal.
    """

    recorded: str
    pack_hash: str
    software_version: str


class Sink(Protocol):
    """Where outcomes go. Used as a context manager: leaving it with an error leaves nothing half-written behind."""

    def write(self, outcome: Outcome) -> None:
        """Keep the values and flags of one batch."""

    def __enter__(self) -> Self:
        """Ready to write."""

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        """Finish, or undo after an error."""

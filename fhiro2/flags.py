"""What a flag is: one episode of one rule in one patient, with its turns and the values that brought each of them."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

AxisState = tuple[str, str, str]
"""A link of the oxygen chain at an anchor: its name, its state (met, not met, not assessable), and why."""


def anchor_id(observation: str, part: int) -> str:
    """Name of an anchor: its Observation, with ``#part`` where it is one of the components (``part`` from 0)."""
    return observation if part < 0 else f"{observation}#{part}"


@dataclass(frozen=True)
class Cited:
    """Where a value came from, in names that outlive the batch: a received Observation, or a value derived at one.

    ``part`` is the component (-1: the Observation itself); ``content_hash`` says which content it was where
    ``version`` is ''. ``derived`` is '' for what was received, else the code of the value derived at this anchor.
    """

    source: str
    subject: str
    observation: str
    part: int
    version: str
    content_hash: str
    derived: str = ""

    @property
    def anchor_id(self) -> str:
        """Name of the anchor."""
        return anchor_id(self.observation, self.part)


@dataclass(frozen=True)
class Evidence:
    """One value as it stood at a turn of an episode; ``age`` is how long before the anchor it was taken (µs).

    ``value`` is None where only a bound is known, ``uncertainty`` where it is not known.
    """

    name: str
    value: float | None
    uncertainty: float | None
    unit: str
    age: int
    cited: Cited


class TurnKind(StrEnum):
    """What happens to an episode at an anchor."""

    RAISED = "raised"
    WORSENED = "worsened"
    CLEARED = "cleared"
    RAISED_AGAIN = "raised again"


@dataclass(frozen=True)
class Turn:
    """One turn of an episode, with the values that brought it as they stood then.

    ``probability`` is that of what the rule finds, None and ``message`` '' where it was cleared. ``axes`` says of each
    link of the oxygen chain how it stood.
    """

    kind: TurnKind
    at: int
    anchor: Cited
    probability: float | None
    message: str
    evidence: tuple[Evidence, ...]
    axes: tuple[AxisState, ...] = ()


@dataclass(frozen=True)
class Flag:
    """One episode as it stands at the end of the anchors seen; the first turn raised it."""

    rule: str
    rule_version: int
    title: str
    severity: str
    patient: str
    cautions: tuple[str, ...]
    turns: tuple[Turn, ...]

    @property
    def anchor(self) -> Cited:
        """The anchor that raised it: with the rule, the key of the episode."""
        return self.turns[0].anchor

    @property
    def raised(self) -> int:
        """When it was raised (microseconds since 1970)."""
        return self.turns[0].at

    @property
    def cleared(self) -> int | None:
        """When it was cleared; None while it stands."""
        return self.turns[-1].at if self.turns[-1].kind is TurnKind.CLEARED else None

    @property
    def latest(self) -> Turn:
        """The last turn that raised or worsened it."""
        return next(turn for turn in reversed(self.turns) if turn.kind is not TurnKind.CLEARED)

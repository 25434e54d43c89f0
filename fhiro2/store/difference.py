"""What is to be written: the difference between what stands and what the server is known, or may be about, to hold."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field

from fhiro2.store.entry import IN_FLIGHT, STANDING, Entry

Withdraw = Callable[[Entry], tuple[Entry, Entry]]


@dataclass
class Difference:
    """What to post, each with its Provenance, and the references of what no longer needs to be written."""

    post: list[tuple[Entry, Entry]] = field(default_factory=list)
    drop: set[str] = field(default_factory=set)


def difference(
    wanted: Mapping[str, tuple[Entry, Entry]],
    written: Mapping[str, Entry],
    waiting: Mapping[str, Entry],
    withdraw: Withdraw,
) -> Difference:
    """Compare what stands (with its Provenance) with the ledger and the outbox, by reference.

    ``withdraw`` makes of an entry what says that it was in error. What may have reached the server without an answer
    counts as being there: it is written over or withdrawn, never forgotten.
    """
    found = Difference()
    for reference in dict.fromkeys([*wanted, *written, *waiting]):
        pair, there, sent = wanted.get(reference), written.get(reference), waiting.get(reference)
        in_doubt = sent is not None and sent.state == IN_FLIGHT
        stands = there is not None and there.state == STANDING
        if pair is not None:
            if sent is not None and sent.hash == pair[0].hash:
                continue
            if there is None or not stands or there.hash != pair[0].hash or in_doubt:
                found.post.append(pair)
            elif sent is not None:
                found.drop.add(reference)
        elif sent is not None and sent.withdrawal:
            continue
        elif there is not None and stands:
            found.post.append(withdraw(there))
        elif sent is not None and in_doubt:
            found.post.append(withdraw(sent))
        elif sent is not None:
            found.drop.add(reference)
    return found


def by_reference(entries: Iterable[Entry]) -> dict[str, Entry]:
    """Entries by their reference, without Provenance, which follows its target."""
    return {one.reference: one for one in entries if not one.reference.startswith("Provenance/")}

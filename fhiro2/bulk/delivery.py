"""From the outbox to the server: in order, whatever was sent without an answer asked after first."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass

from fhiro2.errors import RetryError
from fhiro2.store import Store
from fhiro2.store.entry import Entry
from fhiro2.write.server import Delivered, Fate, ServerSink

AT_ONCE = 200


@dataclass
class Delivery:
    """What became of the writes: resources written and withdrawn, and why it ended before its time ('' if not)."""

    written: int = 0
    withdrawn: int = 0
    stopped: str = ""


def deliver(store: Store, sink: ServerSink, together: int, now: Callable[[], int]) -> Delivery:
    """Send what waits, ``together`` in one request; ends where the server cannot be reached, to go on later."""
    done, failed = Delivery(), set[str]()
    try:
        while due := _due(store, failed):
            for one, sent in _sent(store, sink, due, together):
                with store.transaction() as work:
                    if sent.fate is Fate.DONE:
                        work.confirm(one, sent.etag, now())
                        done.written += not one.withdrawal
                        done.withdrawn += one.withdrawal
                    else:
                        failed.add(one.reference)
                        work.fail(one.reference, sent.problem, dead=sent.fate is Fate.DEAD)
    except RetryError as error:
        done.stopped = str(error)
    return done


def _due(store: Store, failed: set[str]) -> list[Entry]:
    with store.transaction() as work:
        return work.due(failed, AT_ONCE)


def _sent(store: Store, sink: ServerSink, due: Sequence[Entry], together: int) -> Iterator[tuple[Entry, Delivered]]:
    """Send what is due: in batches where that is wanted, but one by one what may have arrived before."""
    with store.transaction() as work:
        references = [one.reference for one in due]
        etags = {one.reference: one.etag for one in work.written(references)}
        doubts = work.doubts(references)
    single = [one for one in due if one.reference in doubts or together == 1]
    fresh = [one for one in due if one.reference not in doubts and together > 1]
    for start in range(0, len(fresh), together):
        some = fresh[start : start + together]
        _note(store, some)
        answers = sink.put_together([(one.reference, one.content, etags.get(one.reference, "")) for one in some])
        for one, answer in zip(some, answers, strict=True):
            if answer is None:
                single.append(one)
            else:
                yield one, answer
    for one in single:
        _note(store, [one])
        yield one, sink.put(one.reference, one.content, etags.get(one.reference, ""), doubts.get(one.reference, []))


def _note(store: Store, entries: Sequence[Entry]) -> None:
    """Remember, before the network is asked, that from now on the server may hold these."""
    with store.transaction() as work:
        work.send(entries)

"""STORE: what was received, what was written and what is still to be written, in one SQLite file.

One worker writes at a time, by a lease. What belongs together (resources, where they ended, what is to be written, the
cursor) is committed in one transaction; the network is never inside one.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from sqlalchemy import Connection, create_engine, delete, event, insert, select, update

from fhiro2.errors import StopError
from fhiro2.store.migrations import migrate
from fhiro2.store.received import Ended, Received, ReceivedVersions
from fhiro2.store.tables import LEASE
from fhiro2.store.written import WrittenResources

__all__ = ["Ended", "Received", "Store", "Transaction"]


class Transaction(ReceivedVersions, WrittenResources):
    """Reads and changes of the store that are kept together, or not at all."""


class Store:
    """A store in a SQLite file, made for its owner's eyes where it is not there.

    Raises StopError for a file that is no store of ours, or cannot be made.
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        try:
            path.touch(mode=0o600)
        except OSError as error:
            raise StopError(f"{path}: cannot be made ({error.strerror}); name a folder that may be written") from None
        self._engine = create_engine(f"sqlite:///{path}")
        event.listen(self._engine, "connect", _prepare)
        event.listen(self._engine, "begin", lambda connection: connection.exec_driver_sql("BEGIN IMMEDIATE"))
        self._prolong: Callable[[Connection], None] | None = None
        migrate(self._engine)

    def close(self) -> None:
        """Let go of the file."""
        self._engine.dispose()

    @contextmanager
    def transaction(self) -> Iterator[Transaction]:
        """One transaction: all of it is kept, or nothing. Under a lease it prolongs it, or raises StopError."""
        with self._engine.begin() as connection:
            if self._prolong is not None:
                self._prolong(connection)
            yield Transaction(connection)

    @contextmanager
    def leased(
        self, holder: str, now: Callable[[], int], length: int, alive: Callable[[str], bool] = lambda holder: True
    ) -> Iterator[None]:
        """Be the one worker meanwhile: each transaction prolongs the lease to ``length`` microseconds from then.

        Raises StopError while another is who may be ``alive``, also in a transaction after another took over a lease
        that had run out: then nothing of the transaction is kept.
        """

        def prolong(connection: Connection) -> None:
            mine = update(LEASE).where(LEASE.c.holder == holder).values(until=now() + length)
            if not connection.execute(mine).rowcount:
                raise StopError(f"{self.path}: another worker took this store over; this one ends")

        self.take_lease(holder, now(), now() + length, alive)
        self._prolong = prolong
        try:
            yield
        finally:
            self._prolong = None
            self.give_up_lease(holder)

    def take_lease(
        self, holder: str, now: int, until: int, alive: Callable[[str], bool] = lambda holder: True
    ) -> None:
        """Become the one worker until ``until``; asked again, go on.

        Raises StopError while another holder has it who may be ``alive``.
        """
        with self._engine.begin() as connection:
            row = connection.execute(select(LEASE)).one_or_none()
            if row is not None and row.holder != holder and row.until > now and alive(row.holder):
                seconds = (row.until - now) // 1_000_000 + 1
                raise StopError(
                    f"{self.path}: worker {row.holder} has this store for {seconds} s more; end it or wait"
                )
            connection.execute(delete(LEASE))
            connection.execute(insert(LEASE).values(id=1, holder=holder, until=until))

    def give_up_lease(self, holder: str) -> None:
        """End the lease of ``holder``."""
        with self._engine.begin() as connection:
            connection.execute(delete(LEASE).where(LEASE.c.holder == holder))


def _prepare(connection: Any, _: Any) -> None:
    connection.isolation_level = None  # transactions are begun by the engine's own event
    try:
        for setting in ("journal_mode=WAL", "synchronous=FULL", "foreign_keys=ON", "busy_timeout=10000"):
            connection.execute(f"PRAGMA {setting}")
    except Exception as error:
        raise StopError(
            f"the store cannot be opened ({type(error).__name__}); name a file made by this program"
        ) from error

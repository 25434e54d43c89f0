"""The versions of the store's schema, each a step from the one before; a failed step leaves the store as it was."""

from __future__ import annotations

from collections.abc import Callable, Sequence

from sqlalchemy import Connection, Engine, text

from fhiro2.errors import StopError
from fhiro2.store.tables import METADATA

Step = Callable[[Connection], None]


def _first(connection: Connection) -> None:
    METADATA.create_all(connection)


STEPS: tuple[Step, ...] = (_first,)


def migrate(engine: Engine, steps: Sequence[Step] = STEPS) -> int:
    """Bring the schema to the last of ``steps`` and return its number; raises StopError for a store that is newer."""
    with engine.begin() as connection:
        connection.execute(text("CREATE TABLE IF NOT EXISTS schema_version (number INTEGER NOT NULL)"))
        number = connection.execute(text("SELECT number FROM schema_version")).scalar()
        if number is None:
            connection.execute(text("INSERT INTO schema_version VALUES (0)"))
            number = 0
        if number > len(steps):
            raise StopError(
                f"the store has schema {number}, this program knows up to {len(steps)}; install a newer one"
            )
        for step in steps[number:]:
            step(connection)
        connection.execute(text("UPDATE schema_version SET number = :number"), {"number": len(steps)})
    return len(steps)

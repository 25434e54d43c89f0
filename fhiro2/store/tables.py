"""The tables of the store. Times are integer microseconds since 1970, UTC; texts of servers are kept as they came."""

from __future__ import annotations

from collections.abc import Iterable, Iterator

from sqlalchemy import BigInteger, Column, Index, Integer, LargeBinary, MetaData, Table, Text

_Number = BigInteger().with_variant(Integer, "sqlite")

_MANY = 500  # values in one IN list

METADATA = MetaData()

LEASE = Table(
    "lease",
    METADATA,
    Column("id", Integer, primary_key=True),
    Column("holder", Text, nullable=False),
    Column("until", _Number, nullable=False),
)
"""The one worker that may write; at most one row."""

CURSOR = Table(
    "cursor",
    METADATA,
    Column("source", Text, primary_key=True),
    Column("stream", Text, primary_key=True),
    Column("updated", Text, nullable=False),
)
"""How far each stream of a source was read: the greatest ``lastUpdated`` of a finished cycle, as it was written."""

VERSION = Table(
    "version",
    METADATA,
    Column("row", _Number, primary_key=True, autoincrement=True),
    Column("source", Text, nullable=False),
    Column("key", Text, nullable=False),
    Column("version", Text, nullable=False),
    Column("hash", Text, nullable=False),
    Column("patient", Text, nullable=False),
    Column("content", LargeBinary),
    Column("bucket", Text, nullable=False),
    Column("reason", Text, nullable=False),
    Column("detail", Text, nullable=False),
    Column("refused_parts", Text, nullable=False),
    Index("version_once", "source", "key", "version", "hash", unique=True),
    Index("version_patient", "source", "patient"),
    sqlite_autoincrement=True,
)
"""Each distinct version received: its raw JSON until a later version supersedes it, and where it ended."""

REFERENCE = Table(
    "reference",
    METADATA,
    Column("source", Text, primary_key=True),
    Column("key", Text, primary_key=True),
    Column("target", Text, primary_key=True),
    Index("reference_target", "source", "target"),
)
"""What resources point to, so that a late or changed target brings those back that wait for it."""

COUNTER = Table("counter", METADATA, Column("name", Text, primary_key=True), Column("number", _Number, nullable=False))
"""What was received and is not kept: the same version again, own output, foreign entries."""

WRITTEN = Table(
    "written",
    METADATA,
    Column("reference", Text, primary_key=True),
    Column("patient", Text, nullable=False),
    Column("hash", Text, nullable=False),
    Column("content", LargeBinary, nullable=False),
    Column("etag", Text, nullable=False),
    Column("state", Text, nullable=False),
    Column("at", _Number, nullable=False),
    Index("written_patient", "patient"),
)
"""The ledger: what the server is known to hold of ours. State: standing or withdrawn."""

OUTBOX = Table(
    "outbox",
    METADATA,
    Column("sequence", _Number, primary_key=True, autoincrement=True),
    Column("reference", Text, nullable=False, unique=True),
    Column("patient", Text, nullable=False),
    Column("hash", Text, nullable=False),
    Column("content", LargeBinary, nullable=False),
    Column("after", Text, nullable=False),
    Column("withdrawal", Integer, nullable=False),
    Column("state", Text, nullable=False),
    Column("attempts", Integer, nullable=False),
    Column("problem", Text, nullable=False),
    sqlite_autoincrement=True,
)
"""What is to be written. State: new, in-flight (its answer is not known), dead (a person must look).

``after`` is the reference that must be written first ('' for none): Provenance follows its target.
"""

DOUBT = Table(
    "doubt",
    METADATA,
    Column("reference", Text, primary_key=True),
    Column("hash", Text, primary_key=True),
    Column("content", LargeBinary, nullable=False),
)
"""Every content that was sent and not answered yet: what the server then holds may be one of these, and still ours."""


def chunks(values: Iterable[str]) -> Iterator[list[str]]:
    """The distinct values in order, as many at a time as one statement takes."""
    everything = sorted(set(values))
    for start in range(0, len(everything), _MANY):
        yield everything[start : start + _MANY]

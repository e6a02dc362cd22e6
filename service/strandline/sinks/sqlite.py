"""The SQLite sink: the embedded default, and the one that needs nothing beside it.

Tables `events` and `late` and the position reached; how a file is opened and written is `database`. Several feeds may
share one file: every row and every position carries its feed.
"""

from __future__ import annotations

import os
import sqlite3
from collections.abc import Sequence

from ..core.columns import Batch, Lane
from ..ports import Lines
from .database import BUSY_WAIT_S, Database, Table, insert_columns
from .rows import LANES, event_texts, late_by_ns, one_lane, source_column

# A key of (feed, batch, position) on a table with row numbers, so that the order is one index walk and a second row of
# the same place cannot be. Measured, rows/s at 5,000 a commit, events of 143 / 1,500 bytes: this 705,000 / 150,000;
# WITHOUT ROWID 680,000 / 58,000 (a row beyond a quarter of a page spills, 4,681 bytes a row); no key at all
# 887,000 / 157,000, but `ORDER BY batch, position` then sorts the whole table. No index on time: whoever wants one
# makes it (CREATE INDEX ... ON events (feed, time_ns)); it costs a quarter of the rate.
EVENTS = Table(
    "events",
    (
        ("feed", "TEXT NOT NULL"),
        ("batch", "INTEGER NOT NULL"),
        ("position", "INTEGER NOT NULL"),
        ("time_ns", "INTEGER NOT NULL"),
        ("source", "TEXT"),
        ("event", "TEXT NOT NULL"),
    ),
    "PRIMARY KEY (feed, batch, position)",
)
LATE = Table(
    "late",
    (
        ("feed", "TEXT NOT NULL"),
        ("time_ns", "INTEGER NOT NULL"),
        ("source", "TEXT"),
        ("arrived_ns", "INTEGER NOT NULL"),
        ("late_by_ns", "INTEGER NOT NULL"),
        ("event", "TEXT NOT NULL"),
    ),
)
POSITIONS = Table(
    "positions",
    (("feed", "TEXT NOT NULL"), ("lane", "TEXT NOT NULL"), ("batch", "INTEGER NOT NULL")),
    "PRIMARY KEY (feed, lane)",
    "WITHOUT ROWID",
)


class SqliteSink:
    """Takes the ordered and the late lane of one feed into one file, each event exactly once across crashes.

    `take` answers once its transaction is on disk (write-ahead log, synchronous=FULL), so `flush` has nothing to do.
    Times are ns since 1970 UTC. `position` counts from 0 within a batch. Rows may be deleted by whoever owns the
    file: the position reached stands in a table of its own.
    """

    def __init__(self, path: str | os.PathLike[str], feed: str, *, busy_wait_s: float = BUSY_WAIT_S) -> None:
        self._feed = feed
        self._database = Database(path, (EVENTS, LATE, POSITIONS), busy_wait_s=busy_wait_s)

    @property
    def lanes(self) -> tuple[Lane, ...]:
        """Ordered and late."""
        return LANES

    @property
    def flush_after_s(self) -> float:
        """Nothing waits for a flush."""
        return 0.0

    async def open(self) -> dict[Lane, int]:
        """Make what is absent and tell the position reached. Errors as for `Database.transaction`."""
        return await self._database.transaction(self._positions)

    async def take(self, batches: Sequence[Batch], lines: Lines) -> dict[Lane, int]:
        """Write batches of one lane in one transaction. Errors as for `Database.transaction`, and SinkRefused."""
        one_lane(batches)
        return await self._database.transaction(lambda connection: self._write(connection, batches, lines))

    async def flush(self, lines: Lines) -> dict[Lane, int]:
        """Everything that was taken is durable already."""
        return {}

    async def close(self) -> None:
        """Release the file."""
        await self._database.close()

    def _positions(self, connection: sqlite3.Connection) -> dict[Lane, int]:
        found = dict(connection.execute("SELECT lane, batch FROM positions WHERE feed = ?", (self._feed,)).fetchall())
        return {lane: found.get(lane, 0) for lane in LANES}

    def _write(self, connection: sqlite3.Connection, batches: Sequence[Batch], lines: Lines) -> dict[Lane, int]:
        # The position is read from the file each time: after an error of a commit only the file knows what it holds.
        positions = self._positions(connection)
        fresh = [batch for batch in batches if batch.number > positions[batch.lane]]
        if fresh:
            lane = fresh[0].lane
            if lane == "ordered":
                insert_columns(connection, EVENTS.name, self._event_columns(fresh, lines))
            else:
                insert_columns(connection, LATE.name, self._late_columns(fresh, lines))
            positions[lane] = fresh[-1].number
            connection.execute("INSERT OR REPLACE INTO positions VALUES (?,?,?)", (self._feed, lane, positions[lane]))
        return positions

    def _event_columns(self, batches: Sequence[Batch], lines: Lines) -> list[list[object]]:
        columns: list[list[object]] = [[] for _ in EVENTS.columns]
        for batch in batches:
            rows = len(batch)
            columns[1] += [batch.number] * rows
            columns[2] += range(rows)
            columns[3] += batch.times.tolist()
            columns[4] += source_column(batch, lines)
            columns[5] += event_texts(batch, lines)
        columns[0] = [self._feed] * len(columns[1])
        return columns

    def _late_columns(self, batches: Sequence[Batch], lines: Lines) -> list[list[object]]:
        columns: list[list[object]] = [[] for _ in LATE.columns]
        for batch in batches:
            columns[1] += batch.times.tolist()
            columns[2] += source_column(batch, lines)
            columns[3] += [batch.instant_ns] * len(batch)
            columns[4] += late_by_ns(batch)
            columns[5] += event_texts(batch, lines)
        columns[0] = [self._feed] * len(columns[1])
        return columns

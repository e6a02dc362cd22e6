"""The built-in keeper of the late lane, of the quarantine, and of what sinks refused for good.

One SQLite file a feed, behind the same port as every sink, so that nothing in either lane is lost when segments of the
journal are deleted. Sending events again, and limits on how much may be kept, are decided elsewhere: `size` tells. The
file's shape is `lane_tables`, reading it while the service runs is `lane_reading`; both are at hand from here.
"""

from __future__ import annotations

import os
import sqlite3
from collections.abc import Sequence
from dataclasses import dataclass
from functools import partial

from ..core.columns import Batch, Lane
from ..errors import SinkRetry
from ..ports import Lines
from .database import Database, insert_columns
from .lane_reading import (
    ROWS_AT_MOST,
    forget_exactly,
    forget_rows,
    lanes_size,
    late_rows,
    quarantine_rows,
    refused_rows,
)
from .lane_tables import (
    LATE,
    QUARANTINE,
    REFUSED,
    TABLES,
    KeptLane,
    LanesSize,
    LateRow,
    QuarantineRow,
    RefusedRow,
    measured,
)
from .rows import event_texts, late_by_ns, one_lane, source_column

__all__ = [
    "ROWS_AT_MOST",
    "KeptLane",
    "LaneStore",
    "LanesSize",
    "LateRow",
    "QuarantineRow",
    "RefusedRow",
    "forget_exactly",
    "forget_rows",
    "lanes_size",
    "late_rows",
    "quarantine_rows",
    "refused_rows",
]

LANES: tuple[Lane, ...] = ("late", "quarantine")
FULL_RETRY_S = 60.0


class LaneStore:
    """Keeps the late lane and the quarantine of one feed, and what its sinks refused, each once across crashes.

    Rows are numbered from 1 in order of arrival. Nothing is dropped here at any size: `size` is current after each
    `open`, `take` and `measure`, and whoever feeds this store refuses requests at its limit.
    """

    def __init__(self, path: str | os.PathLike[str]) -> None:
        self._database = Database(path, TABLES, own=True)
        self._size = LanesSize()

    @property
    def lanes(self) -> tuple[Lane, ...]:
        """Late and quarantine."""
        return LANES

    @property
    def flush_after_s(self) -> float:
        """Nothing waits for a flush."""
        return 0.0

    @property
    def size(self) -> LanesSize:
        """What was kept when it was last looked at. Safe to read from any thread."""
        return self._size

    async def open(self) -> dict[Lane, int]:
        """Make what is absent and tell the position reached. Errors as for `Database.transaction`."""
        return await self._database.transaction(_positions, self._measure)

    async def take(self, batches: Sequence[Batch], lines: Lines) -> dict[Lane, int]:
        """Write batches of one lane in one transaction. Errors as for `Database.transaction`, and SinkRefused."""
        one_lane(batches)
        return await self._database.transaction(lambda connection: _write(connection, batches, lines), self._measure)

    async def flush(self, lines: Lines) -> dict[Lane, int]:
        """Everything that was taken is durable already."""
        return {}

    async def measure(self) -> LanesSize:
        """Look again, after rows were forgotten by another program. Errors as for `Database.transaction`."""
        await self._database.transaction(_positions, self._measure)
        return self._size

    async def keep_refused(
        self, sink: str, batches: Sequence[Batch], detail: str, lines: Lines, bytes_at_most: int
    ) -> None:
        """Keep batches that a sink refused for good, once each; durable when this returns. May be called at any time.

        Raises SinkRetry where the file has `bytes_at_most` or more: what is settled must be removed first. Other errors
        as for `Database.transaction`.
        """
        if self._size.file_bytes >= bytes_at_most:
            await self.measure()
        if self._size.file_bytes >= bytes_at_most:
            raise SinkRetry(
                f"{len(batches)} batches are refused for good and wait, since {self._database.path} has reached "
                f"lanes_at_most: export and forget what is settled, or raise the limit. Why they are refused: {detail}",
                retry_after_s=FULL_RETRY_S,
            )
        work = partial(_keep_refused, sink=sink, batches=batches, detail=detail, lines=lines)
        await self._database.transaction(work, self._measure)

    async def plan_repair(self, sink: str, rows_at_most: int) -> RepairPlan:
        """Which late rows a sink's next repairs take, durably decided; the same again until `end_repair`."""
        return await self._database.transaction(partial(_plan_repair, sink=sink, rows_at_most=rows_at_most))

    async def end_repair(self, sink: str, through: int, next_number: int) -> None:
        """A sink has taken its repairs up to this late row."""
        row = (sink, through, through, next_number)
        await self._database.transaction(lambda connection: _set_repair(connection, row))

    async def take_repair_numbers(self, sink: str, count: int) -> int:
        """The first of `count` numbers of repair batches that nobody else will use."""
        return await self._database.transaction(partial(_take_repair_numbers, sink=sink, count=count))

    async def close(self) -> None:
        """Release the file."""
        await self._database.close()

    def _measure(self, connection: sqlite3.Connection) -> None:
        self._size = measured(connection, self._database.path)


# ---- writing, in the thread -----------------------------------------------------------------------------------------

_KEEP = """INSERT INTO kept VALUES (?,?,?,?,?) ON CONFLICT (lane) DO UPDATE SET batch = excluded.batch,
    number = excluded.number, rows = rows + excluded.rows, bytes = bytes + excluded.bytes"""


def _positions(connection: sqlite3.Connection) -> dict[Lane, int]:
    found = dict(connection.execute("SELECT lane, batch FROM kept").fetchall())
    return {lane: found.get(lane, 0) for lane in LANES}


def _write(connection: sqlite3.Connection, batches: Sequence[Batch], lines: Lines) -> dict[Lane, int]:
    positions = _positions(connection)
    fresh = [batch for batch in batches if batch.number > positions[batch.lane]]
    if not fresh:
        return positions
    lane = fresh[0].lane
    (last,) = connection.execute("SELECT number FROM kept WHERE lane = ?", (lane,)).fetchone() or (0,)
    columns = _late_columns(fresh, lines) if lane == "late" else _quarantine_columns(fresh, lines)
    rows = len(columns[1])
    columns[0] = list(range(last + 1, last + 1 + rows))
    insert_columns(connection, lane, columns)
    positions[lane] = fresh[-1].number
    connection.execute(_KEEP, (lane, positions[lane], last + rows, rows, _event_bytes(fresh)))
    return positions


def _late_columns(batches: Sequence[Batch], lines: Lines) -> list[list[object]]:
    columns: list[list[object]] = [[] for _ in LATE.columns]
    for batch in batches:
        rows = len(batch)
        columns[1] += [batch.number] * rows
        columns[2] += batch.times.tolist()
        columns[3] += source_column(batch, lines)
        columns[4] += [batch.instant_ns] * rows
        columns[5] += late_by_ns(batch)
        columns[6] += batch.behind.tolist()
        columns[7] += event_texts(batch, lines)
    return columns


def _quarantine_columns(batches: Sequence[Batch], lines: Lines) -> list[list[object]]:
    columns: list[list[object]] = [[] for _ in QUARANTINE.columns]
    for batch in batches:
        columns[1] += [batch.number] * len(batch)
        columns[2] += [batch.instant_ns] * len(batch)
        columns[3] += [entry.line for entry in batch.entries]
        columns[4] += [entry.reason for entry in batch.entries]
        columns[5] += [entry.detail for entry in batch.entries]
        columns[6] += lines.lines(batch)
    return columns


def _event_bytes(batches: Sequence[Batch]) -> int:
    return sum(sum(e.length for e in batch.entries) + int(batch.refs["length"].sum()) for batch in batches)


# ---- repairs --------------------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class RepairPlan:
    """Late rows above `after` up to `until` go out in repair batches numbered from `number`."""

    after: int
    until: int
    number: int


def _repair_row(connection: sqlite3.Connection, sink: str) -> tuple[int, int, int]:
    query = "SELECT through, until, number FROM repairs WHERE sink = ?"
    return connection.execute(query, (sink,)).fetchone() or (0, 0, 1)


def _set_repair(connection: sqlite3.Connection, row: tuple[str, int, int, int]) -> None:
    connection.execute("INSERT OR REPLACE INTO repairs VALUES (?,?,?,?)", row)


def _plan_repair(connection: sqlite3.Connection, *, sink: str, rows_at_most: int) -> RepairPlan:
    through, until, number = _repair_row(connection, sink)
    if until == through:
        query = "SELECT max(number) FROM (SELECT number FROM late WHERE number > ? ORDER BY number LIMIT ?)"
        until = connection.execute(query, (through, rows_at_most)).fetchone()[0] or through
        _set_repair(connection, (sink, through, until, number))
    return RepairPlan(through, until, number)


def _take_repair_numbers(connection: sqlite3.Connection, *, sink: str, count: int) -> int:
    through, until, number = _repair_row(connection, sink)
    if until != through:
        raise SinkRetry("repairs are on their way; try again when they have arrived")
    _set_repair(connection, (sink, through, until, number + count))
    return number


# ---- what sinks refused ---------------------------------------------------------------------------------------------


def _keep_refused(
    connection: sqlite3.Connection, *, sink: str, batches: Sequence[Batch], detail: str, lines: Lines
) -> None:
    """After a crash a batch can be refused, and come here, again: one that is there already is passed over."""
    known = "SELECT 1 FROM refused WHERE sink = ? AND lane = ? AND batch = ? LIMIT 1"
    for batch in batches:
        if len(batch) and connection.execute(known, (sink, batch.lane, batch.number)).fetchone() is None:
            (last,) = connection.execute("SELECT number FROM kept WHERE lane = 'refused'").fetchone() or (0,)
            insert_columns(connection, REFUSED.name, _refused_columns(sink, batch, detail, lines, last + 1))
            connection.execute(_KEEP, ("refused", 0, last + len(batch), len(batch), _event_bytes([batch])))


def _refused_columns(sink: str, batch: Batch, detail: str, lines: Lines, first: int) -> list[Sequence[object]]:
    rows = len(batch)
    nothing = [None] * rows
    placed = batch.lane != "quarantine"
    return [
        range(first, first + rows),
        [sink] * rows,
        [batch.lane] * rows,
        [batch.number] * rows,
        range(rows),
        [batch.instant_ns] * rows,
        batch.times.tolist() if placed else nothing,
        batch.behind.tolist() if batch.lane == "late" else nothing,
        source_column(batch, lines) if placed else nothing,
        [detail] * rows,
        lines.lines(batch),
    ]

"""The built-in keeper of the late lane and the quarantine, and how both are read while the service runs.

One SQLite file a feed, behind the same port as every sink, so that nothing in either lane is lost when segments of the
journal are deleted. Sending late events again, and limits on how much may be kept, are decided elsewhere: `size` tells.
"""

from __future__ import annotations

import contextlib
import os
import sqlite3
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

from ..core.columns import Batch, Lane
from ..errors import StrandlineError
from ..ports import Lines
from .database import BUSY_WAIT_S, Database, Table, connect, insert_columns, trouble
from .rows import event_texts, late_by_ns, one_lane, source_column

KeptLane = Literal["late", "quarantine"]
LANES: tuple[KeptLane, ...] = ("late", "quarantine")
ROWS_AT_MOST = 10_000  # rows of one reading
ROW_BYTES_AT_MOST = 16 * 1024 * 1024  # bytes of events of one reading, after the first row

LATE = Table(
    "late",
    (
        ("number", "INTEGER PRIMARY KEY"),
        ("batch", "INTEGER NOT NULL"),
        ("time_ns", "INTEGER NOT NULL"),
        ("source", "TEXT"),
        ("arrived_ns", "INTEGER NOT NULL"),
        ("late_by_ns", "INTEGER NOT NULL"),
        ("watermark_ns", "INTEGER NOT NULL"),
        ("event", "TEXT NOT NULL"),
    ),
)
QUARANTINE = Table(
    "quarantine",
    (
        ("number", "INTEGER PRIMARY KEY"),
        ("batch", "INTEGER NOT NULL"),
        ("arrived_ns", "INTEGER NOT NULL"),
        ("line", "INTEGER NOT NULL"),
        ("reason", "TEXT NOT NULL"),
        ("detail", "TEXT NOT NULL"),
        ("event", "BLOB NOT NULL"),
    ),
)
# One row a lane: the position (last batch), the last number given (never given again, also after rows were forgotten),
# and what is kept, counted in the same transaction, since counting a million rows takes as long as reading them.
KEPT = Table(
    "kept",
    (
        ("lane", "TEXT NOT NULL PRIMARY KEY"),
        ("batch", "INTEGER NOT NULL"),
        ("number", "INTEGER NOT NULL"),
        ("rows", "INTEGER NOT NULL"),
        ("bytes", "INTEGER NOT NULL"),
    ),
    options="WITHOUT ROWID",
)
TABLES = (LATE, QUARANTINE, KEPT)


@dataclass(frozen=True, slots=True)
class LateRow:
    """One late event. Times in ns since 1970 UTC; `watermark_ns` is the watermark that it came behind."""

    number: int
    batch: int
    time_ns: int
    source: str | None
    arrived_ns: int
    late_by_ns: int
    watermark_ns: int
    event: str


@dataclass(frozen=True, slots=True)
class QuarantineRow:
    """One line that could not be an event: why, which line of its request (from 1), and its bytes as they came."""

    number: int
    batch: int
    arrived_ns: int
    line: int
    reason: str
    detail: str
    event: bytes


@dataclass(frozen=True, slots=True)
class LanesSize:
    """What is kept: rows and bytes of events by lane, and the bytes of the files on disk."""

    late_rows: int = 0
    late_bytes: int = 0
    quarantine_rows: int = 0
    quarantine_bytes: int = 0
    file_bytes: int = 0


class LaneStore:
    """Keeps the late lane and the quarantine of one feed, each event exactly once across crashes.

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

    async def close(self) -> None:
        """Release the file."""
        await self._database.close()

    def _measure(self, connection: sqlite3.Connection) -> None:
        self._size = _measured(connection, self._database.path)


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
        columns[6] += [batch.behind_ns] * rows
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


def _measured(connection: sqlite3.Connection, path: Path) -> LanesSize:
    kept = {lane: (rows, size) for lane, rows, size in connection.execute("SELECT lane, rows, bytes FROM kept")}
    return LanesSize(*kept.get("late", (0, 0)), *kept.get("quarantine", (0, 0)), _file_bytes(path))


def _file_bytes(path: Path) -> int:
    total = 0
    for each in (path, path.with_name(path.name + "-wal")):
        with contextlib.suppress(FileNotFoundError):
            total += each.stat().st_size
    return total


# ---- reading, from another connection or another program ------------------------------------------------------------


def late_rows(
    path: str | os.PathLike[str],
    after: int = 0,
    limit: int = 100,
    source: str | None = None,
    since_ns: int | None = None,
) -> list[LateRow]:
    """Late events with a number above `after`, ascending; of one source, or arrived at `since_ns` or later, if asked.

    At most `limit` (1 to 10,000) and some 16 MiB of events: read on after the last number until nothing comes. Empty
    where there is no file yet. A reader never holds the service up. Raises StrandlineError.
    """
    wanted = {"number > ?": after, "source = ?": source, "arrived_ns >= ?": since_ns}
    return [LateRow(*row) for row in _rows(Path(path), LATE, wanted, limit)]


def quarantine_rows(
    path: str | os.PathLike[str],
    after: int = 0,
    limit: int = 100,
    reason: str | None = None,
    since_ns: int | None = None,
) -> list[QuarantineRow]:
    """Lines in quarantine with a number above `after`, ascending; of one reason, if asked. Else as `late_rows`."""
    wanted = {"number > ?": after, "reason = ?": reason, "arrived_ns >= ?": since_ns}
    return [QuarantineRow(*row) for row in _rows(Path(path), QUARANTINE, wanted, limit)]


def lanes_size(path: str | os.PathLike[str]) -> LanesSize:
    """What a file keeps; all 0 where there is none yet. Raises StrandlineError."""
    with _reading(Path(path)) as connection:
        return LanesSize() if connection is None else _measured(connection, Path(path))


def forget_rows(path: str | os.PathLike[str], lane: KeptLane, through: int) -> int:
    """Delete a lane's rows up to and including number `through`, and give their room back to the disk.

    For an operator who has exported them, also while the service runs. Returns how many. Raises StrandlineError.
    """
    place = Path(path)
    if lane not in LANES:
        raise StrandlineError(f"there is no lane {lane!r} to forget rows of: name one of {', '.join(LANES)}")
    if lanes_size(place) == LanesSize():
        return 0
    with _sentences(place), contextlib.closing(connect(place, TABLES)) as connection:
        connection.execute("BEGIN IMMEDIATE")
        rows, size = connection.execute(
            f"SELECT count(*), coalesce(sum(length(CAST(event AS BLOB))), 0) FROM {lane} WHERE number <= ?", (through,)
        ).fetchone()
        connection.execute(f"DELETE FROM {lane} WHERE number <= ?", (through,))
        connection.execute("UPDATE kept SET rows = rows - ?, bytes = bytes - ? WHERE lane = ?", (rows, size, lane))
        connection.execute("COMMIT")
        connection.executescript("PRAGMA incremental_vacuum")  # `execute` would step once, which frees one page
        connection.execute("PRAGMA wal_checkpoint(TRUNCATE)").fetchall()
        return int(rows)


def _rows(path: Path, table: Table, wanted: Mapping[str, object], limit: int) -> list[tuple[Any, ...]]:
    if not 1 <= limit <= ROWS_AT_MOST:
        raise StrandlineError(f"{limit} rows cannot be read at once: ask for 1 to {ROWS_AT_MOST:,}")
    conditions = {condition: value for condition, value in wanted.items() if value is not None}
    query = f"SELECT * FROM {table.name} WHERE {' AND '.join(conditions)} ORDER BY number LIMIT ?"
    rows: list[tuple[Any, ...]] = []
    room = ROW_BYTES_AT_MOST
    with _reading(path) as connection:
        for row in [] if connection is None else connection.execute(query, (*conditions.values(), limit)):
            room -= len(row[-1])
            if rows and room < 0:
                break
            rows.append(row)
    return rows


@contextlib.contextmanager
def _reading(path: Path) -> Iterator[sqlite3.Connection | None]:
    """A connection that cannot write; None where there is no file, or none with its tables yet."""
    with _sentences(path):
        if not path.exists():
            yield None
            return
        address = path.absolute().as_uri() + "?mode=ro"
        connection = sqlite3.connect(address, uri=True, timeout=BUSY_WAIT_S, isolation_level=None)
        with contextlib.closing(connection):
            made = connection.execute("SELECT count(*) FROM sqlite_master WHERE name IN ('late', 'kept')").fetchone()
            yield connection if made == (2,) else None


@contextlib.contextmanager
def _sentences(path: Path) -> Iterator[None]:
    try:
        yield
    except sqlite3.Error as error:
        raise trouble(path, error) from error
    except OSError as error:
        raise StrandlineError(f"{path} cannot be read: {error.strerror or error}") from error

"""Reading and forgetting what the lane store keeps, from another connection or another program, while it writes."""

from __future__ import annotations

import contextlib
import os
import sqlite3
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from typing import Any, Literal

from ..errors import StrandlineError
from .database import BUSY_WAIT_S, Table, connect, trouble
from .lane_tables import (
    KEPT_LANES,
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

ROWS_AT_MOST = 10_000  # rows of one reading
ROW_BYTES_AT_MOST = 16 * 1024 * 1024  # bytes of events of one reading, after the first row


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


def refused_rows(
    path: str | os.PathLike[str],
    after: int = 0,
    limit: int = 100,
    sink: str | None = None,
    since_ns: int | None = None,
) -> list[RefusedRow]:
    """Events that sinks refused for good with a number above `after`, ascending; of one sink, if asked.

    `since_ns`: whose batch was made then or later. Else as `late_rows`.
    """
    wanted = {"number > ?": after, "sink = ?": sink, "instant_ns >= ?": since_ns}
    return [RefusedRow(*row) for row in _rows(Path(path), REFUSED, wanted, limit)]


def lanes_size(path: str | os.PathLike[str]) -> LanesSize:
    """What a file keeps; all 0 where there is none yet. Raises StrandlineError."""
    with read_only(Path(path)) as connection:
        return LanesSize() if connection is None else measured(connection, Path(path))


def last_number(path: str | os.PathLike[str], lane: KeptLane) -> int:
    """The highest number that a lane has given to a row, forgotten ones too; 0 where there is none. StrandlineError."""
    with read_only(Path(path)) as connection:
        if connection is None:
            return 0
        found = connection.execute("SELECT number FROM kept WHERE lane = ?", (lane,)).fetchone()
        return int(found[0]) if found else 0


def forget_rows(path: str | os.PathLike[str], lane: KeptLane, through: int) -> int:
    """Delete a lane's rows up to and including number `through`, and give their room back to the disk.

    For an operator who has exported them, also while the service runs. Returns how many. Raises StrandlineError.
    """
    place = Path(path)
    if lane not in KEPT_LANES:
        raise StrandlineError(f"there is no lane {lane!r} to forget rows of: name one of {', '.join(KEPT_LANES)}")
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


def forget_exactly(path: str | os.PathLike[str], lane: KeptLane, numbers: Sequence[int]) -> int:
    """Delete these rows of a lane, which are settled. Returns how many. Raises StrandlineError. Blocking."""
    place = Path(path)
    with _sentences(place), contextlib.closing(connect(place, TABLES)) as connection:
        connection.execute("BEGIN IMMEDIATE")
        rows = size = 0
        for number in numbers:
            query = f"DELETE FROM {lane} WHERE number = ? RETURNING length(CAST(event AS BLOB))"
            gone = connection.execute(query, (number,)).fetchall()
            rows, size = rows + len(gone), size + sum(length for (length,) in gone)
        connection.execute("UPDATE kept SET rows = rows - ?, bytes = bytes - ? WHERE lane = ?", (rows, size, lane))
        connection.execute("COMMIT")
        return rows


def _rows(path: Path, table: Table, wanted: Mapping[str, object], limit: int) -> list[tuple[Any, ...]]:
    if not 1 <= limit <= ROWS_AT_MOST:
        raise StrandlineError(f"{limit} rows cannot be read at once: ask for 1 to {ROWS_AT_MOST:,}")
    conditions = {condition: value for condition, value in wanted.items() if value is not None}
    query = f"SELECT * FROM {table.name} WHERE {' AND '.join(conditions)} ORDER BY number LIMIT ?"
    rows: list[tuple[Any, ...]] = []
    room = ROW_BYTES_AT_MOST
    with read_only(path, table.name) as connection:
        for row in [] if connection is None else connection.execute(query, (*conditions.values(), limit)):
            room -= len(row[-1])
            if rows and room < 0:
                break
            rows.append(row)
    return rows


def first_number(connection: sqlite3.Connection, column: Literal["arrived_ns", "batch"], wanted: int) -> int:
    """The number of the first late event with so much or more there: both ascend, so halving needs no index."""
    # Each by itself: SQLite looks at the ends of the tree for one of them, and reads all for both at once.
    ((low,),) = connection.execute("SELECT coalesce(min(number), 1) FROM late")
    ((high,),) = connection.execute("SELECT coalesce(max(number), 0) + 1 FROM late")
    query = f"SELECT number, {column} FROM late WHERE number >= ? ORDER BY number LIMIT 1"
    while low < high:
        middle = (low + high) // 2
        row = connection.execute(query, (middle,)).fetchone()  # None: forgotten meanwhile
        low, high = (row[0] + 1, high) if row is not None and row[1] < wanted else (low, middle)
    return int(low)


@contextlib.contextmanager
def read_only(path: Path, table: str = "late") -> Iterator[sqlite3.Connection | None]:
    """A connection that cannot write; None where there is no file, or none with this table yet."""
    with _sentences(path):
        if not path.exists():
            yield None
            return
        address = path.absolute().as_uri() + "?mode=ro"
        connection = sqlite3.connect(address, uri=True, timeout=BUSY_WAIT_S, isolation_level=None)
        with contextlib.closing(connection):
            made = connection.execute(
                "SELECT count(*) FROM sqlite_master WHERE name IN (?, 'kept')", (table,)
            ).fetchone()
            yield connection if made == (2,) else None


@contextlib.contextmanager
def _sentences(path: Path) -> Iterator[None]:
    try:
        yield
    except sqlite3.Error as error:
        raise trouble(path, error) from error
    except OSError as error:
        raise StrandlineError(f"{path} cannot be read: {error.strerror or error}") from error

"""The file that keeps the late lane, the quarantine and what sinks refused: its tables, its rows, and their sizes.

Shapes only: writing is `lanes`, reading is `lane_reading`.
"""

from __future__ import annotations

import contextlib
import sqlite3
from dataclasses import dataclass
from pathlib import Path
from typing import Literal

from .database import Table

KeptLane = Literal["late", "quarantine", "refused"]
KEPT_LANES: tuple[KeptLane, ...] = ("late", "quarantine", "refused")

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
# What a sink refused for good: everything that its batch was made of, so that it can be made again.
REFUSED = Table(
    "refused",
    (
        ("number", "INTEGER PRIMARY KEY"),
        ("sink", "TEXT NOT NULL"),
        ("lane", "TEXT NOT NULL"),
        ("batch", "INTEGER NOT NULL"),
        ("position", "INTEGER NOT NULL"),
        ("instant_ns", "INTEGER NOT NULL"),
        ("time_ns", "INTEGER"),
        ("watermark_ns", "INTEGER"),
        ("source", "TEXT"),
        ("detail", "TEXT NOT NULL"),
        ("event", "BLOB NOT NULL"),
    ),
    "UNIQUE (sink, lane, batch, position)",
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
# One row a sink that takes repairs: late rows up to `through` were sent; those up to `until` are on their way in
# batches numbered from `number` (until == through: nothing is on its way, `number` is the next one's).
REPAIRS = Table(
    "repairs",
    (
        ("sink", "TEXT NOT NULL PRIMARY KEY"),
        ("through", "INTEGER NOT NULL"),
        ("until", "INTEGER NOT NULL"),
        ("number", "INTEGER NOT NULL"),
    ),
    options="WITHOUT ROWID",
)
TABLES = (LATE, QUARANTINE, REFUSED, KEPT, REPAIRS)


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
class RefusedRow:
    """One event of a batch that a sink will never take, and why. Times in ns since 1970 UTC.

    `lane`, `batch` and `position` (from 0) are its place in the output, `instant_ns` the arrival clock of the record
    that made the batch. `time_ns` and `source` are None in quarantine, `watermark_ns` is None outside of the late lane.
    """

    number: int
    sink: str
    lane: str
    batch: int
    position: int
    instant_ns: int
    time_ns: int | None
    watermark_ns: int | None
    source: str | None
    detail: str
    event: bytes


@dataclass(frozen=True, slots=True)
class LanesSize:
    """What is kept: rows and bytes of events by lane, and the bytes of the files on disk."""

    late_rows: int = 0
    late_bytes: int = 0
    quarantine_rows: int = 0
    quarantine_bytes: int = 0
    refused_rows: int = 0
    refused_bytes: int = 0
    file_bytes: int = 0


def measured(connection: sqlite3.Connection, path: Path) -> LanesSize:
    """What the file keeps, as the connection sees it."""
    kept = {lane: (rows, size) for lane, rows, size in connection.execute("SELECT lane, rows, bytes FROM kept")}
    none = (0, 0)
    counts = {
        f"{lane}_{what}": count
        for lane in KEPT_LANES
        for what, count in zip(("rows", "bytes"), kept.get(lane, none), strict=True)
    }
    return LanesSize(**counts, file_bytes=_file_bytes(path))


def _file_bytes(path: Path) -> int:
    total = 0
    for each in (path, path.with_name(path.name + "-wal")):
        with contextlib.suppress(FileNotFoundError):
            total += each.stat().st_size
    return total

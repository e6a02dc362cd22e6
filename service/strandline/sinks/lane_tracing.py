"""Single events in the lane store: one that a sink refused, one that was repaired, one that is searched for.

Reads only, from any thread, while the service writes. The file's shape is `lane_tables`.
"""

from __future__ import annotations

import os
import sqlite3
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from .lane_reading import first_number, read_only
from .lane_tables import LATE, QUARANTINE, REFUSED, LateRow, QuarantineRow

STEPS_BETWEEN_QUESTIONS = 100_000  # of SQLite's machine; some 1 ms


@dataclass(frozen=True, slots=True)
class LateRecord:
    """A late event's number in the lane store (None: forgotten), and by sink the last number that repairs have sent."""

    number: int | None
    repaired_through: dict[str, int]


def refusals(
    path: str | os.PathLike[str], sinks: Sequence[str], lane: str, batch: int, position: int
) -> dict[str, str]:
    """Why each of these sinks refused one event for good; those that did not are missing. Raises StrandlineError."""
    return _refusals(path, sinks, "lane = ? AND batch = ? AND position = ?", (lane, batch, position))


def refusals_of(
    path: str | os.PathLike[str], sinks: Sequence[str], lane: str, batch: int, event: bytes
) -> dict[str, str]:
    """The same for an event whose position in its batch is not known: by its bytes. Raises StrandlineError."""
    return _refusals(path, sinks, "lane = ? AND batch = ? AND event = ?", (lane, batch, event))


def _refusals(
    path: str | os.PathLike[str], sinks: Sequence[str], where: str, values: tuple[object, ...]
) -> dict[str, str]:
    found: dict[str, str] = {}
    with read_only(Path(path), REFUSED.name) as connection:
        if connection is None:
            return found
        query = f"SELECT detail FROM refused WHERE sink = ? AND {where} LIMIT 1"  # by its index: sink, lane, batch
        for sink in sinks:
            row = connection.execute(query, (sink, *values)).fetchone()
            if row is not None:
                found[sink] = row[0]
    return found


def late_record(path: str | os.PathLike[str], batch: int, time_ns: int, event: bytes) -> LateRecord:
    """What the store knows of a batch's late event of this time whose line begins so. Raises StrandlineError."""
    with read_only(Path(path), LATE.name) as connection:
        if connection is None:
            return LateRecord(None, {})
        numbers = (first_number(connection, "batch", each) for each in (batch, batch + 1))
        query = (
            "SELECT number FROM late WHERE number >= ? AND number < ? AND time_ns = ? "
            "AND substr(CAST(event AS BLOB), 1, ?) = ? LIMIT 1"
        )
        row = connection.execute(query, (*numbers, time_ns, len(event), event)).fetchone()
        return LateRecord(None if row is None else row[0], _through(connection))


def repaired_through(path: str | os.PathLike[str]) -> dict[str, int]:
    """By sink the last number that repairs have sent. Raises StrandlineError."""
    with read_only(Path(path), LATE.name) as connection:
        return {} if connection is None else _through(connection)


def _through(connection: sqlite3.Connection) -> dict[str, int]:
    try:
        return dict(connection.execute("SELECT sink, through FROM repairs").fetchall())
    except sqlite3.OperationalError:  # an older file, without that table
        return {}


def kept_late(
    path: str | os.PathLike[str],
    time_ns: int | None,
    text: bytes | None,
    before_ns: int,
    limit: int,
    abandoned: Callable[[], bool],
) -> list[LateRow]:
    """Late events of one time, or that hold a text, which arrived before an instant; the newest first.

    Looks through the whole table. Raises StrandlineError, also where it was `abandoned` on the way.
    """
    where, value = ("time_ns = ?", time_ns) if text is None else ("instr(CAST(event AS BLOB), ?)", text)
    return [LateRow(*row) for row in _kept(path, LATE.name, where, value, before_ns, limit, abandoned)]


def kept_quarantine(
    path: str | os.PathLike[str], text: bytes, before_ns: int, limit: int, abandoned: Callable[[], bool]
) -> list[QuarantineRow]:
    """The same for lines in quarantine that hold a text."""
    rows = _kept(path, QUARANTINE.name, "instr(event, ?)", text, before_ns, limit, abandoned)
    return [QuarantineRow(*row) for row in rows]


def _kept(
    path: str | os.PathLike[str], table: str, where: str, value: object, before_ns: int, limit: int,
    abandoned: Callable[[], bool],
) -> list[tuple[Any, ...]]:  # fmt: skip
    query = f"SELECT * FROM {table} WHERE arrived_ns < ? AND {where} ORDER BY number DESC LIMIT ?"
    with read_only(Path(path), table) as connection:
        if connection is None:
            return []
        connection.set_progress_handler(abandoned, STEPS_BETWEEN_QUESTIONS)
        return connection.execute(query, (before_ns, value, limit)).fetchall()

"""Rows on the SQLite sink against the driver's own bulk load: executemany in one transaction, at equal commit size.

The yardstick gets its rows as tuples that were made beforehand, on a connection with the same settings, into a table of
the same shape and key, one commit each. The sink makes its rows from lines and moves its position in the same
transaction. What both have stored must be equal. The parts after each commit that SQLite does by itself (moving the
log into the file) count for both.
"""

from __future__ import annotations

import sqlite3
import tempfile
import time
from collections.abc import Sequence
from contextlib import closing
from functools import partial
from pathlib import Path

import uvloop
from strandline.core.columns import Batch
from strandline.sinks.database import connect
from strandline.sinks.sqlite import EVENTS, SqliteSink

from .commits import FEED, Blocks, course_of
from .harness import Measure, Row, Sample, Scale

GOAL = 0.8
COMMIT_EVENTS = (1_000, 5_000, 50_000)
INSERT = f"INSERT INTO {EVENTS.name} VALUES (?,?,?,?,?,?)"

Tuples = list[tuple[object, ...]]


def _tuples(batch: Batch, lines: Blocks) -> Tuples:
    sources = [lines.source_names()[number] for number in batch.refs["source"].tolist()]
    events = [line.decode() for line in lines.lines(batch)]
    numbers = [batch.number] * len(batch)
    feeds, times = [FEED] * len(batch), batch.times.tolist()
    return list(zip(feeds, numbers, range(len(batch)), times, sources, events, strict=True))


def _bulk_load(path: Path, commits: Sequence[Tuples]) -> float:
    """Seconds of the yardstick."""
    with closing(connect(path, (EVENTS,))) as connection:
        begin = time.perf_counter()
        for rows in commits:
            connection.execute("BEGIN IMMEDIATE")
            connection.executemany(INSERT, rows)
            connection.execute("COMMIT")
        return time.perf_counter() - begin


async def _sink_load(path: Path, batches: Sequence[Batch], lines: Blocks) -> float:
    """Seconds of the sink."""
    sink = SqliteSink(path, FEED)
    await sink.open()
    begin = time.perf_counter()
    for batch in batches:
        await sink.take([batch], lines)
    seconds = time.perf_counter() - begin
    await sink.close()
    return seconds


def _require_equal(one: Path, other: Path) -> None:
    """Raise RuntimeError unless both files hold the same events."""
    with closing(sqlite3.connect(one)) as connection:
        connection.execute("ATTACH ? AS other", (str(other),))
        for left, right in (("main", "other"), ("other", "main")):
            query = f"SELECT count(*) FROM (SELECT * FROM {left}.events EXCEPT SELECT * FROM {right}.events)"
            if connection.execute(query).fetchone()[0]:
                raise RuntimeError("the two files differ: no figure would mean anything")


def _prepare(commit_events: int, scale: Scale) -> Measure:
    batches, lines = course_of(commit_events, scale)
    commits = [_tuples(batch, lines) for batch in batches]
    events, checked = sum(map(len, batches)), False

    def measure() -> Sample:
        nonlocal checked
        with tempfile.TemporaryDirectory(prefix="strandline-bench-") as name:
            bare_path, our_path = Path(name) / "bare.db", Path(name) / "sink.db"
            bare = events / _bulk_load(bare_path, commits)
            ours = events / uvloop.run(_sink_load(our_path, batches, lines))
            if not checked:
                _require_equal(our_path, bare_path)
                checked = True
        return Sample(ours / bare, {"rows/s": ours, "executemany rows/s": bare})

    return measure


def rows(scale: Scale) -> list[Row]:
    """A row for each size of commit."""
    del scale
    return [
        Row(f"rows into SQLite, commits of {size:,} rows", "x", partial(_prepare, size), GOAL, "at least")
        for size in COMMIT_EVENTS
    ]

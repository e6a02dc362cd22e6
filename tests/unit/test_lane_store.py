"""The keeper of the late lane and quarantine: rows, numbers that never return, reading while it writes, size."""

from __future__ import annotations

import asyncio
import hashlib
import sqlite3
from contextlib import closing
from pathlib import Path

import pytest
from helpers_sinks import LATE_BY_NS, START_NS, HeldLines
from sink_conformance import SinkConformance
from strandline.core.columns import Lane
from strandline.errors import SinkRetry, StrandlineError
from strandline.ports import Sink
from strandline.sinks.lanes import (
    LanesSize,
    LaneStore,
    forget_rows,
    lanes_size,
    late_rows,
    quarantine_rows,
)


def everything_late(path: Path) -> list[object]:
    """All late rows, read in steps of 1,000 as the documentation says."""
    found: list[object] = []
    after = 0
    while step := late_rows(path, after, 1000):
        found += step
        after = step[-1].number
    return found


class TestConformance(SinkConformance):
    def _path(self, place: Path, feed: str) -> Path:
        return place / "feeds" / hashlib.sha256(feed.encode()).hexdigest() / "lanes.db"

    def make(self, place: Path, feed: str) -> Sink:
        return LaneStore(self._path(place, feed))

    def stored(self, place: Path, feed: str, lane: Lane) -> list[tuple[object, ...]]:
        path = self._path(place, feed)
        if lane == "late":
            rows = everything_late(path)
            return [(r.time_ns, r.source, r.arrived_ns, r.late_by_ns, r.event.encode()) for r in rows]
        found: list[tuple[object, ...]] = []
        after = 0
        while step := quarantine_rows(path, after, 1000):
            found += [(r.arrived_ns, r.line, r.reason, r.detail, r.event) for r in step]
            after = step[-1].number
        return found


async def filled(path: Path, lines: HeldLines) -> LaneStore:
    """Batches 1 to 5 of both lanes, 4 rows each."""
    store = LaneStore(path)
    await store.open()
    await store.take(lines.batches("late", range(1, 6), 4), lines)
    await store.take(lines.batches("quarantine", range(1, 6), 4), lines)
    return store


async def test_every_fact_of_a_row(tmp_path: Path) -> None:
    path = tmp_path / "feeds" / "river" / "lanes.db"
    store = await filled(path, HeldLines())
    row = late_rows(path, after=4, limit=1)[0]
    assert (row.number, row.batch, row.source, row.arrived_ns) == (5, 2, "gauge-1", START_NS + 2)
    assert (row.time_ns, row.late_by_ns) == (START_NS + 2_000_000_000, LATE_BY_NS)
    assert row.watermark_ns == row.time_ns + row.late_by_ns
    assert row.event.startswith('{"lane":"late","batch":2,"row":0,')
    entry = quarantine_rows(path, after=19)[0]
    assert (entry.number, entry.batch, entry.line, entry.reason) == (20, 5, 4, "malformed")
    assert (entry.arrived_ns, entry.event) == (START_NS + 5, b'\xff\x00 \n5/3 "')
    await store.close()


async def test_reading_in_steps_and_by_what_is_wanted(tmp_path: Path) -> None:
    path = tmp_path / "lanes.db"
    store = await filled(path, HeldLines())
    assert [row.number for row in late_rows(path, after=3, limit=5)] == [4, 5, 6, 7, 8]
    assert late_rows(path, after=20) == []
    assert [row.number for row in late_rows(path, source="gauge-2")] == [2, 6, 10, 14, 18]
    assert [row.number for row in late_rows(path, source="gauge-2", since_ns=START_NS + 4)] == [14, 18]
    assert [row.number for row in quarantine_rows(path, since_ns=START_NS + 5)] == [17, 18, 19, 20]
    assert len(quarantine_rows(path, reason="malformed")) == 20
    assert quarantine_rows(path, reason="ahead") == []
    assert late_rows(path, source="' OR 1=1 --") == []
    await store.close()


@pytest.mark.parametrize("limit", [0, -1, 10_001])
def test_a_reading_has_a_limit(tmp_path: Path, limit: int) -> None:
    with pytest.raises(StrandlineError, match="ask for 1 to 10,000"):
        late_rows(tmp_path / "lanes.db", limit=limit)


async def test_a_reading_has_a_limit_in_bytes(tmp_path: Path) -> None:
    path = tmp_path / "lanes.db"
    lines = HeldLines()
    store = LaneStore(path)
    await store.open()
    await store.take([lines.batch("late", number, 1, text="x" * 6 * 1024 * 1024) for number in (1, 2, 3, 4)], lines)
    await store.close()
    assert [row.number for row in late_rows(path)] == [1, 2]
    assert [row.number for row in late_rows(path, after=2)] == [3, 4]


async def test_reading_while_the_service_writes_and_after_it_has_stopped(tmp_path: Path) -> None:
    path = tmp_path / "lanes.db"
    assert late_rows(path) == [] and quarantine_rows(path) == [] and lanes_size(path) == LanesSize()
    assert not path.exists()  # a reader makes nothing
    lines = HeldLines()
    store = await filled(path, lines)
    blocked = [lines.batch("late", 6, 3), lines.batch("late", 7, 3)]
    lines.hold_at = 7
    writing = asyncio.create_task(store.take(blocked, lines))
    await asyncio.to_thread(lines.entered.wait)  # in the middle of a transaction
    assert len(late_rows(path, limit=1000)) == 20
    lines.go_on.set()
    await writing
    assert len(late_rows(path, limit=1000)) == 26
    await store.close()
    assert len(late_rows(path, limit=1000)) == 26
    assert lanes_size(path).late_rows == 26


async def test_the_size_is_what_is_there(tmp_path: Path) -> None:
    path = tmp_path / "lanes.db"
    lines = HeldLines()
    store = await filled(path, lines)
    size = store.size
    assert size == lanes_size(path)
    late = [row.event.encode() for row in late_rows(path)]
    quarantined = [row.event for row in quarantine_rows(path)]
    assert (size.late_rows, size.late_bytes) == (20, sum(map(len, late)))
    assert (size.quarantine_rows, size.quarantine_bytes) == (20, sum(map(len, quarantined)))
    on_disk = sum(each.stat().st_size for each in tmp_path.iterdir() if not each.name.endswith("-shm"))
    assert size.file_bytes == on_disk
    await store.close()
    again = LaneStore(path)
    await again.open()
    assert again.size.late_bytes == size.late_bytes
    await again.close()


async def test_forgotten_rows_give_their_room_back_and_their_numbers_never_return(tmp_path: Path) -> None:
    path = tmp_path / "lanes.db"
    lines = HeldLines()
    store = LaneStore(path)
    await store.open()
    await store.take([lines.batch("late", 1, 20_000), lines.batch("late", 2, 10)], lines)
    full = store.size
    assert forget_rows(path, "late", 20_000) == 20_000
    small = await store.measure()
    assert (small.late_rows, [row.number for row in late_rows(path, limit=3)]) == (10, [20_001, 20_002, 20_003])
    assert small.late_bytes == sum(len(row.event.encode()) for row in late_rows(path))
    assert small.file_bytes < full.file_bytes / 10
    assert forget_rows(path, "late", 10**9) == 10
    assert (await store.measure()).late_bytes == 0
    await store.take([lines.batch("late", 2, 10), lines.batch("late", 3, 1)], lines)
    assert [(row.number, row.batch) for row in late_rows(path)] == [(20_011, 3)]
    await store.close()


def test_forgetting_where_nothing_is(tmp_path: Path) -> None:
    assert forget_rows(tmp_path / "lanes.db", "late", 5) == 0
    assert not (tmp_path / "lanes.db").exists()
    with pytest.raises(StrandlineError, match="no lane 'ordered'"):
        forget_rows(tmp_path / "lanes.db", "ordered", 5)  # type: ignore[arg-type]


async def test_a_file_of_another_shape(tmp_path: Path) -> None:
    path = tmp_path / "lanes.db"
    with closing(sqlite3.connect(path)) as connection, connection:
        connection.execute("CREATE TABLE quarantine (line TEXT)")
    store = LaneStore(path)
    with pytest.raises(StrandlineError, match="another shape"):
        await store.open()
    await store.close()
    assert late_rows(path) == []


async def test_what_cannot_be_read_is_named(tmp_path: Path) -> None:
    path = tmp_path / "lanes.db"
    path.write_bytes(b"no database" * 100)
    with pytest.raises(StrandlineError, match="no SQLite database"):
        late_rows(path)
    (tmp_path / "file").write_bytes(b"")
    store = LaneStore(tmp_path / "file" / "lanes.db")
    with pytest.raises(SinkRetry, match=r"the folder of .* cannot be made"):
        await store.open()
    await store.close()


async def test_a_file_that_vanishes_begins_anew(tmp_path: Path) -> None:
    path = tmp_path / "lanes.db"
    lines = HeldLines()
    store = await filled(path, lines)
    for each in list(tmp_path.iterdir()):
        each.unlink()
    await store.take(lines.batches("late", [6], 2), lines)
    await store.close()
    assert [(row.number, row.batch) for row in late_rows(path)] == [(1, 6), (2, 6)]

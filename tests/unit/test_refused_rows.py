"""What sinks refused for good, as the lane store keeps it: every fact of it, each batch once, bounded, readable."""

from __future__ import annotations

import asyncio
import sqlite3
import tempfile
from contextlib import closing
from pathlib import Path

import pytest
from helpers_sinks import LATE_BY_NS, START_NS, HeldLines
from hypothesis import given, settings
from hypothesis import strategies as st
from strandline.core.columns import Batch, Lane
from strandline.errors import SinkRetry
from strandline.sinks.lanes import LaneStore, RefusedRow, forget_rows, lanes_size, late_rows, refused_rows

ENOUGH = 2**40
DETAIL = 'the store said: "no such gauge"\n'


async def kept(path: Path, lines: HeldLines, *refusals: tuple[str, list[Batch]]) -> LaneStore:
    store = LaneStore(path)
    await store.open()
    for sink, batches in refusals:
        await store.keep_refused(sink, batches, DETAIL, lines, ENOUGH)
    return store


async def test_every_fact_of_a_row(tmp_path: Path) -> None:
    path, lines = tmp_path / "lanes.db", HeldLines()
    batches = [lines.batch(lane, 4, 7) for lane in ("ordered", "late", "quarantine")]
    store = await kept(path, lines, ("store", batches))
    await store.close()
    found = refused_rows(path)
    assert [row.number for row in found] == list(range(1, 22))
    assert [row.event for row in found] == lines.held
    time_ns = START_NS + 4 * 10**9
    event = lines.held[1]
    assert found[1] == RefusedRow(
        2, "store", "ordered", 4, 1, START_NS + 4, time_ns + 1, None, "gauge-2", DETAIL, event
    )
    assert found[6].source is None
    late = found[8]
    assert (late.lane, late.position, late.watermark_ns) == ("late", 1, time_ns + LATE_BY_NS)
    quarantined = found[15]
    assert (quarantined.lane, quarantined.position, quarantined.instant_ns) == ("quarantine", 1, START_NS + 4)
    assert (quarantined.time_ns, quarantined.watermark_ns, quarantined.source) == (None, None, None)


REFUSALS = st.lists(
    st.tuples(
        st.sampled_from(["a", "b"]), st.sampled_from(["ordered", "late"]), st.sets(st.integers(1, 6), min_size=1)
    ),
    max_size=8,
)


@settings(max_examples=40)
@given(REFUSALS)
def test_however_often_a_batch_is_refused_it_is_kept_once(refusals: list[tuple[str, Lane, set[int]]]) -> None:
    with tempfile.TemporaryDirectory() as place:
        asyncio.run(refuse_all(Path(place) / "lanes.db", refusals))


async def refuse_all(path: Path, refusals: list[tuple[str, Lane, set[int]]]) -> None:
    lines = HeldLines()
    places: list[tuple[Lane, int]] = [(lane, number) for lane in ("ordered", "late") for number in range(1, 7)]
    batches = {(lane, number): lines.batch(lane, number, number % 3) for lane, number in places}
    expected: dict[tuple[str, Lane, int], None] = {}
    for sink, lane, numbers in refusals:
        store = await kept(path, lines, (sink, [batches[lane, number] for number in sorted(numbers)]))
        size = store.size
        await store.close()
        expected |= dict.fromkeys((sink, lane, number) for number in sorted(numbers))
        found = refused_rows(path, limit=10_000)
        assert [row.number for row in found] == list(range(1, len(found) + 1))
        assert list(dict.fromkeys((row.sink, row.lane, row.batch) for row in found)) == [
            key for key in expected if len(batches[key[1:]])
        ]
        assert [row.event for row in found] == [
            row[-1] for sink, lane, number in expected for row in lines.expected([batches[lane, number]])
        ]
        assert (size.refused_rows, size.refused_bytes) == (len(found), sum(len(row.event) for row in found))
        assert lanes_size(path).refused_bytes == size.refused_bytes


async def test_reading_in_steps_and_by_what_is_wanted(tmp_path: Path) -> None:
    path, lines = tmp_path / "lanes.db", HeldLines()
    store = await kept(path, lines, ("a", lines.batches("ordered", [1, 2], 3)), ("b", lines.batches("late", [9], 3)))
    await store.close()
    assert [row.number for row in refused_rows(path, after=2, limit=3)] == [3, 4, 5]
    assert {row.batch for row in refused_rows(path, sink="b")} == {9}
    assert [row.number for row in refused_rows(path, since_ns=START_NS + 2)] == [4, 5, 6, 7, 8, 9]
    assert refused_rows(path, sink="' OR 1=1 --") == []


async def test_it_is_bounded_by_the_limit_on_the_file(tmp_path: Path) -> None:
    path, lines = tmp_path / "lanes.db", HeldLines()
    store = await kept(path, lines, ("a", [lines.batch("ordered", 1, 5_000)]))
    limit = store.size.file_bytes
    second = [lines.batch("ordered", 2, 1)]
    with pytest.raises(SinkRetry, match=r"1 batches are refused .* has reached lanes_at_most.*no such gauge") as caught:
        await store.keep_refused("a", second, DETAIL, lines, limit)
    assert caught.value.retry_after_s == 60
    assert store.size.refused_rows == 5_000
    assert forget_rows(path, "refused", 5_000) == 5_000  # by another program: the store looks again by itself
    await store.keep_refused("a", second, DETAIL, lines, limit)
    await store.close()
    assert [(row.number, row.batch) for row in refused_rows(path)] == [(5_001, 2)]
    assert lanes_size(path).refused_bytes == len(lines.held[-1])


async def test_it_works_beside_the_lanes_at_the_same_moment(tmp_path: Path) -> None:
    path, lines = tmp_path / "lanes.db", HeldLines()
    store = await kept(path, lines)
    batch = lines.batch("ordered", 1, 3)
    late = lines.batches("late", [1, 2], 3)
    lines.hold_at = 2
    taking = asyncio.create_task(store.take(late, lines))
    await asyncio.to_thread(lines.entered.wait)  # in the middle of a transaction
    keeping = asyncio.create_task(store.keep_refused("a", [batch], DETAIL, lines, ENOUGH))
    lines.go_on.set()
    await asyncio.gather(taking, keeping)
    assert await store.open() == {"late": 2, "quarantine": 0}
    await store.close()
    assert len(late_rows(path)) == 6 and len(refused_rows(path)) == 3


async def test_all_or_nothing_of_a_refusal(tmp_path: Path) -> None:
    path, lines = tmp_path / "lanes.db", HeldLines()
    store = await kept(path, lines)
    batches = lines.batches("ordered", [1, 2, 3])
    lines.fail_at = 3
    with pytest.raises(RuntimeError):
        await store.keep_refused("a", batches, DETAIL, lines, ENOUGH)
    assert refused_rows(path) == []
    lines.fail_at = None
    await store.keep_refused("a", batches, DETAIL, lines, ENOUGH)
    await store.close()
    assert [row.event for row in refused_rows(path)] == lines.held


async def test_a_file_from_before_there_was_this_table(tmp_path: Path) -> None:
    path, lines = tmp_path / "lanes.db", HeldLines()
    store = await kept(path, lines)
    await store.take(lines.batches("late", [1]), lines)
    await store.close()
    with closing(sqlite3.connect(path)) as connection, connection:
        connection.execute("DROP TABLE refused")
    assert refused_rows(path) == [] and len(late_rows(path)) == 3
    again = await kept(path, lines, ("a", lines.batches("ordered", [1])))
    await again.close()
    assert len(refused_rows(path)) == 3 and len(late_rows(path)) == 3

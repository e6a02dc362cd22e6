"""The Parquet sink: the conformance suite, read back by pyarrow's own reader; order, statistics, columns, crashes."""

from __future__ import annotations

import datetime
import errno
import json
import os
import re
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from helpers_sinks import START_NS, HeldLines, VirtualTime
from sink_conformance import SinkConformance
from strandline.core.columns import NO_SOURCE, REF, Batch, Lane
from strandline.errors import SinkRefused, SinkRetry, StrandlineError
from strandline.ports import Sink
from strandline.sinks import make_sink, parquet, rolling
from strandline.sinks.parquet import ParquetSink
from strandline.sinks.postgres_columns import Column
from strandline.sinks.repairs import RepairRow, cut
from strandline.sinks.rolling import feed_part

FILE = re.compile(r"(.*)-(ordered|late)-([0-9]{20})-([0-9]{20})\.parquet", re.DOTALL)


def files(place: Path, feed: str, lane: Lane) -> list[Path]:
    """A lane's complete files, in order; their numbers must join without an overlap."""
    found, last = [], 0
    for path in sorted(place.iterdir()):
        match = FILE.fullmatch(path.name)
        if match and match[1] == feed_part(feed) and match[2] == lane:
            assert last < int(match[3]) <= int(match[4])
            last = int(match[4])
            found.append(path)
    return found


def rows(place: Path, feed: str, lane: Lane) -> list[dict[str, Any]]:
    return [row for path in files(place, feed, lane) for row in pq.read_table(path).to_pylist()]


class TestConformance(SinkConformance):
    examples = 12
    roll_bytes = 64 * 1024 * 1024

    def make(self, place: Path, feed: str) -> Sink:
        return ParquetSink(place, feed, VirtualTime(), roll_bytes=self.roll_bytes, rows_per_group=500)

    def stored(self, place: Path, feed: str, lane: Lane) -> list[tuple[object, ...]]:
        found = rows(place, feed, lane)
        for batch in {row["batch"] for row in found}:
            places = [row["position"] for row in found if row["batch"] == batch]
            assert places == list(range(len(places)))
        if lane == "ordered":
            return [(row["event"].encode(),) for row in found]
        return [
            (row["time_ns"], row["source"], row["arrived_ns"], row["late_by_ns"], row["event"].encode())
            for row in found
        ]


class TestConformanceOfManyFiles(TestConformance):
    roll_bytes = 300


async def opened(place: Path, **options: Any) -> tuple[ParquetSink, VirtualTime, HeldLines]:
    time = VirtualTime()
    sink = ParquetSink(place, "river-gauges", time, **options)
    await sink.open()
    return sink, time, HeldLines()


def batch_of(lines: HeldLines, number: int, events: list[bytes], lane: Lane = "ordered") -> Batch:
    """A batch of these events, one nanosecond apart."""
    refs = np.empty(len(events), REF)
    for row, event in enumerate(events):
        refs[row] = (len(lines.held), len(event), NO_SOURCE if row == 1 else 0)
        lines.held.append(event)
    times = START_NS + number * 1000 + np.arange(len(events), dtype=np.int64)
    return Batch(lane, number, times, refs, START_NS, number, START_NS + 10**9)


async def test_row_groups_ascend_in_time_and_their_statistics_say_so(tmp_path: Path) -> None:
    sink, _, lines = await opened(tmp_path, rows_per_group=50)
    await sink.take(lines.batches("ordered", range(1, 31), 7), lines)
    assert await sink.flush(lines) == {"ordered": 30}
    await sink.close()
    (path,) = files(tmp_path, "river-gauges", "ordered")
    assert path.name == f"river-gauges-ordered-{1:020}-{30:020}.parquet"
    about = pq.read_metadata(path)
    assert about.num_rows == 210
    groups = [about.row_group(number) for number in range(about.num_row_groups)]
    assert [group.num_rows for group in groups] == [50, 50, 50, 50, 10]
    last = -(2**63)
    read = pq.ParquetFile(path)
    for number, group in enumerate(groups):
        statistics = group.column(0).statistics
        times = read.read_row_group(number, ["time_ns"])["time_ns"].to_pylist()
        assert group.column(0).path_in_schema == "time_ns"
        assert (statistics.min, statistics.max) == (min(times), max(times))
        assert times == sorted(times) and last <= statistics.min
        assert not group.sorting_columns
        last = statistics.max
    read.close()


async def test_a_reader_finds_a_stretch_of_time_without_reading_the_rest(tmp_path: Path) -> None:
    sink, _, lines = await opened(tmp_path, rows_per_group=10)
    await sink.take(lines.batches("ordered", range(1, 21), 10), lines)
    await sink.flush(lines)
    await sink.close()
    least, greatest = START_NS + 5 * 10**9, START_NS + 7 * 10**9
    found = pq.read_table(tmp_path, filters=[("time_ns", ">=", least), ("time_ns", "<", greatest)])
    assert set(found["batch"].to_pylist()) == {5, 6} and len(found) == 20


async def test_a_file_rolls_by_size_and_by_age(tmp_path: Path) -> None:
    sink, time, lines = await opened(tmp_path, roll_bytes=9000, roll_every_s=10.0, rows_per_group=40)
    reached = 0
    for batch in lines.batches("ordered", range(1, 61), 20):
        reached = (await sink.take([batch], lines)).get("ordered", reached)
    assert 0 < reached <= 60 and len(files(tmp_path, "river-gauges", "ordered")) >= 2
    assert await sink.take([lines.batch("late", 1, 3)], lines) == {"ordered": reached}
    await time.advance(10.0)
    assert await sink.take([], lines) == {"ordered": 60, "late": 1}
    await sink.close()


async def test_what_was_never_completed_is_removed(tmp_path: Path) -> None:
    sink, _, lines = await opened(tmp_path)
    await sink.take([lines.batch("ordered", 1, 3)], lines)
    (part,) = tmp_path.iterdir()
    assert part.name == f"river-gauges-ordered-{1:020}.parquet.part"
    kept = part.with_name("copy")
    os.link(part, kept)  # as a crash leaves it: without its end no reader takes it
    await sink.close()
    with pytest.raises(pa.ArrowInvalid):
        pq.read_table(kept)
    kept.rename(part)
    again, _, _ = await opened(tmp_path)
    assert not list(tmp_path.iterdir())
    await again.close()


def fetched(place: Path) -> list[str]:
    """Take the complete files away, as a collector does; their names."""
    found = files(place, "river-gauges", "ordered")
    for path in found:
        path.unlink()
    return [path.name for path in found]


async def test_after_a_crash_a_file_ends_where_one_that_was_fetched_did(tmp_path: Path) -> None:
    """Complete and fetched, but not yet told: its batches come again, and in a file of the same name."""
    sink, _, lines = await opened(tmp_path)
    batches = lines.batches("ordered", range(1, 9))
    await sink.take(batches[:5], lines)
    await sink.flush(lines)
    (first,) = fetched(tmp_path)
    await sink.close()
    again, _, _ = await opened(tmp_path)
    await again.take(batches, lines)
    await again.flush(lines)
    assert fetched(tmp_path) == [first, f"river-gauges-ordered-{6:020}-{8:020}.parquet"]
    await again.close()


@pytest.mark.parametrize("step", ["write_all", "sync_data", "sync_directory"])
async def test_a_disk_that_fails_costs_the_incomplete_file_only(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, step: str
) -> None:
    sink, _, lines = await opened(tmp_path)
    batches = lines.batches("ordered", range(1, 5))
    owner = parquet if step == "write_all" else rolling
    plain = getattr(owner, step)

    def fails(*given: Any) -> None:
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(owner, step, fails)
    with pytest.raises(SinkRetry, match="free some room"):
        await sink.take(batches, lines)
        await sink.flush(lines)
    monkeypatch.setattr(owner, step, plain)
    assert not files(tmp_path, "river-gauges", "ordered")
    await sink.take(batches, lines)
    assert await sink.flush(lines) == {"ordered": 4}
    await sink.close()
    assert [row["batch"] for row in rows(tmp_path, "river-gauges", "ordered")] == [1, 1, 1, 2, 2, 2, 3, 3, 3, 4, 4, 4]


async def test_a_file_that_cannot_be_begun_leaves_nothing_open_and_nothing_behind(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The writer writes the format's first bytes as soon as it is made."""
    sink, _, lines = await opened(tmp_path)
    batches = lines.batches("ordered", [1])
    await sink.take(lines.batches("late", [1]), lines)  # the thread runs, and what pyarrow opens at first is open

    def fails(*given: Any) -> None:
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    before = sum(1 for _ in Path("/proc/self/fd").iterdir())
    with monkeypatch.context() as patch:
        patch.setattr(parquet, "write_all", fails)
        for _ in range(3):
            with pytest.raises(SinkRetry, match="free some room"):
                await sink.take(batches, lines)
    assert sum(1 for _ in Path("/proc/self/fd").iterdir()) == before
    assert [path.name for path in tmp_path.iterdir()] == [f"river-gauges-late-{1:020}.parquet.part"]
    await sink.take(batches, lines)
    assert await sink.flush(lines) == {"ordered": 1, "late": 1}
    await sink.close()


MAPPING = (
    Column("time", "time"),
    Column("station", "source"),
    Column("level", at="/level", type="double precision"),
    Column("place", at="/where/name"),
    Column("count", at="/n", type="integer"),
    Column("seen", at="/seen", type="timestamptz"),
    Column("where", at="/where", type="jsonb"),
    Column("wet", at="/wet", type="boolean"),
)
EVENTS = [
    b'{"level":1.5,"where":{"name":"weir"},"n":7,"seen":"2026-01-31T12:00:00.25+01:00","wet":true}',
    b'{"level":2,"where":null,"n":null}',
    '{"level":"high","where":{"name":"Mühle"},"n":1.5}'.encode(),
]


async def test_columns_by_mapping(tmp_path: Path) -> None:
    sink, _, lines = await opened(tmp_path, columns=MAPPING)
    await sink.take([batch_of(lines, 1, EVENTS)], lines)
    await sink.take([batch_of(lines, 1, EVENTS[:1], "late")], lines)
    await sink.flush(lines)
    await sink.close()
    (path,) = files(tmp_path, "river-gauges", "ordered")
    table = pq.read_table(path)
    assert [str(kind) for kind in table.schema.types] == [
        "timestamp[ns, tz=UTC]", "string", "double", "string", "int32", "timestamp[us, tz=UTC]", "string", "bool",
        "string",
    ]  # fmt: skip
    assert table["time"].cast(pa.int64()).to_pylist() == [START_NS + 1000, START_NS + 1001, START_NS + 1002]
    assert table["station"].to_pylist() == ["gauge-1", None, "gauge-1"]
    assert table["level"].to_pylist() == [1.5, 2.0, None]
    assert table["place"].to_pylist() == ["weir", None, "Mühle"]
    assert table["count"].to_pylist() == [7, None, None]
    seen = datetime.datetime(2026, 1, 31, 11, 0, 0, 250_000, datetime.UTC)
    assert table["seen"].to_pylist() == [seen, None, None]
    where = [each and json.loads(each) for each in table["where"].to_pylist()]
    assert where == [{"name": "weir"}, None, {"name": "Mühle"}]
    assert table["wet"].to_pylist() == [True, None, None]
    # Where no column holds the event, one that does not fit its columns is kept whole: nothing is lost.
    assert table["event_aside"].to_pylist() == [None, None, EVENTS[2].decode()]
    (late,) = rows(tmp_path, "river-gauges", "late")
    assert (late["arrived_ns"], late["late_by_ns"], late["level"]) == (START_NS, 10**9 - 1000, 1.5)


async def test_with_the_event_in_a_column_nothing_is_kept_beside_it(tmp_path: Path) -> None:
    columns = (Column("event"), Column("level", at="/level", type="bigint"), Column("time_ns"))
    sink, _, lines = await opened(tmp_path, columns=columns)
    await sink.take([batch_of(lines, 1, EVENTS)], lines)
    await sink.flush(lines)
    await sink.close()
    (path,) = files(tmp_path, "river-gauges", "ordered")
    table = pq.read_table(path)
    assert table.column_names == ["event", "level", "time_ns"]
    assert [each.encode() for each in table["event"].to_pylist()] == EVENTS


async def test_repairs_are_files_of_their_own(tmp_path: Path) -> None:
    sink, _, _ = await opened(tmp_path)
    made = [RepairRow(number, 5 - number, f"gw-{number % 2}", 9, 3, b'{"n":%d}' % number) for number in range(4)]
    (repair,) = cut(made, 100, 12)
    await sink.repair(repair)
    (path,) = tmp_path.iterdir()
    assert path.name == f"river-gauges-repair-{12:020}-{12:020}.parquet"
    before = path.stat()
    await sink.repair(repair)  # a repeat
    assert path.stat() == before
    found = pq.read_table(path).to_pylist()
    assert [(row["source"], row["time_ns"]) for row in found] == [("gw-0", 3), ("gw-0", 5), ("gw-1", 2), ("gw-1", 4)]
    assert [row["event"] for row in found] == ['{"n":2}', '{"n":0}', '{"n":3}', '{"n":1}']
    await sink.close()


async def test_a_batch_that_the_journal_cannot_give_whole_is_refused(tmp_path: Path) -> None:
    sink, _, lines = await opened(tmp_path)
    bad = batch_of(lines, 1, [b'{"a":"\xff"}', b"{}"])
    with pytest.raises(SinkRefused, match="batch 1 of lane ordered is not UTF-8"):
        await sink.take([bad], lines)
    wrong = batch_of(lines, 2, [b"{}", b"{}"])
    wrong.refs["length"][0] = 1
    with pytest.raises(StrandlineError, match="not what the journal gave"):
        await sink.take([wrong], lines)
    await sink.take([batch_of(lines, 3, [b"{}"])], lines)
    assert await sink.flush(lines) == {"ordered": 3}
    await sink.close()


def test_it_is_made_by_its_kind(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    made = make_sink("parquet", "river", VirtualTime(), directory=tmp_path, compression="none", rows_per_group=5)
    assert isinstance(made, ParquetSink)
    with pytest.raises(StrandlineError, match=r"needs the package.*strandline\[arrow\]"):
        monkeypatch.setitem(__import__("sys").modules, "pyarrow", None)
        monkeypatch.delitem(__import__("sys").modules, "strandline.sinks.parquet")
        make_sink("parquet", "river", VirtualTime(), directory=tmp_path)

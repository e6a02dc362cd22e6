"""The NDJSON sink: names, rolling, what a crash leaves behind, the form of late lines, errors of the disk."""

from __future__ import annotations

import errno
import json
import os
import re
import resource
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any
from urllib.parse import unquote

import pytest
from helpers_sinks import START_NS, HeldLines, VirtualTime
from hypothesis import given
from hypothesis import strategies as st
from sink_conformance import HOSTILE, SinkConformance
from strandline.core.columns import Lane
from strandline.errors import SinkRetry, StrandlineError
from strandline.ports import Sink
from strandline.sinks import files as file_calls
from strandline.sinks import make_sink, ndjson, rolling
from strandline.sinks.ndjson import NdjsonSink, late_lines
from strandline.sinks.rolling import feed_part

FILE = re.compile(r"(.*)-(ordered|late)-([0-9]{20})-([0-9]{20})\.ndjson", re.DOTALL)


def files(place: Path, feed: str, lane: Lane) -> list[Path]:
    """A lane's complete files, in order; their numbers must join without a gap or an overlap."""
    found = []
    last = 0
    for path in sorted(place.iterdir()):
        match = FILE.fullmatch(path.name)
        if match and match[1] == feed_part(feed) and match[2] == lane:
            assert last < int(match[3]) <= int(match[4])
            last = int(match[4])
            found.append(path)
    return found


def lines_of(place: Path, feed: str, lane: Lane) -> list[bytes]:
    block = b"".join(path.read_bytes() for path in files(place, feed, lane))
    assert block == b"" or block.endswith(b"\n")
    return block.split(b"\n")[:-1]


class TestConformance(SinkConformance):
    roll_bytes = 64 * 1024 * 1024

    def make(self, place: Path, feed: str) -> Sink:
        return NdjsonSink(place, feed, VirtualTime(), roll_bytes=self.roll_bytes)

    def stored(self, place: Path, feed: str, lane: Lane) -> list[tuple[object, ...]]:
        found = lines_of(place, feed, lane)
        return [(line,) for line in found] if lane == "ordered" else [late_facts(line) for line in found]


class TestConformanceOfManyFiles(TestConformance):
    roll_bytes = 300


def late_facts(line: bytes) -> tuple[object, ...]:
    """A late line as any JSON reader sees it, and the event's own bytes in it."""
    wrapped = json.loads(line)
    event = line.split(b',"event":', 1)[1][:-1]
    assert json.loads(event) == wrapped["event"]
    return wrapped["time_ns"], wrapped["source"], wrapped["arrived_ns"], wrapped["late_by_ns"], event


def names(place: Path) -> list[str]:
    return sorted(path.name for path in place.iterdir() if not path.name.startswith("."))


async def opened(place: Path, **options: float) -> tuple[NdjsonSink, VirtualTime, HeldLines]:
    time = VirtualTime()
    sink = NdjsonSink(place, "river-gauges", time, **options)  # type: ignore[arg-type]
    await sink.open()
    return sink, time, HeldLines()


async def test_names_carry_lane_and_numbers(tmp_path: Path) -> None:
    sink, _, lines = await opened(tmp_path)
    await sink.take(lines.batches("ordered", range(1, 8)), lines)
    await sink.take(lines.batches("late", [3]), lines)
    assert all(name.endswith(".ndjson.part") for name in names(tmp_path))
    assert await sink.flush(lines) == {"ordered": 7, "late": 3}
    await sink.close()
    assert names(tmp_path) == [
        "river-gauges-late-00000000000000000003-00000000000000000003.ndjson",
        "river-gauges-ordered-00000000000000000001-00000000000000000007.ndjson",
    ]


async def test_the_form_of_a_late_line() -> None:
    lines = HeldLines(['gauge "1"', "g2"])
    batch = lines.batch("late", 5, 7, text="x")
    first, *_, last = late_lines(batch, lines).decode().split("\n")[:-1]
    event = '{"lane":"late","batch":5,"row":0,"text":"x"}'
    time_ns = START_NS + 5_000_000_000
    assert first == (
        f'{{"time_ns":{time_ns},"source":"gauge \\"1\\"","arrived_ns":{START_NS + 5},"late_by_ns":7000000000,'
        f'"event":{event}}}'
    )
    assert '"source":null' in last


async def test_a_file_rolls_by_size(tmp_path: Path) -> None:
    sink, _, lines = await opened(tmp_path, roll_bytes=1000)
    batches = lines.batches("ordered", range(1, 31), 4)
    size = len(lines.ndjson(batches[0]))
    reached = 0
    for batch in batches:
        reached = (await sink.take([batch], lines)).get("ordered", reached)
    assert 0 < reached <= 30
    complete = files(tmp_path, "river-gauges", "ordered")
    assert len(complete) >= 3
    assert all(1000 <= path.stat().st_size < 1000 + 2 * size for path in complete)
    assert int(complete[-1].name[-27:-7]) == reached
    await sink.close()


async def test_a_file_rolls_by_age(tmp_path: Path) -> None:
    sink, time, lines = await opened(tmp_path, roll_every_s=10.0)
    first, second, third, late = *lines.batches("ordered", [1, 2, 3]), lines.batch("late", 1, 1)
    assert await sink.take([first], lines) == {}
    await time.advance(9.999)
    assert await sink.take([second], lines) == {}
    assert await sink.take([late], lines) == {}
    await time.advance(0.001)
    assert await sink.take([third], lines) == {"ordered": 3}
    await time.advance(10.0)
    assert await sink.take([], lines) == {"ordered": 3, "late": 1}
    assert sink.flush_after_s == 10.0
    await sink.close()


async def test_what_a_crash_left_is_removed_and_others_are_not_touched(tmp_path: Path) -> None:
    digits = "0" * 19
    ours = [f"river-gauges-ordered-{digits}4.ndjson.part", f"river-gauges-late-{digits}9.ndjson.part"]
    theirs = [
        f"river-gauges-2-ordered-{digits}4.ndjson.part",
        f"river-gauges-2-ordered-{digits}1-{digits}9.ndjson",
        f"river-gauges-ordered-{digits}1-{digits}8.ndjson.gz",
        "river-gauges-ordered-1-8.ndjson",
        f"Xriver-gauges-ordered-{digits}1-{digits}9.ndjson",
        "notes.txt",
    ]
    complete = [f"river-gauges-ordered-{digits}1-{digits}2.ndjson", f"river-gauges-ordered-{digits}3-{digits}3.ndjson"]
    for name in (*ours, *theirs, *complete):
        (tmp_path / name).write_bytes(b"{}\n")
    sink = NdjsonSink(tmp_path, "river-gauges", VirtualTime())
    assert await sink.open() == {"ordered": 3}  # nothing tells where the late lane is
    await sink.close()
    assert names(tmp_path) == sorted([*theirs, *complete])


async def test_collected_files_leave_the_position_unknown(tmp_path: Path) -> None:
    sink, _, lines = await opened(tmp_path)
    await sink.take(lines.batches("ordered", [1, 2]), lines)
    await sink.flush(lines)
    await sink.close()
    for path in tmp_path.iterdir():
        path.unlink()
    again = NdjsonSink(tmp_path, "river-gauges", VirtualTime())
    assert await again.open() == {}
    await again.close()


@contextmanager
def file_size_at_most(limit: int) -> Iterator[None]:
    """The system's own limit on the size of a file: a write beyond it is cut short, the next one fails (EFBIG)."""
    before = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (limit, before[1]))
    try:
        yield
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, before)


async def test_a_write_that_fails_half_way_leaves_nothing(tmp_path: Path) -> None:
    sink, _, lines = await opened(tmp_path)
    batches = lines.batches("ordered", range(1, 5), 50)
    size = len(lines.ndjson(batches[0]))
    with file_size_at_most(size * 3 // 2), pytest.raises(SinkRetry, match="limit on the size of a file") as caught:
        await sink.take(batches, lines)
    assert str(tmp_path) in str(caught.value)
    assert names(tmp_path) == []
    assert await sink.flush(lines) == {}
    await sink.take(batches, lines)
    assert await sink.flush(lines) == {"ordered": 4}
    await sink.close()
    assert lines_of(tmp_path, "river-gauges", "ordered") == [row[0] for row in lines.expected(batches)]


async def test_a_rename_that_fails_leaves_nothing(tmp_path: Path) -> None:
    """The file is taken away under the sink, so the rename finds nothing."""
    sink, _, lines = await opened(tmp_path)
    batches = lines.batches("ordered", [1, 2])
    await sink.take(batches, lines)
    for path in tmp_path.iterdir():
        path.unlink()
    with pytest.raises(SinkRetry, match="make the folder again"):
        await sink.flush(lines)
    await sink.take(batches, lines)
    assert await sink.flush(lines) == {"ordered": 2}
    await sink.close()
    assert lines_of(tmp_path, "river-gauges", "ordered") == [row[0] for row in lines.expected(batches)]


async def test_a_long_file_is_given_to_the_disk_on_the_way(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Piece by piece, none twice and none left out but the last one; a disk that fails at one costs nothing."""
    begun: list[tuple[int, int]] = []
    fails: list[int] = []

    def begin(descriptor: int, offset: int, size: int) -> None:
        assert os.fstat(descriptor).st_size == offset + size
        begun.append((offset, size))
        if fails:
            raise OSError(fails.pop(), "Input/output error")

    monkeypatch.setattr(ndjson, "begin_writing", begin)
    monkeypatch.setattr(ndjson, "BEGUN_EVERY_BYTES", 1000)
    sink, _, lines = await opened(tmp_path)
    batches = lines.batches("ordered", range(1, 41), 5)
    fails.append(errno.EIO)
    with pytest.raises(SinkRetry, match="see whether its disk is failing"):
        await sink.take(batches, lines)
    assert names(tmp_path) == []
    begun.clear()
    await sink.take(batches, lines)
    await sink.flush(lines)
    await sink.close()
    assert len(begun) > 5 and all(size >= 1000 for _, size in begun)
    assert [offset for offset, _ in begun] == [0, *(offset + size for offset, size in begun)][:-1]
    assert lines_of(tmp_path, "river-gauges", "ordered") == [row[0] for row in lines.expected(batches)]


class Watched:
    """The calls that make files durable, each carried out and noted down; `fails` names one that fails instead."""

    def __init__(self, patch: pytest.MonkeyPatch) -> None:
        self.calls: list[str] = []
        self.fails = ""
        for owner, name in ((rolling, "sync_data"), (Path, "rename"), (rolling, "sync_directory")):
            patch.setattr(owner, name, self._watching(name, getattr(owner, name)))

    def _watching(self, name: str, plain: Callable[..., Any]) -> Callable[..., Any]:
        def call(*arguments: Any) -> Any:
            self.calls.append(name)
            if name == self.fails:
                raise OSError(errno.EIO, "Input/output error")
            return plain(*arguments)

        return call


async def test_a_file_is_synced_then_renamed_then_its_folder_is_synced(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    sink, _, lines = await opened(tmp_path)
    watched = Watched(monkeypatch)
    await sink.take(lines.batches("ordered", [1]), lines)
    assert watched.calls == []
    await sink.flush(lines)
    # The file's bytes, then the note's; a note is durable before a file is there that anybody could fetch.
    assert watched.calls == ["sync_data", "sync_data", "sync_directory", "rename", "sync_directory"]
    await sink.close()


@pytest.mark.parametrize("step", ["sync_data", "rename", "sync_directory"])
async def test_what_could_not_be_made_durable_is_written_anew(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, step: str
) -> None:
    """After a sync that failed the same bytes must not be synced again: the system may have dropped them already."""
    sink, _, lines = await opened(tmp_path)
    batches = lines.batches("ordered", [1, 2])
    watched = Watched(monkeypatch)
    watched.fails = step
    await sink.take(batches, lines)
    with pytest.raises(SinkRetry, match="see whether its disk is failing"):
        await sink.flush(lines)
    assert names(tmp_path) == []
    watched.fails = ""
    assert await sink.flush(lines) == {}
    await sink.take(batches, lines)
    assert await sink.flush(lines) == {"ordered": 2}
    await sink.close()
    assert lines_of(tmp_path, "river-gauges", "ordered") == [row[0] for row in lines.expected(batches)]


def test_new_folders_are_kept_by_the_folders_above_them(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    synced: list[Path] = []
    plain = file_calls.sync_directory
    monkeypatch.setattr(file_calls, "sync_directory", lambda folder: (synced.append(folder), plain(folder)))
    file_calls.make_directory(tmp_path / "a" / "b")
    assert sorted(synced) == [tmp_path, tmp_path / "a"]
    file_calls.make_directory(tmp_path / "a" / "b")
    assert len(synced) == 2


async def test_one_lanes_trouble_leaves_the_other_alone(tmp_path: Path) -> None:
    sink, _, lines = await opened(tmp_path)
    late = lines.batches("late", [1])
    await sink.take(late, lines)
    ordered = lines.batches("ordered", [1], 100)
    with file_size_at_most(2000), pytest.raises(SinkRetry):
        await sink.take(ordered, lines)
    assert await sink.take(late, lines) == {}  # still held: skipped, not written twice
    assert await sink.flush(lines) == {"late": 1}
    await sink.close()
    assert len(lines_of(tmp_path, "river-gauges", "late")) == 3


async def test_a_folder_that_is_gone_is_tried_again(tmp_path: Path) -> None:
    place = tmp_path / "a" / "b"
    sink, _, lines = await opened(place)
    place.rmdir()
    with pytest.raises(SinkRetry, match="make the folder again"):
        await sink.take(lines.batches("ordered", [1]), lines)
    place.mkdir()
    await sink.take(lines.batches("ordered", [1]), lines)
    assert await sink.flush(lines) == {"ordered": 1}
    await sink.close()


@pytest.mark.parametrize("below", ["", "deeper"])
async def test_a_file_in_the_folders_place_is_an_error(tmp_path: Path, below: str) -> None:
    (tmp_path / "taken").write_bytes(b"")
    sink = NdjsonSink(tmp_path / "taken" / below, "river-gauges", VirtualTime())
    with pytest.raises(StrandlineError, match="cannot be a folder") as caught:
        await sink.open()
    assert not isinstance(caught.value, SinkRetry)
    await sink.close()


@given(st.text(st.characters(exclude_categories=["Cs"]), max_size=300))
def test_every_feed_name_becomes_a_file_name(feed: str) -> None:
    part = feed_part(feed)
    assert re.fullmatch(r"[A-Za-z0-9_%~.-]*", part) and not part.startswith(".")
    assert len(part) <= 190
    if "~" not in part:
        assert unquote(part) == feed  # so two names never give the same part


def test_hostile_names_stay_apart() -> None:
    parts = {feed_part(feed) for feed in (*HOSTILE, "x" * 255, "x" * 257, "X", "x")}
    assert len(parts) == len(HOSTILE) + 4


async def test_made_by_kind(tmp_path: Path) -> None:
    sink = make_sink("ndjson", "river", VirtualTime(), directory=tmp_path, roll_every_s=3.0, roll_bytes=4096)
    assert await sink.open() == {}
    assert sink.flush_after_s == 3.0
    await sink.close()

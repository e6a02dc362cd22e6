"""Snapshots and retention in a running service: what is deleted, what is kept, and what a start makes of what is left.

Segments of 64 KiB, so that a few thousand events fill several; the ticks of the service do the housekeeping.
"""

from __future__ import annotations

import asyncio
from pathlib import Path

import pytest
from helpers_faulty import planted, scripted
from helpers_service import FEED, Running, configuration, events, eventually, running, small_journal, stored
from strandline.errors import JournalError

BODY = 200


def files(folder: Path, ending: str) -> list[Path]:
    """The files of the feed's journal with this ending, without spares, oldest first."""
    found = (folder / "data" / "feeds" / FEED).glob(f"*.{ending}")
    return sorted(path for path in found if not path.name.startswith("spare"))


async def fill(service: Running, first: int, bodies: int) -> int:
    """Send bodies of ascending events; the second behind the last one."""
    for start in range(first, first + bodies * BODY, BODY):
        await service.send(range(start, start + BODY))
    return first + bodies * BODY


async def fill_twice(service: Running, folder: Path, first: int = 0) -> int:
    """Send until the state was saved twice, which is due by what was written and by what the first one took."""
    for _ in range(60):
        first = await fill(service, first, 10)
        await tidied(service)
        if len(files(folder, "snap")) == 2:
            return first
    raise AssertionError("two snapshots are not written")


async def tidied(service: Running) -> None:
    """A tick, and the housekeeping that it may have begun."""
    service.runtime.tick()
    await eventually(lambda: service.runtime._housekeeping is None or service.runtime._housekeeping.done())


def events_from(first: int) -> bytes:
    return events(range(first, first + BODY))


def settled(service: Running) -> bool:
    return service.runtime.feed.state.outbox.undelivered_events == 0 and not service.runtime.feed.state.runs.held


async def test_segments_go_once_every_sink_has_taken_what_they_hold(tmp_path: Path) -> None:
    text = small_journal(tmp_path, "100MiB")
    async with running(text) as service:
        sent = await fill_twice(service, tmp_path)
        await eventually(lambda: service.runtime.journal.first_lsn > 0, "the first segment is deleted")
        assert len(files(tmp_path, "seg")) < service.runtime.feed.next_lsn / 65536
        ledger = (await service.document())["ledger"]
    assert stored(tmp_path) == list(range(sent))
    async with running(text) as service:  # nothing before the snapshot is needed
        assert (await service.document())["ledger"] == ledger
        sent = await fill(service, sent, 1)
    assert stored(tmp_path) == list(range(sent))


async def test_nothing_goes_that_a_sink_has_yet_to_take(tmp_path: Path) -> None:
    toml, sinks = scripted("a", "b")
    going_on = asyncio.Event()
    sinks["b"].script.extend(["ok", going_on])
    async with running(small_journal(tmp_path, "100MiB", sinks=toml), make=planted(**sinks)) as service:
        sent = await fill(service, 0, 30)
        await eventually(lambda: len(files(tmp_path, "snap")) == 1, "a snapshot is written")
        assert service.runtime.journal.first_lsn == 0 and len(files(tmp_path, "seg")) > 4
        going_on.set()
        await eventually(lambda: settled(service))
        for _ in range(30):  # a snapshot that held all that waited is followed by one at four times its size
            sent = await fill(service, sent, 20)
            await eventually(lambda: settled(service))
            await tidied(service)
            if service.runtime.journal.first_lsn > 0:
                break
        await eventually(lambda: service.runtime.journal.first_lsn > 0)
        assert sinks["a"].durable["ordered"] == sinks["b"].durable["ordered"]


async def test_what_is_held_keeps_its_segment_and_comes_out_of_it(tmp_path: Path) -> None:
    """One straggling source holds the feed from the first segment on; a start in between changes nothing."""
    text = small_journal(tmp_path, "100MiB", idle_after="1h")
    async with running(text) as service:
        await service.send([0], "gw-2")
        sent = await fill_twice(service, tmp_path, 1)
        assert service.runtime.journal.first_lsn == 0 and stored(tmp_path) == [0]
    async with running(text) as service:
        assert (await service.document())["held"]["events"] == sent - 1
        await service.send([10**6], "gw-2")
        await eventually(lambda: len(stored(tmp_path)) == sent)
        assert stored(tmp_path) == list(range(sent))


async def test_a_damaged_snapshot_is_passed_over_for_the_older_one(tmp_path: Path) -> None:
    text = small_journal(tmp_path, "100MiB", slack="100s")
    async with running(text) as service:
        sent = await fill_twice(service, tmp_path)
        await eventually(lambda: service.runtime.journal.first_lsn > 0)
        before = await service.document()
    _, newest = files(tmp_path, "snap")
    content = bytearray(newest.read_bytes())
    content[len(content) // 2] ^= 1
    newest.write_bytes(content)
    async with running(text) as service:
        found = await service.document()
        for key in ("ledger", "watermark_ns", "newest", "last_batch", "sources"):
            assert found[key] == before[key], key
        assert (await service.post("drain")).status == 204
        await eventually(lambda: len(stored(tmp_path)) == sent)
    assert stored(tmp_path) == list(range(sent))


async def test_without_any_snapshot_a_journal_that_begins_later_cannot_be_read(tmp_path: Path) -> None:
    text = small_journal(tmp_path, "100MiB")
    async with running(text) as service:
        await fill_twice(service, tmp_path)
        await eventually(lambda: service.runtime.journal.first_lsn > 0)
    for snapshot in files(tmp_path, "snap"):
        snapshot.write_bytes(b"\0" * snapshot.stat().st_size)
    before = files(tmp_path, "seg")
    with pytest.raises(JournalError, match="no usable snapshot"):
        async with running(text):
            pass
    assert files(tmp_path, "seg") == before, "nothing was deleted"


async def test_a_feed_with_the_least_room_never_stands_still(tmp_path: Path) -> None:
    """Two segments, the least that the configuration takes: refused now and then, and always taken again."""
    async with running(small_journal(tmp_path, "128KiB")) as service:
        sent = refused = 0
        while sent < 40 * BODY:
            answer = await service.post("events", events_from(sent))
            if answer.status == 200:
                sent += BODY
            else:
                assert answer.json["type"].endswith(":journal_full")
                refused += 1
                await eventually(lambda: settled(service))
                await eventually(lambda: not service.runtime.journal.short_of_room, "room is made")
        assert service.runtime.journal.bytes_used <= 128 * 1024
    assert stored(tmp_path) == list(range(sent))


async def test_where_a_snapshot_would_free_nothing_none_is_written(tmp_path: Path) -> None:
    """Room is short and the sink stands: writing the state again and again would only load the disk."""
    toml, sinks = scripted("a")
    going_on = asyncio.Event()
    sinks["a"].script.extend(["ok", going_on])
    async with running(small_journal(tmp_path, "192KiB", sinks=toml), make=planted(**sinks)) as service:
        first = 0
        while (await service.post("events", events_from(first))).status == 200:
            first += BODY
        await eventually(lambda: len(files(tmp_path, "snap")) == 1)
        before = files(tmp_path, "snap")
        for _ in range(20):  # each leaves a record, and a tick looks after each
            promise = {"source": "gw-1", "time": "2023-01-01T00:00:00Z"}
            assert (await service.post("marks", promise)).status == 204
            await tidied(service)
        assert files(tmp_path, "snap") == before
        going_on.set()
        await eventually(lambda: settled(service))
        await eventually(lambda: not service.runtime.journal.short_of_room)
        assert (await service.post("events", events_from(first))).status == 200


async def test_a_stop_leaves_a_snapshot_so_that_a_start_folds_little(
    tmp_path: Path, caplog: pytest.LogCaptureFixture
) -> None:
    caplog.set_level("INFO")
    async with running(configuration(tmp_path, slack="1h")) as service:
        for second in range(50):
            await service.send([second])
    caplog.clear()
    async with running(configuration(tmp_path, slack="1h")) as service:
        assert (await service.document())["held"]["events"] == 50
    assert "0 records folded, 50 events held" in caplog.text

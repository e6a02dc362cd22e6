"""The fuzz lane's targets of the journal: damaged folders, and damaged bodies behind a sound envelope."""

from __future__ import annotations

import struct
from collections.abc import Callable, Mapping
from functools import cache
from random import Random
from typing import NamedTuple

import msgspec
from fuzz_mutate import mutated
from fuzz_targets import Target
from helpers_feed import Shell, Written, patient, saved_bytes
from helpers_journal import FEED
from simdisk import SimDisk
from strandline.clock import SystemClock
from strandline.core.columns import Fault, RequestKey
from strandline.core.feed import Feed
from strandline.core.records import Kind, decode_arrival, decode_mark, decode_small
from strandline.errors import JournalError
from strandline.housekeeping import Housekeeper
from strandline.journal.journal import Journal

SEGMENT_BYTES = 4096
Files = Mapping[str, bytes]


class Story(NamedTuple):
    """A feed's journal: its files, its records by position, and what the feed knew behind each of them."""

    files: Files
    records: dict[int, Written]
    known: dict[int, tuple[int, int, int]]  # end of a record -> received, released, watermark
    saved: bytes


@cache
def story() -> Story:
    """Three segments, one snapshot, and every kind of record."""
    shell = Shell(patient(slack_ns=3, id_window_events=100, keys_at_most=5), sinks={"a": ("ordered", "late")})
    for number in range(40):
        key = RequestKey(f"key-{number}", bytes(16)) if number % 9 == 0 else None
        faults = [Fault(9, "malformed", "not one JSON object", b"{")] if number % 7 == 0 else []
        times = [number * 2, number * 2 + number % 5 - 3]
        shell.events(times, number, f"gw-{number % 6}", faults, identities=[number, number // 2], key=key)
    shell.act("promise", "gw-1", 90, now_ns=50)
    shell.act("excuse", "gw-2", "its link is down", now_ns=51)
    shell.taken("a", "ordered", 1, 52)
    shell.act("drain", now_ns=53)
    return Story(*_written(shell))


def _written(shell: Shell) -> tuple[Files, dict[int, Written], dict[int, tuple[int, int, int]], bytes]:
    disk, feed, known, saved = SimDisk(), Feed(shell.settings), {}, b""
    journal = _opened(disk)
    for number, record in enumerate(shell.records):
        journal.reserve([len(record.body)])
        journal.append(record.lsn, record.kind, [record.body])
        feed.fold(record.kind, 1, memoryview(record.body), record.lsn)
        known[feed.next_lsn] = _known(feed)
        if number % 5 == 0:
            journal.flush()
        if number == len(shell.records) // 2:
            journal.flush()
            saved = saved_bytes(feed)
            journal.write_snapshot(feed.next_lsn, [saved])
    journal.flush()
    journal.close()
    files = {name: bytes(disk.open(f"{FEED}/{name}").view()) for name in disk.names(FEED)}
    return files, {record.lsn: record for record in shell.records}, known, saved


def _known(feed: Feed) -> tuple[int, int, int]:
    return feed.state.ledger.received, feed.state.ledger.released, feed.state.watermark_ns


def _opened(disk: SimDisk) -> Journal:
    return Journal.open(disk, FEED, segment_bytes=SEGMENT_BYTES, journal_bytes_at_most=64 * SEGMENT_BYTES)


# --- a folder ----------------------------------------------------------------------------------------------------


def _damaged(draw: Random) -> Files:
    files = dict(story().files)
    for _ in range(draw.choice((1, 1, 1, 2, 3))):
        draw.choice(_DAMAGES)(draw, files)
    return files


def _some(draw: Random, files: dict[str, bytes]) -> str:
    return draw.choice(sorted(files) or [""])


def _flip(draw: Random, files: dict[str, bytes]) -> None:
    name = _some(draw, files)
    content = bytearray(files.get(name, b""))
    for _ in range(draw.choice((1, 1, 8))):
        if content:
            # The headers hold what a reader goes by; most of the rest is bodies.
            within = 64 if draw.random() < 0.4 else len(content)
            content[draw.randrange(min(within, len(content)))] ^= 1 << draw.randrange(8)
    files[name or "x"] = bytes(content)


def _change(draw: Random, files: dict[str, bytes]) -> None:
    name = _some(draw, files)
    start = draw.randrange(len(files.get(name, b"")) + 1)
    content = files.get(name, b"")
    files[name or "x"] = content[:start] + mutated(draw, content[start : start + 600]) + content[start + 600 :]


def _zero(draw: Random, files: dict[str, bytes]) -> None:
    name = _some(draw, files)
    content = files.get(name, b"")
    start, count = draw.randrange(len(content) + 1), draw.choice((1, 8, 512, 4096))
    files[name or "x"] = content[:start] + bytes(len(content[start : start + count])) + content[start + count :]


def _resize(draw: Random, files: dict[str, bytes]) -> None:
    name = _some(draw, files)
    content = files.get(name, b"")
    cut = draw.choice((0, 1, 63, 64, 65, 500, len(content)))
    files[name or "x"] = content[:cut] if draw.random() < 0.7 else content + content[:cut]


def _rename(draw: Random, files: dict[str, bytes]) -> None:
    name = _some(draw, files)
    other = mutated(draw, name.encode(), [each.encode() for each in files]).decode("latin-1").replace("/", "_")
    if name and other.isprintable() and 0 < len(other) < 100:
        files[other] = files.pop(name)


def _remove(draw: Random, files: dict[str, bytes]) -> None:
    files.pop(_some(draw, files), None)


def _copy(draw: Random, files: dict[str, bytes]) -> None:
    one, other = _some(draw, files), _some(draw, files)
    if one:
        files[other] = files[one]


_DAMAGES: tuple[Callable[[Random, dict[str, bytes]], None], ...] = (
    _flip, _flip, _flip, _change, _change, _zero, _resize, _rename, _remove, _copy
)  # fmt: skip


def _recover(files: Files) -> str:
    """A damaged folder is refused by name, or read back to a stretch of what was written, and nothing else."""
    disk = SimDisk()
    for name, content in files.items():
        disk.create(f"{FEED}/{name}", len(content)).write(0, [content])
    disk.sync_directory(FEED)
    try:
        journal = _opened(disk)
    except JournalError as error:
        assert str(error).isprintable() and len(str(error)) < 2000
        return "refused"
    journal.check()
    records = story().records
    for frame in journal.frames():
        original = records[frame.lsn]
        assert (frame.kind, bytes(frame.body)) == (original.kind, original.body), "a record that was never written"
    feed = Feed(patient())
    try:
        Housekeeper(journal, feed, None, None, SystemClock()).recover()  # type: ignore[arg-type]
    except JournalError as error:
        assert "snapshot" in str(error)
        return "needs its snapshot"
    feed.check()
    assert feed.next_lsn == journal.next_lsn
    if feed.next_lsn:
        assert _known(feed) == story().known[feed.next_lsn], "the state is not that of this position"
    journal.close()
    return "whole" if feed.next_lsn == max(story().known) else "prefix" if feed.next_lsn else "empty"


# --- bodies ------------------------------------------------------------------------------------------------------


def _record(draw: Random) -> bytes:
    """The kind, and the body."""
    records = list(story().records.values())
    record = draw.choice(records)
    return bytes([record.kind]) + mutated(draw, record.body, [other.body for other in records[:20]])


def _read_record(given: bytes) -> str:
    kind, body = given[0] if given else 0, given[1:]
    try:
        if kind == Kind.ARRIVAL:
            decode_arrival(body, 0)
        elif kind == Kind.MARK:
            decode_mark(body)
        else:
            decode_small(Kind(kind), body)
    except (struct.error, ValueError, msgspec.MsgspecError):
        return "refused"
    return "good"


def _snapshot(draw: Random) -> bytes:
    return mutated(draw, story().saved)


def _restore(body: bytes) -> str:
    """A snapshot's checksum was right: then only another version, or a fault of its own, can make it unreadable."""
    try:
        Feed(patient()).restore(body, 0)
    except ValueError as error:
        assert str(error)
        return "refused"
    return "good"


TARGETS: dict[str, Target] = {
    "folders": Target(
        2_000, _damaged, _recover, frozenset({"refused", "whole", "prefix", "needs its snapshot"}), 4 * 2**20
    ),
    "records": Target(1_500, _record, _read_record, frozenset({"refused", "good"})),
    "snapshots": Target(500, _snapshot, _restore, frozenset({"refused", "good"}), 8 * 2**20),
}

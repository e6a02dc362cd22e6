"""Group commit: one sync for all who wait, callbacks on the loop, an end that flushes, a failure told once."""

from __future__ import annotations

import asyncio
import threading
from pathlib import Path

from helpers_journal import append, ends, opened, records_of
from simdisk import Faults, SimDisk
from strandline.errors import JournalFailed
from strandline.journal.commit import GroupCommit
from strandline.journal.counters import SYNC_BOUNDS_S, Counters
from strandline.journal.disk import LocalDisk

LEVELS = [(3, b'{"station":"weir-%d"}\n' % number) for number in range(400)]


class Gate(Faults):
    """Holds every sync of a file until it is let through."""

    def __init__(self) -> None:
        super().__init__()
        self.closed = False
        self.arrived = threading.Semaphore(0)
        self.through = threading.Semaphore(0)

    def meet(self, name: str, path: str, partly=lambda: None) -> None:
        if name == "sync" and self.closed:
            self.arrived.release()
            assert self.through.acquire(timeout=60)
        super().meet(name, path, partly)


class Ends:
    """What a GroupCommit told, and in which thread; awaits positions."""

    def __init__(self) -> None:
        self.durable: list[int] = []
        self.failures: list[Exception] = []
        self.threads: set[int] = set()
        self._told = asyncio.Event()

    def on_durable(self, lsn: int) -> None:
        self.durable.append(lsn)
        self._tell()

    def on_failed(self, error: Exception) -> None:
        self.failures.append(error)
        self._tell()

    def _tell(self) -> None:
        self.threads.add(threading.get_ident())
        self._told.set()

    async def next(self) -> None:
        """Wait until something was told."""
        await self._told.wait()
        self._told.clear()


async def test_one_sync_serves_all_who_wait() -> None:
    gate = Gate()
    journal = opened(SimDisk(faults=gate))
    told = Ends()
    commit = GroupCommit(journal, told.on_durable, told.on_failed)
    gate.closed = True
    append(journal, LEVELS[0])
    commit.kick()
    await asyncio.to_thread(gate.arrived.acquire)
    for record in LEVELS[1:30]:
        append(journal, record)
        commit.kick()
    assert told.durable == [] and commit.busy and journal.durable_lsn == 0
    gate.through.release()
    await told.next()
    assert told.durable == ends(LEVELS[:1])
    await asyncio.to_thread(gate.arrived.acquire)
    gate.closed = False
    gate.through.release()
    await told.next()
    assert told.durable == [ends(LEVELS[:1])[0], ends(LEVELS[:30])[-1]]
    assert told.threads == {threading.get_ident()}
    assert (commit.counters.syncs, commit.counters.frames) == (2, 30)
    assert commit.counters.bytes_written == ends(LEVELS[:30])[-1]
    await commit.close()
    journal.check()
    journal.close()


async def test_close_flushes_what_is_queued_and_ends(tmp_path: Path) -> None:
    disk = LocalDisk(tmp_path)
    journal = opened(disk)
    told = Ends()
    commit = GroupCommit(journal, told.on_durable, told.on_failed)
    for record in LEVELS:
        append(journal, record)
    await commit.close()
    await commit.close()
    assert told.durable[-1] == journal.durable_lsn == ends(LEVELS)[-1] and not commit.busy
    commit.kick()
    assert not commit.busy
    journal.close()
    assert records_of(opened(disk)) == LEVELS


async def test_closing_without_work_does_nothing(tmp_path: Path) -> None:
    journal = opened(LocalDisk(tmp_path))
    told = Ends()
    commit = GroupCommit(journal, told.on_durable, told.on_failed)
    await commit.close()
    assert told.durable == [] and told.failures == [] and journal.counters.syncs == 0
    journal.close()


async def test_a_failure_is_told_once_and_nothing_is_flushed_after_it() -> None:
    disk = SimDisk()
    journal = opened(disk)
    told = Ends()
    commit = GroupCommit(journal, told.on_durable, told.on_failed)
    append(journal, LEVELS[0])
    with disk.failing(1):
        commit.kick()
        await told.next()
    assert told.durable == [] and [type(error) for error in told.failures] == [JournalFailed]
    commit.kick()
    assert not commit.busy
    await commit.close()
    assert len(told.failures) == 1


async def test_an_error_in_the_callback_is_told_too(tmp_path: Path) -> None:
    journal = opened(LocalDisk(tmp_path))
    told = Ends()

    def broken(lsn: int) -> None:
        raise LookupError("no such token")

    commit = GroupCommit(journal, broken, told.on_failed)
    append(journal, LEVELS[0])
    commit.kick()
    await told.next()
    assert [str(error) for error in told.failures] == ["no such token"]
    await commit.close()
    journal.close()


async def test_a_spare_segment_is_made_behind_the_answers(tmp_path: Path) -> None:
    journal = opened(LocalDisk(tmp_path))
    told = Ends()
    commit = GroupCommit(journal, told.on_durable, told.on_failed)
    for first in range(0, 400, 10):
        for record in LEVELS[first : first + 10]:
            append(journal, record)
        commit.kick()
        await told.next()
    await commit.close()
    assert not journal.lacks_spare and records_of(journal) == LEVELS
    journal.check()
    journal.close()


def test_sync_durations_fall_into_their_buckets() -> None:
    counters = Counters()
    for seconds in (0.0, 0.0005, 0.00051, 10.0, 11.0):
        counters.synced(seconds)
        counters.check()
    assert counters.sync_counts[:2] == [2, 1] and counters.sync_counts[-2:] == [1, 1]
    assert len(counters.sync_counts) == len(SYNC_BOUNDS_S) + 1 and counters.sync_seconds_last == 11.0

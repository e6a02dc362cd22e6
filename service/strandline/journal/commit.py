"""Group commit: one sync serves everyone who waits, and while it runs the next group gathers.

The asyncio side of the journal: starts flushes in a thread of its own, tells the loop what became durable. What is
appended, and what follows from durability, is decided elsewhere.
"""

from __future__ import annotations

import asyncio
from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from typing import TypeVar

from ..core.effects import Buffer
from .counters import Counters
from .journal import Journal

Result = TypeVar("Result")


class GroupCommit:
    """Flushes one journal. All methods belong to the loop's thread; the callbacks run there too.

    `saves_every_ns`: a snapshot is due so often at the latest while anything changes; None: the size decides alone.

    `on_durable(lsn)` is called after each flush that moved it; `on_failed(error)` once, for whatever ended it: a
    JournalFailed, or an error that `on_durable` raised. After that nothing is flushed any more.
    """

    saves_every_ns: int | None = None

    def __init__(
        self, journal: Journal, on_durable: Callable[[int], None], on_failed: Callable[[Exception], None]
    ) -> None:
        self._journal = journal
        self._on_durable = on_durable
        self._on_failed = on_failed
        self._worker = ThreadPoolExecutor(max_workers=1, thread_name_prefix="journal")
        self._task: asyncio.Task[None] | None = None
        self._wanted = False
        self._ended = False

    @property
    def counters(self) -> Counters:
        """Syncs, frames, bytes and how long the syncs took."""
        return self._journal.counters

    def append(self, lsn: int, kind: int, parts: Sequence[Buffer]) -> None:
        """Queue one record; see Journal.append."""
        self._journal.append(lsn, kind, parts)

    async def keep_snapshot(self, lsn: int, parts: Sequence[Buffer], needed_lsn: int) -> None:
        """A snapshot was written beside the journal: nothing more is to be done where the journal is all there is."""

    @property
    def durable_lsn(self) -> int:
        """What was told to `on_durable` at most: everything before it outlives a crash."""
        return self._journal.durable_lsn

    @property
    def busy(self) -> bool:
        """Whether a flush is running or about to."""
        return self._task is not None

    def kick(self) -> None:
        """Records were appended: make them durable soon. Cheap; call it as often as you like."""
        if self._ended:
            return
        self._wanted = True
        if self._task is None:
            self._task = asyncio.get_running_loop().create_task(self._run())

    async def run(self, work: Callable[[], Result]) -> Result:
        """Do something else in the journal's own thread, between flushes."""
        return await asyncio.get_running_loop().run_in_executor(self._worker, work)

    async def close(self) -> None:
        """Flush what is queued, end the thread. The journal stays open. A second call does nothing."""
        if self._journal.queued_bytes:
            self.kick()
        if self._task is not None:
            await self._task
        self._ended = True
        # An idle thread ends at once; one that reserves a segment ends when that is done.
        await asyncio.to_thread(self._worker.shutdown)

    async def _run(self) -> None:
        loop = asyncio.get_running_loop()
        try:
            while self._wanted:
                self._wanted = False
                before = self._journal.durable_lsn
                lsn = await loop.run_in_executor(self._worker, self._journal.flush)
                if lsn > before:
                    self._on_durable(lsn)
                if self._journal.lacks_spare:
                    # Behind the answers, before the next group; what it meets is remembered by the journal.
                    self._worker.submit(self._journal.replenish)
        except Exception as error:
            self._ended = True
            self._on_failed(error)
        finally:
            self._task = None

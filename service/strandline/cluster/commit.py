"""Group commit of a partition: durable is what the replicated log holds, not what a disk of this machine does.

Records go to the local journal as everywhere, for sinks and recovery read them there; a sync is answered once their
entries are in the log (`log`). While one group is on its way the next gathers. What follows is decided elsewhere.
"""

from __future__ import annotations

import asyncio
import logging
from collections.abc import Callable, Coroutine, Sequence
from typing import Any, TypeVar

import msgspec

from ..bell import Bell
from ..core.effects import Buffer
from ..errors import StrandlineError
from ..journal.commit import GroupCommit
from ..journal.journal import Journal
from .entries import Entry, Origin, Taken, entry_of
from .link import Away
from .log import PartitionLog, TakenOver

log = logging.getLogger(__name__)
Result = TypeVar("Result")


class GivenUp(StrandlineError):
    """The owner stops at once: what is not in the log by now will not get there by this owner."""


class ReplicatedCommit(GroupCommit):
    """Makes one partition's journal durable. All methods belong to the loop's thread."""

    # Whoever takes over reads again every message that came since the snapshot, although its events may be delivered:
    # the stream must keep them so long.
    saves_every_ns = 30 * 10**9

    def __init__(
        self,
        journal: Journal,
        on_durable: Callable[[int], None],
        on_failed: Callable[[Exception], None],
        replica: PartitionLog,
    ) -> None:
        super().__init__(journal, on_durable, on_failed)
        self._replica = replica
        self._entries: list[Entry] = []
        self._next_lsn = self._replicated_lsn = journal.next_lsn
        self._writing = asyncio.Lock()
        self._bell = Bell()
        self._stop = asyncio.Event()  # set once it has ended
        self._left: set[asyncio.Future[Any]] = set()  # what was under way at the end, until it notices
        self.origin: Origin | None = None  # of the arrival that is being appended
        self.next_message = 1  # all of the stream's messages before it are in the log

    def append(self, lsn: int, kind: int, parts: Sequence[Buffer]) -> None:
        """As in GroupCommit; an arrival needs `origin` to be set."""
        super().append(lsn, kind, parts)
        self._entries.append(entry_of(kind, parts, self.origin))

    @property
    def durable_lsn(self) -> int:
        """Everything before this position is in the log."""
        return self._replicated_lsn

    async def keep_snapshot(self, lsn: int, parts: Sequence[Buffer], needed_lsn: int) -> None:
        """Put a snapshot into the log, once everything before it is there; then let go what nobody needs.

        Without the log, or once it was taken over, the snapshot is left out: the log goes back further then.
        """
        try:
            saved = await self._unless_ended(self._replica.store_snapshot(lsn, parts, needed_lsn))
            while self._replicated_lsn < lsn:
                self._require_going_on()
                bell = self._bell.next
                self.kick()
                await bell.wait()
            async with self._writing:
                self._require_going_on()
                saved = msgspec.structs.replace(saved, next_message=self.next_message)
                await self._unless_ended(self._replica.append(self._replicated_lsn, [saved]))
                named = self._replica.last
            await self._unless_ended(self._replica.let_go(saved, named))
        except (TakenOver, GivenUp, Away) as error:
            log.warning("a snapshot at position %d is not in the log: %s", lsn, error)

    def give_up(self, why: str) -> None:
        """Replicate nothing more, not even what is on its way. `close` still must be called."""
        if not self._ended:  # as it is once it was closed
            self._end(GivenUp(why))

    async def close(self) -> None:
        """As in GroupCommit; after `give_up` what is queued goes to the local journal only, which nobody reads."""
        if self._entries and not self._ended:
            self.kick()
        await self._until_idle()
        if self._journal.queued_bytes and not self._journal.failed:
            await self.run(self._journal.flush)
        await super().close()

    def _note_messages(self, entries: Sequence[Entry]) -> None:
        last = max((entry.sequence for entry in entries if isinstance(entry, Taken)), default=0)
        self.next_message = max(self.next_message, last + 1)

    async def _until_idle(self) -> None:
        while (task := self._task) is not None:
            await asyncio.wait([task])

    async def _unless_ended(self, call: Coroutine[Any, Any, Result]) -> Result:
        """What it returns. Once this ends it is left alone: the client passes over some cancellings. Raises GivenUp."""
        task, stop = asyncio.ensure_future(call), asyncio.ensure_future(self._stop.wait())
        try:
            await asyncio.wait([task, stop], return_when=asyncio.FIRST_COMPLETED)
        finally:
            stop.cancel()
            if not task.done():
                self._left.add(task)
                task.add_done_callback(self._forget)
                task.cancel()
        if task in self._left:
            raise GivenUp("the owner stops")
        return task.result()

    def _forget(self, task: asyncio.Future[Any]) -> None:
        self._left.discard(task)
        if not task.cancelled():
            task.exception()  # looked at, so that asyncio does not report it as forgotten

    def _end(self, error: Exception) -> None:
        self._ended = True
        self._stop.set()
        self._replica.give_up()
        self._bell.ring()
        self._on_failed(error)

    def _require_going_on(self) -> None:
        if self._ended:
            raise GivenUp("the owner stops")

    async def _run(self) -> None:
        loop = asyncio.get_running_loop()
        try:
            while self._wanted and not self._ended:
                self._wanted = False
                async with self._writing:
                    begin_lsn, self._next_lsn = self._next_lsn, self._journal.next_lsn
                    entries, self._entries = self._entries, []
                    flushing = loop.run_in_executor(self._worker, self._journal.flush)
                    try:
                        if entries:
                            await self._unless_ended(self._replica.append(begin_lsn, entries))
                    finally:
                        await flushing
                    if entries:
                        self._replicated_lsn = self._next_lsn
                        self._note_messages(entries)
                if entries:
                    self._bell.ring()
                    self._on_durable(self._replicated_lsn)
                if self._journal.lacks_spare:
                    self._worker.submit(self._journal.replenish)
        except Exception as error:
            if not self._ended:
                self._end(error)
        finally:
            self._task = None

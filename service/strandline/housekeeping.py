"""Keeping a feed's folder in bounds: snapshots of the core, deletion of journal segments, a spare segment ahead.

What is still needed is told by the core; nothing here looks at events.
"""

from __future__ import annotations

import asyncio
import logging
from collections.abc import Awaitable, Callable

from .core.feed import Feed
from .errors import JournalError, JournalFull
from .journal.commit import GroupCommit
from .journal.journal import Journal

log = logging.getLogger(__name__)


class Housekeeper:
    """Looks after one journal. `settle` waits until all that was appended is durable."""

    def __init__(
        self, journal: Journal, feed: Feed, commit: GroupCommit, settle: Callable[[], Awaitable[None]]
    ) -> None:
        self._journal, self._feed, self._commit, self._settle = journal, feed, commit, settle
        self._saved_lsn = 0
        self._saved_bytes = 0

    def recover(self) -> int:
        """Fold what the journal holds, from its newest usable snapshot on; how many records were folded. Blocking.

        Raises JournalError where the records between the newest usable snapshot and the journal's start are gone.
        """
        for lsn, body in self._journal.snapshots():
            try:
                self._feed.restore(body, lsn)
            except (ValueError, LookupError, TypeError) as error:
                log.warning("%s: the snapshot at %d cannot be used (%s)", self._feed.state.settings.name, lsn, error)
                continue
            self._saved_lsn = lsn
            break
        if self._feed.next_lsn < self._journal.first_lsn:
            raise JournalError(
                f"feeds/{self._feed.state.settings.name}: no usable snapshot, and the journal begins only at "
                f"{self._journal.first_lsn}; restore the folder from a copy"
            )
        folded = 0
        for frame in self._journal.frames(self._feed.next_lsn):
            self._feed.fold(frame.kind, frame.version, frame.body, frame.lsn)
            folded += 1
        return folded

    def due(self, segment_bytes: int) -> bool:
        """Whether `run` has something to do."""
        return self._snapshot_due(segment_bytes) or self._journal.lacks_spare

    def _snapshot_due(self, segment_bytes: int) -> bool:
        # When the journal has grown by a segment and by four times the snapshot's own size, so that snapshots stay
        # below a quarter of what is written; or when room is short and a snapshot would free some.
        grown = self._feed.next_lsn - self._saved_lsn
        if grown >= max(segment_bytes, 4 * self._saved_bytes):
            return True
        return self._journal.short_of_room and self._journal.frees(self._feed.needed_place)

    async def run(self, segment_bytes: int) -> None:
        """Do what is due. Raises JournalFailed; a lack of room is logged and tried again later."""
        try:
            if self._snapshot_due(segment_bytes):
                await self.save()
            if self._journal.lacks_spare:
                await self._commit.run(self._journal.replenish)
        except JournalFull as error:
            log.warning("%s", error)

    async def save(self) -> None:
        """Write a snapshot of the core and delete the segments that nothing needs any more.

        Raises JournalFull (nothing is lost: the journal goes back further), JournalFailed.
        """
        lsn, parts, needed = self._feed.next_lsn, self._feed.save(), self._feed.needed_place
        older = self._saved_lsn
        if lsn > older:
            await self._settle()
            await asyncio.to_thread(self._journal.write_snapshot, lsn, parts)
            self._saved_lsn, self._saved_bytes = lsn, sum(len(part) for part in parts)
        # The older of the two kept snapshots stays usable, in case the newer one turns out damaged; where room is
        # short there is no such choice.
        keep = min(lsn if self._journal.short_of_room else older, needed, self._journal.durable_lsn)
        await self._commit.run(lambda: self._journal.drop_before(keep))

"""Keeping a feed's folder in bounds: snapshots of the core, deletion of journal segments, a spare segment ahead.

What is still needed is told by the core; nothing here looks at events. How long segments stay beyond that, for a
replay, is `retention`; they go first where room is short.
"""

from __future__ import annotations

import asyncio
import logging
from collections.abc import Awaitable, Callable

from .core.feed import Feed
from .core.records import instant_of
from .errors import JournalError, JournalFull
from .journal.commit import GroupCommit
from .journal.journal import Journal
from .ports import Clock
from .retention import Retention

log = logging.getLogger(__name__)


class Housekeeper:
    """Looks after one journal. `settle` waits until all that was appended is durable."""

    def __init__(
        self, journal: Journal, feed: Feed, commit: GroupCommit, settle: Callable[[], Awaitable[None]], clock: Clock,
        retain_ns: int = 0,
    ) -> None:  # fmt: skip
        self._journal, self._feed, self._commit, self._settle = journal, feed, commit, settle
        self._clock = clock
        self._saved_lsn = 0  # of the newest snapshot
        self._older_lsn = 0  # of the one before it: the journal goes back to it, should the newest turn out damaged
        self._saved_bytes = 0
        self._saved_ns = 0  # when; before the first one of this process it was long ago
        self._retention = Retention(retain_ns)
        journal.keeps_snapshots = retain_ns > 0

    def recover(self) -> int:
        """Fold what the journal holds, from its newest usable snapshot on; how many records were folded. Blocking.

        Raises JournalError where the records between the newest usable snapshot and the journal's start are gone.
        """
        intact = self._journal.intact_snapshots()
        for lsn, body in intact:
            try:
                self._feed.restore(body, lsn)
            except (ValueError, LookupError, TypeError) as error:
                log.warning("%s: the snapshot at %d cannot be used (%s)", self._feed.state.settings.name, lsn, error)
                continue
            self._saved_lsn = lsn
            self._older_lsn = next((older_lsn for older_lsn, _ in intact), 0)
            break
        if self._feed.next_lsn < self._journal.first_lsn:
            raise JournalError(
                f"feeds/{self._feed.state.settings.name}: no usable snapshot, and the journal begins only at "
                f"{self._journal.first_lsn}; restore the folder from a copy"
            )
        folded = 0
        for frame in self._journal.frames(self._feed.next_lsn, known=True, just_read=True):
            self._feed.fold(frame.kind, frame.version, frame.body, frame.lsn)
            folded += 1
        if self._retention.retain_ns:
            # How long they have been free is not written down: they count from when the next segment was begun.
            free_lsn = min(self._older_lsn, self._feed.needed_place)
            self._retention.note(self._journal.ends, free_lsn, self._begun_ns)
        return folded

    def _begun_ns(self, first_lsn: int) -> int:
        """Arrival clock of the first record at or behind a position that has one."""
        instants = (instant_of(frame.kind, frame.body) for frame in self._journal.frames(first_lsn, known=True))
        return next((instant for instant in instants if instant is not None), self._clock.now_ns())

    def due(self, segment_bytes: int) -> bool:
        """Whether `run` has something to do."""
        return self._snapshot_due(segment_bytes) or self._journal.lacks_spare or self._retained_due()

    def _retained_due(self) -> bool:
        ends = self._retention.ends
        return bool(ends) and (self._journal.tight or self._retention.through(self._clock.now_ns()) > 0)

    def _snapshot_due(self, segment_bytes: int) -> bool:
        grown = self._feed.next_lsn - self._saved_lsn
        every_ns = self._commit.saves_every_ns
        if grown and every_ns is not None and self._clock.now_ns() >= self._saved_ns + every_ns:
            return True
        # When the journal has grown by a segment and by four times the snapshot's own size, so that snapshots stay
        # below a quarter of what is written; or when room is short and a snapshot would free some.
        if grown >= max(segment_bytes, 4 * self._saved_bytes):
            return True
        return self._journal.short_of_room and self._journal.frees(self._feed.needed_place)

    async def run(self, segment_bytes: int) -> None:
        """Do what is due. Raises JournalFailed; a lack of room is logged and tried again later."""
        try:
            if self._retained_due():
                await self._drop(self._retention.ends[-1])
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
        if lsn > self._saved_lsn:
            await self._settle()
            await asyncio.to_thread(self._journal.write_snapshot, lsn, parts)
            await self._commit.keep_snapshot(lsn, parts, needed)
            self._older_lsn, self._saved_lsn, self._saved_ns = self._saved_lsn, lsn, self._clock.now_ns()
            self._saved_bytes = sum(len(part) for part in parts)
        # The older of the two kept snapshots stays usable, in case the newer one turns out damaged; where room is
        # short there is no such choice.
        keep = min(lsn if self._journal.short_of_room else self._older_lsn, needed, self._journal.durable_lsn)
        await self._drop(keep)

    async def _drop(self, free_lsn: int) -> None:
        """Delete segments before a position that were free for long enough, or as many as are short of room."""
        now_ns = self._clock.now_ns()
        self._retention.note(self._journal.ends, free_lsn, lambda end: now_ns)
        await self._commit.run(lambda: self._drop_now(now_ns))
        self._retention.note(self._journal.ends, free_lsn, lambda end: now_ns)

    def _drop_now(self, now_ns: int) -> None:
        self._journal.drop_before(self._retention.through(now_ns))
        for end in self._retention.ends:
            if not self._journal.tight:
                return
            self._journal.drop_before(end)

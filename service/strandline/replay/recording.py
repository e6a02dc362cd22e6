"""A capture recorded from a running feed: its state now, then every record as it becomes durable, for a while.

The feed is not held up: records are read back from its journal, behind the sync. A listener that is too slow loses the
journal's segments and is let go; its file then ends without an index, and what it has still counts.
"""

from __future__ import annotations

import asyncio
import time
from collections.abc import AsyncIterator
from dataclasses import dataclass

from strandline.core.effects import Buffer
from strandline.journal.journal import Journal
from strandline.runtime import FeedRuntime

from .capture import CaptureWriter, HeldLine, Meta, held_lines

PIECE_BYTES = 4 << 20  # of the journal read at a time
POLL_S = 0.25
BLOCK_S = 5.0  # what came is written as a block after so long at most: a recording that breaks off holds the rest
SECONDS_AT_MOST = 24 * 3600


@dataclass(slots=True)
class _Begun:
    """What was there at the instant at which the recording began."""

    lsn: int
    state: list[Buffer]
    held: HeldLine


class Recording:
    """One recording of one feed. `pieces` yields the file's bytes; for the loop's thread."""

    def __init__(self, runtime: FeedRuntime, *, seconds: float, lines: bool) -> None:
        """Takes the feed's state as it is now. Raises ValueError for an unreasonable time."""
        if not 0 < seconds <= SECONDS_AT_MOST:
            raise ValueError(f"a recording lasts up to {SECONDS_AT_MOST:,} s, not {seconds:g}")
        self._runtime, self._seconds, self._lines = runtime, seconds, lines
        feed = runtime.feed
        self._begun = _Begun(feed.next_lsn, feed.save(), held_lines(feed.state))
        self._buffer: list[bytes] = []
        self._lsn = feed.next_lsn

    async def pieces(self) -> AsyncIterator[bytes]:
        """The capture, as it is recorded. Raises JournalError where the journal has gone on too far."""
        deadline = time.monotonic() + self._seconds
        journal = self._runtime.journal
        while journal.durable_lsn < self._begun.lsn and self._goes_on():
            await asyncio.sleep(POLL_S)
        writer = await asyncio.to_thread(self._begin, journal)
        yield self._taken()
        block_at = time.monotonic() + BLOCK_S
        while True:
            over = time.monotonic() >= deadline or not self._goes_on()
            while journal.durable_lsn > self._lsn:
                try:
                    await asyncio.to_thread(self._read_on, journal, writer)
                except OSError:
                    if self._goes_on():
                        raise
                    break  # a partition that went leaves no journal here: the file ends well, with what was read
                yield self._taken()
            if over:
                break
            if time.monotonic() >= block_at:
                writer.end_block()
                block_at = time.monotonic() + BLOCK_S
                yield self._taken()
            await asyncio.sleep(min(POLL_S, max(0.0, deadline - time.monotonic())))
        writer.close()
        yield self._taken()

    def _goes_on(self) -> bool:
        return self._runtime.failure is None and self._runtime.accepting

    def _begin(self, journal: Journal) -> CaptureWriter:
        begun = self._begun
        held = journal.gather(*begun.held) if self._lines and len(begun.held.places) else b""
        meta = Meta(self._runtime.config.name, "service", self._runtime.clock.now_ns(), begun.lsn, self._lines)
        return CaptureWriter(self._buffer.append, meta, state=begun.state, held=held)

    def _read_on(self, journal: Journal, writer: CaptureWriter) -> None:
        begin = self._lsn
        for frame in journal.frames(begin, known=True):
            writer.add(frame.kind, frame.version, frame.lsn, frame.body)
            self._lsn = frame.end_lsn
            if self._lsn - begin >= PIECE_BYTES:
                return

    def _taken(self) -> bytes:
        found = b"".join(self._buffer)
        self._buffer.clear()
        return found

"""The journal of one feed: frames appended in memory, written and synced in groups, read back by position.

Here lives which segment a frame goes to, what is refused, what is failed and what is kept. Synchronous: no asyncio
(that is `commit`), no meaning of a record (that is strandline.core.records).

**Threads.** `reserve` and `append` belong to one thread, the event loop's. `flush`, `replenish`, `drop_before` and
`close` belong to one worker at a time. `write_snapshot` may run in a third thread beside them. `frames`, `gather` and
`line_bytes` (see `reading`) may be called from any. What two threads touch (the queue, the table of segments, the
failure) changes under one lock that is never held across a call to the disk; a queued frame is handed over whole, and a
segment's handle is used by the worker alone.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterable, Iterator, Sequence
from itertools import groupby, pairwise
from operator import attrgetter
from threading import Lock
from typing import NoReturn

from strandline.core.effects import Buffer
from strandline.core.records import VERSION, frame_bytes
from strandline.errors import JournalError, JournalFailed, JournalFull
from strandline.ports import Disk

from . import snapshots
from .counters import Counters
from .frame import BODY_BYTES_AT_MOST, bytes_of, flatten
from .group import Queued, write_group
from .limits import Limits
from .reading import Readable
from .recovery import make_certain, recover
from .segments import SEGMENT_HEADER_BYTES, Maps, Segment, digest_of
from .spares import SHORTAGES, Spares

SEGMENT_BYTES = 64 << 20
SEGMENT_BYTES_AT_LEAST = 200  # a header, a quarter of headroom for one mark, and a frame: what simulations use
JOURNAL_BYTES_AT_MOST = 8 << 30
QUEUED_BYTES_AT_MOST = 256 << 20
HEADROOM_BYTES = 64 << 10  # some 800 marks of 64 bytes a frame: what frees room must not lack it


class Journal(Readable):
    """One feed's journal. Make it with `open`; every limit is in bytes and is checked before anything is written."""

    def __init__(
        self, disk: Disk, directory: str, digest: bytes, *, segment_bytes: int, journal_bytes_at_most: int,
        queued_bytes_at_most: int, clock: Callable[[], float], read_only: bool,
    ) -> None:  # fmt: skip
        super().__init__(directory, Maps.on(disk))
        self._disk = disk
        self._digest = digest
        self._segment_bytes = segment_bytes
        self._limits = Limits(directory, journal_bytes_at_most, queued_bytes_at_most)
        self._headroom = min(HEADROOM_BYTES, segment_bytes // 4)
        self._clock = clock
        self._read_only = read_only
        self._spares = Spares(disk, directory, segment_bytes)
        self._lock = Lock()
        self._snapshot_lock = Lock()
        self._segments_bytes = 0
        self._queue: list[Queued] = []
        self._queued_bytes = 0
        self._next_lsn = 0
        self._failure: str | None = None
        self._opened = False
        self._short = False
        self.counters = Counters()
        self.cut_bytes = 0
        self.keeps_snapshots = False  # those too that a replay of the oldest segments can begin from

    @classmethod
    def open(
        cls, disk: Disk, directory: str, *, segment_bytes: int = SEGMENT_BYTES,
        journal_bytes_at_most: int = JOURNAL_BYTES_AT_MOST, queued_bytes_at_most: int = QUEUED_BYTES_AT_MOST,
        read_only: bool = False, begin_lsn: int = 0, clock: Callable[[], float] = time.perf_counter,
    ) -> Journal:  # fmt: skip
        """Read the directory back to its longest valid prefix (see `recovery`) and make that durable.

        The directory's last name is the feed's. `read_only` changes nothing on the disk, takes the segments of any one
        feed and refuses to append: for captures, and for looking on while another process writes. `clock` (seconds)
        times syncs. An empty directory begins at `begin_lsn`. Raises JournalError where something durable is missing or
        the disk does not answer.
        """
        if segment_bytes < SEGMENT_BYTES_AT_LEAST or journal_bytes_at_most < 2 * segment_bytes:
            raise ValueError(f"{segment_bytes=} must be {SEGMENT_BYTES_AT_LEAST} or more, and the limit two segments")
        digest = digest_of(directory.rsplit("/", 1)[-1])
        journal = cls(
            disk, directory, digest, segment_bytes=segment_bytes, journal_bytes_at_most=journal_bytes_at_most,
            queued_bytes_at_most=queued_bytes_at_most, clock=clock, read_only=read_only,
        )  # fmt: skip
        try:
            journal._take_over(begin_lsn)
        except (OSError, JournalFailed) as error:
            raise JournalError(
                f"{directory}: the journal could not be opened ({error}); check the disk and the rights on data_dir"
            ) from error
        finally:
            if not journal._opened:
                journal._give_back()
        return journal

    def _take_over(self, begin_lsn: int) -> None:
        """Read what is on the disk, and make it certain and ready for appending unless it is only read."""
        found = recover(self._disk, self._directory, self._maps, own=not self._read_only)
        self._segments = tuple(found.segments)
        self._segments_bytes = sum(segment.size for segment in found.segments)
        self._digest = found.digest or self._digest
        if not self._read_only:
            self.cut_bytes = make_certain(self._disk, found, self._maps)
            snapshots.remove_unfinished(self._disk, self._directory)
            self._spares.adopt()
        self._next_lsn = self._durable_lsn = found.next_lsn if found.segments else begin_lsn
        if not self._read_only:
            self.replenish()
        self._opened = True

    # ---- what there is --------------------------------------------------------------------------------------------

    @property
    def next_lsn(self) -> int:
        """Position of the frame that is appended next."""
        return self._next_lsn

    @property
    def bytes_used(self) -> int:
        """Bytes that the segments take on the disk, at their reserved size, the spare ones included; no snapshots."""
        return self._segments_bytes + self._spares.bytes_reserved

    @property
    def queued_bytes(self) -> int:
        """Bytes of frames that were appended and are not synced yet."""
        return self._queued_bytes

    @property
    def failed(self) -> bool:
        """Whether a write or a sync has failed: then nothing but reading works any more."""
        return self._failure is not None

    # ---- appending (the loop's thread) ----------------------------------------------------------------------------

    def reserve(self, body_bytes: Iterable[int], *, of_headroom: bool = False) -> None:
        """Make sure that records with bodies of these sizes fit now.

        Call it before deciding and append without waiting in between. `of_headroom` is for the small records that free
        room or that must not wait (marks, positions of sinks, acts): the limits do not count for them, and everyone
        else leaves HEADROOM_BYTES (a quarter of a small segment) of reserved room for them.

        The room is one stretch, in the current segment or in a spare one, for all of it and the headroom. So whatever
        is appended fits, however it is split and whatever small records come in between: a frame that does not fit the
        current segment goes to the largest spare, and so does all that follows. What is larger than a segment gets one
        made for it. Rarely blocks: only there, and where the spare was used up faster than it was replaced.

        Raises JournalFull("journal_full" or "disk_full"), nothing having been written; JournalFailed.
        """
        need = sum(map(frame_bytes, body_bytes))
        self._raise_if_unusable()
        stretch = need if of_headroom else need + self._headroom
        more = 0
        if stretch > self._left and not self._spares.hold(stretch):
            more = max(self._segment_bytes, stretch + SEGMENT_HEADER_BYTES)
        if not of_headroom:
            used = self._segments_bytes + more if more else self.bytes_used  # a larger spare replaces the others
            self._short = used > self._limits.bytes_at_most
            self._limits.check(need, used, self._queued_bytes)
        if more:
            self._make_spare(stretch)

    def append(self, lsn: int, kind: int, parts: Sequence[Buffer], version: int = VERSION) -> None:
        """Queue one record; its frame starts at `lsn`, which must be next_lsn. The parts must not change until synced.

        Without a fitting `reserve` before it this may raise JournalFull, when the deciding is already done.
        """
        self._raise_if_unusable()
        if lsn != self._next_lsn:
            raise ValueError(f"a record for position {lsn}, but the journal stands at {self._next_lsn}")
        bodies = flatten(parts)
        body_bytes = sum(map(bytes_of, bodies))
        if body_bytes > BODY_BYTES_AT_MOST:
            raise ValueError(f"a body of {body_bytes} bytes does not fit a frame (at most {BODY_BYTES_AT_MOST})")
        size = frame_bytes(body_bytes)
        if size > self._left:
            self._begin_segment(body_bytes)
        with self._lock:
            self._queue.append(Queued(self._segments[-1], lsn, kind, version, bodies, size))
            self._queued_bytes += size
            self._next_lsn += size

    @property
    def _left(self) -> int:
        """Room in the segment that is being filled, what is queued for it taken off."""
        if not self._segments:
            return 0
        last = self._segments[-1]
        return last.first_lsn + last.room - self._next_lsn

    def _begin_segment(self, body_bytes: int) -> None:
        spare = self._spares.take(frame_bytes(body_bytes))
        if spare is None:
            self.reserve([body_bytes], of_headroom=True)
            spare = self._spares.take(frame_bytes(body_bytes))
            assert spare is not None
        segment = Segment(spare.path, spare.size, self._next_lsn, self._digest, spare.file, named=False)
        with self._lock:
            self._segments = (*self._segments, segment)
            self._segments_bytes += segment.size

    def _make_spare(self, frames_bytes: int) -> None:
        try:
            self._spares.make(frames_bytes)
        except JournalFull:
            self._short = True
            raise
        except OSError as error:
            self._fail(error, "reserving a segment")

    # ---- writing (the worker's thread) ----------------------------------------------------------------------------

    def flush(self) -> int:
        """Write everything queued, sync it, and return the position up to which the journal is durable.

        One sync for all of it; one more, and one of the directory, for each segment that is begun. Raises
        JournalFailed where the disk reports any error: finally, since the kernel may have dropped the pages of a
        failed sync, and a second sync would then succeed without them.
        """
        with self._lock:
            self._raise_if_unusable()
            queue, self._queue = self._queue, []
        try:
            for segment, group in groupby(queue, key=attrgetter("segment")):
                self._write(segment, list(group))
        except BaseException as error:
            self._fail(error, "writing")
        return self._durable_lsn

    def _write(self, segment: Segment, group: list[Queued]) -> None:
        begins = not segment.named
        write_group(self._disk, segment, group, self.counters, self._clock)
        if begins:
            for older in self._segments[: self._segments.index(segment)]:
                older.seal()
        end_lsn, size = group[-1].lsn + group[-1].bytes, sum(queued.bytes for queued in group)
        with self._lock:
            self._durable_lsn = end_lsn
            self._queued_bytes -= size
        segment.note(end_lsn)

    def replenish(self) -> bool:
        """Reserve a spare segment if there is none and the limit allows it; whether there is one now.

        A lack of room is no failure here: whoever needs the room is refused then, with the reason.
        """
        self._raise_if_unusable()
        if not len(self._spares) and self.bytes_used + self._segment_bytes <= self._limits.bytes_at_most:
            try:
                self._make_spare(0)
            except JournalFull:
                return False
        return len(self._spares) > 0

    @property
    def lacks_spare(self) -> bool:
        """Whether `replenish` has something to do."""
        return not len(self._spares)

    @property
    def short_of_room(self) -> bool:
        """Whether the limit or the disk has no room for one more segment, or somebody was refused for want of it."""
        full = self.lacks_spare and self.bytes_used + self._segment_bytes > self._limits.bytes_at_most
        return full or self._short

    @property
    def tight(self) -> bool:
        """Whether the limit leaves no room for a segment behind the spare one: what nothing needs had better go."""
        more = self._segment_bytes * (1 + self.lacks_spare)
        return self._short or self.bytes_used + more > self._limits.bytes_at_most

    @property
    def ends(self) -> list[int]:
        """Where each segment but the last ends, the oldest first: what `drop_before` can delete up to."""
        return [segment.first_lsn for segment in self._segments[1:] if segment.named]

    def frees(self, lsn: int) -> bool:
        """Whether `drop_before(lsn)` would delete something, were `lsn` durable."""
        segments = self._segments
        return len(segments) > 1 and segments[1].first_lsn <= lsn

    def drop_before(self, lsn: int) -> int:
        """Delete the segments whose frames all end at or before `lsn`, never the last one; returns the bytes freed.

        The oldest goes first and durably before the next, so that a crash leaves no hole. `lsn` must be durable, and a
        snapshot at or behind it must exist, or the next start has nothing to begin with.
        """
        self._raise_if_unusable()
        if lsn > self._durable_lsn:
            raise ValueError(f"position {lsn} is not durable yet ({self._durable_lsn} is)")
        freed = 0
        while len(self._segments) > 1 and self._segments[1].named and self._segments[1].first_lsn <= lsn:
            oldest = self._segments[0]
            with self._lock:
                self._segments = self._segments[1:]
                self._segments_bytes -= oldest.size
            try:
                self._disk.remove(oldest.path)
                self._disk.sync_directory(self._directory)
            except OSError as error:
                self._fail(error, f"removing {oldest.path}")
            oldest.seal()
            self._maps.forget(oldest.path)
            freed += oldest.size
            self._short = False
        return freed

    def close(self) -> None:
        """Note, durably, how far the journal is durable, and give the handles back. Nothing may be queued any more."""
        if self._queue and not self.failed:
            raise ValueError("flush before closing: records are queued")
        if self._segments and not self.failed and not self._read_only:
            # The last note goes out with a sync of its own: after a clean end any damage is told from a torn write.
            try:
                self._segments[-1].writable().sync()
            except OSError as error:
                self._fail(error, "closing")
        self._give_back()
        self._read_only = True

    def _give_back(self) -> None:
        for segment in self._segments:
            segment.seal()
        self._spares.close()

    def _raise_if_unusable(self) -> None:
        if self._failure is not None:
            raise JournalFailed(self._failure)
        if self._read_only:
            raise ValueError(f"{self._directory}: the journal is closed, or was opened for reading only")

    def _fail(self, error: BaseException, doing: str) -> NoReturn:
        """Mark the journal failed, for good. What is no OSError leaves as it came: it is a fault of the program."""
        with self._lock:
            if self._failure is None:
                self._failure = (
                    f"{self._directory}: {doing} failed ({error}); the journal is durable up to position "
                    f"{self._durable_lsn}, what came behind may or may not be on disk: check the disk, then restart"
                )
        if isinstance(error, OSError):
            raise JournalFailed(self._failure) from error
        raise error

    # ---- snapshots ------------------------------------------------------------------------------------------------

    def write_snapshot(self, lsn: int, parts: Sequence[Buffer]) -> None:
        """Keep a body that stands for everything before `lsn`, durably; the two newest are kept.

        With `keeps_snapshots` also those that stand at or behind the oldest segment that is kept.

        Raises JournalFull("disk_full") where there is no room for it; JournalFailed where the disk reports an error.
        """
        self._raise_if_unusable()
        if lsn > self._durable_lsn:
            raise ValueError(f"position {lsn} is not durable yet ({self._durable_lsn} is)")
        with self._snapshot_lock:
            try:
                kept_from = self.first_lsn if self.keeps_snapshots else snapshots.MAX_LSN
                snapshots.write_snapshot(self._disk, self._directory, lsn, self._digest, parts, kept_from)
            except OSError as error:
                if error.errno not in SHORTAGES:
                    self._fail(error, "writing a snapshot")
                raise JournalFull(
                    "disk_full", f"{self._directory}: no room for a snapshot ({error.strerror or error}); free some"
                ) from error

    def snapshots(self) -> list[tuple[int, memoryview]]:
        """Position and body of each intact snapshot, the newest first. Raises OSError."""
        return list(self.intact_snapshots())

    def intact_snapshots(self) -> Iterator[tuple[int, memoryview]]:
        """The same one by one: each is read through only when it is asked for. Raises OSError."""
        return snapshots.intact_snapshots(self._disk, self._directory, self._digest)

    def check(self) -> None:
        """Assert every invariant. For the loop's thread; a flush may be running."""
        assert 0 <= self.first_lsn <= self._durable_lsn <= self._next_lsn
        for older, newer in pairwise(self._segments):
            assert older.first_lsn < newer.first_lsn <= older.first_lsn + older.room
            assert older.named or not newer.named
            assert newer.digest == older.digest == self._digest
        if self._segments:
            last = self._segments[-1]
            assert last.first_lsn <= self._next_lsn <= last.first_lsn + last.room
        assert self._segments_bytes == sum(segment.size for segment in self._segments)
        self.counters.check()
        with self._lock:
            # What a flush has taken over lies between what is durable and what is queued.
            lsn = self._next_lsn - sum(queued.bytes for queued in self._queue)
            assert self._durable_lsn <= lsn and self._queued_bytes == self._next_lsn - self._durable_lsn
            for queued in self._queue:
                assert queued.lsn == lsn and queued.segment in self._segments
                lsn += queued.bytes

"""Reading a journal by position: frames in order, and event lines from anywhere in it.

Here lives finding the segments that positions lie in; copying lines fast is `gather`, writing is `journal`. Any thread
may read: the table of segments is a tuple that is replaced, never changed, and a mapping stays valid while it is held.
"""

from __future__ import annotations

from bisect import bisect_right
from collections.abc import Iterator
from operator import attrgetter

import numpy as np
from numpy.typing import ArrayLike, NDArray

from strandline.errors import JournalError

from .frame import Frame, decode_frame, intact_end, octets
from .gather import Copier, Positions, Source, block, lines
from .segments import SEGMENT_HEADER_BYTES, Maps, Segment


class Readable:
    """What can be read of a journal: its segments, oldest first, up to what is durable."""

    def __init__(self, directory: str, maps: Maps) -> None:
        self._directory = directory
        self._maps = maps
        self._segments: tuple[Segment, ...] = ()
        self._durable_lsn = 0

    @property
    def first_lsn(self) -> int:
        """Position of the oldest frame that is kept; where the first one will stand while there is none."""
        segments = self._segments
        return segments[0].first_lsn if segments else self._durable_lsn

    @property
    def durable_lsn(self) -> int:
        """Everything before this position is synced."""
        return self._durable_lsn

    def frames(
        self, from_lsn: int | None = None, *, known: bool = False, just_read: bool = False
    ) -> Iterator[Frame]:
        """The frames from a position (None: from the oldest) up to what is durable now, each CRC checked, no copies.

        A position inside a frame begins with the next one; frames can only be found from the front, so the segment is
        read from its start, unless it is `known` that a frame starts at the position. `just_read`: the journal was
        opened a moment ago, so what was checked then is not checked again. Raises JournalError where the position is no
        longer kept, or where a frame is not intact.
        """
        segments, end_lsn = self._segments, self._durable_lsn
        start = from_lsn if from_lsn is not None else self.first_lsn
        if start < self.first_lsn:
            raise JournalError(
                f"{self._directory}: position {start} is no longer kept, the oldest segment starts at {self.first_lsn}"
            )
        for index in range(max(0, self._index(segments, start)), len(segments)):
            until = min(end_lsn, segments[index + 1].first_lsn) if index + 1 < len(segments) else end_lsn
            begin = max(start, segments[index].first_lsn) if known else segments[index].first_lsn
            yield from self._frames_of(segments[index], begin, start, until, just_read)

    def _frames_of(self, segment: Segment, begin: int, start: int, until: int, just_read: bool) -> Iterator[Frame]:
        lsn = begin
        if lsn >= until:
            return
        view = self._maps.view(segment.path)
        flat = octets(view)
        limit, checked = segment.offset(until), just_read and not segment.unread
        while lsn < until:
            frame = decode_frame(view, flat, segment.offset(lsn), limit, lsn, checked=checked)
            if frame is None:
                raise _changed(segment, lsn)
            if lsn >= start:
                yield frame
            lsn = frame.end_lsn

    def unmap(self) -> None:
        """Let the mappings go, which would keep removed files on the disk; who reads again maps them anew."""
        self._maps.forget_all()

    def line_bytes(self, places: ArrayLike, lengths: ArrayLike) -> list[bytes]:
        """The lines at these positions, one bytes object each, without line feeds. Arguments as for `gather`."""
        return lines(*self._located(places, lengths))

    def gather(self, places: ArrayLike, lengths: ArrayLike, copier: Copier | None = None) -> bytes:
        """The lines one after the other, each followed by a line feed.

        `places` integer[n] are the positions of the lines' first bytes, `lengths` integer[n] bytes without the line
        feed; in any order; `copier` as for `gather.block`. Raises JournalError where one is not kept, or not durable
        yet. What is read was checked when the journal was opened, or written by this process, or its segment is read
        through and checked here, once.
        """
        return block(*self._located(places, lengths), copier)

    def _located(
        self, places: ArrayLike, lengths: ArrayLike
    ) -> tuple[list[Source], NDArray[np.intp] | None, Positions, Positions]:
        """Sources, number of each line's source (None: all in the first), offsets and lengths, for `gather`."""
        begins, counts = np.asarray(places, np.int64), np.asarray(lengths, np.int64)
        if not len(begins):
            return [], None, begins, counts
        durable_lsn, segments = self._durable_lsn, self._segments
        low, high, end = int(begins.min()), int(begins.max()), int((begins + counts).max())
        first, last = self._index(segments, low), self._index(segments, high)
        if first < 0 or end > durable_lsn or high >= durable_lsn or counts.min() < 0:
            raise self._not_kept(low, end)
        if first == last:
            source = self._source(segments, first, durable_lsn)
            if end - source.shift > source.end:
                raise self._not_kept(low, end)
            return [source], None, begins - source.shift, counts
        bounds = [segment.first_lsn for segment in segments[first + 1 : last + 1]]
        owners = np.searchsorted(np.array(bounds, np.int64), begins, side="right")
        # Only segments that are asked for are mapped: a straggler may lie a hundred segments before the rest.
        present = np.bincount(owners) > 0
        sources = [self._source(segments, first + index, durable_lsn) for index in np.flatnonzero(present).tolist()]
        owners = (np.cumsum(present) - 1)[owners]
        offsets = begins - np.array([source.shift for source in sources], np.int64)[owners]
        if (offsets + counts > np.array([source.end for source in sources], np.int64)[owners]).any():
            raise self._not_kept(low, end)
        return sources, owners, offsets, counts

    def _source(self, segments: tuple[Segment, ...], index: int, durable_lsn: int) -> Source:
        segment = segments[index]
        end_lsn = min(durable_lsn, segments[index + 1].first_lsn) if index + 1 < len(segments) else durable_lsn
        view = self._maps.view(segment.path)
        if segment.unread:
            self._read_through(segment, view, end_lsn)
        return Source(view, segment.first_lsn - SEGMENT_HEADER_BYTES, segment.offset(end_lsn))

    @staticmethod
    def _read_through(segment: Segment, view: memoryview, end_lsn: int) -> None:
        """Check every frame of a segment that the start passed over; two threads may do it twice, to the same end.

        The whole segment, not the frame that a line lies in: frames can only be found from the front.
        """
        end = intact_end(view, octets(view), SEGMENT_HEADER_BYTES, segment.offset(end_lsn), segment.first_lsn)
        if end < segment.offset(end_lsn):
            raise _changed(segment, segment.first_lsn + end - SEGMENT_HEADER_BYTES)
        segment.unread = False

    def _not_kept(self, low: int, high: int) -> JournalError:
        return JournalError(
            f"{self._directory}: lines from position {low} to {high} were asked for, but only "
            f"{self.first_lsn} to {self._durable_lsn} is kept and durable, each line inside one segment"
        )

    @staticmethod
    def _index(segments: tuple[Segment, ...], lsn: int) -> int:
        """Number of the segment that a position lies in; -1 before the first."""
        return bisect_right(segments, lsn, key=attrgetter("first_lsn")) - 1


def _changed(segment: Segment, lsn: int) -> JournalError:
    return JournalError(
        f"{segment.path}: the frame at byte {segment.offset(lsn)} (position {lsn}) is not intact any more: "
        "the disk changed what it had synced; check the disk and restore the file from a copy"
    )

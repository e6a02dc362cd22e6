"""The NDJSON sink: files of newline-delimited JSON, and how batches are written as lines, which other sinks share.

Ordered lines are the events' own bytes. How files are named, rolled and completed is `rolling`'s.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import Any

import msgspec

from ..core.columns import Batch, Lane
from ..ports import Lines
from ..writeback import begin_writing
from .files import write_all
from .repairs import Repair
from .rolling import RollingSink
from .rows import late_by_ns, source_column

BEGUN_EVERY_BYTES = 4 * 1024 * 1024  # of a file, given to the disk before the sync that completes it


class NdjsonSink(RollingSink):
    """Takes the ordered and the late lane of one feed into files of lines that roll by size or age.

    Ordered lines are the events' own bytes. Late lines wrap the event as it came with what is known of it:
    {"time_ns":...,"source":...,"arrived_ns":...,"late_by_ns":...,"event":{...}} (times in ns since 1970 UTC; source
    null where the feed has none).
    """

    ending = "ndjson"
    note_ending = ""

    def block(self, batch: Batch, lines: Lines) -> bytes:
        """The batch's lines."""
        return lane_lines(batch, lines)

    def blocks(self, batches: Sequence[Batch], lines: Lines) -> Iterator[memoryview | bytes]:
        """The lines of ordered batches as they are, small batches read together."""
        if batches and batches[0].lane == "ordered":
            return lines.ndjson_each(batches)
        return super().blocks(batches, lines)

    def begin(self, lane: Lane, descriptor: int) -> _Text:
        """Lines of either lane, one after the other."""
        return _Text(descriptor)

    def repair_block(self, repair: Repair) -> bytes:
        """The repair's lines."""
        return repair.ndjson()


class _Text:
    """A file of lines: it ends with its last line."""

    def __init__(self, descriptor: int) -> None:
        self._descriptor, self._size, self._begun = descriptor, 0, 0

    def write(self, block: Any) -> int:
        write_all(self._descriptor, block)
        self._size += len(block)
        if self._size - self._begun >= BEGUN_EVERY_BYTES:  # else one sync writes 64 MiB, and the journal's wait for it
            begin_writing(self._descriptor, self._begun, self._size - self._begun)
            self._begun = self._size
        return self._size

    def finish(self) -> None:
        pass

    def abandon(self) -> None:
        pass


def lane_lines(batch: Batch, lines: Lines) -> bytes:
    """An ordered or a late batch as NDJSON: events as they came, late ones wrapped."""
    return lines.ndjson(batch) if batch.lane == "ordered" else late_lines(batch, lines)


def late_lines(batch: Batch, lines: Lines) -> bytes:
    """A late batch as NDJSON: each event as it came, wrapped with what is known of it."""
    sources = source_column(batch, lines)
    encoded = {source: msgspec.json.encode(source) for source in set(sources)}
    form = b'{"time_ns":%d,"source":%b,"arrived_ns":%d,"late_by_ns":%d,"event":%b}\n'
    facts = zip(batch.times.tolist(), sources, late_by_ns(batch), lines.lines(batch), strict=True)
    return b"".join(
        form % (time_ns, encoded[source], batch.instant_ns, late_by, event) for time_ns, source, late_by, event in facts
    )

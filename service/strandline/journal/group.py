"""Writing one group of frames into one segment, durably: the only place where frames reach the disk.

What a group is, what follows from its being durable, and what a failure means is `journal`.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import NamedTuple

from strandline.core.effects import Buffer
from strandline.ports import Disk, File
from strandline.writeback import BEGUN_FROM_BYTES

from .counters import Counters
from .frame import encode_frame
from .segments import SEGMENT_HEADER_BYTES, Segment, segment_name


class Queued(NamedTuple):
    """A frame that waits to be written. `parts` are those of `flatten`, `bytes` those of the whole frame."""

    segment: Segment
    lsn: int
    kind: int
    version: int
    parts: list[Buffer]
    bytes: int


def write_group(
    disk: Disk, segment: Segment, group: Sequence[Queued], counters: Counters, clock: Callable[[], float]
) -> None:
    """Write frames that follow each other in a segment and sync them; name the segment if these are its first.

    Everything before the group is durable already: so a segment's name proves that. Raises OSError; what then is on
    the disk is open.
    """
    file = segment.writable()
    _write_frames(file, segment, group)
    before = clock()
    file.sync()
    counters.synced(clock() - before)
    if not segment.named:
        directory = segment.path.rpartition("/")[0]
        path = f"{directory}/{segment_name(segment.first_lsn)}"
        disk.rename(segment.path, path)
        disk.sync_directory(directory)
        segment.path, segment.named = path, True
    counters.frames += len(group)
    counters.bytes_written += sum(queued.bytes for queued in group)


def _write_frames(file: File, segment: Segment, group: Sequence[Queued]) -> None:
    """In pieces: the disk works on one while the checksums of the next are reckoned (see `strandline.writeback`)."""
    header = segment.header()
    buffers: list[Buffer] = [] if segment.named else [header, bytes(SEGMENT_HEADER_BYTES - len(header))]
    offset, size = (segment.offset(group[0].lsn), 0) if segment.named else (0, SEGMENT_HEADER_BYTES)
    for queued in group:
        buffers += encode_frame(queued.lsn, queued.kind, queued.parts, queued.version)
        size += queued.bytes
        if size >= BEGUN_FROM_BYTES:
            file.write(offset, buffers)
            buffers, offset, size = [], offset + size, 0
    if buffers:
        file.write(offset, buffers)

"""Reading a journal's directory back after any end: the longest valid prefix, or the reason why there is none.

Here lives what is told apart and what is done about it; nothing is appended here and no record is understood.

Proof that the journal was once durable up to some position stands in three places: in the notes of the segments, in the
name of every segment (it gets its name only after all before it was synced) and in the names of the snapshots. The
highest of them is the *floor*.

* What is not intact at or behind the floor is the unfinished end of a write: it is cut, that is, overwritten with zeros
  and synced, so that no old byte can be taken for a frame later. Parts of such a write reach the disk in any order, so
  intact frames may follow: they were never answered for, and are cut too.
* What is not intact before the floor: a disk that lost or changed what it had synced. JournalError, nothing is touched.
* What cannot be told from a torn end: damage to the last group synced before a crash of the machine, while its note was
  not durable yet (the note goes out with the next sync or by itself within the kernel's write-back time, some 30 s).

Segments that end at or before the newest intact snapshot are not read: their headers, notes and names are judged, and
their frames are marked `unread`. Whoever folds frames checks each of them, and whoever gathers lines from an unread
segment reads it through first (`reading`). Without an intact snapshot everything is read.

What is intact behind the floor is written again before it is synced. A process that died of a failed sync leaves pages
that read well, count as clean and are not on the disk: a sync alone would do nothing for them.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field

from strandline.errors import JournalError
from strandline.ports import Disk

from .disk import ZEROS
from .frame import Octets, intact_end, next_intact, octets
from .segments import (
    SEGMENT_HEADER_BYTES,
    Maps,
    Segment,
    decode_header,
    digest_of,
    first_lsn_of,
    noted_lsn,
    segment_name,
)
from .snapshots import SNAPSHOT_NAME, intact_snapshots
from .spares import last_set


@dataclass(slots=True)
class Recovered:
    """A journal as it was found. `floor_lsn` is proved durable; what lies from there to `next_lsn` is intact."""

    segments: list[Segment] = field(default_factory=list)
    next_lsn: int = 0
    floor_lsn: int = 0
    digest: bytes = b""


def recover(disk: Disk, directory: str, maps: Maps, *, own: bool) -> Recovered:
    """Find the segments and the longest valid prefix; change nothing.

    `own`: the directory must be that of the feed it is named after; otherwise (a copy of segments that is only read)
    its segments must merely be of one feed. Raises JournalError, OSError.
    """
    names = disk.names(directory)
    digest = digest_of(directory.rsplit("/", 1)[-1]) if own else b""
    found = Recovered(digest=digest)
    for name in names:
        first_lsn = first_lsn_of(name)
        if first_lsn is not None:
            found.segments.append(_known(f"{directory}/{name}", first_lsn, found, maps))
    stands_lsn = _stands_for(disk, directory, found)
    # Sorted names are sorted positions: the digits are of one length.
    for index, segment in enumerate(found.segments):
        follower = found.segments[index + 1] if index + 1 < len(found.segments) else None
        segment.unread = follower is not None and follower.first_lsn <= stands_lsn
        found.next_lsn = _checked_end(segment, follower, found, maps)
    _check_snapshots(names, directory, found)
    return found


def _stands_for(disk: Disk, directory: str, found: Recovered) -> int:
    """Position of the newest intact snapshot, which stands for everything before it; 0 where there is none."""
    return next((lsn for lsn, _ in intact_snapshots(disk, directory, found.digest)), 0)


def _known(path: str, first_lsn: int, found: Recovered, maps: Maps) -> Segment:
    view = maps.view(path)
    stands, digest = decode_header(view, path)
    if stands != first_lsn:
        raise JournalError(f"{path}: its header says position {stands}; the file was renamed: give it its name back")
    found.digest = found.digest or digest
    if digest != found.digest:
        raise JournalError(
            f"{path}: this segment belongs to another feed; move it to that feed's directory "
            "(a feed's name cannot be changed while its journal exists)"
        )
    found.floor_lsn = max(found.floor_lsn, first_lsn, noted_lsn(view))
    return Segment(path, len(view), first_lsn, digest)


def _checked_end(segment: Segment, follower: Segment | None, found: Recovered, maps: Maps) -> int:
    """Position where the segment's intact frames end; raises where one is missing that was durable.

    An unread segment is taken to reach its follower, if it can.
    """
    limit = segment.size
    if follower is not None:
        limit = segment.offset(follower.first_lsn)
        if limit > segment.size:
            raise _hole(segment, follower)
        if segment.unread:
            return follower.first_lsn
    view = maps.view(segment.path)
    flat = octets(view)
    end = intact_end(view, flat, SEGMENT_HEADER_BYTES, limit, segment.first_lsn)
    end_lsn = segment.first_lsn + end - SEGMENT_HEADER_BYTES
    durable_lsn = follower.first_lsn if follower else found.floor_lsn
    if end_lsn < durable_lsn:
        raise _damage(segment, view, flat, end, limit, found)
    return end_lsn


def _hole(segment: Segment, follower: Segment) -> JournalError:
    at_most = segment.first_lsn + segment.room
    return JournalError(
        f"{segment.path}: it can reach position {at_most} at most, but the next segment, {follower.path}, starts at "
        f"{follower.first_lsn}: a segment between them is missing; put it back"
    )


def _damage(segment: Segment, view: memoryview, flat: Octets, end: int, limit: int, found: Recovered) -> JournalError:
    lsn = segment.first_lsn + end - SEGMENT_HEADER_BYTES
    later = sum(other.first_lsn > segment.first_lsn for other in found.segments)
    intact = next_intact(view, flat, end, limit, lsn)
    return JournalError(
        f"{segment.path}: the frame at byte {end} (position {lsn}) is not intact, although the journal was durable up "
        f"to position {found.floor_lsn}: the disk has lost or changed what it had synced. "
        + (f"Frames are intact again from byte {intact}" if intact else "No intact frame follows in this file")
        + f"; later segments: {later}. Nothing was changed. Keep a copy of the directory, check the disk, and restore "
        f"the file from a copy. Without one, `strandline.journal.recovery.keep_prefix` keeps what stands before "
        f"position {lsn} and gives up the rest (format.md, section 7)"
    )


def _check_snapshots(names: list[str], directory: str, found: Recovered) -> None:
    for lsn in (int(match[1]) for match in map(SNAPSHOT_NAME.fullmatch, names) if match):
        if lsn > found.next_lsn:
            raise JournalError(
                f"{directory}/snapshot-{lsn:020d}.snap: it was taken at position {lsn}, but the journal ends at "
                f"{found.next_lsn}: what stood between is missing or damaged; put the segments back from a copy, or "
                "move this snapshot away and lose what they held"
            )
        found.floor_lsn = max(found.floor_lsn, lsn)


def make_certain(disk: Disk, found: Recovered, maps: Maps) -> int:
    """Cut the torn end of the last segment, make all that is intact durable, open it for writing.

    Returns the bytes that were cut: of the span behind the last intact frame, up to the last byte that is not zero.
    Raises OSError; running it again after a crash at any point comes to the same.
    """
    if not found.segments:
        return 0
    last = found.segments[-1]
    view = maps.view(last.path)
    floor = last.offset(max(found.floor_lsn, last.first_lsn))
    end = last.offset(found.next_lsn)
    last.file = disk.open(last.path)
    torn_end = last_set(view[: last.file.data_end(end)], end)
    for offset, piece in _pieces(view, floor, end, torn_end):
        last.file.write(offset, [piece])
    last.file.sync()
    disk.sync_directory(last.path.rsplit("/", 1)[0])
    last.note(found.next_lsn)
    return torn_end - end


def _pieces(view: memoryview, floor: int, end: int, torn_end: int) -> Iterator[tuple[int, bytes]]:
    """What is intact but unproved, as it stands; then zeros."""
    step = len(ZEROS)
    for offset in range(floor, end, step):
        yield offset, bytes(view[offset : min(offset + step, end)])
    for offset in range(end, torn_end, step):
        yield offset, ZEROS[: min(step, torn_end - offset)]


def keep_prefix(disk: Disk, directory: str) -> list[str]:
    """An operator's act on a damaged journal that no copy can restore: keep what stands before the damage.

    Segments and snapshots behind it get the prefix `lost-`, the newest first, so that a crash on the way leaves the
    damage to be found again; the damaged segment is cut. Returns the new names. Raises OSError. Events behind the
    damage that no sink has taken are lost; positions and numbers behind it are used again.
    """
    maps = Maps.on(disk)
    names = [name for name in disk.names(directory) if first_lsn_of(name) is not None]
    kept: list[Segment] = []
    end_lsn = None
    for name in names:
        segment = _readable(f"{directory}/{name}", maps)
        if segment is None or end_lsn not in (None, segment.first_lsn):
            break
        kept.append(segment)
        view = maps.view(segment.path)
        end = intact_end(view, octets(view), SEGMENT_HEADER_BYTES, segment.size, segment.first_lsn)
        end_lsn = segment.first_lsn + end - SEGMENT_HEADER_BYTES
    lost = names[len(kept) :] + [
        name
        for name, match in ((name, SNAPSHOT_NAME.fullmatch(name)) for name in disk.names(directory))
        if match and int(match[1]) > (end_lsn or 0)
    ]
    for name in reversed(lost):
        disk.rename(f"{directory}/{name}", f"{directory}/lost-{name}")
        disk.sync_directory(directory)
    if kept:
        make_certain(disk, Recovered(kept, end_lsn or 0, kept[-1].first_lsn, kept[-1].digest), maps)
        kept[-1].forget_notes()
    return [f"lost-{name}" for name in lost]


def _readable(path: str, maps: Maps) -> Segment | None:
    view = maps.view(path)
    try:
        first_lsn, digest = decode_header(view, path)
    except JournalError:
        return None
    return Segment(path, len(view), first_lsn, digest) if path.endswith(segment_name(first_lsn)) else None

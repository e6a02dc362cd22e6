"""A capture out of a feed's journal on disk, also while a service appends to it: reads, locks nothing, changes nothing.

A capture begins where the feed's state is known: at the journal's first record if that is the feed's first one, else at
a snapshot; or anywhere behind, since the records up to there are folded. What happens to records is `core`'s business.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass

from strandline.core.effects import Buffer
from strandline.core.feed import Feed
from strandline.core.records import instant_of
from strandline.core.settings import Settings
from strandline.errors import CaptureError, JournalError, StrandlineError
from strandline.journal.frame import Frame
from strandline.journal.journal import Journal
from strandline.ports import Disk

from .capture import CaptureWriter, Meta, held_lines

OPENINGS = 5  # a service that deletes or begins a segment meanwhile is met again a moment later


@dataclass(frozen=True, slots=True)
class Wanted:
    """What of a journal is wanted: arrival clocks from `from_ns` up to and including `to_ns`; lines or only columns."""

    feed: str
    made_ns: int
    from_ns: int | None = None
    to_ns: int | None = None
    lines: bool = True


def capture_journal(
    disk: Disk,
    directory: str,
    wanted: Wanted,
    write: Callable[[bytes], object],
    progress: Callable[[int, int], object] = lambda done, of: None,
) -> CaptureWriter:
    """Write the capture; the writer tells what is in it. `progress` is told bytes of the journal done, and of how many.

    Raises CaptureError where nothing can be captured, JournalError where the journal is damaged, OSError.
    """
    journal = _opened(disk, directory)
    try:
        feed = _begin(journal, wanted)
        places, lengths = held_lines(feed.state)
        held = journal.gather(places, lengths) if wanted.lines and len(places) else b""
        meta = Meta(wanted.feed, "journal", wanted.made_ns, feed.next_lsn, wanted.lines)
        state: list[Buffer] = feed.save() if feed.next_lsn else []
        writer = CaptureWriter(write, meta, state=state, held=held)
        begin, end = feed.next_lsn, journal.durable_lsn
        for frame in _until(journal.frames(begin, known=True), wanted.to_ns):
            writer.add(frame.kind, frame.version, frame.lsn, frame.body)
            progress(frame.end_lsn - begin, end - begin)
        writer.close()
        return writer
    except FileNotFoundError as error:
        raise CaptureError(
            f"{directory}: the service deleted {error.filename} meanwhile: it keeps only what it needs; set "
            "journal.retain so that older traffic stays, or begin later with --from"
        ) from error
    finally:
        journal.close()


def _opened(disk: Disk, directory: str) -> Journal:
    for attempt in range(OPENINGS):
        try:
            journal = Journal.open(disk, directory, read_only=True)
            break
        except JournalError:
            if attempt == OPENINGS - 1:
                raise
    if journal.durable_lsn == journal.first_lsn:
        raise CaptureError(f"{directory}: there is no journal in it, or nothing in the journal yet")
    return journal


def _until(frames: Iterator[Frame], to_ns: int | None) -> Iterator[Frame]:
    for frame in frames:
        instant = instant_of(frame.kind, frame.body) if to_ns is not None else None
        if instant is not None and to_ns is not None and instant > to_ns:
            return
        yield frame


def _begin(journal: Journal, wanted: Wanted) -> Feed:
    """The feed as it was just before the first record that is wanted."""
    feed = _start(journal, wanted)
    if wanted.from_ns is None:
        return feed
    for frame in journal.frames(feed.next_lsn, known=True):
        instant = instant_of(frame.kind, frame.body)
        if instant is not None and instant >= wanted.from_ns:
            return feed
        feed.fold(frame.kind, frame.version, frame.body, frame.lsn)
    raise CaptureError(f"the journal of {wanted.feed} holds nothing at or behind the instant that --from names")


def _start(journal: Journal, wanted: Wanted) -> Feed:
    """The latest known state at or before what is wanted, else the earliest one."""
    earliest: Feed | None = Feed(Settings(wanted.feed)) if journal.first_lsn == 0 else None
    trouble = "there is no snapshot"
    for lsn, body in journal.intact_snapshots():
        if wanted.from_ns is None and journal.first_lsn == 0:
            break
        feed = Feed(Settings(wanted.feed))
        try:
            feed.restore(body, lsn)
        except ValueError as error:
            trouble = str(error)
            continue
        if not _usable(feed, journal, wanted):
            continue
        if wanted.from_ns is not None and feed.state.now_ns < wanted.from_ns:
            return feed
        earliest = feed if journal.first_lsn else earliest
    if earliest is None:
        raise CaptureError(
            f"the journal of {wanted.feed} begins at position {journal.first_lsn}, and no state is known that a "
            f"capture could begin with ({trouble}): start the service once, which writes one"
        )
    return earliest


def _usable(feed: Feed, journal: Journal, wanted: Wanted) -> bool:
    """Whether everything that this state holds, and every record behind it, still stands in the journal."""
    places, _ = held_lines(feed.state)
    there = feed.next_lsn >= journal.first_lsn
    return there and (not wanted.lines or not len(places) or int(places[0]) >= journal.first_lsn)


def feed_of(directory: str) -> str:
    """The feed whose folder this is. Raises StrandlineError for a path that names none."""
    name = directory.rstrip("/").rsplit("/", 1)[-1]
    if not name:
        raise StrandlineError(f"{directory!r} names no folder of a feed")
    return name

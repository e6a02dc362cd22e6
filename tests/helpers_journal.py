"""Shared by the journal's tests: records to append, a journal read back as plain values, choices from a seed."""

from __future__ import annotations

import random
from collections.abc import Callable, Iterable
from pathlib import Path

from strandline.core.records import frame_bytes
from strandline.journal.journal import Journal
from strandline.ports import Disk

FEED = "feeds/river-gauges"
SMALL = {"segment_bytes": 4096, "journal_bytes_at_most": 1 << 20}

Record = tuple[int, bytes]  # kind, body
LEVELS: list[Record] = [(3, b'{"station":"weir-%d","level":1.5}\n' % number * 5) for number in range(60)]


def opened(disk: Disk, directory: str = FEED, **limits: int) -> Journal:
    """A journal with small segments, checked."""
    journal = Journal.open(disk, directory, **{**SMALL, **limits})
    journal.check()
    return journal


def append(journal: Journal, *records: Record) -> list[int]:
    """Reserve room for the records and append them, each body in two parts; returns their positions."""
    positions = []
    for kind, body in records:
        journal.reserve([len(body)])
        positions.append(journal.next_lsn)
        journal.append(journal.next_lsn, kind, [body[: len(body) // 3], body[len(body) // 3 :]])
        journal.check()
    return positions


def flush(journal: Journal) -> int:
    """Flush and check."""
    durable = journal.flush()
    journal.check()
    return durable


def write(journal: Journal, *records: Record) -> list[int]:
    """Append and flush."""
    positions = append(journal, *records)
    flush(journal)
    return positions


def records_of(journal: Journal, from_lsn: int | None = None) -> list[Record]:
    """The records that are kept."""
    return [(frame.kind, bytes(frame.body)) for frame in journal.frames(from_lsn)]


def ends(records: Iterable[Record], first_lsn: int = 0) -> list[int]:
    """Where each record's frame ends."""
    found = []
    for _, body in records:
        first_lsn += frame_bytes(len(body))
        found.append(first_lsn)
    return found


def lines_body(*lines: bytes) -> bytes:
    """A body of lines, each followed by a line feed."""
    return b"".join(line + b"\n" for line in lines)


def seeded(seed: int) -> Callable[[int], int]:
    """Choices for SimDisk.crash that the same seed repeats."""
    return random.Random(seed).randrange


def folder(tmp_path: Path) -> list[str]:
    """Names in the feed's directory."""
    return sorted(path.name for path in (tmp_path / FEED).iterdir())


def segment_files(tmp_path: Path) -> list[Path]:
    """The feed's segments, oldest first."""
    return sorted((tmp_path / FEED).glob("journal-*.seg"))


def flip(path: Path, offset: int, bit: int = 0) -> None:
    """Damage one bit of a file."""
    content = bytearray(path.read_bytes())
    content[offset] ^= 1 << bit
    path.write_bytes(content)

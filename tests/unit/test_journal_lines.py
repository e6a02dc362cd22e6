"""Reading lines back through the journal: from anywhere, across segments, refused where they are not kept."""

from __future__ import annotations

from pathlib import Path

import pytest
from helpers_journal import LEVELS, append, lines_body, opened, write
from simdisk import SimDisk
from strandline.core.records import FRAME_HEADER_BYTES
from strandline.errors import JournalError
from strandline.journal import segments
from strandline.journal.disk import LocalDisk


@pytest.fixture
def disk(tmp_path: Path) -> LocalDisk:
    """A disk on real files."""
    return LocalDisk(tmp_path)


def test_lines_come_back_from_anywhere(disk: LocalDisk) -> None:
    journal = opened(disk)
    lines = [b'{"station":"weir-%d","level":%d}' % (number % 7, number) for number in range(400)]
    places = []
    for first in range(0, 400, 10):
        some = lines[first : first + 10]
        [lsn] = write(journal, (3, lines_body(*some)))
        offset = lsn + FRAME_HEADER_BYTES
        for line in some:
            places.append(offset)
            offset += len(line) + 1
    lengths = [len(line) for line in lines]
    assert journal.line_bytes(places, lengths) == lines
    assert journal.gather(places, lengths) == lines_body(*lines)
    order = sorted(range(400), key=lambda number: number * 7919 % 400)
    assert journal.line_bytes([places[n] for n in order], [lengths[n] for n in order]) == [lines[n] for n in order]
    assert journal.gather([places[n] for n in order], [lengths[n] for n in order]) == lines_body(
        *(lines[n] for n in order)
    )


def test_lines_that_are_not_kept_or_not_durable_are_refused(disk: LocalDisk) -> None:
    journal = opened(disk)
    write(journal, *LEVELS)
    append(journal, LEVELS[0])
    boundary = journal._segments[1].first_lsn
    for places, lengths in (
        ([-1], [1]), ([journal.durable_lsn], [0]), ([journal.durable_lsn - 1], [2]), ([boundary - 2], [4]),
        ([0, boundary - 2], [4, 4]), ([8], [-1]), ([0, boundary], [boundary + 1, 1]),
    ):  # fmt: skip
        for act in (journal.gather, journal.line_bytes):
            with pytest.raises(JournalError, match="were asked for"):
                act(places, lengths)


def test_mappings_are_bounded() -> None:
    disk = SimDisk()
    opened_paths = []

    def open_file(path: str):
        opened_paths.append(path)
        return disk.open(path)

    for number in range(5):
        disk.create(f"a/{number}", 8)
    maps = segments.Maps(open_file, at_most=3)
    first = maps.view("a/0")
    for number in (0, 1, 2, 3, 4, 4):
        maps.view(f"a/{number}")
    assert len(maps) == 3 and opened_paths == [f"a/{number}" for number in range(5)] and len(first) == 8
    maps.forget("a/4")
    maps.view("a/0")
    assert len(maps) == 3 and opened_paths[-1] == "a/0"

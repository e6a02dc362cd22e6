"""What a crash leaves and what a bad disk does: cut ends, damage told and given up, failures that are final."""

from __future__ import annotations

import errno
from pathlib import Path

import pytest
from helpers_journal import FEED, LEVELS, append, ends, flip, opened, records_of, segment_files, write
from simdisk import SimDisk
from strandline.core.records import frame_bytes
from strandline.errors import JournalError, JournalFailed, JournalFull
from strandline.journal import segments
from strandline.journal.disk import LocalDisk
from strandline.journal.journal import Journal
from strandline.journal.recovery import keep_prefix


@pytest.fixture
def disk(tmp_path: Path) -> LocalDisk:
    """A disk on real files."""
    return LocalDisk(tmp_path)


def test_a_torn_end_is_cut_and_never_comes_back(disk: LocalDisk, tmp_path: Path) -> None:
    journal = opened(disk)
    write(journal, *LEVELS[:3])
    size = frame_bytes(len(LEVELS[0][1]))
    [path] = segment_files(tmp_path)
    flushed = path.read_bytes()
    # As if two more frames had been under way and only the second had reached the disk.
    write(journal, *LEVELS[3:5])
    torn = bytearray(flushed)
    second = 64 + 4 * size
    torn[second : second + size] = path.read_bytes()[second : second + size]
    path.write_bytes(torn)
    again = opened(disk)
    assert records_of(again) == LEVELS[:3] and again.cut_bytes == 2 * size - (-len(LEVELS[4][1]) % 8)
    # A frame of the lost one's size must not make the one behind it readable again.
    write(again, LEVELS[5])
    again.close()
    assert records_of(opened(disk)) == [*LEVELS[:3], LEVELS[5]]


def test_damage_before_a_noted_position_is_told_and_nothing_is_touched(disk: LocalDisk, tmp_path: Path) -> None:
    journal = opened(disk)
    write(journal, *LEVELS[:2])
    write(journal, *LEVELS[2:4])
    journal.close()
    [path] = segment_files(tmp_path)
    size = frame_bytes(len(LEVELS[0][1]))
    flip(path, 64 + size + 30)
    before = path.read_bytes()
    expected = (
        rf"{path.name}: the frame at byte {64 + size} \(position {size}\) is not intact, although the journal was "
        rf"durable up to position {4 * size}.*intact again from byte {64 + 2 * size}; later segments: 0"
    )
    with pytest.raises(JournalError, match=expected):
        opened(disk)
    assert path.read_bytes() == before
    assert keep_prefix(disk, FEED) == []
    assert records_of(opened(disk)) == LEVELS[:1]


def test_after_a_clean_end_damage_to_the_very_last_frame_is_told(disk: LocalDisk, tmp_path: Path) -> None:
    journal = opened(disk)
    write(journal, LEVELS[0])
    journal.close()
    flip(segment_files(tmp_path)[0], 70)
    with pytest.raises(JournalError, match="No intact frame follows"):
        opened(disk)


def test_damage_in_an_earlier_segment_is_told_and_can_be_given_up(disk: LocalDisk, tmp_path: Path) -> None:
    journal = opened(disk)
    positions = write(journal, *LEVELS)
    journal.write_snapshot(0, [b"early"])
    journal.write_snapshot(journal.durable_lsn, [b"late"])
    journal.close()
    paths = segment_files(tmp_path)
    flip(paths[1], 64 + frame_bytes(len(LEVELS[0][1])) + 9)
    # The late snapshot stands for it, so a start does not read it; whoever reads it is told.
    with pytest.raises(JournalError, match="is not intact any more"):
        records_of(opened(disk))
    (tmp_path / FEED / f"snapshot-{ends(LEVELS)[-1]:020d}.snap").rename(tmp_path / "aside")
    with pytest.raises(JournalError, match="later segments: 1"):
        opened(disk)
    (tmp_path / "aside").rename(tmp_path / FEED / f"snapshot-{ends(LEVELS)[-1]:020d}.snap")
    lost = keep_prefix(disk, FEED)
    assert lost == [f"lost-{paths[2].name}", f"lost-snapshot-{ends(LEVELS)[-1]:020d}.snap"]
    kept = positions.index(segments.first_lsn_of(paths[1].name)) + 1
    again = opened(disk)
    assert records_of(again) == LEVELS[:kept] and [bytes(body) for _, body in again.snapshots()] == [b"early"]
    write(again, LEVELS[0])
    again.close()
    assert records_of(opened(disk)) == [*LEVELS[:kept], LEVELS[0]]


def test_frames_tell_when_a_frame_goes_bad_while_the_journal_is_open(disk: LocalDisk, tmp_path: Path) -> None:
    journal = opened(disk)
    write(journal, *LEVELS[:2])
    with segment_files(tmp_path)[0].open("r+b") as file:
        file.seek(100)
        file.write(b"\xff")
    with pytest.raises(JournalError, match=r"byte 64 \(position 0\) is not intact any more"):
        list(journal.frames())


@pytest.mark.parametrize(
    ("damage", "told"),
    [
        (lambda paths: paths[1].unlink(), "a segment between them is missing"),
        (lambda paths: flip(paths[1], 3), "the header at byte 0 is damaged"),
        (lambda paths: flip(paths[1], 17), "the header at byte 0 is damaged"),
        (lambda paths: paths[1].write_bytes(b""), "too few for a segment"),
        (lambda paths: paths[2].rename(paths[2].with_name(segments.segment_name(99_999))), "give it its name back"),
        (lambda paths: paths[0].write_bytes(paths[0].read_bytes()[:8] + b"\2\0\0\0"), "too few for a segment"),
        (
            lambda paths: paths[0].write_bytes(paths[0].read_bytes()[:8] + b"\2\0\0\0" + paths[0].read_bytes()[12:]),
            "written in format 2, this program reads up to 1",
        ),
    ],
    ids=["missing", "magic", "position", "empty", "renamed", "short", "newer"],
)
def test_segments_that_cannot_be_right(disk: LocalDisk, tmp_path: Path, damage, told: str) -> None:
    journal = opened(disk)
    write(journal, *LEVELS)
    journal.close()
    damage(segment_files(tmp_path))
    with pytest.raises(JournalError, match=told):
        opened(disk)
    with pytest.raises(JournalError, match=told):
        Journal.open(disk, FEED, read_only=True)
    keep_prefix(disk, FEED)
    records = records_of(opened(disk))
    assert records == LEVELS[: len(records)]


def test_another_feeds_segments_are_told(disk: LocalDisk, tmp_path: Path) -> None:
    journal = opened(disk)
    write(journal, LEVELS[0])
    journal.close()
    (tmp_path / FEED).rename(tmp_path / "feeds" / "rain-gauges")
    with pytest.raises(JournalError, match="belongs to another feed"):
        opened(disk, "feeds/rain-gauges")
    assert records_of(Journal.open(disk, "feeds/rain-gauges", read_only=True)) == LEVELS[:1]


def test_a_missing_last_segment_is_told_by_a_snapshot(disk: LocalDisk, tmp_path: Path) -> None:
    journal = opened(disk)
    write(journal, *LEVELS)
    journal.write_snapshot(journal.durable_lsn, [b"state"])
    journal.close()
    segment_files(tmp_path)[-1].unlink()
    with pytest.raises(JournalError, match=rf"taken at position {ends(LEVELS)[-1]}, but the journal ends at"):
        opened(disk)


def test_a_failed_sync_is_final() -> None:
    disk = SimDisk()
    journal = opened(disk)
    write(journal, LEVELS[0])
    append(journal, LEVELS[1])
    with disk.failing(1) as faults, pytest.raises(JournalFailed, match=r"durable up to position 184.*check the disk"):
        journal.flush()
    assert faults.failed == f"sync {FEED}/spare-0.seg" and journal.failed  # the name it was opened under
    journal.check()
    for act in (
        journal.flush, journal.replenish, lambda: journal.reserve([8]), lambda: journal.append(0, 3, [b""]),
        lambda: journal.drop_before(0), lambda: journal.write_snapshot(0, [b""]),
    ):  # fmt: skip
        with pytest.raises(JournalFailed, match="restart"):
            act()
    assert records_of(journal) == LEVELS[:1]
    journal.close()
    assert disk.handles == 0


def test_a_start_makes_names_durable_that_it_has_read() -> None:
    disk = SimDisk()
    journal = opened(disk)
    append(journal, LEVELS[0])
    with disk.failing(3) as faults, pytest.raises(JournalFailed):
        journal.flush()
    assert faults.failed == f"sync_directory {FEED}"
    disk = disk.restarted()
    disk.capacity_bytes = 4096  # no spare segment is made, whose directory sync would help by the way
    assert records_of(opened(disk)) == LEVELS[:1]
    assert records_of(opened(disk.crash(lambda count: 0))) == LEVELS[:1]


def test_an_error_of_the_program_while_writing_is_final_too() -> None:
    disk = SimDisk()
    journal = opened(disk)
    append(journal, LEVELS[0])
    with disk.failing(0, MemoryError), pytest.raises(MemoryError):
        journal.flush()
    with pytest.raises(JournalFailed):
        journal.flush()


def test_handles_are_given_back() -> None:
    disk = SimDisk()
    journal = opened(disk)
    for record in LEVELS:
        write(journal, record)
    journal.gather([20], [5])
    assert disk.handles == 2 - journal.lacks_spare
    journal.close()
    assert disk.handles == 0


def test_a_shortage_of_handles_refuses_and_passes() -> None:
    disk = SimDisk()
    journal = opened(disk)
    write(journal, (3, bytes(2900)))
    with (
        disk.failing(0, lambda: OSError(errno.EMFILE, "Too many open files")),
        pytest.raises(JournalFull, match="Too many open files"),
    ):
        journal.reserve([2000])
    write(journal, (3, bytes(2000)))

"""What a start reads: segments behind the newest intact snapshot; older ones only when a line is taken from them."""

from __future__ import annotations

from pathlib import Path

import pytest
from helpers_journal import FEED, LEVELS, Record, ends, flip, opened, records_of, segment_files, write
from strandline.core.records import FRAME_HEADER_BYTES
from strandline.errors import JournalError
from strandline.journal import recovery
from strandline.journal.disk import LocalDisk
from strandline.journal.journal import Journal

RECORDS: list[Record] = LEVELS * 3


@pytest.fixture
def disk(tmp_path: Path) -> LocalDisk:
    """A disk on real files."""
    return LocalDisk(tmp_path)


def filled(disk: LocalDisk, at: int) -> list[int]:
    """A journal of some segments, a snapshot before record `at`; the records' positions."""
    journal = opened(disk)
    positions = write(journal, *RECORDS)
    journal.write_snapshot([0, *ends(RECORDS)][at], [b"state"])
    journal.close()
    return positions


def line_of(journal: Journal, position: int, record: Record) -> bytes:
    """The first 20 bytes of a record's body, read as a line is."""
    return journal.line_bytes([position + FRAME_HEADER_BYTES], [20])[0]


def read_paths(disk: LocalDisk, monkeypatch: pytest.MonkeyPatch) -> tuple[Journal, list[int]]:
    """A start, and the positions at which it began to read a segment's frames."""
    found: list[int] = []
    real = recovery.intact_end

    def watched(view, flat, offset, limit, lsn):
        found.append(lsn)
        return real(view, flat, offset, limit, lsn)

    monkeypatch.setattr(recovery, "intact_end", watched)
    return opened(disk), found


def test_only_segments_that_reach_beyond_the_snapshot_are_read(
    disk: LocalDisk, monkeypatch: pytest.MonkeyPatch
) -> None:
    filled(disk, len(RECORDS))
    journal, read = read_paths(disk, monkeypatch)
    assert read == [journal.ends[-1]]
    assert records_of(journal) == RECORDS


def test_without_an_intact_snapshot_everything_is_read(
    disk: LocalDisk, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    filled(disk, len(RECORDS))
    [snapshot] = (tmp_path / FEED).glob("snapshot-*.snap")
    flip(snapshot, 66)
    journal, read = read_paths(disk, monkeypatch)
    assert read == [0, *journal.ends]


def test_with_the_newest_snapshot_damaged_the_older_one_counts(
    disk: LocalDisk, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    filled(disk, len(RECORDS) // 2)
    journal = opened(disk)
    middle, last = ends(RECORDS)[len(RECORDS) // 2 - 1], journal.durable_lsn
    journal.write_snapshot(last, [b"newer"])
    journal.close()
    flip(tmp_path / FEED / f"snapshot-{last:020d}.snap", 66)
    journal, read = read_paths(disk, monkeypatch)
    assert read == [0, *journal.ends][sum(end <= middle for end in journal.ends) :]
    assert 1 < len(read) < len(journal.ends)


def test_damage_in_an_unread_segment_is_told_when_a_line_is_taken_from_it(disk: LocalDisk, tmp_path: Path) -> None:
    positions = filled(disk, len(RECORDS))
    second = segment_files(tmp_path)[1]
    first_lsn = int(second.stem.removeprefix("journal-"))
    flip(second, 64 + 400)
    journal = opened(disk)
    assert line_of(journal, positions[0], RECORDS[0]) == RECORDS[0][1][:20]
    for _ in range(2):  # it stays refused
        with pytest.raises(JournalError, match=rf"{second.name}: .* is not intact any more"):
            line_of(journal, first_lsn, RECORDS[0])
    with pytest.raises(JournalError, match="is not intact any more"):
        records_of(journal)
    flip(second, 64 + 400)  # the file was put back
    assert len(line_of(journal, first_lsn, RECORDS[0])) == 20
    flip(second, 64 + 400)
    assert len(line_of(journal, first_lsn, RECORDS[0])) == 20, "read through once, not each time"


def test_damage_beyond_the_snapshot_is_told_by_the_start(disk: LocalDisk, tmp_path: Path) -> None:
    filled(disk, 10)
    flip(segment_files(tmp_path)[1], 64 + 400)
    with pytest.raises(JournalError, match="although the journal was durable"):
        opened(disk)


@pytest.mark.parametrize("damage", ["header", "missing", "renamed"])
def test_headers_and_names_of_unread_segments_are_judged(disk: LocalDisk, tmp_path: Path, damage: str) -> None:
    filled(disk, len(RECORDS))
    second = segment_files(tmp_path)[1]
    match damage:
        case "header":
            flip(second, 20)
        case "missing":
            second.unlink()
        case "renamed":
            second.rename(second.with_name(f"journal-{1:020d}.seg"))
    with pytest.raises(JournalError, match=r"header|missing|renamed"):
        opened(disk)

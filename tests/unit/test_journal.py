"""The journal on real files: append, flush, reopen, limits, retention, snapshots, damage, reading lines back."""

from __future__ import annotations

from pathlib import Path

import pytest
from helpers_journal import (
    FEED,
    LEVELS,
    SMALL,
    append,
    ends,
    flip,
    flush,
    folder,
    opened,
    records_of,
    segment_files,
    write,
)
from simdisk import SimDisk
from strandline.core.records import frame_bytes
from strandline.errors import JournalError, JournalFull
from strandline.journal import segments
from strandline.journal.disk import LocalDisk
from strandline.journal.journal import HEADROOM_BYTES, Journal


@pytest.fixture
def disk(tmp_path: Path) -> LocalDisk:
    """A disk on real files."""
    return LocalDisk(tmp_path)


# ---- appending and reading back -------------------------------------------------------------------------------------


def test_an_empty_journal(disk: LocalDisk) -> None:
    journal = opened(disk)
    assert (journal.first_lsn, journal.next_lsn, journal.durable_lsn) == (0, 0, 0)
    assert flush(journal) == 0 and records_of(journal) == [] and journal.counters.syncs == 0
    assert journal.line_bytes([], []) == [] and journal.gather([], []) == b""


def test_what_is_flushed_is_read_back_here_and_after_a_restart(disk: LocalDisk) -> None:
    journal = opened(disk)
    positions = write(journal, *LEVELS[:3]) + write(journal, *LEVELS[3:])
    assert positions == [0, *ends(LEVELS)[:-1]] and journal.durable_lsn == journal.next_lsn == ends(LEVELS)[-1]
    assert records_of(journal) == LEVELS
    journal.close()
    again = opened(disk)
    assert records_of(again) == LEVELS and again.durable_lsn == ends(LEVELS)[-1] and again.cut_bytes == 0
    assert [frame.lsn for frame in again.frames()] == positions
    assert write(again, (4, b"mark")) == [ends(LEVELS)[-1]]
    assert records_of(again)[-1] == (4, b"mark")


def test_frames_never_cross_segments_and_segments_follow_without_a_gap(disk: LocalDisk, tmp_path: Path) -> None:
    journal = opened(disk)
    for record in LEVELS:
        write(journal, record)
    names = [path.name for path in segment_files(tmp_path)]
    assert len(names) == 3 and names[0] == f"journal-{0:020d}.seg"
    assert {path.stat().st_size for path in segment_files(tmp_path)} == {4096}
    firsts = [segments.first_lsn_of(name) for name in names]
    assert set(firsts) <= {0, *ends(LEVELS)}


def test_one_group_may_span_segments(disk: LocalDisk) -> None:
    journal = opened(disk)
    append(journal, *LEVELS)
    assert records_of(journal) == []
    before = journal.counters.syncs
    flush(journal)
    assert records_of(journal) == LEVELS and journal.counters.syncs - before == 3
    assert journal.counters.frames == 60 and journal.counters.bytes_written == ends(LEVELS)[-1]


def test_a_record_larger_than_a_segment_gets_one_of_its_own(disk: LocalDisk, tmp_path: Path) -> None:
    journal = opened(disk)
    large = (3, bytes(range(256)) * 100)
    records = [LEVELS[0], large, LEVELS[1]]
    write(journal, *records)
    assert records_of(opened(disk)) == records
    assert sorted(path.stat().st_size for path in segment_files(tmp_path))[-1] == 28672


def test_frames_from_a_position(disk: LocalDisk) -> None:
    journal = opened(disk)
    positions = write(journal, *LEVELS)
    for number in (0, 1, 20, 59):
        assert records_of(journal, positions[number]) == LEVELS[number:]
        assert records_of(journal, positions[number] - 1 if number else 0) == LEVELS[number:]
    assert records_of(journal, journal.next_lsn) == []


def test_bodies_of_frames_are_views_of_the_map(disk: LocalDisk) -> None:
    journal = opened(disk)
    write(journal, LEVELS[0])
    [frame] = journal.frames()
    assert isinstance(frame.body, memoryview) and frame.body.readonly and frame.body.obj is not None
    assert frame.end_lsn == journal.next_lsn and frame.version == 1


def test_a_record_for_another_position_is_refused(disk: LocalDisk) -> None:
    journal = opened(disk)
    with pytest.raises(ValueError, match="stands at 0"):
        journal.append(8, 3, [b"a"])


def test_the_order_of_threads_is_free_between_append_and_flush(disk: LocalDisk) -> None:
    # What is appended while a flush runs belongs to the next one: the queue is handed over whole.
    journal = opened(disk)
    append(journal, LEVELS[0])
    flushed = journal.flush()
    append(journal, LEVELS[1])
    assert flushed == journal.durable_lsn == ends(LEVELS)[0] and journal.queued_bytes == frame_bytes(len(LEVELS[1][1]))


def test_a_closed_journal_takes_nothing(disk: LocalDisk) -> None:
    journal = opened(disk)
    append(journal, LEVELS[0])
    with pytest.raises(ValueError, match="queued"):
        journal.close()
    flush(journal)
    journal.close()
    journal.close()
    with pytest.raises(ValueError, match="closed"):
        journal.append(journal.next_lsn, 3, [b"a"])


def test_reading_only_changes_nothing(disk: LocalDisk, tmp_path: Path) -> None:
    journal = opened(disk)
    write(journal, *LEVELS[:20])
    copy = tmp_path / "captures" / "yesterday"
    copy.mkdir(parents=True)
    for path in segment_files(tmp_path):
        (copy / path.name).write_bytes(path.read_bytes())
    before = {path.name: path.read_bytes() for path in copy.iterdir()}
    reader = Journal.open(LocalDisk(tmp_path, read_only=True), "captures/yesterday", read_only=True)
    assert records_of(reader) == LEVELS[:20]
    for act in (lambda: reader.append(reader.next_lsn, 3, [b"a"]), reader.flush, lambda: reader.reserve([1])):
        with pytest.raises(ValueError, match="reading only"):
            act()
    reader.close()
    assert {path.name: path.read_bytes() for path in copy.iterdir()} == before


# ---- limits ---------------------------------------------------------------------------------------------------------


def filled(journal: Journal) -> int:
    """Append until the journal refuses; returns how many records it took."""
    for number in range(10_000):
        try:
            write(journal, (3, bytes(500)))
        except JournalFull:
            return number
        journal.replenish()
    raise AssertionError("the journal never refused")


def test_a_full_journal_refuses_with_numbers_and_keeps_headroom(disk: LocalDisk) -> None:
    journal = opened(disk, journal_bytes_at_most=4 * 4096)
    count = filled(journal)
    assert count == 4 * (4032 // frame_bytes(500)) - 2 and journal.bytes_used == 4 * 4096
    expected = r"520 bytes more would take the segments to 20,480 bytes.*limit.*is 16,384"
    with pytest.raises(JournalFull, match=expected) as full:
        journal.reserve([500])
    assert full.value.reason == "journal_full" and journal.next_lsn == count * frame_bytes(500)
    marks = [(4, bytes(40))] * (1024 // frame_bytes(40))
    journal.reserve([40] * len(marks), of_headroom=True)
    assert journal.bytes_used == 4 * 4096
    for kind, body in marks:
        journal.append(journal.next_lsn, kind, [body])
    flush(journal)
    assert records_of(journal)[count:] == marks


def test_small_records_pass_the_limit_and_others_still_do_not(disk: LocalDisk) -> None:
    journal = opened(disk, journal_bytes_at_most=2 * 4096)
    filled(journal)
    for _ in range(200):
        journal.reserve([40], of_headroom=True)
        journal.append(journal.next_lsn, 4, [bytes(40)])
        flush(journal)
    assert journal.bytes_used > 2 * 4096
    with pytest.raises(JournalFull) as full:
        journal.reserve([8])
    assert full.value.reason == "journal_full"


def test_room_comes_back_with_retention(disk: LocalDisk) -> None:
    journal = opened(disk, journal_bytes_at_most=3 * 4096)
    filled(journal)
    assert journal.drop_before(journal.durable_lsn) == 2 * 4096
    journal.check()
    assert filled(journal) > 10


def test_the_default_headroom_is_the_stated_one() -> None:
    assert HEADROOM_BYTES == 64 << 10


def test_a_full_disk_refuses_before_the_first_byte() -> None:
    disk = SimDisk(capacity_bytes=4 * 4096)
    journal = opened(disk)
    filled(journal)
    position = journal.next_lsn
    with pytest.raises(JournalFull, match="No space left") as full:
        journal.reserve([500])
    assert full.value.reason == "disk_full" and journal.next_lsn == position and not journal.failed
    journal.reserve([40] * 10, of_headroom=True)
    disk.capacity_bytes = 8 * 4096
    write(journal, (3, bytes(500)))
    journal.check()


def test_a_full_disk_does_not_keep_a_journal_from_starting() -> None:
    disk = SimDisk(capacity_bytes=4 * 4096)
    journal = opened(disk)
    filled(journal)
    records = records_of(journal)
    assert records_of(opened(disk.restarted())) == records


def test_what_waits_for_the_disk_is_limited(disk: LocalDisk) -> None:
    journal = opened(disk, queued_bytes_at_most=2000)
    append(journal, (3, bytes(1500)))
    with pytest.raises(JournalFull, match=r"1,520 bytes wait for the disk and 1,016 more would pass 2,000"):
        journal.reserve([1000])
    journal.reserve([1000], of_headroom=True)
    flush(journal)
    append(journal, (3, bytes(1000)))


def test_limits_that_cannot_work_are_refused(disk: LocalDisk) -> None:
    for limits in ({"segment_bytes": 192}, {"journal_bytes_at_most": 5000}):
        with pytest.raises(ValueError, match="segment_bytes"):
            Journal.open(disk, FEED, **{**SMALL, **limits})


def test_a_spare_is_made_ahead_and_taken_over(disk: LocalDisk, tmp_path: Path) -> None:
    journal = opened(disk)
    assert folder(tmp_path) == ["spare-0.seg"] and not journal.lacks_spare
    write(journal, LEVELS[0])
    assert journal.lacks_spare and journal.replenish() and not journal.lacks_spare
    journal.close()
    again = opened(disk)
    assert folder(tmp_path) == [f"journal-{0:020d}.seg", "spare-1.seg"] and not again.lacks_spare
    again.close()
    flip(tmp_path / FEED / "spare-1.seg", 4000)
    opened(disk)
    assert folder(tmp_path) == [f"journal-{0:020d}.seg", "spare-2.seg"]


# ---- retention and snapshots ----------------------------------------------------------------------------------------


def test_whole_segments_before_a_position_go_and_never_the_last(disk: LocalDisk, tmp_path: Path) -> None:
    journal = opened(disk)
    positions = write(journal, *LEVELS)
    firsts = [segments.first_lsn_of(path.name) or 0 for path in segment_files(tmp_path)]
    assert journal.drop_before(firsts[1] - 1) == 0 and journal.first_lsn == 0
    assert journal.drop_before(firsts[1]) == 4096 and journal.first_lsn == firsts[1]
    journal.check()
    kept = LEVELS[positions.index(firsts[1]) :]
    assert records_of(journal) == kept
    with pytest.raises(JournalError, match="no longer kept"):
        list(journal.frames(0))
    with pytest.raises(JournalError, match="were asked for"):
        journal.gather([0], [8])
    with pytest.raises(ValueError, match="not durable"):
        journal.drop_before(journal.next_lsn + 1)
    assert journal.drop_before(journal.next_lsn) == 4096 and journal.first_lsn == firsts[2]
    journal.close()
    assert records_of(opened(disk)) == LEVELS[positions.index(firsts[2]) :]


def test_a_segment_that_only_a_queued_record_begins_does_not_free_the_one_before() -> None:
    disk = SimDisk()
    journal = opened(disk)
    write(journal, (3, bytes(2900)))
    append(journal, (3, bytes(2900)))
    assert journal.drop_before(journal.durable_lsn) == 0
    after = opened(disk.crash(lambda count: 0))
    assert after.next_lsn == frame_bytes(2900)


def test_lines_that_are_held_survive_the_removal_of_their_segment(disk: LocalDisk) -> None:
    journal = opened(disk)
    write(journal, *LEVELS)
    first = next(journal.frames()).body
    journal.drop_before(journal.durable_lsn)
    assert bytes(first) == LEVELS[0][1]


def test_snapshots_newest_first_and_two_are_kept(disk: LocalDisk, tmp_path: Path) -> None:
    journal = opened(disk)
    assert journal.snapshots() == []
    taken = []
    for number in range(4):
        write(journal, LEVELS[number])
        journal.write_snapshot(journal.durable_lsn, [b"state", bytearray(b" %d" % number), b""])
        taken.append((journal.durable_lsn, b"state %d" % number))
        assert [(lsn, bytes(body)) for lsn, body in journal.snapshots()] == taken[: -3 if number > 1 else None : -1]
    journal.close()
    again = opened(disk)
    assert [(lsn, bytes(body)) for lsn, body in again.snapshots()] == taken[:1:-1]
    assert len([name for name in folder(tmp_path) if name.startswith("snapshot")]) == 2


def test_a_snapshot_may_be_empty_and_be_taken_again(disk: LocalDisk) -> None:
    journal = opened(disk)
    for body in (b"", b"twice", b"thrice"):
        journal.write_snapshot(0, [body])
        assert [(lsn, bytes(found)) for lsn, found in journal.snapshots()] == [(0, body)]
    with pytest.raises(ValueError, match="not durable"):
        journal.write_snapshot(8, [b""])


def test_a_damaged_snapshot_is_left_out(disk: LocalDisk, tmp_path: Path) -> None:
    journal = opened(disk)
    for record in LEVELS[:2]:
        write(journal, record)
        journal.write_snapshot(journal.durable_lsn, [b"state"])
    newest = sorted((tmp_path / FEED).glob("snapshot-*.snap"))[-1]
    size = newest.stat().st_size
    for offset in range(size):
        flip(newest, offset)
        assert [lsn for lsn, _ in journal.snapshots()] == ends(LEVELS)[:1], offset
        flip(newest, offset)
    for kept in (0, 63, size - 1):
        newest.write_bytes(newest.read_bytes()[:kept])
        assert [lsn for lsn, _ in journal.snapshots()] == ends(LEVELS)[:1]


def test_an_unfinished_snapshot_is_removed(disk: LocalDisk, tmp_path: Path) -> None:
    opened(disk).close()
    (tmp_path / FEED / f"snapshot-{0:020d}.tmp").write_bytes(b"half")
    opened(disk)
    assert folder(tmp_path) == ["spare-0.seg"]


def test_no_room_for_a_snapshot_is_no_failure() -> None:
    disk = SimDisk(capacity_bytes=3 * 4096)
    journal = opened(disk)
    write(journal, LEVELS[0])
    journal.replenish()
    with pytest.raises(JournalFull, match="snapshot") as full:
        journal.write_snapshot(journal.durable_lsn, [bytes(8000)])
    assert full.value.reason == "disk_full" and not journal.failed
    write(journal, LEVELS[1])

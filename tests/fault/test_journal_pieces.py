"""Groups that are written in pieces: whatever is cut or fails between them, what was answered is kept."""

from __future__ import annotations

import pytest
from helpers_journal import LEVELS, Record, append, flush, opened, records_of, seeded, write
from simdisk import SimDisk
from strandline.errors import JournalFailed
from strandline.journal import group

PIECE_BYTES = 200
ANSWERED = LEVELS[1:4]
GROUP: list[Record] = [*LEVELS[4:20], (3, b"x" * 3000), *LEVELS[20:24]]  # goes on into further segments


@pytest.fixture(autouse=True)
def small_pieces(monkeypatch: pytest.MonkeyPatch) -> None:
    """So that few records make many pieces."""
    monkeypatch.setattr(group, "BEGUN_FROM_BYTES", PIECE_BYTES)


def operations() -> list[str]:
    """What a flush of the group asks of the disk."""
    disk = SimDisk()
    journal = opened(disk)
    write(journal, *ANSWERED)
    append(journal, *GROUP)
    with disk.failing(-1) as faults:
        flush(journal)
    return faults.names


def test_a_group_is_written_in_pieces_and_synced_once_a_segment() -> None:
    names = operations()
    assert names.count("write") > 8
    disk = SimDisk()
    journal = opened(disk)
    write(journal, *ANSWERED)
    before = journal.counters.syncs
    append(journal, *GROUP)
    flush(journal)
    assert records_of(journal) == [*ANSWERED, *GROUP]
    assert records_of(opened(disk.restarted())) == [*ANSWERED, *GROUP]
    assert journal.counters.syncs - before == len({queued.path for queued in journal._segments})


def test_pieces_or_not_the_segments_are_the_same(monkeypatch: pytest.MonkeyPatch) -> None:
    found = []
    for size in (PIECE_BYTES, 1, 1 << 30):
        monkeypatch.setattr(group, "BEGUN_FROM_BYTES", size)
        disk = SimDisk()
        journal = opened(disk)
        write(journal, *ANSWERED)
        write(journal, *GROUP)
        journal.close()
        found.append({path: bytes(disk.open(path).view()) for path in disk.paths()})
    assert found[0] == found[1] == found[2]


class _PowerCut(BaseException):
    """No program sees it."""


@pytest.mark.parametrize("fails", [OSError, _PowerCut])
def test_between_any_two_pieces_nothing_answered_is_lost(fails: type[BaseException]) -> None:
    for n in range(len(operations())):
        disk = SimDisk()
        journal = opened(disk)
        write(journal, *ANSWERED)
        append(journal, *GROUP)
        with disk.failing(n, fails), pytest.raises((JournalFailed, _PowerCut)):
            journal.flush()
        assert journal.failed
        durable = records_of(journal)
        for seed in range(8):
            crashed = disk.crash(seeded(seed), torn_sectors=seed % 2 == 1, any_order=seed % 4 > 1)
            kept = records_of(opened(crashed))
            assert kept == [*ANSWERED, *GROUP][: len(kept)] and len(kept) >= len(durable) >= len(ANSWERED)

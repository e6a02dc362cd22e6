"""The n-th operation on the disk fails, once, for every n: all or nothing, said so, nothing lost by the next start."""

from __future__ import annotations

import errno
from collections.abc import Callable

import pytest
from helpers_journal import Record, ends, opened, records_of, seeded
from simdisk import SimDisk
from strandline.errors import JournalError, JournalFailed, JournalFull
from strandline.journal.journal import Journal

RECORDS: list[Record] = [(3, b'{"station":"weir-%d"}\n' % number * (1 + number % 60)) for number in range(24)]


class Story:
    """What a feed does with its journal in one life, and what came of each step."""

    def __init__(self) -> None:
        self.appended: list[Record] = []
        self.answered = 0
        self.refused = 0
        self.snapshots: list[int] = [0]
        self.dropped_to = 0

    def live(self, journal: Journal) -> None:
        """Take over what is there; append in groups, flush, snapshot, drop; go on after a refusal."""
        found = records_of(journal)
        assert found == self.appended[: len(found)] and len(found) >= self.answered
        self.appended, self.answered = found, len(found)
        for number in range(0, len(RECORDS), 3):
            for record in RECORDS[number : number + 3]:
                self._try(lambda record=record: self._append(journal, record))
            journal.flush()
            self.answered = len(self.appended)
            journal.check()
            journal.replenish()
            if number % 6 == 0:
                self._try(lambda: self._snapshot(journal))
            self._drop(journal)
        journal.close()

    def _try(self, step: Callable[[], None]) -> None:
        try:
            step()
        except JournalFull as full:
            assert full.reason == "disk_full"
            self.refused += 1

    def _append(self, journal: Journal, record: Record) -> None:
        journal.reserve([len(record[1])])
        self.appended.append(record)
        journal.append(journal.next_lsn, record[0], [record[1]])

    def _snapshot(self, journal: Journal) -> None:
        journal.write_snapshot(journal.durable_lsn, [b"%d" % self.answered])
        self.snapshots.append(journal.durable_lsn)

    def _drop(self, journal: Journal) -> None:
        self.dropped_to = self.snapshots[-2] if len(self.snapshots) > 1 else 0
        journal.drop_before(self.dropped_to)


def begun() -> tuple[SimDisk, Story]:
    """A disk on which a first life ended in the middle of a group: two records were answered for, a third was not."""
    disk, story = SimDisk(), Story()
    journal = opened(disk)
    for record in RECORDS[:2]:
        story._append(journal, record)
    journal.flush()
    story.answered = 2
    story._append(journal, RECORDS[2])
    with disk.failing(1, KeyboardInterrupt), pytest.raises(KeyboardInterrupt):
        journal.flush()
    journal.close()
    return disk.restarted(), story


def operations() -> list[str]:
    """The operations of the whole story on a disk that never fails."""
    disk, story = begun()
    with disk.failing(-1) as faults:
        story.live(opened(disk))
    return faults.names


def holds(disk: SimDisk, story: Story) -> None:
    """A start on this disk finds everything that was answered for, in order, and nothing that was not appended."""
    journal = opened(disk)
    positions = [0, *ends(story.appended)]
    found = records_of(journal)
    first = positions.index(journal.first_lsn)
    assert journal.first_lsn <= story.dropped_to
    assert found == story.appended[first : first + len(found)] and first + len(found) >= story.answered
    kept = [(lsn, int(bytes(body))) for lsn, body in journal.snapshots()]
    assert all(lsn == positions[count] for lsn, count in kept)
    if story.dropped_to:
        assert [lsn for lsn, _ in kept[:2] if lsn >= journal.first_lsn] == [lsn for lsn, _ in kept[:2]] != []
    journal.close()
    assert disk.handles == 0


@pytest.mark.parametrize("n", range(len(operations())), ids=lambda n: f"{n}-{operations()[n]}")
def test_an_error_is_final_and_costs_nothing_that_was_answered(n: int) -> None:
    disk, story = begun()
    journal = None
    with disk.failing(n) as faults:
        try:
            journal = opened(disk)
            story.live(journal)
        except JournalFailed:
            assert journal is not None and journal.failed
            for act in (journal.flush, lambda: journal.reserve([1]), journal.replenish):
                with pytest.raises(JournalFailed):
                    act()
            journal.check()
        except JournalError as error:
            assert journal is None and "could not be opened" in str(error)
        except OSError as error:
            # Reading what is there: the caller sees the system's own error, nothing has begun.
            assert error.errno == errno.EIO and story.answered == 2
    assert faults.failed is not None and story.refused == 0
    if journal is not None:
        journal.close()
    assert disk.handles == 0
    for seed in range(8):
        holds(disk.crash(seeded(seed), torn_sectors=seed % 2 == 1, any_order=seed % 4 > 1), story)
    holds(disk.restarted(), story)


@pytest.mark.parametrize("n", [n for n, name in enumerate(operations()) if name in ("create", "sync", "write")])
def test_no_room_refuses_where_nothing_was_written_and_is_final_where_something_was(n: int) -> None:
    disk, story = begun()
    journal = None
    with disk.failing(n, lambda: OSError(errno.ENOSPC, "No space left on device")) as faults:
        try:
            journal = opened(disk)
            story.live(journal)
        except (JournalFailed, JournalError):
            assert not (faults.failed or "").startswith("create")
    assert faults.failed is not None
    if journal is not None:
        if faults.failed.startswith("create"):
            # Whoever needed the room was refused, or it was only the spare one: the rest of the story went on.
            assert story.refused <= 1 and not journal.failed
            assert len(story.appended) + story.refused >= 3 + len(RECORDS)
        journal.close()
    assert disk.handles == 0
    holds(disk.crash(seeded(n)), story)
    holds(disk.restarted(), story)


def test_the_story_meets_every_operation() -> None:
    assert set(operations()) == {
        "names", "create", "open", "view", "write", "sync", "rename", "remove", "sync_directory"
    }  # fmt: skip

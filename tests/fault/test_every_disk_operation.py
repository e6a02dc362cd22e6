"""Every operation on the disk in the life of a whole feed fails once, fails for ever, or is the last one.

The story and how it is disturbed stand in `sim_ordeal`. Whatever fails, in the end every event that was answered is in
every store once and in order, and until then whatever was durable can be read back. The journal alone is treated the
same way in `test_journal_disk_faults`.
"""

from __future__ import annotations

import errno
import random
from collections import Counter
from collections.abc import Callable

import pytest
from sim_loop import PowerCut
from sim_ordeal import (
    KINDS,
    VARIANTS,
    crashed,
    each_fails_once,
    holds,
    numbers_of,
    operations,
    recovered,
    the_power_fails_before_each,
    the_process_dies_at_each,
    told,
)
from strandline.errors import JournalError, JournalFailed


def test_the_story_meets_every_kind_of_operation() -> None:
    met = Counter(operations())
    assert set(met) == {*KINDS, "store"} and all(number >= 4 for number in met.values()), met


# ---- one operation fails --------------------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", KINDS)
def test_an_operation_that_fails_once_costs_nothing_that_was_answered(kind: str) -> None:
    each_fails_once(kind)


@pytest.mark.parametrize("kind", KINDS)
def test_an_operation_that_fails_from_then_on_costs_nothing_that_was_answered(kind: str) -> None:
    """Every operation of that kind, until somebody mends the disk: the third start from then on finds it mended."""
    for number in numbers_of(kind, operations()):
        lives: set[int] = set()

        def at(now: int, name: str, number: int = number, lives: set[int] = lives) -> None:
            if now >= number and name == kind:
                lives.add(id(story.loop))
                if len(lives) <= 2:
                    raise OSError(errno.EIO, "simulated")

        with told(at) as story:
            story.tell()
            assert lives


# ---- the power fails ------------------------------------------------------------------------------------------------


def test_the_power_may_fail_before_any_operation() -> None:
    """All or nothing: only what was not synced is damaged, in several ways at each operation."""
    looked = the_power_fails_before_each(random.Random(20_260_301))
    assert looked >= VARIANTS * len(operations())


@pytest.mark.parametrize("kind", [*KINDS, "store"])
def test_the_process_may_die_at_any_operation_and_the_story_goes_on(kind: str) -> None:
    """At any step of a store's work too: what a store holds and how far it says it is must not fall apart."""
    the_process_dies_at_each(kind)


def test_a_start_may_fail_or_die_at_any_operation_of_its_own() -> None:
    """A crash, then an error or another crash in each operation of the recovery, then a recovery that comes through."""
    chance = random.Random(7)
    tried = Counter[str]()

    def at(number: int, name: str) -> None:
        if number % 5:
            return
        story.note_durable()
        found = crashed(story.disk, chance.randrange)
        left, step = True, 0
        while left:
            disk = found.crash(lambda below: 0)  # nothing is unsynced on it: a copy
            error: Callable[[], BaseException] = chance.choice((PowerCut, lambda: OSError(errno.EIO, "simulated")))
            with disk.failing(step, error) as faults:
                try:
                    recovered(disk, story)[0].close()
                    left = faults.failed is not None
                except (PowerCut, JournalError, JournalFailed, OSError):
                    tried[faults.failed.split()[0] if faults.failed else "?"] += 1
            holds(crashed(disk, chance.randrange), story)
            holds(disk.restarted(), story)
            step += 1

    with told(at) as story:
        story.tell()
    assert all(tried[kind] for kind in ("write", "sync", "sync_directory", "open", "view", "names")), tried

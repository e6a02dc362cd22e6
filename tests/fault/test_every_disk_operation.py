"""Every operation on the disk in the life of a whole feed fails once, fails for ever, or is the last one.

One story with stores, snapshots, retention, orderly stops and restarts. Whatever fails, in the end every event that was
answered is in every store once and in order, and until then whatever was durable can be read back. The journal alone is
treated the same way in `test_journal_disk_faults`.
"""

from __future__ import annotations

import errno
import random
from collections import Counter
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from functools import cache
from pathlib import Path

import pytest
from helpers_feed import saved_bytes
from sim_loop import PowerCut
from sim_process import SimClock, seams
from sim_story import Story
from sim_weather import Weather
from simdisk import Choose, SimDisk
from strandline.config_model import Journal as JournalConfig
from strandline.core.feed import Feed
from strandline.errors import JournalError, JournalFailed
from strandline.journal.journal import Journal
from strandline.runtime import FeedRuntime

KINDS = ("create", "write", "sync", "rename", "remove", "sync_directory", "open", "view", "names")
VARIANTS = 4  # of what a power failure leaves, at each operation
EVENTS = [(number % 3, number - 5.0 * (number % 7 == 6)) for number in range(12)]  # some are late


class Ordeal(Weather):
    """Counts the operations of a whole story, over all lives, and does something at each or at one of them."""

    def __init__(self, at: Callable[[int, str], None], counted: list[str]) -> None:
        super().__init__(random.Random(0))
        self._at, self._counted = at, counted

    def meet(self, name: str, path: str, partly: Callable[[], None] = lambda: None) -> None:
        if self.dead:
            raise OSError(errno.EIO, "this process is dead")
        self._counted.append(name)
        try:
            self._at(len(self._counted) - 1, name)
        except OSError:
            self.errors += 1
            partly()
            raise
        except PowerCut:
            self.dead = True
            raise


class Told(Story):
    """The story; `at` is asked before each operation."""

    def __init__(self, folder: Path, at: Callable[[int, str], None] = lambda number, name: None) -> None:
        journal = JournalConfig(700, 100_000)
        super().__init__(folder, EVENTS, sinks=("store", "receiver"), journal=journal, slack_ns=10**9)
        self.met: list[str] = []
        self.counted = 0  # of those that were met before faults were over
        self._at = at

    def _weather(self) -> Weather:
        return Ordeal(self._at, self.met)

    def tell(self) -> None:
        """From the first start to the end, with a stop in the middle; starts again where it has ended."""
        for requests in (4, 4, 4):
            for _ in range(requests // 2):
                self.require_up()
                self.send(2)
                self.work(2, seconds=0.5)
            self.stop()
        self.require_up()
        self.counted = len(self.met)
        self._at = lambda number, name: None
        if self.process is not None:
            assert isinstance(self.process.weather, Ordeal)
            self.process.weather._at = self._at
        self.finish()


@contextmanager
def told(tmp_path: Path, name: str, at: Callable[[int, str], None] = lambda number, name: None) -> Iterator[Told]:
    folder = tmp_path / name
    folder.mkdir()
    story = Told(folder, at)
    with seams("story"), story.stores.watched():
        try:
            yield story
        finally:
            story.abandon()


@cache
def operations(tmp_path: Path) -> tuple[str, ...]:
    """The operations of the story on a disk that never fails."""
    with told(tmp_path, "plain") as story:
        story.tell()
        return tuple(story.met[: story.counted])


def test_the_story_meets_every_kind_of_operation(tmp_path: Path) -> None:
    met = Counter(operations(tmp_path))
    assert set(met) == set(KINDS) and all(met[kind] >= 4 for kind in KINDS), met


# ---- one operation fails --------------------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", KINDS)
def test_an_operation_that_fails_once_costs_nothing_that_was_answered(kind: str, tmp_path: Path) -> None:
    for number in numbers_of(kind, operations(tmp_path)):

        def at(now: int, name: str, number: int = number) -> None:
            if now == number:
                raise OSError(errno.EIO, "simulated")

        with told(tmp_path, f"once-{number}", at) as story:
            story.tell()
            assert story.counted > number, "the story never came to it"


@pytest.mark.parametrize("kind", KINDS)
def test_an_operation_that_fails_from_then_on_costs_nothing_that_was_answered(kind: str, tmp_path: Path) -> None:
    """Every operation of that kind, until somebody mends the disk: the third start from then on finds it mended."""
    for number in numbers_of(kind, operations(tmp_path)):
        lives: set[int] = set()

        def at(now: int, name: str, number: int = number, lives: set[int] = lives) -> None:
            if now >= number and name == kind:
                lives.add(id(story.loop))
                if len(lives) <= 2:
                    raise OSError(errno.EIO, "simulated")

        with told(tmp_path, f"for-ever-{number}", at) as story:
            story.tell()
            assert lives


def numbers_of(kind: str, names: tuple[str, ...]) -> list[int]:
    return [number for number, name in enumerate(names) if name == kind]


# ---- the power fails ------------------------------------------------------------------------------------------------


def recovered(disk: SimDisk, story: Told) -> tuple[Journal, Feed]:
    """A journal and a feed, as the service reads them back. Raises what the disk makes it raise."""
    clock = SimClock(lambda: story.mono_ns, story.wall_ns)
    runtime = FeedRuntime(story.config, story.folder, disk, clock, lambda feed, error: None, story.stores.make)
    runtime._house.recover()
    return runtime.journal, runtime.feed


def holds(disk: SimDisk, story: Told) -> None:
    """All that was durable is there, nothing else but what came next, and it gives the state that it must give."""
    journal, feed = recovered(disk, story)
    story.history.require_kept(journal)
    feed.check()
    if journal.next_lsn:
        again = story.history.folded(story.config.settings(), journal.next_lsn)
        assert saved_bytes(feed) == saved_bytes(again)
    journal.close()


def crashed(disk: SimDisk, choose: Choose) -> SimDisk:
    return disk.crash(
        choose, torn_sectors=bool(choose(2)), any_order=bool(choose(2)), flipped_bits=bool(choose(2))
    )


def test_the_power_may_fail_before_any_operation(tmp_path: Path) -> None:
    """All or nothing: only what was not synced is damaged, in several ways at each operation."""
    chance = random.Random(20_260_301)
    looked = 0

    def at(number: int, name: str) -> None:
        nonlocal looked
        story.history.durable(journal_of(story))
        for _ in range(VARIANTS):
            holds(crashed(story.disk, chance.randrange), story)
            looked += 1

    with told(tmp_path, "snapshots", at) as story:
        story.tell()
    assert looked >= VARIANTS * len(operations(tmp_path)) // 2


def journal_of(story: Told) -> int:
    """How far the journal says it is durable now."""
    return 0 if story.process is None else story.process.runtime.journal.durable_lsn


def test_the_process_may_die_at_any_operation_and_the_story_goes_on(tmp_path: Path) -> None:
    for number in range(len(operations(tmp_path))):

        def at(now: int, name: str, number: int = number) -> None:
            if now == number:
                raise PowerCut(name)

        with told(tmp_path, f"death-{number}", at) as story:
            story.tell()
            assert story.tally.crashes == 1


def test_a_start_may_fail_or_die_at_any_operation_of_its_own(tmp_path: Path) -> None:
    """A crash, then an error or another crash in each operation of the recovery, then a recovery that comes through."""
    chance = random.Random(7)
    tried = Counter[str]()

    def at(number: int, name: str) -> None:
        if number % 5:
            return
        story.history.durable(journal_of(story))
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

    with told(tmp_path, "recovery", at) as story:
        story.tell()
    assert all(tried[kind] for kind in ("write", "sync", "sync_directory", "open", "view", "names")), tried

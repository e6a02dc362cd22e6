"""One story of a whole feed, and what can be done to it at each operation on its disk.

Stores, snapshots, retention, orderly stops and restarts; the tests that fail one operation after the other stand in
`fault/test_every_disk_operation`.
"""

from __future__ import annotations

import errno
import random
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

from helpers_feed import saved_bytes
from sim_loop import PowerCut
from sim_process import SimClock, seams
from sim_stores import a_folder
from sim_story import Story
from sim_weather import Weather
from simdisk import Choose, SimDisk
from strandline.config_model import Journal as JournalConfig
from strandline.core.feed import Feed
from strandline.journal.journal import Journal
from strandline.runtime import FeedRuntime

KINDS = ("create", "write", "sync", "rename", "remove", "sync_directory", "open", "view", "names")
VARIANTS = 4  # of what a power failure leaves, at each operation
EVENTS = [(number % 3, number - 5.0 * (number % 7 == 6)) for number in range(12)]  # some are late


class Ordeal(Weather):
    """Counts the operations of a whole story, over all lives, and does something at each or at one of them.

    Steps of the stores' own work count as operations named "store".
    """

    def __init__(self, at: Callable[[int, str], None], counted: list[str]) -> None:
        super().__init__(random.Random(0))
        self._at, self._counted = at, counted

    def meet_store(self) -> None:
        self.meet("store", "")

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
        super().__init__(folder, EVENTS, sinks=("store", "files", "receiver"), journal=journal, slack_ns=10**9)
        self.met: list[str] = []
        self.counted = 0  # of those that were met before faults were over
        self._at = at

    def _weather(self) -> Weather:
        return Ordeal(self._at, self.met)

    def note_durable(self) -> None:
        """What the journal says is durable now must stay."""
        if self.process is not None:
            self.history.durable(self.process.runtime.journal.durable_lsn)

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
def told(at: Callable[[int, str], None] = lambda number, name: None) -> Iterator[Told]:
    """A story that can be told; nothing is left open behind it."""
    with a_folder() as folder, seams("story"):
        story = Told(folder, at)
        with story.stores.watched():
            try:
                yield story
            finally:
                story.abandon()


def operations() -> tuple[str, ...]:
    """The operations of the story on a disk that never fails."""
    with told() as story:
        story.tell()
        return tuple(story.met[: story.counted])


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
    """The disk as one of the many power failures now would leave it."""
    return disk.crash(
        choose, torn_sectors=bool(choose(2)), any_order=bool(choose(2)), flipped_bits=bool(choose(2))
    )


# ---- what is done to the story at its operations --------------------------------------------------------------------


def each_fails_once(kind: str) -> None:
    """Each operation of a kind fails in a story of its own. Raises AssertionError where a promise is broken."""
    for number in numbers_of(kind, operations()):

        def at(now: int, name: str, number: int = number) -> None:
            if now == number:
                raise OSError(errno.EIO, "simulated")

        with told(at) as story:
            story.tell()
            assert story.counted > number, "the story never came to it"


def the_process_dies_at_each(kind: str) -> None:
    """The process dies at each operation of a kind, in a story of its own, which then goes on."""
    for number in numbers_of(kind, operations()):

        def at(now: int, name: str, number: int = number) -> None:
            if now == number:
                raise PowerCut(name)

        with told(at) as story:
            story.tell()
            assert story.tally.crashes == 1


def the_power_fails_before_each(chance: random.Random) -> int:
    """At each operation several power failures, each followed by a start; how many. Only the unsynced is damaged."""
    looked = 0

    def at(number: int, name: str) -> None:
        nonlocal looked
        story.note_durable()
        for _ in range(VARIANTS):
            holds(crashed(story.disk, chance.randrange), story)
            looked += 1

    with told(at) as story:
        story.tell()
    return looked


def numbers_of(kind: str, names: tuple[str, ...]) -> list[int]:
    """Numbers of the operations of a kind."""
    return [number for number, name in enumerate(names) if name == kind]

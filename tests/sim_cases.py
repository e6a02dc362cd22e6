"""Cases that seeds of the simulation have found, each as the shortest story that shows it.

Each raises AssertionError where its promise is broken; run by `fault/test_found_by_simulation`.
"""

from __future__ import annotations

import errno
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from typing import Any

import msgspec
from sim_process import seams
from sim_scenario import FEED, SECOND_NS
from sim_stores import a_folder
from sim_story import Story
from simdisk import Faults, SimDisk
from strandline.config_model import Journal as JournalConfig
from strandline.journal.journal import Journal


@contextmanager
def told(events: Sequence[tuple[int, float]], **given: Any) -> Iterator[Story]:
    """A story under way; nothing is left open behind it."""
    with a_folder() as folder, seams("story"):
        story = Story(folder, events, **given)
        with story.stores.watched():
            try:
                yield story
            finally:
                story.abandon()


def a_store_that_answers_before_the_start_lets_nothing_be_released() -> None:
    """P1: a mark between recovery and start would number a batch before the older ones were delivered again, and a
    store that was offered the newer one first never takes the older one."""
    events = [(0, 0.0), (1, 1.0), (0, 60.0)]
    with told(events, sinks=("receiver", "store"), idle_after_ns=SECOND_NS) as story:
        story.start()
        story.stores.moods["store"] = "refuses"
        story.send(2)
        story.work()
        assert list(story.history.left) == [("ordered", 1)]
        assert list(story.stores.receiver.batches["ordered"]) == [1]
        story.die()
        story.stores.moods["store"] = "hangs"
        story.pass_time(10)  # every source has been silent by now: a mark would release what is held
        story.start()
        story.pass_time(6)  # the store is not waited for any longer
        story.work()
        story.finish()


def files_that_were_fetched_before_a_crash_are_not_repeated_in_part() -> None:
    """P5: whoever fetches files tells a repeat by the numbers in the names, so no file may hold new batches behind
    ones that an earlier file may have held."""
    events = [(0, float(second)) for second in range(6)]
    with told(events, sinks=("files",), batch_events_at_most=1) as story:
        story.start()
        story.send(2)
        story.work_only(seconds=2)  # without a tick: that the files are complete is told, and not synced yet
        story.work_only()
        assert len(list((story.folder / "files").glob("*ordered*.ndjson"))) == 1
        story.stores.collect()
        story.die()
        story.start()
        story.send(2)
        story.work(3, seconds=2)
        story.finish()


def a_request_larger_than_the_spare_segment_is_taken_once_room_was_made() -> None:
    """P7: room is short where somebody was refused for want of it, also while a spare segment lies ready: it may be
    too small. And spares that are too small must not take the room of the one that is needed."""
    events = [(0, second / 10) for second in range(200)]
    journal = JournalConfig(264, 6400)
    with told(events, journal=journal, events_a_request=5) as story:
        story.start()
        story.finish()


def a_journal_that_fails_while_room_is_reserved_ends_the_service() -> None:
    """P7: nothing is written after it, so no write would ever tell; the service must not stand there as if it did well.
    """
    events = [(0, second / 10) for second in range(40)]
    with told(events, journal=JournalConfig(400, 100_000), slack_ns=10 * SECOND_NS) as story:
        story.start()
        story.send(2)
        assert story.process is not None and story.process.up
        story.disk.faults = FailingAt("create")
        story.process.weather.errors = 1
        for _ in range(30):
            story.send()
            story.work(seconds=0.1)
        assert story.process is None and story.tally.counts["failed"] == 1
        story.finish()


def spare_segments_that_are_too_small_make_room() -> None:
    """P7: each request asks for a little more than the one before; the spare segments that were made for those must not
    take the room of the one that is needed."""
    journal = Journal.open(SimDisk(), f"feeds/{FEED}", segment_bytes=264, journal_bytes_at_most=3000)
    for size in range(200, 2400, 200):
        journal.reserve([size])
        journal.check()
    journal.close()


def settings_that_find_no_room_end_nothing() -> None:
    """P7: settings name every source that is expected, so their record can be a large one; on a full disk they are not
    taken over, and the feed goes on with those that it has."""
    expected = tuple(f"gauge-at-kilometre-{number:04d}" for number in range(80))
    with told([(0, 0.0), (0, 1.0)], journal=JournalConfig(1000, 100_000)) as story:
        story.start()
        story.send()
        assert story.process is not None and story.loop is not None
        story.disk.capacity_bytes = story.disk.bytes_used
        story.loop.call_soon(
            story.process.runtime.reconfigure, msgspec.structs.replace(story.config, expect_sources=expected)
        )
        story.work()
        assert story.process is not None and story.process.up
        story.finish()


class FailingAt(Faults):
    """Every operation of this name fails."""

    def __init__(self, operation: str) -> None:
        super().__init__()
        self._operation = operation

    def meet(self, name: str, path: str, partly: Callable[[], None] = lambda: None) -> None:
        if name == self._operation:
            raise OSError(errno.EIO, "simulated")


CASES: list[Callable[[], None]] = [
    a_store_that_answers_before_the_start_lets_nothing_be_released,
    files_that_were_fetched_before_a_crash_are_not_repeated_in_part,
    a_request_larger_than_the_spare_segment_is_taken_once_room_was_made,
    a_journal_that_fails_while_room_is_reserved_ends_the_service,
    spare_segments_that_are_too_small_make_room,
    settings_that_find_no_room_end_nothing,
]

"""Cases that seeds of the simulation have found, each as the shortest story that shows it."""

from __future__ import annotations

import errno
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from typing import Any

from sim_process import seams
from sim_scenario import SECOND_NS
from sim_stores import a_folder
from sim_story import Story
from simdisk import Faults
from strandline.config_model import Journal


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


def test_a_store_that_answers_before_the_start_lets_nothing_be_released() -> None:
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


def test_files_that_were_fetched_before_a_crash_are_not_repeated_in_part() -> None:
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


def test_a_request_larger_than_the_spare_segment_is_taken_once_room_was_made() -> None:
    """P7: room is short where somebody was refused for want of it, also while a spare segment lies ready: it may be
    too small. And spares that are too small must not take the room of the one that is needed."""
    events = [(0, second / 10) for second in range(200)]
    journal = Journal(264, 6400)
    with told(events, journal=journal, events_a_request=5) as story:
        story.start()
        story.finish()


def test_a_journal_that_fails_while_room_is_reserved_ends_the_service() -> None:
    """P7: nothing is written after it, so no write would ever tell; the service must not stand there as if it did well.
    """
    events = [(0, second / 10) for second in range(40)]
    with told(events, journal=Journal(400, 100_000), slack_ns=10 * SECOND_NS) as story:
        story.start()
        story.send(2)
        assert story.process is not None and story.process.up
        story.disk.faults = FailingAt("create")
        story.process.weather.errors = 1
        while story.process is not None and story.crowd.left > 2:
            story.send()
            story.work(seconds=0.1)
        assert story.process is None and story.tally.counts["failed"] == 1
        story.finish()


class FailingAt(Faults):
    """Every operation of this name fails."""

    def __init__(self, operation: str) -> None:
        super().__init__()
        self._operation = operation

    def meet(self, name: str, path: str, partly: Callable[[], None] = lambda: None) -> None:
        if name == self._operation:
            raise OSError(errno.EIO, "simulated")

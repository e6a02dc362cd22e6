"""Cases that seeds of the simulation have found, each as the shortest story that shows it."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from sim_process import seams
from sim_scenario import SECOND_NS
from sim_story import Story


@contextmanager
def told(story: Story) -> Iterator[Story]:
    """A story under way; nothing is left open behind it."""
    with seams("story"), story.stores.watched():
        try:
            yield story
        finally:
            story.abandon()


def test_a_store_that_answers_before_the_start_lets_nothing_be_released(tmp_path: Path) -> None:
    """P1: a mark between recovery and start would number a batch before the older ones were delivered again, and a
    store that was offered the newer one first never takes the older one."""
    events = [(0, 0.0), (1, 1.0), (0, 60.0)]
    with told(Story(tmp_path, events, sinks=("receiver", "store"), idle_after_ns=SECOND_NS)) as story:
        story.start()
        story.stores.moods["store"] = "refuses"
        story.send(2)
        story.work()
        assert [name for name in story.history.left] == [("ordered", 1)]
        assert list(story.stores.receiver.batches["ordered"]) == [1]
        story.die()
        story.stores.moods["store"] = "hangs"
        story.pass_time(10)  # every source has been silent by now: a mark would release what is held
        story.start()
        story.pass_time(6)  # the store is not waited for any longer
        story.work()
        story.finish()

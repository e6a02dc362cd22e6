"""When a partition that could not be taken over is tried again: bounds of the waits, by what went wrong."""

from __future__ import annotations

import random

from strandline.cluster.balance import Partition
from strandline.cluster.troubles import AT_MOST_S, PASSING_AT_MOST_S, Troubles

GAUGES = [Partition("gauges", number) for number in range(8)]


def test_brokers_that_do_not_answer_hold_no_partition_up_for_long() -> None:
    """A slow moment of theirs, such as a log that is just being made, meets many partitions at one time."""
    troubles = Troubles(random.Random(1))
    for turn in range(20):
        for each in GAUGES:
            assert troubles.note(each, "no answer", None, 10.0 * turn, is_passing=True) <= PASSING_AT_MOST_S
            troubles.check()
    assert troubles.note(GAUGES[0], "its disk is full", None, 300.0) <= AT_MOST_S


def test_what_is_wrong_here_is_tried_less_and_less_often() -> None:
    troubles = Troubles(random.Random(1))
    waits = [troubles.note(GAUGES[turn % 8], "its disk is full", None, 1000.0 * turn) for turn in range(40)]
    assert max(waits) > 20 * PASSING_AT_MOST_S and max(waits) <= AT_MOST_S
    troubles.check()

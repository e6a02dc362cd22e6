"""K-slack traces with every step of emission (check-values, section 8), one event an arrival, integers for times.

Sources: time-based K-slack (release all x with x + K <= the largest time seen) as described by Babu, Srivastava, Widom
(ACM TODS 29(3), 2004) and the literature after it; the traces were computed outside this project.
"""

from __future__ import annotations

import numpy as np
import pytest
from helpers_feed import patient
from helpers_single import Passed, one_by_one

TRACE = [1, 4, 3, 5, 7, 8, 6, 9]


def passed(times: list[int], slack: int) -> Passed:
    return one_by_one(np.array(times, dtype=np.int64), np.arange(len(times)), patient(slack_ns=slack))


def late(times: list[int], found: Passed) -> list[int]:
    return [time for time, is_late in zip(times, found.late.tolist(), strict=True) if is_late]


# (K, emission steps as (arriving event, emitted), late, what is left for the flush)
TRACES = [
    (0, [(1, [1]), (4, [4]), (5, [5]), (7, [7]), (8, [8]), (9, [9])], [3, 6], []),
    (1, [(4, [1]), (3, [3]), (5, [4]), (7, [5]), (8, [7]), (9, [8])], [6], [9]),
    (2, [(4, [1]), (3, []), (5, [3]), (7, [4, 5]), (8, []), (6, [6]), (9, [7])], [], [8, 9]),
]


@pytest.mark.parametrize(("slack", "emissions", "late_ones", "flushed"), TRACES)
def test_every_step_of_emission(
    slack: int, emissions: list[tuple[int, list[int]]], late_ones: list[int], flushed: list[int]
) -> None:
    found = passed(TRACE, slack)
    steps = [(TRACE[row], times) for row, times in found.steps if row < len(TRACE)]
    assert steps == [step for step in emissions if step[1]]
    assert late(TRACE, found) == late_ones
    assert [TRACE[row] for row in found.released.tolist()] == [t for _, times in emissions for t in times] + flushed
    assert found.drained == len(flushed)


def test_the_smallest_slack_that_loses_nothing_is_the_greatest_lateness() -> None:
    newest = np.maximum.accumulate(TRACE)
    assert max(newest - TRACE) == 2
    assert [len(late(TRACE, passed(TRACE, slack))) for slack in range(4)] == [2, 1, 0, 0]


def test_late_means_behind_the_watermark_not_behind_the_last_event_released() -> None:
    """The trap of section 8: 5 could still be released in order (only 1 is out), but the watermark stands at 8."""
    times = [1, 10, 5, 20]
    found = passed(times, 2)
    assert late(times, found) == [5]
    assert [times[row] for row in found.released.tolist()] == [1, 10, 20]


def test_a_slack_tolerates_a_lateness_of_exactly_itself() -> None:
    """DESIGN section 6: up to and including the slack."""
    assert late([10, 5], passed([10, 5], 5)) == []
    assert late([10, 5], passed([10, 5], 4)) == [5]

"""Laws of what is held: whatever gathers before it is dealt, releases are those of one stable sort of all that came."""

from __future__ import annotations

import numpy as np
from helpers_strands import constants
from hypothesis import given, settings
from hypothesis import strategies as st
from strandline.core import held as held_module
from strandline.core.columns import REF, TIME_MAX, TIME_MIN, as_refs, as_rows
from strandline.core.held import Held
from strandline.core.merge import Merger

times = st.one_of(st.integers(-5, 40), st.sampled_from((TIME_MIN, TIME_MAX)))  # few values, so that ties are common
steps = st.lists(st.one_of(st.lists(times, min_size=1, max_size=30), st.integers(-6, 41)), max_size=30)


class Told:
    """One `Held` beside the model: a list of (time, number of the event), sorted when it is asked."""

    def __init__(self, fresh_events: int) -> None:
        self.held = Held(Merger(), fresh_events=fresh_events)
        self.model: list[tuple[int, int]] = []
        self.came = 0
        self.least = TIME_MIN  # nothing before it comes any more: that would be late
        self.released: list[int] = []

    def hold(self, given_times: list[int]) -> None:
        column = [time for time in given_times if time >= self.least]
        if not column:
            return
        refs = np.zeros(len(column), REF)
        refs["place"] = np.arange(self.came, self.came + len(column))
        self.model += [(time, self.came + row) for row, time in enumerate(column)]
        self.came += len(column)
        self.held.hold(np.array(column, np.int64), as_rows(refs))

    def release(self, watermark: int) -> None:
        self.least = max(self.least, watermark)
        strand = self.held.release(self.least)
        expected = sorted((row for row in self.model if row[0] <= self.least), key=lambda row: row[0])
        self.model = [row for row in self.model if row[0] > self.least]
        found = list(zip(strand.times.tolist(), as_refs(strand.refs)["place"].tolist(), strict=True))
        assert found == expected
        self.released += [number for _, number in found]

    def check(self) -> None:
        self.held.check()
        held_times = [time for time, _ in self.model]
        assert self.held.held == len(held_times) == sum(self.held.lengths())
        assert self.held.head_ns == min(held_times, default=None)
        assert self.held.tail_ns == max(held_times, default=None)
        runs = self.held.runs
        assert [run.length for run in runs] == self.held.lengths()
        seen = [(t, p) for run in runs for c in run.chunks
                for t, p in zip(c.times.tolist(), as_refs(c.refs)["place"].tolist(), strict=True)]  # fmt: skip
        assert sorted(seen) == sorted(self.model)
        # In order of age: of equal times the earlier run has the one that came first.
        assert sorted(seen, key=lambda row: row[0]) == sorted(self.model)


@settings(max_examples=300)
@given(steps, st.sampled_from((0, 1, 5, 64, 1 << 15)), st.sampled_from((0, 1, 16, 1 << 20)))
def test_releases_are_those_of_a_stable_sort_whatever_gathers(
    history: list[list[int] | int], fresh_events: int, sorted_times: int
) -> None:
    with constants(SORTED_TIMES=sorted_times):
        told = Told(fresh_events)
        for step in history:
            if isinstance(step, list):
                told.hold(step)
            else:
                told.release(step)
            told.check()
        told.release(TIME_MAX)
        told.check()
        assert sorted(told.released) == list(range(told.came))


def test_few_rows_at_a_time_are_dealt_together() -> None:
    """What the buffer is for: comparisons in dealing and cutting, for 1,000 requests of 8 events in disorder."""
    comparisons = {}
    for fresh_events in (0, held_module.FRESH_EVENTS):
        random, held = np.random.default_rng(1), Held(Merger(), fresh_events=fresh_events)
        for request in range(1_000):
            column = request * 8 - random.exponential(200, 8).astype(np.int64)
            held.hold(column, as_rows(np.zeros(8, REF)))
            if request % 10 == 9:
                held.release(request * 8 - 3_000)
        comparisons[fresh_events] = held.comparisons
    assert comparisons[0] > 10 * comparisons[held_module.FRESH_EVENTS] > 0

"""Laws of what is held: whatever gathers before it is dealt, releases are those of one stable sort of all that came."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

import numpy as np
from helpers_strands import constants
from hypothesis import example, given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from strandline.core import held as held_module
from strandline.core.columns import REF, TIME_MAX, TIME_MIN, as_refs, as_rows
from strandline.core.held import Held
from strandline.core.merge import Merger
from strandline.core.runs import joined

times = st.one_of(st.integers(-5, 40), st.sampled_from((TIME_MIN, TIME_MAX)))  # few values, so that ties are common
steps = st.lists(st.one_of(st.lists(times, min_size=1, max_size=30), st.integers(-6, 41)), max_size=30)


class Told:
    """One `Held` beside the model: a list of (time, number of the event), sorted when it is asked."""

    def __init__(self, near_events: int) -> None:
        self.held = Held(Merger(), near_events=near_events)
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


shapes = st.sampled_from(("late", "delayed", "bursts", "back"))
limits = st.sampled_from((0, 1, 5, 64, 1 << 17))  # rows near their release, and beyond the bound
constant = st.fixed_dictionaries(
    {
        "STRANDS_AT_MOST": st.sampled_from((1, 2, 6)),
        "PART_EVENTS": st.sampled_from((1, 4, 4096)),
        "RESORTED_EVENTS": st.sampled_from((0, 8, 2048)),
        "RESORTED_FRESH": st.sampled_from((2, 1 << 30)),
        "SAMPLES": st.sampled_from((1, 64)),
        "TRIES_AT_MOST": st.sampled_from((1, 8)),
    }
)


def played(history: list[list[int] | int], near_events: int) -> Told:
    """A history, each step checked, and all let go at its end."""
    told = Told(near_events)
    for step in history:
        if isinstance(step, list):
            told.hold(step)
        else:
            told.release(step)
        told.check()
        assert told.held.near.rows <= near_events, "no more than may be near, however the times lie"
    told.release(TIME_MAX)
    told.check()
    return told


@settings(max_examples=400)
@given(steps, limits, constant)
def test_releases_are_those_of_a_stable_sort_whatever_gathers(
    history: list[list[int] | int], near_events: int, chosen: dict[str, int]
) -> None:
    with constants(**chosen):
        told = played(history, near_events)
    assert sorted(told.released) == list(range(told.came))


@settings(max_examples=60, deadline=None)
@given(st.integers(0, 2**32 - 1), st.sampled_from((0, 100, 3_000)), shapes)
def test_the_same_with_rows_enough_for_each_way_of_sorting(seed: int, near_events: int, shape: str) -> None:
    """Few falls, many, long stretches and descending ones; times are coarse, so that many are equal."""
    random, told = np.random.default_rng(seed), Told(near_events)
    for request in range(12):
        rows = int(random.integers(1, 1_500))
        column = request * 1_000 + np.sort(random.integers(0, 1_000, rows))
        match shape:
            case "late":
                column -= np.where(random.random(rows) < 0.01, random.integers(0, 4_000, rows), 0)
            case "delayed":
                column -= random.exponential(1_000, rows).astype(np.int64)
            case "bursts":
                column = np.concatenate([part - 300 * k for k, part in enumerate(np.array_split(column, 4))])
            case "back":
                column = np.unique(column)[::-1]
        told.hold(column.tolist())
        if random.random() < 0.7:
            told.release(request * 1_000 - int(random.integers(0, 5_000)))
        told.check()
    told.release(TIME_MAX)
    assert sorted(told.released) == list(range(told.came))


@settings(max_examples=200)
@given(steps, limits, limits, st.integers(0, 30), constant)
@example([[0, 1, 2, 3, 4, 5], [10, 11], [12]], 5, 1, 2, {})  # more beyond the bound than may gather afterwards
def test_what_is_saved_and_restored_releases_the_same(
    history: list[list[int] | int], before: int, after: int, pause: int, chosen: dict[str, int]
) -> None:
    """Also where less, or more, may be near afterwards than before."""
    with constants(**chosen):
        restored(history, before, after, pause)


def restored(history: list[list[int] | int], before: int, after: int, pause: int) -> None:
    """A history with a pause in it, each step checked."""
    told = Told(before)
    for index, step in enumerate(history):
        if index == pause:
            saved, told.held = told.held, Held(Merger(), near_events=after)
            for run in saved.open.runs:
                told.held.open.reopen(joined(list(run.chunks)))
            told.held.restore(*saved.saved())
            assert before != after or told.held.lengths() == saved.lengths()
            told.check()
        if isinstance(step, list):
            told.hold(step)
        else:
            told.release(step)
        told.check()
    told.release(TIME_MAX)
    assert sorted(told.released) == list(range(told.came))


def test_few_rows_at_a_time_are_dealt_together() -> None:
    """What the buffer is for: comparisons in dealing and cutting, for 1,000 requests of 8 events in disorder."""
    comparisons = {}
    for near_events in (0, held_module.NEAR_EVENTS):
        random, held = np.random.default_rng(1), Held(Merger(), near_events=near_events)
        for request in range(1_000):
            column = request * 8 - random.exponential(200, 8).astype(np.int64)
            held.hold(column, as_rows(np.zeros(8, REF)))
            if request % 10 == 9:
                held.release(request * 8 - 3_000)
        comparisons[near_events] = held.comparisons
    assert comparisons[0] > 10 * comparisons[held_module.NEAR_EVENTS] > 0


def test_a_mark_that_needs_open_runs_cuts_them_for_those_that_follow() -> None:
    """Delays drawn evenly, 40,000 rows held, 1,000 of them leave at each mark: few marks touch the open runs."""
    random, held, cuts, released = np.random.default_rng(5), Held(Merger(), near_events=1 << 13), 0, 0
    for request in range(240):
        column = np.sort(request * 1_000 + random.integers(0, 1_000, 1_000)) - random.integers(0, 80_000, 1_000)
        held.hold(column, as_rows(np.zeros(1_000, REF)))
        before = held.bound
        released += len(held.release((request + 1) * 1_000 - 80_000).times)
        if request >= 120:
            cuts += held.bound != before
        if request % 20 == 0:
            held.check()
    assert held.open.held > 20_000 and released > 100_000
    assert 0 < cuts < 60


def test_what_is_released_is_let_go() -> None:
    """Columns that are held are no parts of far longer ones, so that what left does not stay in memory."""
    random, held = np.random.default_rng(6), Held(Merger(), near_events=1 << 12)
    for request in range(200):
        column = request * 1_000 - random.exponential(8_000, 1_000).astype(np.int64)
        held.hold(column, as_rows(np.zeros(1_000, REF)))
        held.release(request * 1_000 - 30_000)
        bases = {id(base): base.nbytes for base in map(base_of, columns_of(held))}
        assert sum(bases.values()) <= 2 * 24 * held.held


def columns_of(held: Held) -> list[NDArray[Any]]:
    strands = [chunk for run in held.open.runs for chunk in run.chunks] + held.near.strands
    return [column for strand in strands for column in strand]


def base_of(column: NDArray[Any]) -> NDArray[Any]:
    return column.base if isinstance(column.base, np.ndarray) else column


def near_most(told: Held, marks: Iterable[tuple[int, NDArray[np.int64]]]) -> int:
    """The most rows that were near after any of these marks, each with what came before it."""
    most = 0
    for mark, came in marks:
        if len(came):
            told.hold(came, as_rows(np.zeros(len(came), REF)))
        told.release(mark)
        most = max(most, told.near.rows)
    return most


def test_a_source_that_is_a_year_ahead_brings_no_more_near() -> None:
    """100,000 events in 75 s and one a year ahead: how far the bound goes cannot be guessed from how far times lie."""
    second, held = 1_000_000_000, Held(Merger(), near_events=1 << 12)
    times = np.append(np.arange(100_000) * (75 * second // 100_000), 365 * 86_400 * second)
    held.hold(times, as_rows(np.zeros(len(times), REF)))
    marks = ((mark * second, np.empty(0, np.int64)) for mark in range(80))
    assert near_most(held, marks) <= 1 << 12


def test_many_equal_times_come_near_only_when_they_leave() -> None:
    """Minute stamps of many, and a slow source between them whose events leave one by one."""
    held, minute = Held(Merger(), near_events=1 << 12), 60_000
    times = np.concatenate((np.repeat(np.arange(1, 6) * minute, 20_000), np.arange(0, 6 * minute, 100)))
    np.random.default_rng(1).shuffle(times)
    for part in np.array_split(times, 30):
        held.hold(part, as_rows(np.zeros(len(part), REF)))
    assert near_most(held, ((mark, np.empty(0, np.int64)) for mark in range(0, 6 * minute, 500))) <= 1 << 12
    assert held.held == np.count_nonzero(times > 6 * minute - 500)

"""Laws of the pass that finds every slack at once: it agrees with slow simulations of each slack, in any chunks."""

from __future__ import annotations

import math
from itertools import pairwise
from typing import Any

import numpy as np
import pytest
from helpers_feed import patient
from helpers_single import one_by_one
from helpers_slack import Feed, simulate
from hypothesis import given, settings
from hypothesis import strategies as st
from strandline.replay.basis import NONE, TIME_GREATEST, TIME_LEAST, grouped_greatest, least_covering
from strandline.replay.slacks import LateSteps, SlackFigures
from strandline_loadgen.shapes import poisson_exponential

SLACKS = [0, 1, 2, 3, 5, 8, 13, 21, 60]
BASES = [("event", None), ("arrival", None), ("sources", None), ("sources", 1), ("sources", 7), ("sources", 30)]

events = st.tuples(st.integers(-20, 20), st.integers(0, 3), st.integers(0, 50))
requests = st.lists(st.tuples(st.integers(0, 9), st.lists(events, min_size=1, max_size=4)), min_size=1, max_size=25)


def feed_of(drawn: list[tuple[int, list[tuple[int, int, int]]]]) -> Feed:
    """Requests one after the other; event times are drawn relative to the arrival."""
    clock, made = 1000, []
    for pause, brought in drawn:
        clock += pause
        made.append((clock, [(clock + off, source, length) for off, source, length in brought]))
    return Feed(made)


def columns(feed: Feed) -> dict[str, Any]:
    rows = [(at, *event) for at, brought in feed.requests for event in brought]
    sizes = [len(brought) for _, brought in feed.requests]
    return {
        "arrivals": np.array([row[0] for row in rows], dtype=np.int64),
        "times": np.array([row[1] for row in rows], dtype=np.int64),
        "sources": np.array([row[2] for row in rows], dtype=np.uint32),
        "lengths": np.array([row[3] for row in rows], dtype=np.uint32),
        "starts": np.cumsum([0, *sizes[:-1]]),
    }


def passed(feed: Feed, cuts: list[int], basis: Any, idle_after: int | None, **more: Any) -> SlackFigures:
    """The pass over a feed, in chunks that end at the requests of these numbers."""
    given, figures = columns(feed), SlackFigures(SLACKS, basis, idle_after_ns=idle_after, **more)
    edges = sorted({0, len(feed.requests), *(cut % len(feed.requests) for cut in cuts)})
    for first, after in pairwise(edges):
        starts = given["starts"]
        rows = slice(starts[first], starts[after] if after < len(starts) else len(given["times"]))
        figures.add(
            given["times"][rows],
            given["arrivals"][rows],
            starts=starts[first:after] - starts[first],
            sources=given["sources"][rows],
            lengths=given["lengths"][rows],
        )
        figures.check()
    return figures


@pytest.mark.parametrize(("basis", "idle_after"), BASES)
@given(drawn=requests, cuts=st.lists(st.integers(0, 24), max_size=3))
def test_every_slack_is_as_if_it_had_been_tried(
    drawn: list[Any], cuts: list[int], basis: Any, idle_after: int | None
) -> None:
    feed = feed_of(drawn)
    span = feed.requests[-1][0] - feed.requests[0][0]
    for figure in passed(feed, cuts, basis, idle_after).figures((0.0, 0.5, 1.0)):
        tried = simulate(feed, figure.slack_ns, basis, idle_after)
        assert figure.late == tried.late
        assert figure.open_events == tried.open_events
        assert (figure.held_events_peak, figure.held_bytes_peak) == (tried.held_peak, tried.bytes_peak)
        if span:
            assert figure.held_events_mean == pytest.approx(tried.held_integral / span, rel=1e-12, abs=1e-12)
            assert figure.held_bytes_mean == pytest.approx(tried.bytes_integral / span, rel=1e-12, abs=1e-12)
        assert (figure.hold_ns_mean is None) == (not tried.holds)
        if figure.hold_ns_mean is not None and figure.hold_ns_quantiles is not None:
            assert figure.hold_ns_mean == pytest.approx(np.mean(tried.holds), rel=1e-12, abs=1e-12)
            ordered = sorted(tried.holds)
            for q, value in figure.hold_ns_quantiles.items():
                assert value == pytest.approx(ordered[math.floor(q * (len(ordered) - 1))], rel=0.0100001)


@pytest.mark.parametrize(("basis", "idle_after"), BASES)
@given(drawn=requests)
def test_late_share_is_exact_everywhere_by_steps_and_bounded_by_the_sketch(
    drawn: list[Any], basis: Any, idle_after: int | None
) -> None:
    feed = feed_of(drawn)
    given = columns(feed)
    lengths = given.pop("lengths")
    figures = SlackFigures(SLACKS, basis, idle_after_ns=idle_after)
    lateness = figures.add(**given)
    tried = simulate(feed, 0, basis, idle_after)
    expected = [late if basis == "arrival" else max(late, 0) for late in tried.lateness]
    assert lateness.tolist() == expected and len(lateness) == len(lengths)
    steps = LateSteps(lateness)
    for slack in range(70):
        share = sum(late > slack for late in expected) / len(expected)
        assert steps.late_share(slack) == share
        bounds = figures.late_share(slack)
        assert bounds.at_least <= share <= bounds.at_most
        assert bounds.exact or slack not in SLACKS
    for target in (0.0, 0.1, 0.5, 1.0):
        slack = steps.slack_for(target)
        assert steps.late_share(slack) <= target
        assert slack == 0 or steps.late_share(slack - 1) > target


@pytest.mark.parametrize("idle_after", [None, 7, 30])
@pytest.mark.parametrize("slack", [0, 2, 13])
@settings(max_examples=25)
@given(drawn=requests)
def test_the_core_does_the_same_to_the_event(drawn: list[Any], slack: int, idle_after: int | None) -> None:
    """The service's own core, one event a request, without ticks: late events and the greatest number held."""
    rows = columns(feed_of([(pause, brought[:1]) for pause, brought in drawn]))
    times, arrivals, sources = rows["times"], rows["arrivals"], rows["sources"]
    chosen = {} if idle_after is None else {"idle_after_ns": idle_after}
    core = one_by_one(times, arrivals, patient(slack_ns=slack, **chosen), sources, ("a", "b", "c", "d"))
    figures = SlackFigures([slack], "sources", idle_after_ns=idle_after)
    lateness = figures.add(times, arrivals, sources=sources)
    assert (lateness > slack).tolist() == core.late.tolist()
    (figure,) = figures.figures()
    assert (figure.late, figure.held_events_peak, figure.open_events) == (
        int(core.late.sum()),
        int(core.held.max()),
        core.drained,
    )


@given(drawn=requests, idle_after=st.integers(1, 40))
def test_without_knowing_when_sources_fall_idle_two_passes_bound_it(drawn: list[Any], idle_after: int) -> None:
    feed = feed_of(drawn)
    waiting = passed(feed, [], "sources", None).figures()
    leading = passed(feed, [], "event", None).figures()
    for low, figure, high in zip(waiting, passed(feed, [], "sources", idle_after).figures(), leading, strict=True):
        assert low.late <= figure.late <= high.late
        assert high.held_events_peak <= figure.held_events_peak <= low.held_events_peak
        assert high.held_bytes_peak <= figure.held_bytes_peak <= low.held_bytes_peak
        assert high.held_events_mean - 1e-9 <= figure.held_events_mean <= low.held_events_mean + 1e-9


@pytest.mark.parametrize("basis", ["event", "arrival", "sources"])
def test_chunks_and_blocks_change_nothing(basis: Any) -> None:
    """More rows than a block holds, in one piece and in odd ones."""
    trace = poisson_exponential(1000, 0.5, 200_000, 3)
    sources = (np.arange(len(trace)) % 7).astype(np.uint32)
    grid = [0, 10**6, 10**8, 10**9, 3 * 10**9]
    whole, pieces = SlackFigures(grid, basis), SlackFigures(grid, basis)
    lateness = whole.add(trace.times, trace.arrivals, sources=sources)
    edges = [0, 1, 2, 777, 70_000, 70_001, 199_999, 200_000]
    parts = []
    for first, after in pairwise(edges):
        rows = slice(first, after)
        parts.append(pieces.add(trace.times[rows], trace.arrivals[rows], sources=sources[rows]))
        pieces.check()
    assert np.array_equal(np.concatenate(parts), lateness)
    assert pieces.lag_ns_mean == pytest.approx(whole.lag_ns_mean, rel=1e-9)
    for one, other in zip(whole.figures(), pieces.figures(), strict=True):
        assert (one.late, one.held_events_peak, one.open_events) == (
            other.late,
            other.held_events_peak,
            other.open_events,
        )
        assert one.hold_ns_quantiles == other.hold_ns_quantiles
        assert one.held_events_mean == pytest.approx(other.held_events_mean, rel=1e-9)
        assert (one.hold_ns_mean is None) == (other.hold_ns_mean is None) == (basis == "arrival" and not one.slack_ns)
        assert (one.hold_ns_mean or 0.0) == pytest.approx(other.hold_ns_mean or 0.0, rel=1e-9)


def test_slacks_that_hold_too_much_are_given_up_and_the_others_are_not() -> None:
    trace = poisson_exponential(1000, 0.5, 300_000, 4)
    grid = [0, 10**8, 10**9, 10**11]  # the last holds some 100,000 events
    bounded = SlackFigures(grid, "event", held_events_at_most=5_000)
    free = SlackFigures(grid, "event")
    for figures in (bounded, free):
        figures.add(trace.times, trace.arrivals)
        figures.check()
    assert bounded.figures()[:3] == free.figures()[:3]
    given_up, known = bounded.figures()[3], free.figures()[3]
    assert given_up.held_events_peak is None and given_up.hold_ns_mean is None and given_up.open_events is None
    assert given_up.late == known.late and known.held_events_peak is not None and known.held_events_peak > 90_000


def test_times_at_both_ends_of_int64_do_not_overflow() -> None:
    times = np.array([0, -(2**63), 2**63 - 1, 5, -(2**63)], dtype=np.int64)
    figures = SlackFigures([0, 2**61], "event")
    lateness = figures.add(times, np.arange(5, dtype=np.int64))
    assert lateness.tolist() == [0, -TIME_LEAST, 0, TIME_GREATEST - 5, TIME_GREATEST - TIME_LEAST]
    assert [figure.late for figure in figures.figures()] == [3, 3]
    figures.check()


def test_an_arrival_clock_that_steps_back_stands_still() -> None:
    times, arrivals = np.array([10, 12, 11], dtype=np.int64), np.array([20, 15, 25], dtype=np.int64)
    assert SlackFigures([0], "arrival").add(times, arrivals).tolist() == [10, 8, 14]


def test_nothing_gives_figures_of_nothing() -> None:
    figures = SlackFigures([0, 5], "sources")
    nothing = np.empty(0, dtype=np.int64)
    assert len(figures.add(nothing, nothing, sources=nothing.astype(np.uint32))) == 0
    figures.check()
    assert [(each.events, each.late_share, each.hold_ns_mean) for each in figures.figures()] == [(0, 0.0, None)] * 2
    assert math.isnan(figures.lag_ns_mean) and LateSteps(nothing).late_share(3) == 0


@pytest.mark.parametrize("slacks", [[], [3, 2], [1, 1], [-1], [2**61 + 1], list(range(65))])
def test_a_grid_that_cannot_be_used_is_refused(slacks: list[int]) -> None:
    with pytest.raises(ValueError, match="slacks"):
        SlackFigures(slacks)


@pytest.mark.parametrize(
    ("more", "message"),
    [
        ({"starts": np.array([1])}, "starts must ascend"),
        ({"starts": np.array([0, 0])}, "starts must ascend"),
        ({"starts": np.array([0, 2])}, "starts must ascend"),
        ({"sources": np.zeros(3, dtype=np.uint32)}, "equal length"),
        ({"lengths": np.zeros(1, dtype=np.uint32)}, "1 lengths for 2 events"),
        ({}, "needs a column of sources"),
        ({"sources": np.array([0, 2**24], dtype=np.uint32)}, "from 0 to"),
    ],
)
def test_columns_that_contradict_each_other_are_refused(more: dict[str, Any], message: str) -> None:
    two = np.arange(2, dtype=np.int64)
    with pytest.raises(ValueError, match=message):
        SlackFigures([0], "sources").add(two, two, **more)


@given(
    intervals=st.lists(st.tuples(st.integers(0, 40), st.integers(0, 40), st.integers(-5, 5)), max_size=30),
    length=st.integers(1, 40),
)
def test_the_least_over_intervals(intervals: list[tuple[int, int, int]], length: int) -> None:
    usable = [(first, min(after, length), value) for first, after, value in intervals if first < length]
    begins, ends, values = (np.array([each[i] for each in usable], dtype=np.int64) for i in range(3))
    found = least_covering(begins, ends, values, length)
    for place in range(length):
        over = [value for first, after, value in usable if first <= place < after]
        assert found[place] == min(over, default=NONE)


@given(
    values=st.lists(st.tuples(st.booleans(), st.integers(-5, 5)), min_size=1, max_size=40),
    wide=st.sampled_from([1, 2**40, 2**59]),
)
def test_the_greatest_by_group_in_a_narrow_and_in_a_wide_range(values: list[tuple[bool, int]], wide: int) -> None:
    """A wide range leaves no room for lifting values, so ranks are lifted."""
    fresh = np.array([True, *(new for new, _ in values[1:])])
    column = np.array([value * wide for _, value in values], dtype=np.int64)
    running: list[int] = []
    for new, value in zip(fresh.tolist(), column.tolist(), strict=True):
        running.append(value if new else max(running[-1], value))
    assert grouped_greatest(column, fresh).tolist() == running

"""Laws of the pass that finds every slack at once: it agrees with slow simulations of each slack, in any chunks."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from helpers_feed import patient
from helpers_single import one_by_one
from helpers_slack import Feed, simulate
from hypothesis import example, given, settings
from hypothesis import strategies as st
from strandline.replay import slacks as slacks_module
from strandline.replay.basis import LeastOfSources, Requests, grouped_greatest, least_covering
from strandline.replay.slacks import LateSteps, SlackFigures

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
    for first, after in zip(edges, edges[1:], strict=False):
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
    drawn: list[Any], cuts: list[int], basis: str, idle_after: int | None
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

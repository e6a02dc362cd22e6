"""When and whose events are late: counts as a plain count says, quantiles within their bound, steps a clock shows."""

from __future__ import annotations

import numpy as np
import pytest
from helpers_advice import BEGIN_NS, SECOND, Columns, exponential, feed
from strandline.replay.advice import Rule
from strandline.replay.patterns import DAY_NS, RELATIVE_ERROR, Lateness, patterns, step_ns

RULE = Rule("event")


def lateness_of(columns: Columns) -> np.ndarray:
    """Newest event time before each, minus its own, at least 0; each event is a request of its own."""
    newest = np.maximum.accumulate(columns.times)
    before = np.concatenate((columns.times[:1], newest[:-1]))
    return np.maximum(before - columns.times, 0)


def same(found: Lateness, lateness: np.ndarray, slack_ns: int) -> None:
    assert (found.events, found.late) == (len(lateness), int(np.count_nonzero(lateness > slack_ns)))
    if not len(lateness):
        assert found == Lateness(0, 0, None, None, None, None)
        return
    assert found.late_share == found.late / found.events
    assert found.lateness_ns_max == lateness.max()
    for q, value in ((0.5, found.lateness_ns_p50), (0.99, found.lateness_ns_p99)):
        lower, higher = (float(np.quantile(lateness, q, method=method)) for method in ("lower", "higher"))
        assert value is not None
        assert lower * (1 - RELATIVE_ERROR) - 1 <= value <= higher * (1 + RELATIVE_ERROR) + 1


@pytest.mark.parametrize("rows", [10**6, 333])
def test_steps_and_sources_of_a_short_capture(rows: int) -> None:
    delays = np.random.default_rng(5).exponential(1.0, 9_000)
    sources = np.random.default_rng(6).integers(0, 4, len(delays)).astype(np.uint32)
    columns = feed(50, delays * (1 + sources), 5, sources)
    lateness, slack_ns = lateness_of(columns), 2 * SECOND
    found = patterns(lambda: columns.blocks(rows), RULE, columns.span_ns, slack_ns, [3, 1])
    assert not found.by_day and found.steps[0].from_ns == 0
    begin, end = columns.span_ns
    assert found.steps[-1].from_ns <= end - begin < found.steps[-1].to_ns
    place = (columns.arrivals - begin) // (found.steps[0].to_ns)
    for number, step in enumerate(found.steps):
        same(step.lateness, lateness[place == number], slack_ns)
    assert sorted(found.sources) == [1, 3]
    for source, each in found.sources.items():
        same(each, lateness[columns.sources == source], slack_ns)


def test_hours_of_the_day_over_several_days() -> None:
    """An event each ten minutes over three days; those between 6 and 7 h UTC come two minutes late."""
    times = BEGIN_NS - BEGIN_NS % DAY_NS + np.arange(3 * 144, dtype=np.int64) * 600 * SECOND
    hour = times % DAY_NS // (3600 * SECOND)
    arrivals = times + np.where(hour == 6, 1_320, 1) * SECOND
    order = np.argsort(arrivals, kind="stable")
    columns = Columns(times[order], arrivals[order], np.zeros(len(times), dtype=np.uint32))
    found = patterns(columns.blocks, RULE, columns.span_ns, 0)
    assert found.by_day and len(found.steps) == 24 and found.sources == {}
    lateness, came = lateness_of(columns), columns.arrivals % DAY_NS // (3600 * SECOND)
    for number, step in enumerate(found.steps):
        assert step.from_ns == number * 3600 * SECOND
        same(step.lateness, lateness[came == number], 0)
    # 22 minutes of delay: those of 6:40 and 6:50 arrive after those of 7:00, and so on: all late ones come in hour 7.
    assert {number for number, step in enumerate(found.steps) if step.lateness.late} == {7}


@pytest.mark.parametrize("seconds", [0, 1, 23, 24, 500, 3_600, 86_399])
def test_steps_are_as_narrow_as_their_number_allows(seconds: int) -> None:
    width = step_ns(seconds * SECOND)
    assert seconds * SECOND // width + 1 <= 24
    assert width == SECOND or seconds * SECOND // (width * 2 // 5) + 1 >= 23


def test_a_step_without_events_is_there_and_unknown() -> None:
    columns = exponential(50, 0.1, 500, 3)
    later = columns.arrivals + np.where(np.arange(len(columns.arrivals)) > 250, 100, 0) * SECOND
    gap = Columns(columns.times, later, columns.sources)
    found = patterns(gap.blocks, RULE, gap.span_ns, 0)
    assert any(step.lateness == Lateness(0, 0, None, None, None, None) for step in found.steps)

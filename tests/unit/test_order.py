"""`strandline.order`: any iterable in order, lazily. Outside opinions: Python's stable sort, and a plain watermark."""

from __future__ import annotations

import heapq
import itertools
from collections.abc import Iterator

import numpy as np
import pytest
import strandline
from hypothesis import given
from hypothesis import strategies as st

Event = tuple[int, str, int]  # time, source, serial number

times = st.one_of(st.integers(-20, 20), st.integers(-(2**63) + 1, 2**63 - 1))
feeds = st.lists(st.tuples(times, st.sampled_from("abc")))


def numbered(feed: list[tuple[int, str]]) -> list[Event]:
    return [(time, source, number) for number, (time, source) in enumerate(feed)]


def first(event: Event) -> int:
    return event[0]


@given(feeds, st.integers(0, 60) | st.integers(0, 2**64))
def test_what_is_yielded_is_the_stable_sort_of_what_is_not_late(feed: list[tuple[int, str]], slack: int) -> None:
    events, late = numbered(feed), []
    out = list(strandline.order(events, time=first, slack=slack, late=late.append))
    assert late == plainly_late(events, slack, by_source=False)
    assert out == sorted((event for event in events if event not in late), key=first)


@given(feeds, st.integers(0, 60))
def test_with_sources_the_watermark_follows_the_slowest_that_was_heard(feed: list[tuple[int, str]], slack: int) -> None:
    events, late = numbered(feed), []
    ordered = strandline.order(events, time=first, slack=slack, source=lambda event: event[1], late=late.append)
    assert list(ordered) == sorted((event for event in events if event not in late), key=first)
    assert late == plainly_late(events, slack, by_source=True)


def plainly_late(events: list[Event], slack: int, *, by_source: bool) -> list[Event]:
    """Events before the watermark that stood when they came: the rule, written down once more."""
    newest: dict[str, int] = {}
    watermark, late = -(2**63), []
    for event in events:
        if event[0] < watermark:
            late.append(event)
        name = event[1] if by_source else ""
        newest[name] = max(newest.get(name, event[0]), event[0])
        watermark = max(watermark, min(newest.values()) - slack)
    return late


@given(feeds)
def test_a_slack_that_covers_every_lateness_sorts_all(feed: list[tuple[int, str]]) -> None:
    events = numbered(feed)
    slack = max(map(first, events), default=0) - min(map(first, events), default=0)
    assert list(strandline.order(events, time=first, slack=slack)) == sorted(events, key=first)


@given(st.lists(st.lists(st.integers(0, 50)), max_size=4))
def test_sorted_sources_merge_as_heapq_merges_them(columns: list[list[int]]) -> None:
    streams = [[(time, str(source), 0) for time in sorted(column)] for source, column in enumerate(columns)]
    shuffled = [event for row in itertools.zip_longest(*streams) for event in row if event]
    found = list(strandline.order(shuffled, time=first, slack=10**6, source=lambda event: event[1]))
    assert [event[0] for event in found] == [event[0] for event in heapq.merge(*streams, key=first)]


def test_events_are_yielded_as_soon_as_the_watermark_has_passed() -> None:
    asked = []

    def feed() -> Iterator[int]:
        for time in (1, 3, 2, 10, 11):
            asked.append(time)
            yield time

    ordered = strandline.order(feed(), time=lambda event: event, slack=5)
    assert not asked, "nothing is asked for before the first event is"
    assert [next(ordered), next(ordered), next(ordered)] == [1, 2, 3]
    assert asked == [1, 3, 2, 10]
    assert list(ordered) == [10, 11]


def test_an_event_exactly_the_slack_behind_is_in_time() -> None:
    late: list[int] = []
    assert list(strandline.order([10, 5, 4], time=lambda event: event, slack=5, late=late.append)) == [5, 10]
    assert late == [4]
    assert list(strandline.order([10, 5, 4], time=lambda event: event, slack=5)) == [5, 10], "without `late`: left out"


def test_an_endless_feed_is_ordered_in_bounded_room() -> None:
    """What is held is what the slack holds, however long the feed goes on."""
    endless = (number ^ 1 for number in itertools.count())
    ordered = strandline.order(endless, time=lambda event: event, slack=4)
    assert list(itertools.islice(ordered, 3000)) == list(range(3000))


def test_equal_events_that_are_no_values_of_a_set_are_all_yielded() -> None:
    events = [{"time": 2}, {"time": 1}, {"time": 1}]
    found = list(strandline.order(events, time=lambda event: event["time"], slack=5))
    assert found == [{"time": 1}, {"time": 1}, {"time": 2}]
    assert found[0] is events[1] and found[1] is events[2] and found[2] is events[0]


def test_integers_of_numpy_are_integers() -> None:
    column = np.array([3, 1, 2], dtype=np.int64)
    assert list(strandline.order(column, time=lambda event: event, slack=np.int64(5))) == [1, 2, 3]


@pytest.mark.parametrize("time", ["1", 1.0, None])
def test_a_time_that_is_no_integer(time: object) -> None:
    with pytest.raises(TypeError, match=type(time).__name__):
        list(strandline.order([0], time=lambda event: time, slack=5))  # type: ignore[arg-type, return-value]


@pytest.mark.parametrize("time", [2**63, -(2**63) - 1, -(2**63)])
def test_a_time_that_does_not_fit(time: int) -> None:
    with pytest.raises(OverflowError, match="does not fit int64"):
        list(strandline.order([time], time=lambda event: event, slack=5))


def test_a_wrong_slack_is_told_at_once() -> None:
    with pytest.raises(ValueError, match="must not be negative"):
        strandline.order([], time=first, slack=-1)
    with pytest.raises(TypeError, match="float"):
        strandline.order([], time=first, slack=0.5)  # type: ignore[arg-type]

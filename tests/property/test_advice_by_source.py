"""Advice by source equals what is found source by source in plain Python, whatever the blocks are."""

from __future__ import annotations

import math
from collections.abc import Iterator

import numpy as np
import pytest
from helpers_advice_by_source import Feed, blocks_of, held, judged, least_slack
from hypothesis import given, settings
from hypothesis import strategies as st
from strandline.core.sketch import LEAST_NS, Buckets
from strandline.replay.advice import SUPPORTED, Rule, Wanted, advise, cut_of, rounded_up
from strandline.replay.advice_by_source import AdviceBySource, advise_by_source, rounded_up_column
from strandline.replay.basis import Requests
from strandline.replay.basis_by_source import NEVER_ON_TIME, NewestOfEach
from strandline.replay.holds_by_source import Followed, Hold
from strandline.replay.intervals import wilks, wilson, wilson_columns
from strandline.replay.sketch_by_source import SketchBySource

SOURCES = 4
MILLISECOND = 1_000_000
events = st.tuples(st.integers(-20, 20), st.integers(0, SOURCES - 1))
requests = st.lists(st.tuples(st.integers(0, 9), st.lists(events, min_size=1, max_size=5)), min_size=2, max_size=40)
cuts = st.lists(st.integers(0, 40), max_size=3)
silences = st.sampled_from((None, 3, 12))


def feed_of(drawn: list[tuple[int, list[tuple[int, int]]]], unit: int = 1) -> Feed:
    """Requests one after the other; event times are drawn relative to the arrival."""
    clock, made = 1000, []
    for pause, brought in drawn:
        clock += pause
        made.append((clock * unit, [((clock + off) * unit, source) for off, source in brought]))
    return made


@given(requests, cuts, silences)
def test_each_event_is_as_late_as_its_own_source_says(drawn: list, ends: list[int], idle_after: int | None) -> None:
    feed, basis = feed_of(drawn), NewestOfEach(idle_after)
    found = [late for block in blocks_of(feed, ends) for late in basis.add(block).lateness.tolist()]
    expected = [late for _, _, late in judged(feed, idle_after)]
    assert found == [NEVER_ON_TIME if late == math.inf else late for late in expected]


@given(requests, cuts, silences, st.lists(st.sampled_from((0, 1, 3, 10, 60)), min_size=SOURCES, max_size=SOURCES))
def test_holds_are_those_of_each_source_by_itself(
    drawn: list, ends: list[int], idle_after: int | None, slacks: list[int]
) -> None:
    feed, basis, hold = feed_of(drawn), NewestOfEach(idle_after), Hold(np.array(slacks, dtype=np.int64))
    for block in blocks_of(feed, ends):
        hold.follow(Followed(block, basis.add(block), idle_after))
    expected = held(feed, idle_after, slacks)
    assert (hold.events, hold.sum_ns) == (len(expected), sum(expected)) and not hold.given_up
    assert hold.mean_ns == (sum(expected) / len(expected) if expected else None)


@settings(max_examples=150)
@given(requests, cuts, silences, st.sampled_from((0.05, 0.2, 0.5)), st.sampled_from((None, 5, 1000)))
def test_advice_is_what_each_source_needs_by_itself(
    drawn: list, ends: list[int], idle_after_ms: int | None, share: float, at_most_ms: int | None
) -> None:
    idle_after = None if idle_after_ms is None else idle_after_ms * MILLISECOND
    feed = feed_of(drawn, MILLISECOND)
    at_most = None if at_most_ms is None else at_most_ms * MILLISECOND
    span = feed[0][0], feed[-1][0]
    wanted = Wanted(share, at_most, learn_part=0.5)
    cut = cut_of(span, 0.5)
    rows = judged(feed, idle_after)
    first = [[late for at, of, late in rows if of == number and at < cut] for number in range(SOURCES)]
    second = [[late for at, of, late in rows if of == number and at >= cut] for number in range(SOURCES)]
    if not any(first) or not any(second):
        with pytest.raises(ValueError, match="one part is empty"):
            advise_by_source(lambda: blocks_of(feed, ends), span, idle_after, wanted)
        return
    advice = advise_by_source(lambda: blocks_of(feed, ends), span, idle_after, wanted)
    needed = wilks(1 - share, 0.95)
    longest = math.inf if at_most is None else at_most
    enough = [number for number in range(SOURCES) if len(first[number]) >= needed]
    for number in enough:
        exact = least_slack(first[number], share)
        least = max([late for late in first[number] if late < math.inf], default=0) if exact == math.inf else exact
        assert min(least, longest) <= advice.slacks_ns[number] <= min(rounded_up(round(least * 1.003) + 1), longest)
        beyond = sum(late > (2**61 if at_most is None else at_most) for late in first[number])
        assert advice.binding[number] == (beyond > share * len(first[number]))
    for number in range(len(advice.slacks_ns)):
        later = second[number] if number < SOURCES else []
        if number not in enough:
            assert advice.slacks_ns[number] == advice.ways["fixed"].slack_ns
        assert advice.late[number] == sum(late > advice.slacks_ns[number] for late in later)
        assert advice.late_fixed[number] == sum(late > advice.ways["fixed"].slack_ns for late in later)
        assert (advice.first_events[number], advice.second_events[number]) == (
            len(first[number]) if number < SOURCES else 0,
            len(later),
        )
    pooled = advice.ways["pooled"]
    assert pooled.late == sum(late > pooled.slack_ns for _, _, late in rows[len([1 for at, *_ in rows if at < cut]) :])
    if enough:
        assert advice.ways["fixed"].slack_ns == max(advice.slacks_ns[number] for number in enough)
    slacks = {
        "steered": advice.slacks_ns.tolist(),
        **{name: [advice.ways[name].slack_ns] * SOURCES for name in ("pooled", "fixed")},  # type: ignore[index]
    }
    for name, way in advice.ways.items():
        holds = held(feed, idle_after, (slacks[name] + [0] * SOURCES)[:SOURCES])
        assert way.hold_ns_mean == (pytest.approx(np.mean(holds)) if holds else None)
    check_rows(advice)


@pytest.mark.parametrize(
    ("wanted", "reason"),
    [
        (Wanted(0.0), "late share"),
        (Wanted(1.0), "late share"),
        (Wanted(0.1, learn_part=1.0), "part to choose on"),
        (Wanted(0.1, -1), "longest wait"),
        (Wanted(0.1, 2**61 + 1), "longest wait"),
    ],
)
def test_what_cannot_be_wanted_is_refused_before_anything_is_read(wanted: Wanted, reason: str) -> None:
    def unread() -> Iterator[Requests]:
        raise AssertionError("read")

    with pytest.raises(ValueError, match=reason):
        advise_by_source(unread, (0, 1), None, wanted)
    with pytest.raises(ValueError, match=reason):
        advise(unread, (0, 1), Rule("event"), wanted)


def check_rows(advice: AdviceBySource) -> None:
    """Shown and rest are all sources that were heard, whatever the limit; verdicts are those of the row."""
    whole, nothing = advice.rows(SOURCES)
    assert nothing.sources == 0 and len({row.source for row in whole}) == len(whole)
    # As advice.md says: contradictions, then those missed, then by slack, those with too few events last.
    ranks = {"contradiction": 0, "missed": 1, "open": 2, "shown": 2, "too_short": 3}
    places = [(ranks[row.verdict], -row.slack_ns, row.source) for row in whole]
    assert places == sorted(places)
    for row in whole:
        low, high = row.interval
        if min(row.first_events, row.second_events) < advice.events_needed:
            assert row.verdict == "too_short"
        elif row.verdict in SUPPORTED:
            assert low <= advice.wanted.late_share and (row.verdict == "open") == (high > advice.wanted.late_share)
    for shown in range(len(whole)):
        rows, rest = advice.rows(shown)
        assert rows == whole[:shown] and rest.sources == len(whole) - shown
        assert sum(row.second_events for row in rows) + rest.second_events == advice.second.events
        assert sum(row.late for row in rows) + rest.late == advice.ways["steered"].late
        assert sum(row.late_fixed for row in rows) + rest.late_fixed == advice.ways["fixed"].late


lateness = st.one_of(st.just(0), st.integers(0, 10**4), st.integers(0, 10**9), st.integers(0, 10**14))


@settings(max_examples=150)
@given(
    st.lists(st.lists(st.tuples(st.integers(0, 40), lateness), min_size=1, max_size=60), min_size=1, max_size=6),
    st.sampled_from((1 << 25, 1 << 18, 1 << 14, 1 << 10)),
    st.sampled_from((0.0, 0.1, 0.5)),
)
def test_a_sketch_that_folds_keeps_its_word(columns: list, cells: int, share: float) -> None:
    """However little room there is: the slack keeps the share, and is at most a bucket above the least one."""
    sketch = SketchBySource(cells)
    by_source: dict[int, list[int]] = {}
    for rows in columns:
        numbers = np.array([number for number, _ in rows], dtype=np.uint32)
        sketch.add(numbers, np.array([late for _, late in rows], dtype=np.int64))
        sketch.check()
        for number, late in rows:
            by_source.setdefault(number, []).append(late)
    error = sketch.relative_error
    slacks, beyond = sketch.slacks_for(share), sketch.late(10**8)
    for number, values in by_source.items():
        exact = least_slack(values, share) if share else max(values)
        assert exact <= slacks[number] <= max(exact * (1 + 2 * error / (1 - error)) * (1 + 1e-9) + 1, LEAST_NS)
        assert sum(late > 10**8 for late in values) <= beyond[number]
        assert beyond[number] <= sum(late > 10**8 * (1 - error) / (1 + error) - 1 for late in values)
    assert isinstance(sketch.buckets, Buckets) and error < 0.25


@given(st.lists(st.integers(0, 2**61), min_size=1, max_size=50))
def test_rounding_up_a_column_is_rounding_up_each(values: list[int]) -> None:
    assert rounded_up_column(np.array(values, dtype=np.int64)).tolist() == [rounded_up(value) for value in values]


@given(st.lists(st.tuples(st.integers(0, 50), st.integers(0, 10**6)), min_size=1, max_size=50))
def test_intervals_of_a_column_are_those_of_each(pairs: list[tuple[int, int]]) -> None:
    rows = [(late, late + more) for late, more in pairs]
    low, high = wilson_columns(*(np.array(column, dtype=np.int64) for column in zip(*rows, strict=True)), 0.95)
    expected = [wilson(late, trials) for late, trials in rows]
    assert low.tolist() == pytest.approx([each[0] for each in expected])
    assert high.tolist() == pytest.approx([each[1] for each in expected])

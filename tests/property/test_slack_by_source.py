"""A slack for each source: the identity holds for each, on any feed, and each is steered as if it were alone.

Sources: Gibbs & Candes, "Adaptive conformal inference under distribution shift" (NeurIPS 2021); Angelopoulos, Candes &
Tibshirani, "Conformal PID control for time series prediction" (NeurIPS 2023): quantile tracking and its identity.
"""

from __future__ import annotations

import numpy as np
import pytest
from helpers_strands import constants
from hypothesis import event, given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from strandline.core.settings import Settings
from strandline.core.slack import WARM_UP_EVENTS, FixedSlack, Rows, SteeredSlack
from strandline.core.slack_by_source import BLOCK, SteeredBySource, slack_for
from strandline.core.tails import SHOWN_EVENTS, Tails

SECOND = 10**9
Int64s = NDArray[np.int64]
SOURCES = 5
Request = list[tuple[int, int]]

rows = st.lists(st.tuples(st.integers(0, SOURCES - 1), st.integers(0, 10**12)), min_size=1, max_size=60)
feeds = st.lists(rows, min_size=1, max_size=60)


def tell(slack: SteeredBySource, now: int, given: Request, set_slack_ns: int | None = None) -> None:
    """An arrival of (source, lateness); late is what is behind its source's slack, or the one that was set."""
    numbers = np.array([number for number, _ in given], dtype=np.uint32)
    lateness = np.array([ns for _, ns in given], dtype=np.int64)
    each = slack.each(SOURCES)[numbers] if set_slack_ns is None else set_slack_ns
    which = lateness > each
    late = int(np.count_nonzero(which))
    aside = set_slack_ns is not None
    rows = Rows(numbers, which if late else None, SOURCES)
    slack.learn(now, len(given), late, lateness, set_aside=aside, rows=rows)
    slack.check(SOURCES)


def identity_holds(slack: SteeredBySource, number: int) -> None:
    """(share - target) * events == (S(T+1) - S(1) - clipped) / eta, in the source's present stretch."""
    stretch = slack.stretch(number)
    if not stretch.number:
        return
    left = stretch.late - slack.target * stretch.events
    right = (stretch.exact_ns - stretch.first_ns - stretch.clipped_ns) / stretch.eta_ns
    assert left == pytest.approx(right, abs=1e-6 * (stretch.events + 1))
    if not stretch.clipped_ns and stretch.events:
        bound = slack.seen(number, number + 1)[0].bound
        assert bound is not None and abs(left) / stretch.events <= bound * (1 + 1e-9)


@settings(max_examples=150, deadline=None)
@given(feeds, st.sampled_from([0.3, 0.05, 0.004]), st.integers(0, 5), st.integers(5, 500), st.integers(0, 59))
def test_the_identity_holds_for_each_source(
    feed: list[Request], target: float, at_least_s: int, at_most_s: int, aside_from: int
) -> None:
    with constants(WARM_UP_EVENTS=9, MEMORY_PER_LATE=1, MEMORY_EVENTS=60):
        slack = SteeredBySource(target, at_most_s * SECOND, at_least_s * SECOND)
        counted = dict.fromkeys(range(SOURCES), 0)
        late = dict.fromkeys(range(SOURCES), 0)
        for now, given in enumerate(feed):
            set_slack_ns = SECOND if now >= aside_from else None
            each = slack.each(SOURCES).tolist()
            for number, lateness_ns in given:
                counted[number] += 1
                late[number] += lateness_ns > (each[number] if set_slack_ns is None else set_slack_ns)
            tell(slack, now * SECOND, given, set_slack_ns)
            for number in range(SOURCES):
                identity_holds(slack, number)
        seen = slack.seen(0, SOURCES)
        assert [(own.events, own.late) for own in seen] == [(counted[each], late[each]) for each in range(SOURCES)]
        assert (slack.events, slack.late) == (sum(counted.values()), sum(late.values()))
    event(f"clipped: {any(slack.stretch(number).clipped_ns for number in range(SOURCES))}")


@settings(max_examples=100, deadline=None)
@given(feeds, st.sampled_from([0.3, 0.05]))
def test_a_source_is_steered_as_if_alone_and_its_events_are_one_step(feed: list[Request], target: float) -> None:
    """Also: one event a request goes another way through the code, and must come to the same bits."""
    with constants(WARM_UP_EVENTS=9, MEMORY_PER_LATE=1, MEMORY_EVENTS=60):
        together = SteeredBySource(target, 100 * SECOND)
        alone = [SteeredBySource(target, 100 * SECOND) for _ in range(SOURCES)]
        for now, given in enumerate(feed):
            tell(together, now * SECOND, given)
            for number, slack in enumerate(alone):
                own = [(0, lateness_ns) for of, lateness_ns in given if of == number]
                if own:
                    tell(slack, now * SECOND, own)
                expected, found = slack.stretch(0), together.stretch(number)
                assert found == expected
                assert slack.seen(0, 1) == together.seen(number, number + 1)


@settings(max_examples=60, deadline=None)
@given(feeds, st.integers(0, 59))
def test_what_is_saved_goes_on_the_same(feed: list[Request], cut: int) -> None:
    with constants(WARM_UP_EVENTS=9, MEMORY_EVENTS=60):
        straight, other = SteeredBySource(0.1, 100 * SECOND), SteeredBySource(0.1, 100 * SECOND)
        for now, given in enumerate(feed):
            if now == cut:
                restored = SteeredBySource(0.1, 100 * SECOND)
                restored.restore(other.saved(), other.columns(SOURCES))
                other = restored
            tell(straight, now * SECOND, given)
            tell(other, now * SECOND, given)
        assert straight.saved() == other.saved()
        for one, another in zip(straight.columns(SOURCES), other.columns(SOURCES), strict=True):
            assert one.tobytes() == another.tobytes()


def drive(slack: SteeredBySource, scales_s: list[float], requests: int, each: int, seed: int = 1) -> None:
    """Requests with so many events of each source, exponential lateness of these scales."""
    random = np.random.default_rng(seed)
    numbers = np.repeat(np.arange(len(scales_s), dtype=np.uint32), each)
    for now in range(requests):
        lateness = (random.exponential(np.array(scales_s)[numbers]) * SECOND).astype(np.int64)
        which = lateness > slack.each(len(scales_s))[numbers]
        late = int(np.count_nonzero(which))
        slack.learn(now * SECOND, len(numbers), late, lateness, rows=Rows(numbers, which, len(scales_s)))


def test_each_source_finds_its_own_quantile() -> None:
    """Exponential lateness of mean m: the quantile wanted is m ln(1 / target), for a scale of 10 ms as for 100 s."""
    scales_s = [0.01, 0.3, 3.0, 100.0]
    slack = SteeredBySource(0.01, 3600 * SECOND)
    drive(slack, scales_s, 20_000, 2)
    for own, scale_s in zip(slack.seen(0, 4), scales_s, strict=True):
        assert own.late / own.events == pytest.approx(0.01, rel=0.1)
        assert own.slack_ns / SECOND == pytest.approx(scale_s * np.log(100), rel=0.45)
        assert not own.binding and not own.warming_up
    found = slack.together(4)
    assert (found.warming_up, found.binding, found.binding_source) == (0, 0, None)
    assert found.longest_ns == max(own.slack_ns for own in slack.seen(0, 4)) == slack.slack_ns


def test_a_longest_wait_that_is_too_short_for_one_source_is_said_of_that_one() -> None:
    slack = SteeredBySource(0.01, 10 * SECOND)
    drive(slack, [0.1, 10.0, 30.0], 5_000, 2)
    calm, late, latest = slack.seen(0, 3)
    assert (calm.binding, late.binding, latest.binding) == (False, True, True)
    # P(lateness > 10 s) for means of 10 and 30 s; a bucket spans 67 %, within which events are taken to lie evenly.
    assert late.attainable == pytest.approx(np.exp(-1), rel=0.1)
    assert latest.attainable == pytest.approx(np.exp(-1 / 3), rel=0.1)
    assert late.late / late.events == pytest.approx(np.exp(-1), rel=0.1), "what it says is what came"
    found = slack.together(3)
    assert (found.binding, found.binding_source, found.attainable) == (2, 2, latest.attainable)
    for number in range(3):
        identity_holds(slack, number)
    assert slack.stretch(2).clipped_ns < 0, "what the limit took off is told apart"


def test_the_longest_wait_holds_until_enough_was_seen_of_that_source() -> None:
    slack = SteeredBySource(0.01, 30 * SECOND)
    for now in range(WARM_UP_EVENTS - 1):
        tell(slack, now, [(0, 0), (1, 0), (2, 0)])
    tell(slack, 10**6, [(2, 0)])
    assert slack.each(4).tolist()[:2] == [30 * SECOND] * 2 and slack.each(4)[2] < SECOND
    assert [own.warming_up for own in slack.seen(0, 4)] == [True, True, False, True]
    assert slack.together(4).warming_up == 3


lateness_columns = st.lists(
    st.one_of(st.just(0), st.integers(0, 10**7), st.integers(0, 10**14)), min_size=20, max_size=300
)


@settings(max_examples=200)
@given(lateness_columns, st.sampled_from((0.2, 0.05, 0.001)))
def test_the_edge_of_a_tail_is_that_of_the_events_within_a_bucket(values: list[int], target: float) -> None:
    tails = Tails()
    tails.reach(2)
    column = np.array(values, dtype=np.int64)
    tails.add(np.ones(len(values), dtype=np.intp), column)
    weight = np.array([float(len(values))])
    number = np.array([1], dtype=np.intp)
    scale, first = tails.tails(number, weight, target)
    share = min(max(target, SHOWN_EVENTS / len(values)), 0.25)
    edge = float(first[0] - scale[0] * np.log(share / min(target, share)))
    # The least value with no more than the share above it, and the one with that share at or above it.
    descending = sorted(values, reverse=True)
    wanted = share * len(values)
    beyond = descending[min(int(np.ceil(wanted)), len(values)) - 1]
    assert edge <= descending[0] + 1
    if beyond < 1_000_000 * 0.97:
        assert edge == pytest.approx(0, abs=1), "below a millisecond is told as no lateness"
    else:
        assert beyond / 1.7 <= edge <= beyond * 1.7, "within a bucket"
    shares = [float(tails.late_share(number, weight, slack_ns)[0]) for slack_ns in (0, 10**9, 10**12, 10**14)]
    assert shares == sorted(shares, reverse=True) and shares[-1] == 0.0
    tails.check(np.array([0.0, float(len(values))]))


def test_other_limits_keep_what_was_learned_another_target_does_not() -> None:
    before = SteeredBySource(0.01, 60 * SECOND)
    drive(before, [0.1, 3.0], 2_000, 2)
    tell(before, 0, [(3, 0)])
    slacks = before.each(4).tolist()
    wide = slack_for(Settings("f", slack_ns=90 * SECOND, late_share=0.01, order="source"), before)
    assert isinstance(wide, SteeredBySource) and wide.each(4).tolist()[:2] == slacks[:2] and wide.events == 8_001
    assert wide.each(4)[3] == 90 * SECOND, "one that warms up is held for the longest wait"
    narrow = slack_for(Settings("f", slack_ns=2 * SECOND, late_share=0.01, order="source"), wide)
    assert isinstance(narrow, SteeredBySource)
    narrow.check(4)
    assert narrow.each(4).tolist() == [slacks[0], 2 * SECOND, 2 * SECOND, 2 * SECOND]
    assert narrow.stretch(1).first_ns == 2 * SECOND and narrow.stretch(0).events > 0, "a jump begins a stretch"
    tell(narrow, 1, [(0, 0), (1, 5 * SECOND)])
    fresh = slack_for(Settings("f", slack_ns=90 * SECOND, late_share=0.02, order="source"), narrow)
    assert isinstance(fresh, SteeredBySource) and fresh.events == 0
    whole = slack_for(Settings("f", slack_ns=90 * SECOND, late_share=0.02), fresh)
    assert isinstance(whole, SteeredSlack) and whole.events == 0
    again = slack_for(Settings("f", slack_ns=90 * SECOND, late_share=0.02, order="source"), whole)
    assert isinstance(again, SteeredBySource) and again.events == 0
    assert isinstance(slack_for(Settings("f", slack_ns=7, order="source"), again), FixedSlack)


def test_many_sources_are_looked_at_in_blocks() -> None:
    count = BLOCK + 10
    with constants(WARM_UP_EVENTS=2):
        slack = SteeredBySource(0.01, SECOND)
        numbers = np.arange(count, dtype=np.uint32)
        for now in range(3):
            lateness = np.full(count, 5 * SECOND, dtype=np.int64)
            slack.learn(now, count, count, lateness, rows=Rows(numbers, lateness > SECOND, count))
        slack.check(count)
        found = slack.together(count)
    assert (found.binding, found.warming_up, found.attainable) == (count, 0, 1.0)
    assert found.binding_source is not None

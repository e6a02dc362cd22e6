"""Late share and mean number held against closed forms (check-values, section 9): Poisson events, exponential delays.

Events of rate L a second with delays of mean 1/M s, rho = L/M, slack K; R(rho) = 1 - integral over u from 0 to 1 of
u^rho e^(rho (1-u)) is the share that arrives behind a later event. Derived and checked by simulation outside this
project; models of the kind: Kleinrock, Kamoun, Muntz 1981; Harrus & Plateau 1982; Baccelli, Gelenbe, Plateau 1984.

    watermark = arrival clock - K:   late share e^(-M K);         mean held L (K - (1 - e^(-M K)) / M)
    watermark = newest seen - K:     late share e^(-M K) R(rho);  mean held 1 + L K - rho (1 - e^(-M K)) R(rho)

Each event is a request of its own. The number held is looked at when the next event arrives: arrivals of this model are
Poisson, so they see the average over time.
"""

from __future__ import annotations

import math
from collections.abc import Iterator

import numpy as np
import pytest
from helpers_feed import patient
from helpers_single import Passed, pass_poisson, poisson, two_at_a_time
from strandline.core.settings import Settings

EVENTS = 200_000
ENDS = 5_000  # left out at both ends: the feed fills and drains there
TOLERANCE = 0.02
SEED = 7

# rate, 1/mean delay, K, then the printed R, late by the arrival clock, late by the event clock, held by either clock
PRINTED = [
    (1, 1, 1.0, 0.281718, 0.367879, 0.103638, 0.367879, 1.821920),
    (5, 1, 2.0, 0.562267, 0.135335, 0.076095, 5.676676, 8.569138),
    (10, 2, 0.5, 0.562267, 0.367879, 0.206846, 1.839397, 4.222898),
    (50, 5, 0.2, 0.666725, 0.367879, 0.245274, 3.678794, 6.785493),
]


def reordered(rho: float) -> float:
    """R(rho), by the trapezoid rule on a fine grid (the integrand is smooth)."""
    u = np.linspace(0, 1, 200_001)
    return 1 - float(np.trapezoid(u**rho * np.exp(rho * (1 - u)), u))


def forms(rate: float, mu: float, slack: float) -> tuple[float, float, float, float]:
    """Late share by the arrival clock and by the event clock, mean held by either."""
    rho, stays = rate / mu, math.exp(-mu * slack)
    share = reordered(rho)
    return (
        stays,
        stays * share,
        rate * (slack - (1 - stays) / mu),
        1 + rate * slack - rho * (1 - stays) * share,
    )


def by(clock: str, slack: float) -> Settings:
    """Settings of a feed with this clock and this slack in seconds."""
    return patient(clock=clock, slack_ns=round(slack * 1e9))


@pytest.fixture(scope="module")
def passed() -> Iterator[dict[tuple[float, float, float, str], Passed]]:
    """Every parameter set by both clocks, through the feed, in two processes."""
    with two_at_a_time() as pool:
        futures = {
            (rate, mu, slack, clock): pool.submit(pass_poisson, float(rate), 1 / mu, EVENTS, SEED, by(clock, slack))
            for rate, mu, slack, *_ in PRINTED
            for clock in ("event", "arrival")
        }
        yield {key: future.result() for key, future in futures.items()}


@pytest.mark.parametrize(
    ("rho", "share"),
    [(0.1, 0.046188), (0.5, 0.178628), (1, 0.281718), (2, 0.402736), (5, 0.562267), (10, 0.666725), (100, 0.881228)],
)
def test_the_reordered_share_is_the_printed_one(rho: float, share: float) -> None:
    assert reordered(rho) == pytest.approx(share, abs=6e-7)
    if rho == 1:
        assert reordered(1) == pytest.approx(3 - math.e, abs=1e-9)


@pytest.mark.parametrize("row", PRINTED)
def test_the_forms_give_the_printed_values(row: tuple[float, ...]) -> None:
    rate, mu, slack, _, *printed = row
    assert forms(rate, mu, slack) == pytest.approx(printed, abs=6e-7)


@pytest.mark.parametrize("row", PRINTED)
def test_late_share_and_mean_held_by_the_arrival_clock(
    row: tuple[float, ...], passed: dict[tuple[float, float, float, str], Passed]
) -> None:
    rate, mu, slack, *_ = row
    found = passed[rate, mu, slack, "arrival"]
    late, _, held, _ = forms(rate, mu, slack)
    inner = slice(ENDS, EVENTS - ENDS)
    assert found.balance == 0
    assert np.mean(found.late[inner]) == pytest.approx(late, rel=TOLERANCE)
    # Held just before the event came: the watermark had followed the clock to that instant.
    assert np.mean((found.held - ~found.late)[inner]) == pytest.approx(held, rel=TOLERANCE)


@pytest.mark.parametrize("row", PRINTED)
def test_late_share_and_mean_held_by_the_event_clock(
    row: tuple[float, ...], passed: dict[tuple[float, float, float, str], Passed]
) -> None:
    rate, mu, slack, *_ = row
    found = passed[rate, mu, slack, "event"]
    _, late, _, held = forms(rate, mu, slack)
    inner = slice(ENDS, EVENTS - ENDS)
    assert found.balance == 0
    assert np.mean(found.late[inner]) == pytest.approx(late, rel=TOLERANCE)
    assert np.mean(found.held[inner]) == pytest.approx(held, rel=TOLERANCE)


@pytest.mark.parametrize("row", PRINTED)
def test_the_feed_agrees_with_a_vectorised_watermark_to_the_event(
    row: tuple[float, ...], passed: dict[tuple[float, float, float, str], Passed]
) -> None:
    """A second opinion without a law of chance in it: the same trace, the rule in two lines of numpy."""
    rate, mu, slack, *_ = row
    trace, slack_ns = poisson(rate, 1 / mu, EVENTS, SEED), round(slack * 1e9)
    newest = np.maximum.accumulate(trace.times)
    before = np.concatenate(([np.iinfo(np.int64).min // 2], newest[:-1]))
    assert np.array_equal(passed[rate, mu, slack, "event"].late, trace.times < before - slack_ns)
    assert np.array_equal(passed[rate, mu, slack, "arrival"].late, trace.times < trace.arrivals - slack_ns)

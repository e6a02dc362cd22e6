"""Every slack at once against closed forms and K-slack traces (check-values, sections 8 and 9).

Poisson events of rate L a second with exponential delays of mean 1/M s, rho = L/M, slack K. The forms were derived, and
checked by simulation, outside this project; models of the kind: Kleinrock, Kamoun, Muntz 1981; Harrus & Plateau 1982;
Baccelli, Gelenbe, Plateau 1984. A million events a set: the ends, where the feed fills and drains, weigh nothing.
"""

from __future__ import annotations

import math
from functools import cache

import numpy as np
import pytest
from strandline.replay.disorder import inversions, overtakers
from strandline.replay.reordering import Reordering
from strandline.replay.slacks import LateSteps, SlackFigure, SlackFigures
from strandline_loadgen.shapes import poisson_exponential
from strandline_loadgen.trace import Trace

EVENTS = 1_000_000
TOLERANCE = 0.02

# L, M, K: R, late by the arrival clock, by the event clock, held by either, lag E[Y], latency by the event clock
PRINTED = {
    (1, 1, 1.0): (0.281718, 0.367879, 0.103638, 0.367879, 1.821920, 1.718282, 2.718282),
    (5, 1, 2.0): (0.562267, 0.135335, 0.076095, 5.676676, 8.569138, 0.637733, 2.637733),
    (10, 2, 0.5): (0.562267, 0.367879, 0.206846, 1.839397, 4.222898, 0.318867, 0.818867),
    (100, 1, 3.0): (0.881228, 0.049787, 0.043874, 204.9787, 217.2646, 0.128772, 3.128772),
    (1, 2, 1.0): (0.178628, 0.135335, 0.024175, 0.567668, 1.922773, 1.410686, 2.410686),
    (50, 5, 0.2): (0.666725, 0.367879, 0.245274, 3.678794, 6.785493, 0.086655, 0.286655),
}
SETS = pytest.mark.parametrize("given", PRINTED)


@cache
def trace(rate: float, mu: float) -> Trace:
    return poisson_exponential(rate, 1 / mu, EVENTS, 17)


@cache
def passed(rate: float, mu: float, slack: float, basis: str) -> tuple[SlackFigures, SlackFigure]:
    figures = SlackFigures([round(slack * 1e9)], basis)  # type: ignore[arg-type]
    feed = trace(rate, mu)
    figures.add(feed.times, feed.arrivals)
    figures.check()
    return figures, figures.figures()[0]


def reordered(rho: float) -> float:
    """R(rho) = 1 - integral over u from 0 to 1 of u^rho e^(rho (1-u)), by the trapezoid rule on a fine grid."""
    u = np.linspace(0, 1, 200_001)
    return 1 - float(np.trapezoid(u**rho * np.exp(rho * (1 - u)), u))


@SETS
def test_the_forms_give_the_printed_values(given: tuple[float, float, float]) -> None:
    rate, mu, slack = given
    rho, stays, share = rate / mu, math.exp(-mu * slack), reordered(rate / mu)
    lag = 1 / rate + (1 - share) / mu
    held = rate * (slack - (1 - stays) / mu), 1 + rate * slack - rho * (1 - stays) * share
    assert (share, stays, stays * share, *held, lag, slack + lag) == pytest.approx(PRINTED[given], rel=2e-6, abs=6e-7)


@SETS
def test_late_shares(given: tuple[float, float, float]) -> None:
    _, by_arrival, by_event, *_ = PRINTED[given]
    assert passed(*given, "arrival")[1].late_share == pytest.approx(by_arrival, rel=TOLERANCE)
    assert passed(*given, "event")[1].late_share == pytest.approx(by_event, rel=TOLERANCE)


@SETS
def test_mean_numbers_held(given: tuple[float, float, float]) -> None:
    *_, by_arrival, by_event, _, _ = PRINTED[given]
    assert passed(*given, "arrival")[1].held_events_mean == pytest.approx(by_arrival, rel=TOLERANCE)
    assert passed(*given, "event")[1].held_events_mean == pytest.approx(by_event, rel=TOLERANCE)


@SETS
def test_latency_by_either_clock(given: tuple[float, float, float]) -> None:
    """The watermark of the event clock passes a time K and the basis's lag later; the arrival clock's just K later."""
    *_, lag, latency = PRINTED[given]
    rate, mu, slack = given
    assert passed(*given, "event")[0].lag_ns_mean / 1e9 == pytest.approx(lag, rel=TOLERANCE)
    assert slack + passed(*given, "event")[0].lag_ns_mean / 1e9 == pytest.approx(latency, rel=TOLERANCE)
    feed, figure = trace(rate, mu), passed(*given, "arrival")[1]
    delays = feed.arrivals - feed.times
    delay = float(delays[delays <= slack * 1e9].mean())
    assert figure.hold_ns_mean is not None
    assert figure.hold_ns_mean + delay == pytest.approx(slack * 1e9, rel=1e-3)  # but for those open at the end


@SETS
@pytest.mark.parametrize("basis", ["event", "arrival"])
def test_littles_law(given: tuple[float, float, float], basis: str) -> None:
    """Mean number held = rate at which events are held x mean hold."""
    figure = passed(*given, basis)[1]
    assert figure.hold_ns_mean is not None and figure.open_events is not None
    rate = (figure.events - figure.late - figure.open_events) * 1e9 / np.ptp(trace(*given[:2]).arrivals)
    assert rate * figure.hold_ns_mean / 1e9 == pytest.approx(figure.held_events_mean, rel=1e-3)


@SETS
def test_reordered_share_and_inversions(given: tuple[float, float, float]) -> None:
    rate, mu, _ = given
    found = Reordering(trace(rate, mu).times, numbered=False)
    assert found.ratio == pytest.approx(PRINTED[given][0], rel=TOLERANCE)
    assert inversions(trace(rate, mu).times) / EVENTS == pytest.approx(rate / mu / 2, rel=TOLERANCE)


def test_how_many_overtake_an_event() -> None:
    """rho = 5: P(N = 0..7) and P(N > k), what a buffer of k slots loses."""
    overtaken = overtakers(trace(5, 1).times)
    exactly = (0.437733, 0.163373, 0.098009, 0.067060, 0.048842, 0.036891, 0.028531, 0.022430)
    assert np.bincount(overtaken)[:8] / EVENTS == pytest.approx(exactly, rel=TOLERANCE)
    more = {0: 0.56227, 1: 0.39889, 2: 0.30088, 5: 0.14809, 10: 0.05338}
    assert {k: float(np.mean(overtaken > k)) for k in more} == pytest.approx(more, rel=TOLERANCE)


@pytest.mark.parametrize(
    ("rate", "printed"), [(1, 3.338322), (5, 4.029392), (100, 4.478731)], ids=["rho 1", "rho 5", "rho 100"]
)
def test_the_slack_for_a_share_of_one_in_a_hundred(rate: float, printed: float) -> None:
    """K = ln(1 / (1-q)) / M by the arrival clock, ln(R(rho) / (1-q)) / M by the event clock; q = .99, M = 1."""
    feed = trace(rate, 1)
    for basis, expected in (("arrival", math.log(100)), ("event", math.log(100 * reordered(rate)))):
        assert expected == pytest.approx(printed if basis == "event" else 4.605170, abs=6e-7)
        figures = SlackFigures([0, round(expected * 1e9)], basis)  # type: ignore[arg-type]
        lateness = figures.add(feed.times, feed.arrivals)
        assert figures.late_share(round(expected * 1e9)).at_least == pytest.approx(0.01, rel=0.03)
        exact = LateSteps(lateness).slack_for(0.01)
        assert exact / 1e9 == pytest.approx(expected, rel=TOLERANCE)
        gamma = figures.sketch.buckets.gamma
        assert exact <= figures.sketch.slack_for(0.01) <= exact * gamma * (1 + 1e-9)


# ---- K-slack traces (section 8): Babu, Srivastava, Widom, ACM TODS 29(3), 2004 and the literature after it ----------

TRACE = np.array([1, 4, 3, 5, 7, 8, 6, 9], dtype=np.int64)


@pytest.mark.parametrize(
    ("slack", "late", "flushed", "held"),
    # Emission steps: K=0 every arrival its own; K=1: 4 lets go 1, 3 -> 3, 5 -> 4, 7 -> 5, 8 -> 7, 9 -> 8;
    # K=2: 4 lets go 1, 5 -> 3, 7 -> 4 and 5, 6 -> 6, 9 -> 7, so that 1, 1, 2, 2, 1, 2, 2, 2 are held.
    [(0, 2, 0, 0), (1, 1, 1, 1), (2, 0, 2, 2)],
)
def test_a_k_slack_trace(slack: int, late: int, flushed: int, held: int) -> None:
    figures = SlackFigures([slack], "event")
    lateness = figures.add(TRACE, np.arange(8, dtype=np.int64))
    (figure,) = figures.figures((0.0, 1.0))
    assert lateness.tolist() == [0, 0, 1, 0, 0, 0, 2, 0]
    assert (figure.late, figure.open_events, figure.held_events_peak) == (late, flushed, held)


def test_the_smallest_slack_that_loses_nothing_is_the_greatest_lateness() -> None:
    lateness = SlackFigures([0], "event").add(TRACE, np.arange(8, dtype=np.int64))
    assert LateSteps(lateness).slack_for(0.0) == 2 == lateness.max()


def test_late_means_behind_the_watermark_not_behind_the_last_event_released() -> None:
    """The trap of section 8: 5 comes behind the watermark (8), but only 1 was let go."""
    figures = SlackFigures([2], "event")
    figures.add(np.array([1, 10, 5, 20], dtype=np.int64), np.arange(4, dtype=np.int64))
    assert figures.figures()[0].late == 1

"""Every shape is repeatable, keeps a trace's promises, and is disordered in the way that its description says."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from strandline_loadgen.shapes import (
    SECOND_NS,
    SHAPES,
    START_NS,
    description,
    parameters,
    poisson_exponential,
    poisson_uniform,
    shape,
)
from strandline_loadgen.trace import FIRST_ID, Trace, join

EVENTS = 20_000


def lateness_s(trace: Trace) -> np.ndarray:
    """Seconds behind the newest event time seen before or with it."""
    return (np.maximum.accumulate(trace.times) - trace.times) / SECOND_NS


def delays_s(trace: Trace) -> np.ndarray:
    return (trace.arrivals - trace.times) / SECOND_NS


@given(name=st.sampled_from(sorted(SHAPES)), events=st.integers(0, 400), seed=st.integers(0, 2**32))
def test_law_same_arguments_same_trace_and_every_promise_kept(name: str, events: int, seed: int) -> None:
    one, two = shape(name, events, seed), shape(name, events, seed)
    one.check()
    assert len(one) == events
    for column in ("times", "arrivals", "sources", "ids"):
        assert np.array_equal(getattr(one, column), getattr(two, column))
    assert one.source_names == two.source_names
    assert one.name == name


@pytest.mark.parametrize("name", SHAPES)
def test_another_seed_gives_another_trace(name: str) -> None:
    assert not np.array_equal(shape(name, 500, 1).times, shape(name, 500, 2).times)


@pytest.mark.parametrize("name", [name for name in SHAPES if name != "duplicates"])
def test_every_event_is_named_once(name: str) -> None:
    assert np.array_equal(np.sort(shape(name, 500, 1).ids), np.arange(FIRST_ID, FIRST_ID + 500))


@pytest.mark.parametrize("name", [name for name in SHAPES if name not in ("far_future", "low_tide", "clock_step")])
def test_nothing_arrives_before_its_time_where_the_clocks_are_right(name: str) -> None:
    assert delays_s(shape(name, EVENTS, 3)).min() >= 0


@pytest.mark.parametrize("name", SHAPES)
def test_each_has_a_description_and_parameters_with_defaults(name: str) -> None:
    assert description(name).endswith(".")
    known = parameters(name)
    assert {"events_per_s", "sources", "start_ns", "clock_ns"} <= set(known)
    again = shape(name, 300, 5, **known)
    assert np.array_equal(again.times, shape(name, 300, 5).times)


def test_common_parameters_set_rate_start_sources_and_clock() -> None:
    trace = shape("in_order", 50_000, 1, events_per_s=1000.0, sources=3, clock_ns=1_000_000)
    assert trace.times[0] >= START_NS
    assert np.all(trace.times % 1_000_000 == 0)
    # 50,000 gaps with a mean of 1 ms: the sum has a relative standard deviation of 1/sqrt(50,000) = 0.45 %.
    assert (trace.times[-1] - START_NS) / SECOND_NS == pytest.approx(50, rel=0.03)
    assert np.count_nonzero(trace.times[1:] == trace.times[:-1]) > 1000
    assert np.bincount(trace.sources) == pytest.approx([50_000 / 3] * 3, rel=0.05)


def test_in_order_is_in_order() -> None:
    assert lateness_s(shape("in_order", EVENTS, 1)).max() == 0


def test_jitter_stays_within_its_bound() -> None:
    trace = shape("jitter", EVENTS, 1, bound_s=2.5)
    assert 2.4 < delays_s(trace).max() <= 2.5
    assert 0 < lateness_s(trace).max() <= 2.5


def test_one_percent_late_is_one_percent_and_the_rest_at_once() -> None:
    trace = shape("one_percent_late", 100_000, 1, late_s_at_most=120.0)
    late = delays_s(trace) > 0
    assert np.mean(late) == pytest.approx(0.01, rel=0.15)  # standard deviation 3.1 %
    assert 100 < delays_s(trace).max() <= 120
    assert np.all(np.diff(trace.times[~late]) >= 0)


# R(rho), the reordered share of Poisson events with Exp delays: closed form and table of check-values, section 9 (2).
@pytest.mark.parametrize(("rho", "share"), [(0.5, 0.178628), (1, 0.281718), (5, 0.562267), (100, 0.881228)])
def test_poisson_exponential_meets_the_closed_form(rho: float, share: float) -> None:
    trace = poisson_exponential(rho, 1.0, 200_000, 1)
    assert np.mean(lateness_s(trace) > 0) == pytest.approx(share, rel=0.02)
    assert delays_s(trace).mean() == pytest.approx(1, rel=0.02)


@pytest.mark.parametrize(
    ("rate", "mean", "slack", "late"), [(5, 1, 2, 0.076095), (10, 0.5, 0.5, 0.206846), (50, 0.2, 0.2, 0.245274)]
)
def test_poisson_exponential_late_share_behind_the_newest(rate: float, mean: float, slack: float, late: float) -> None:
    """Check-values section 9 (3), e^(-K/mean) R(rho)."""
    trace = poisson_exponential(rate, mean, 400_000, 2)
    assert np.mean(lateness_s(trace) > slack) == pytest.approx(late, rel=0.02)


@pytest.mark.parametrize(("rate", "longest", "slack"), [(1, 2, 0.5), (10, 1, 0.3), (50, 1, 0)])
def test_poisson_uniform_meets_the_closed_form(rate: float, longest: float, slack: float) -> None:
    """Check-values section 9 (3): .119755, .314311, .822755."""
    left = longest - slack
    closed = (
        left - math.sqrt(math.pi * longest / (2 * rate)) * math.erf(left * math.sqrt(rate / (2 * longest)))
    ) / longest
    trace = poisson_uniform(rate, longest, 200_000, 1)
    assert np.mean(lateness_s(trace) > slack) == pytest.approx(closed, rel=0.02)


def test_heavy_tail_follows_its_law() -> None:
    pareto = delays_s(shape("heavy_tail", 200_000, 1, scale_s=1.0, tail=2.0))
    for x in (1.0, 4.0, 9.0):
        assert np.mean(pareto > x) == pytest.approx((1 + x) ** -2, rel=0.05)
    lognormal = delays_s(shape("heavy_tail", 200_000, 1, law="lognormal", scale_s=1.0, tail=1.0))
    assert np.median(lognormal) == pytest.approx(1, rel=0.02)
    assert np.std(np.log(lognormal)) == pytest.approx(1, rel=0.02)
    assert delays_s(shape("heavy_tail", EVENTS, 1, delay_s_at_most=3.0)).max() <= 3.0


def test_bursty_gateways_send_whole_bursts_in_order() -> None:
    trace = shape("bursty_gateways", EVENTS, 1, gateways=8, shortest_s=5.0, longest_s=10.0)
    assert len(trace.source_names) == 8
    assert delays_s(trace).max() <= 10
    for gateway in range(8):
        own = trace.sources == gateway
        assert np.all(np.diff(trace.times[own]) >= 0), "each gateway is in order by itself"
        bursts = np.unique(trace.arrivals[own])
        assert np.all(np.diff(bursts) >= 5 * SECOND_NS)
        assert len(bursts) < own.sum() / 4


def test_outage_ends_and_the_backlog_is_caught_up() -> None:
    trace = shape("outage_and_catch_up", EVENTS, 1, sources_hit=0.25, from_share=0.3, outage_share=0.3, catch_up=4.0)
    delays = delays_s(trace)
    hit = np.unique(trace.sources[delays > 0])
    assert len(hit) == 4
    span = (trace.times.max() - trace.times.min()) / SECOND_NS
    assert delays.max() == pytest.approx(0.3 * span, rel=0.01)
    newest_tenth = trace.times > trace.times.min() + 0.9 * (trace.times.max() - trace.times.min())
    assert delays[newest_tenth].max() == 0, "back in time at the end"
    own = trace.sources == hit[0]
    assert np.all(np.diff(trace.times[own]) >= 0), "oldest first"


def test_slow_source_is_the_first_one() -> None:
    trace = shape("slow_source", EVENTS, 1, behind_s=10.0, jitter_s=0.2)
    slow = trace.sources == 0
    assert delays_s(trace)[slow].min() >= 10
    assert delays_s(trace)[~slow].max() <= 0.2


@pytest.mark.parametrize("step_s", [-30.0, 30.0])
def test_clock_step_moves_the_time_of_some_sources(step_s: float) -> None:
    trace = shape("clock_step", EVENTS, 1, step_s=step_s, sources_hit=0.25)
    wrong = trace.arrivals != trace.times
    assert np.unique(delays_s(trace)[wrong]).tolist() == [-step_s]
    assert len(np.unique(trace.sources[wrong])) == 4
    middle = (trace.arrivals[0] + trace.arrivals[-1]) // 2
    assert trace.arrivals[wrong].min() >= middle - SECOND_NS


def test_far_future_claims_a_time_a_day_ahead() -> None:
    trace = shape("far_future", EVENTS, 1, share=0.001)
    assert np.count_nonzero(delays_s(trace) < -86_000) == 20
    assert np.count_nonzero(delays_s(shape("far_future", 10, 1)) < 0) == 1, "at least one, however few there are"


def test_low_tide_leaves_one_source_whose_clock_runs_ahead() -> None:
    trace = shape("low_tide", EVENTS, 1, ahead_s=8.0)
    begin = trace.arrivals[0] + 0.31 * (trace.arrivals[-1] - trace.arrivals[0])
    end = trace.arrivals[0] + 0.59 * (trace.arrivals[-1] - trace.arrivals[0])
    ebb = (trace.arrivals > begin) & (trace.arrivals < end)
    assert np.unique(trace.sources[ebb]).tolist() == [0]
    assert np.all(delays_s(trace)[ebb] == pytest.approx(-8))
    woken = trace.sources[trace.arrivals >= end]
    first = [int(np.flatnonzero(woken == source)[0]) for source in range(1, 16)]
    assert sorted(first) != first, "not in order of their numbers"
    assert lateness_s(trace).max() > 0.3 * (trace.times.max() - trace.times.min()) / SECOND_NS * 0.9


def test_random_order_is_uniform() -> None:
    """Mean inversions of a random permutation: n(n-1)/4 (check-values 6.2); records: H_n. 3 standard errors each."""
    n, tries = 60, 400
    ranks = [np.argsort(np.argsort(shape("random_order", n, seed).times)) for seed in range(tries)]
    inversions = [int(np.count_nonzero(np.triu(r[:, None] > r[None, :]))) for r in ranks]
    sd = math.sqrt(n * (n - 1) * (2 * n + 5) / 72)
    assert np.mean(inversions) == pytest.approx(n * (n - 1) / 4, abs=3 * sd / math.sqrt(tries))
    records = [np.count_nonzero(np.maximum.accumulate(r) == r) for r in ranks]
    harmonic, squares = sum(1 / k for k in range(1, n + 1)), sum(1 / k**2 for k in range(1, n + 1))
    assert np.mean(records) == pytest.approx(harmonic, abs=3 * math.sqrt((harmonic - squares) / tries))


def test_reversed_order_descends() -> None:
    trace = shape("reversed_order", EVENTS, 1)
    assert np.all(np.diff(trace.times) <= 0)


def test_duplicates_copy_an_event_once_and_later() -> None:
    trace = shape("duplicates", EVENTS, 1, share=0.05)
    ids, copies = np.unique(trace.ids, return_counts=True)
    assert np.count_nonzero(copies == 2) == 1000
    assert copies.max() == 2
    assert len(ids) == EVENTS - 1000
    order = np.argsort(trace.ids, kind="stable")
    pair = np.flatnonzero(trace.ids[order][1:] == trace.ids[order][:-1])
    apart = trace.arrivals[order][pair + 1] - trace.arrivals[order][pair]
    assert apart.min() >= 0
    assert apart.max() <= 5 * SECOND_NS


@pytest.mark.parametrize(
    ("name", "arguments", "message"),
    [
        ("jittery", {}, "there is no shape 'jittery'; there are in_order"),
        ("jitter", {"bound": 1.0}, "has no parameter 'bound'; it has bound_s"),
        ("jitter", {"bound_s": -1.0}, "bound_s is -1.0; it must not be negative"),
        ("jitter", {"bound_s": math.nan}, "must be a finite number"),
        ("jitter", {"bound_s": "1"}, "give it like 1.0"),
        ("jitter", {"sources": 1.5}, "give it like 16"),
        ("jitter", {"sources": 0}, "it must be 1 to"),
        ("jitter", {"events_per_s": 0.0}, "must be above 0"),
        ("heavy_tail", {"law": "cauchy"}, "it must be pareto or lognormal"),
        ("duplicates", {"share": 0.6}, "it must be 0 to 0.5"),
        ("outage_and_catch_up", {"catch_up": 1.0}, "the backlog would never end"),
        ("bursty_gateways", {"shortest_s": 9.0, "longest_s": 3.0}, "ascend"),
    ],
)
def test_wrong_use_is_refused_with_what_may_be_given(name: str, arguments: dict, message: str) -> None:
    with pytest.raises(ValueError, match=message):
        shape(name, 10, 1, **arguments)
    with pytest.raises(ValueError, match="events is -1"):
        shape("jitter", -1, 1)


@settings(max_examples=25)
@given(by=st.integers(-(10**15), 10**15), start=st.integers(0, 50), stop=st.integers(50, 100))
def test_law_a_part_shifted_is_the_shift_of_the_part(by: int, start: int, stop: int) -> None:
    trace = shape("exponential", 100, 1)
    one, two = trace.part(start, stop).shifted(by), trace.shifted(by).part(start, stop)
    one.check()
    assert len(one) == stop - start
    assert np.array_equal(one.times, two.times)
    assert np.array_equal(one.times, trace.times[start:stop] + by)
    assert np.array_equal(one.arrivals - one.times, (trace.arrivals - trace.times)[start:stop])


@settings(max_examples=40)
@given(sizes=st.lists(st.integers(0, 60), min_size=1, max_size=4))
def test_law_a_join_holds_every_row_of_its_parts(sizes: list[int]) -> None:
    names = ("duplicates", "jitter", "bursty_gateways", "jitter")
    parts = [
        shape(name, size, 1, sources=3 + number) for number, (name, size) in enumerate(zip(names, sizes, strict=False))
    ]
    whole = join("whole", parts)
    whole.check()

    def rows(traces: list[Trace]) -> list[tuple[int, int, str]]:
        return sorted(
            (time, arrival, trace.source_names[source])
            for trace in traces
            for time, arrival, source in zip(trace.times.tolist(), trace.arrivals.tolist(), trace.sources, strict=True)
        )

    assert rows([whole]) == rows(parts)
    assert len(set(whole.source_names)) == len(whole.source_names)
    assert len(np.unique(whole.ids)) == sum(len(np.unique(part.ids)) for part in parts)

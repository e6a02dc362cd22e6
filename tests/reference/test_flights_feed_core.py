"""A year of departures through the core, one flight an arrival, against figures computed outside (check-values, 11).

The whole year passes a feed at five settings, in two processes; every listed slack, by both clocks and behind the
slowest of three origins, is then checked on January, where a vectorised rule in numpy gives the same answer to the
event. `test_flights_feed.py` checks that rule against every printed digit of the year, and the feed's own figures.

On two idle cores of the build machine this file takes some 60 s (a year is 15 s, a January 1.2 s).
"""

from __future__ import annotations

from collections.abc import Iterator
from concurrent.futures import Future
from functools import partial

import numpy as np
import pytest
from helpers_feed import patient
from helpers_single import Passed, pass_flights, two_at_a_time
from numpy.typing import NDArray
from strandline_loadgen.flights import MINUTE_NS, flights
from strandline_loadgen.trace import Trace

Key = tuple[str, str, int]  # part, rule ("event", "arrival", "origins"), slack in minutes

# Printed late shares of the year: (rule, slack) -> share.
YEAR = {
    ("event", 1300): 0.0,
    ("event", 15): 0.226509,
    ("arrival", 60): 0.080911,
    ("origins", 60): 0.055458,
    ("origins", 0): 0.293095,
}
SLACKS = (0, 5, 10, 15, 30, 60, 120, 240, 480, 1300)
ORIGIN_SLACKS = (0, 15, 60, 120, 240)
JANUARY = [(rule, slack) for rule in ("event", "arrival") for slack in SLACKS] + [
    ("origins", slack) for slack in ORIGIN_SLACKS
]
GREATEST = 1300  # the greatest lateness of the year: nothing is late behind it
NEVER = -(2**62)


@pytest.fixture(scope="module")
def passed() -> Iterator[dict[Key, Passed]]:
    """Everything through the feed: the years first, then the Januaries, then 1 January."""
    keys: list[Key] = [("year", *key) for key in YEAR]
    keys += [("january", *key) for key in JANUARY] + [("new_years_day", "event", 1300)]
    with two_at_a_time() as pool:
        futures: dict[Key, Future[Passed]] = {}
        for part, rule, slack in keys:
            chosen = patient(clock="arrival" if rule == "arrival" else "event", slack_ns=slack * MINUTE_NS)
            work = partial(pass_flights, gathering=slack != GREATEST)
            futures[part, rule, slack] = pool.submit(work, part, rule == "origins", chosen)
        yield {key: future.result() for key, future in futures.items()}


@pytest.fixture(scope="module")
def traces() -> dict[str, Trace]:
    return {part: flights(part=part) for part in ("year", "january", "new_years_day")}


def late_by_rule(trace: Trace, rule: str, slack: int) -> NDArray[np.bool_]:
    """Which events come behind the watermark that stood when they came, in a few lines of numpy."""
    if rule == "arrival":
        return trace.times < trace.arrivals - slack * MINUTE_NS
    origins = trace.sources if rule == "origins" else np.zeros(len(trace), dtype=np.uint32)
    newest = np.stack(
        [np.maximum.accumulate(np.where(origins == o, trace.times, NEVER)) for o in range(int(origins.max()) + 1)]
    )
    before = np.concatenate((np.full((len(newest), 1), NEVER), newest[:, :-1]), axis=1)
    heard = np.where(before > NEVER, before, 2**62)
    rule_ns = np.where(np.all(before == NEVER, axis=0), NEVER, heard.min(axis=0)) - slack * MINUTE_NS
    # A watermark does not go back where an origin is heard for the first time behind the others.
    return trace.times < np.maximum.accumulate(rule_ns)


@pytest.mark.parametrize(("rule", "slack"), YEAR)
def test_the_late_share_of_the_year_is_the_printed_one(rule: str, slack: int, passed: dict[Key, Passed]) -> None:
    found = passed["year", rule, slack]
    assert len(found.late) == 328_521 and found.balance == 0
    assert np.mean(found.late) == pytest.approx(YEAR[rule, slack], abs=5e-7)


@pytest.mark.parametrize(("rule", "slack"), YEAR)
def test_the_year_is_late_event_by_event_as_the_rule_says(
    rule: str, slack: int, passed: dict[Key, Passed], traces: dict[str, Trace]
) -> None:
    assert np.array_equal(passed["year", rule, slack].late, late_by_rule(traces["year"], rule, slack))


@pytest.mark.parametrize(("rule", "slack"), JANUARY)
def test_january_is_late_event_by_event_as_the_rule_says(
    rule: str, slack: int, passed: dict[Key, Passed], traces: dict[str, Trace]
) -> None:
    found = passed["january", rule, slack]
    assert len(found.late) == 26_483 and found.balance == 0
    assert np.array_equal(found.late, late_by_rule(traces["january"], rule, slack))


@pytest.mark.parametrize(
    "key",
    [*(("year", *key) for key in YEAR), *(("january", *key) for key in JANUARY), ("new_years_day", "event", 1300)],
)
def test_the_released_order_is_a_stable_sort(key: Key, passed: dict[Key, Passed], traces: dict[str, Trace]) -> None:
    """Outside opinion: numpy's stable argsort of what was not late, in order of arrival."""
    found, times = passed[key], traces[key[0]].times
    kept = np.flatnonzero(~found.late)
    assert np.array_equal(found.released, kept[np.argsort(times[kept], kind="stable")])


@pytest.mark.parametrize(("part", "runs"), [("year", 19), ("january", 13), ("new_years_day", 12)])
def test_as_many_runs_are_open_as_the_feed_needs(part: str, runs: int, passed: dict[Key, Passed]) -> None:
    """With a slack of the greatest lateness nothing is late, and the printed number of interleaved runs is reached."""
    found = passed[part, "event", GREATEST]
    assert not found.late.any()
    assert found.open_runs_peak == runs


def test_the_greatest_lateness_is_the_smallest_slack_without_late_events(traces: dict[str, Trace]) -> None:
    for part, greatest in (("year", 1300), ("january", 1300), ("new_years_day", 331)):
        assert not late_by_rule(traces[part], "event", greatest).any()
        assert late_by_rule(traces[part], "event", greatest - 1).any()

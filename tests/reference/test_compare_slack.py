"""The steered slack beside other ways to choose one: what the method promises, on small feeds of many shapes.

The promise (Gibbs & Candes 2021, in the form of core/slack.md): over a stretch of constant step the late share is
within a stated bound of the target, on any feed. "The largest lateness so far" is the published K-slack rule
(check-values, section 8). The figures of the flights in the last test are published ones for the same feed.
"""

from __future__ import annotations

import json

import numpy as np
import pytest
from strandline_loadgen.compare_slack import LONGEST_NS, SHAPES, Course, compare, drifting, feed, main
from strandline_loadgen.shapes import shape

SECOND_NS = 10**9
EVENTS = 20_000
LONGER = 60_000  # where shares are compared: 2,700 wanted late events at .05, 540 at .01
STEADY = ("jitter", "exponential", "heavy_tail", "drifting")


@pytest.mark.parametrize("target", [0.05, 0.01])
@pytest.mark.parametrize("name", [*SHAPES, "drifting"])
def test_the_share_is_within_the_bound(name: str, target: float) -> None:
    trace, longest_ns = feed(name, EVENTS, 3)
    found = compare(name, trace, target, longest_ns)
    assert found.stretch_share is not None and found.stretch_bound is not None
    assert abs(found.stretch_share - target) <= found.stretch_bound


@pytest.mark.parametrize("target", [0.05, 0.01])
@pytest.mark.parametrize("name", ["jitter", "exponential", "heavy_tail"])
def test_the_share_is_within_the_bound_where_that_is_narrow(name: str, target: float) -> None:
    """Above, the longest wait is so long that the bound may exceed any share; with 5 s it says something."""
    trace, _ = feed(name, EVENTS, 3)
    found = compare(name, trace, target, 5 * SECOND_NS)
    assert found.stretch_share is not None and found.stretch_bound is not None
    assert abs(found.stretch_share - target) <= found.stretch_bound < 0.07


@pytest.mark.parametrize("target", [0.05, 0.01])
@pytest.mark.parametrize("name", STEADY)
def test_it_waits_less_than_the_largest_lateness_at_an_allowed_share(name: str, target: float) -> None:
    trace, longest_ns = feed(name, LONGER, 3)
    found = compare(name, trace, target, longest_ns)
    assert found.steered.late_share <= 1.2 * target
    assert found.steered.slack_s < found.largest.slack_s
    assert found.steered.hold_s < found.largest.hold_s


@pytest.mark.parametrize("target", [0.05, 0.01])
def test_on_a_drifting_feed_the_choice_of_the_first_tenth_fails_and_steering_does_not(target: float) -> None:
    found = compare("drifting", drifting(LONGER, 3), target, LONGEST_NS)
    assert found.first_tenth.late_share > 3 * target
    assert found.steered.late_share <= 1.2 * target


# ---- the yardsticks themselves --------------------------------------------------------------------------------------


@pytest.mark.parametrize("slack_s", [0.0, 0.25, 1.0, 5.0])
def test_a_fixed_slack_is_judged_as_by_hand(slack_s: float) -> None:
    trace = shape("exponential", 2000, 5)
    slack_ns = round(slack_s * 1e9)
    late, holds, newest, watermarks = 0, [], -(2**62), []
    for time in trace.times.tolist():
        watermarks.append(newest - slack_ns)
        newest = max(newest, time)
    watermarks.append(newest - slack_ns)
    for row in range(200, 2000):
        time = int(trace.times[row])
        if time < watermarks[row]:
            late += 1
            continue
        after = next((later for later in range(row, 2000) if watermarks[later + 1] >= time), None)
        if after is not None:
            holds.append(int(trace.arrivals[after] - trace.arrivals[row]))
    found = Course(trace).fixed(slack_ns)
    assert found.late_share == late / 1800
    assert found.hold_s == pytest.approx(np.mean(holds) / 1e9)
    assert found.slack_s == found.slack_s_max == slack_s


@pytest.mark.parametrize("target", [0.05, 0.01, 0.001])
def test_the_best_fixed_slack_is_the_least_that_keeps_the_target(target: float) -> None:
    course = Course(shape("heavy_tail", EVENTS, 5))
    least = course.least(target, slice(course.cut, None))
    assert course.fixed(least).late_share <= target < course.fixed(least - 1).late_share


def test_the_largest_lateness_so_far_lets_only_records_be_late() -> None:
    """An event is late by this rule exactly if its lateness exceeds all before it: a record."""
    course = Course(shape("exponential", EVENTS, 5))
    before = np.maximum.accumulate(course.lateness)[course.cut - 1 : -1]
    records = np.count_nonzero(course.lateness[course.cut :] > before)
    assert course.largest_so_far().late_share == records / (EVENTS - course.cut)


def test_the_flights_give_the_figures_that_are_published() -> None:
    """Over the whole year: best fixed slack 85 / 180 / 318 min; "the largest so far" waits 1,287 on average."""
    trace, _ = feed("flights", 0, 0)
    course = Course(trace)
    best = [course.least(target, slice(None)) / 60e9 for target in (0.05, 0.01, 0.001)]
    assert best == pytest.approx([85, 180, 318], abs=1)
    assert np.maximum.accumulate(course.lateness).mean() / 60e9 == pytest.approx(1287, abs=1)


# ---- the command ----------------------------------------------------------------------------------------------------


def test_the_command_prints_a_row_for_each_feed_and_target() -> None:
    lines: list[str] = []
    assert main(["jitter", "--events", "2000", "--target", "0.05", "--target", "0.01"], lines.append) == 0
    assert len(lines) == 4
    assert [line.split("|")[2].strip() for line in lines[2:]] == ["0.05", "0.01"]
    rows: list[str] = []
    assert main(["jitter", "--events", "2000", "--target", "0.05", "--json"], rows.append) == 0
    found = json.loads(rows[0])
    assert (found["feed"], found["events"]) == ("jitter", 1800)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["tides"], "no feed 'tides'"),
        (["--events", "10"], "--events is 10"),
        (["jitter", "--events", "1000", "--target", "1.5"], "between 0 and 1"),
    ],
)
def test_wrong_use_is_said(arguments: list[str], message: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(arguments) == 2
    assert message in capsys.readouterr().err

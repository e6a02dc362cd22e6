"""The flights feed against values that were computed outside this project (check-values, section 11).

They check the generator; every measure is computed here, with numpy alone, and shares no code with the service.
"""

from __future__ import annotations

import hashlib
from bisect import bisect_right

import numpy as np
import pytest
from strandline_loadgen.flights import MINUTE_NS, flights
from strandline_loadgen.trace import Trace


@pytest.fixture(scope="module")
def year() -> Trace:
    return flights()


def natural_runs(times: np.ndarray) -> int:
    """Stretches that do not descend."""
    return 1 + int(np.count_nonzero(times[1:] < times[:-1]))


def open_runs(times: np.ndarray) -> int:
    """Patience: each event goes on the first run whose tail it may follow; tails descend, so a search by bisection."""
    negated: list[int] = []  # minus the tails, ascending
    for time in times.tolist():
        place = bisect_right(negated, -time - 1)
        if place == len(negated):
            negated.append(-time)
        else:
            negated[place] = -time
    return len(negated)


def inversions(times: np.ndarray) -> int:
    """Pairs that stand the wrong way round: counted in blocks of 256 by comparison, then by merging sorted halves."""
    if len(times) <= 256:
        return int(np.count_nonzero(np.triu(times[:, None] > times[None, :])))
    left, right = times[: len(times) // 2], times[len(times) // 2 :]
    across = len(left) - np.searchsorted(np.sort(left), right, side="right")
    return inversions(left) + inversions(right) + int(across.sum())


def minutes(trace: Trace) -> tuple[np.ndarray, np.ndarray]:
    return trace.times // MINUTE_NS, trace.arrivals // MINUTE_NS


def test_the_feed_is_the_one_that_the_figures_were_computed_on(year: Trace) -> None:
    year.check()
    times, arrivals = minutes(year)
    lines = "".join(f"{event},{arrival}\n" for event, arrival in zip(times.tolist(), arrivals.tolist(), strict=True))
    assert hashlib.sha256(lines.encode()).hexdigest()[:16] == "598054b510cca811"
    first = [(int(times[i]), int(arrivals[i]), year.source_names[year.sources[i]]) for i in range(5)]
    assert first == [
        (22617255, 22617257, "EWR"),
        (22617269, 22617273, "LGA"),
        (22617280, 22617282, "JFK"),
        (22617285, 22617284, "JFK"),
        (22617300, 22617294, "LGA"),
    ]
    assert year.source_names == ("EWR", "JFK", "LGA")
    assert len(flights("carrier", "january").source_names) == 16
    assert int(np.count_nonzero(arrivals[1:] == arrivals[:-1])) == 116804  # ties on the minute clock


ROWS = {
    # part: events, reordered, natural runs, open runs, inversions/event, max lateness min,
    #       lateness q50/90/99/99.9 of all, of the late only, delay q50/90/99/99.9
    "year": (328521, 194327, 123486, 19, 10.050, 1300, (3, 50, 180, 318), (10, 75, 210, 355), (-2, 49, 191, 340)),
    "january": (26483, 14884, 9676, 13, 9.215, 1300, (2, 42, 165, 295), (10, 70, 195, 332), (-2, 40, 168, 294)),
    "new_years_day": (838, 476, 323, 12, 9.557, 331, (3, 40, 152.8, 325.1), (10, 65, 257, 327.7), (-1, 37, 156, 456)),
}


@pytest.mark.parametrize("part", ROWS)
def test_disorder_is_as_published(part: str, year: Trace) -> None:
    events, reordered, runs, needed, inverted, lateness_max, of_all, of_late, of_delay = ROWS[part]
    times, arrivals = minutes(year if part == "year" else flights(part=part))
    lateness = np.maximum.accumulate(times) - times
    late = lateness > 0
    assert len(times) == events
    assert int(np.count_nonzero(late)) == reordered
    assert natural_runs(times) == runs
    assert open_runs(times) == needed
    assert inversions(times) / events == pytest.approx(inverted, abs=0.0005)
    assert lateness.max() == lateness_max
    # The quantiles are printed rounded: to a minute, but lateness in the smallest part to a tenth.
    half = 0.05 if part == "new_years_day" else 0.5
    for values, printed, step in (
        (lateness, of_all, half),
        (lateness[late], of_late, half),
        (arrivals - times, of_delay, 0.5),
    ):
        assert np.quantile(values, (0.5, 0.9, 0.99, 0.999)) == pytest.approx(printed, abs=step)


@pytest.mark.parametrize(
    ("slack", "event_clock", "arrival_clock"),
    [
        (0, 0.591521, 0.390940),
        (5, 0.367012, 0.302705),
        (10, 0.275136, 0.252142),
        (15, 0.226509, 0.215432),
        (30, 0.149290, 0.146995),
        (60, 0.078028, 0.080911),
        (120, 0.026321, 0.029596),
        (240, 0.003543, 0.004639),
        (480, 0.000170, 0.000204),
        (1300, 0.0, 0.000003),
    ],
)
def test_late_share_for_a_slack(slack: int, event_clock: float, arrival_clock: float, year: Trace) -> None:
    times, arrivals = minutes(year)
    newest = np.maximum.accumulate(times)
    assert np.mean(times < newest - slack) == pytest.approx(event_clock, abs=5e-7)
    assert np.mean(times < arrivals - slack) == pytest.approx(arrival_clock, abs=5e-7)


@pytest.mark.parametrize(
    ("slack", "share"), [(0, 0.293095), (15, 0.159509), (60, 0.055458), (120, 0.017545), (240, 0.002170)]
)
def test_late_share_behind_the_slowest_origin(slack: int, share: float, year: Trace) -> None:
    """Watermark = least over the three origins of (newest - slack); before an origin was heard it does not count."""
    times, _ = minutes(year)
    newest = np.stack([np.maximum.accumulate(np.where(year.sources == origin, times, -(2**62))) for origin in range(3)])
    heard = np.where(newest > -(2**62), newest, 2**62)
    assert np.mean(times < heard.min(axis=0) - slack) == pytest.approx(share, abs=5e-7)

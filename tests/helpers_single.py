"""Feeds in which each event is an arrival of its own: driven fast, two at a time in processes of their own.

No judging here. A run of a trace through the feed gives columns over its events: late or not, and how much was held.
"""

from __future__ import annotations

from collections.abc import Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from multiprocessing import get_context

import numpy as np
from helpers_strands import constants
from numpy.typing import NDArray
from strandline.core import held as held_rows
from strandline.core.columns import Arrival
from strandline.core.effects import Deliver, Effect
from strandline.core.feed import Feed
from strandline.core.settings import Settings
from strandline_loadgen.flights import flights
from strandline_loadgen.shapes import poisson_exponential
from strandline_loadgen.trace import Trace


@dataclass(frozen=True, slots=True)
class Passed:
    """A trace that has passed through a feed, row by row in order of arrival; at the end the rest was drained."""

    late: NDArray[np.bool_]  # which events were late
    held: NDArray[np.int64]  # events held after each arrival
    released: NDArray[np.int64]  # numbers of the rows in the order in which they were released
    steps: list[tuple[int, list[int]]]  # number of the row that set a release off, times released; first 100
    drained: int  # rows released only by the last drain
    open_runs_peak: int
    balance: int


class _Collector:
    """Places of what was released and of what was late."""

    def __init__(self) -> None:
        self.places: dict[str, list[NDArray[np.int64]]] = {"ordered": [], "late": []}
        self.steps: list[tuple[int, list[int]]] = []

    def take(self, effects: Sequence[Effect], row: int) -> None:
        for effect in effects:
            if isinstance(effect, Deliver):
                self.places[effect.batch.lane].append(effect.batch.refs["place"])
                if effect.batch.lane == "ordered" and len(self.steps) < 100:
                    self.steps.append((row, effect.batch.times.tolist()))

    def joined(self, lane: str) -> NDArray[np.int64]:
        return np.concatenate([np.empty(0, dtype=np.int64), *self.places[lane]])


def one_by_one(
    times: NDArray[np.int64],
    arrivals: NDArray[np.int64],
    settings: Settings,
    sources: NDArray[np.uint32] | None = None,
    names: Sequence[str] = ("all",),
) -> Passed:
    """Each row is one request that holds one event, at the instant arrivals[row] (ascending)."""
    rows = len(times)
    numbers = np.zeros(rows, dtype=np.uint32) if sources is None else sources
    lengths = np.zeros(1, dtype=np.uint32)
    held, open_runs_peak = np.empty(rows, dtype=np.int64), 0
    feed, found = Feed(settings), _Collector()
    feed.start(int(arrivals[0]), {})
    state = feed.state
    for row, now_ns in enumerate(arrivals.tolist()):
        given = Arrival(times[row : row + 1], numbers[row : row + 1], lengths, b"\n", () if row else names)
        feed.arrive(given, now_ns, row)
        found.take(feed.synced(feed.next_lsn), row)
        held[row] = state.runs.held
        open_runs_peak = max(open_runs_peak, len(state.runs.open.runs))
    feed.check()
    drained = state.runs.held
    feed.drain(int(arrivals[-1]), rows)
    found.take(feed.synced(feed.next_lsn), rows)
    ordered, late_places = found.joined("ordered"), found.joined("late")
    all_places = np.sort(np.concatenate((ordered, late_places)))
    late = np.zeros(rows, dtype=np.bool_)
    late[np.searchsorted(all_places, late_places)] = True
    released = np.searchsorted(all_places, ordered)
    return Passed(late, held, released, found.steps, drained, open_runs_peak, state.ledger.balance())


# ---- work for processes (module level, so that it can be sent there) ------------------------------------------------


def pass_flights(part: str, by_origin: bool, settings: Settings, *, gathering: bool = True) -> Passed:
    """The flights through a feed, one flight an arrival, from one source or from the three origins.

    Without gathering each flight is dealt over the open runs at once, so that these are counted as published.
    """
    trace = flights(part=part)
    origins = (trace.sources, trace.source_names) if by_origin else ()
    with constants(NEAR_EVENTS=held_rows.NEAR_EVENTS if gathering else 0):
        return one_by_one(trace.times, trace.arrivals, settings, *origins)


def poisson(rate: float, mean_s: float, events: int, seed: int) -> Trace:
    """Poisson events with exponential delays."""
    return poisson_exponential(rate, mean_s, events, seed)


def pass_poisson(rate: float, mean_s: float, events: int, seed: int, settings: Settings) -> Passed:
    """The same through a feed."""
    trace = poisson(rate, mean_s, events, seed)
    return one_by_one(trace.times, trace.arrivals, settings)


def two_at_a_time() -> ProcessPoolExecutor:
    """Two processes; started anew, for a fork of a test runner may inherit what it should not."""
    return ProcessPoolExecutor(2, mp_context=get_context("spawn"))

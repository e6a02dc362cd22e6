"""Rows on ordering alone: Strandline's runs against other ways to keep late events sorted, at the same held counts.

Every contestant gets the same arrivals in the form that it likes best, made before the clock starts: columns for the
runs and for numpy, ready-made (time, place) tuples for those that keep Python objects. After each batch the watermark
goes to the newest time less the slack, and each must give back what lies at or before it, in order, ties in order of
arrival. Before anything is measured both must have given back the same. Only the steady state is measured: the buffer
is filled first, by the runs batch by batch, by their peers in whatever way is quickest.
"""

from __future__ import annotations

import heapq
import time
from bisect import bisect_right, insort
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import cache, partial
from typing import Any, Protocol

import numpy as np
from sortedcontainers import SortedKeyList
from strandline.core.columns import REF, as_refs, as_rows
from strandline.core.merge import Merger
from strandline.core.runs import OpenRuns, runs_of

from strandline_loadgen.shapes import shape
from strandline_loadgen.trace import Int64s

from .harness import Measure, Row, Sample, Scale

MEASURED_BATCHES = 20
EVENTS_PER_S = 10_000.0
Pair = tuple[int, int]


@dataclass(frozen=True, slots=True)
class Course:
    """Batches that fill the buffer and then keep it filled, with the watermark after each."""

    times: list[Int64s]
    refs: list[np.ndarray[Any, Any]]
    pairs: list[list[Pair]]
    watermarks: list[int]
    filling: int  # batches before the measuring begins

    @property
    def measured_events(self) -> int:
        """Events of the batches that are measured."""
        return sum(map(len, self.times[self.filling :]))

    def held(self) -> list[Pair]:
        """What is held when the measuring begins, in order."""
        pairs = sorted(pair for part in self.pairs[: self.filling] for pair in part)
        _cut(pairs, self.watermarks[self.filling - 1])
        return pairs


class Contestant(Protocol):
    """Takes a batch, gives back what lies at or before the watermark, as a column or a list of its own form."""

    def fill(self, course: Course) -> None:
        """Hold what is held when the measuring begins."""

    def turn(self, course: Course, batch: int) -> Any:
        """One batch in, one release out."""


class Runs:
    """Strandline's own: natural runs dealt over open runs, heads cut and merged."""

    def __init__(self) -> None:
        self.open, self.merger = OpenRuns(), Merger()

    def fill(self, course: Course) -> None:
        """Batch by batch, so that the open runs are what they would be."""
        for batch in range(course.filling):
            self.turn(course, batch)

    def turn(self, course: Course, batch: int) -> Any:
        """Columns in, columns out."""
        for run in runs_of(course.times[batch], course.refs[batch]):
            self.open.deal(run)
        return self.merger.merge(self.open.cut(course.watermarks[batch]))


class NumpyResort:
    """A stable re-sort of everything held, at each batch: hard to beat while little is held."""

    def __init__(self) -> None:
        self.times, self.refs = np.empty(0, dtype=np.int64), as_rows(np.empty(0, dtype=REF))

    def fill(self, course: Course) -> None:
        """One sort."""
        self._sort_in(np.concatenate(course.times[: course.filling]), np.concatenate(course.refs[: course.filling]))
        self._cut(course.watermarks[course.filling - 1])

    def turn(self, course: Course, batch: int) -> Any:
        """Columns in, columns out."""
        self._sort_in(course.times[batch], course.refs[batch])
        return self._cut(course.watermarks[batch])

    def _sort_in(self, times: Int64s, refs: np.ndarray[Any, Any]) -> None:
        times, refs = np.concatenate((self.times, times)), np.concatenate((self.refs, refs))
        order = np.argsort(times, kind="stable")
        self.times, self.refs = times[order], refs[order]

    def _cut(self, watermark: int) -> tuple[Int64s, np.ndarray[Any, Any]]:
        cut = int(np.searchsorted(self.times, watermark, side="right"))
        released = self.times[:cut], self.refs[:cut]
        self.times, self.refs = self.times[cut:], self.refs[cut:]
        return released


class Listed:
    """What contestants that keep one list have in common."""

    def __init__(self) -> None:
        self.held: list[Pair] = []

    def fill(self, course: Course) -> None:
        """One sort (a sorted list is a heap, too)."""
        self.held = course.held()


class ListSort(Listed):
    """list.sort over everything held, at each batch."""

    def turn(self, course: Course, batch: int) -> Any:
        """Tuples in, tuples out."""
        self.held += course.pairs[batch]
        self.held.sort()
        return _cut(self.held, course.watermarks[batch])


class Insort(Listed):
    """bisect.insort for each event into one sorted list."""

    def turn(self, course: Course, batch: int) -> Any:
        """Tuples in, tuples out."""
        held = self.held
        for pair in course.pairs[batch]:
            insort(held, pair)
        return _cut(held, course.watermarks[batch])


class Heap(Listed):
    """heapq: a push for each event, a pop for each release."""

    def turn(self, course: Course, batch: int) -> Any:
        """Tuples in, tuples out."""
        held, push, pop = self.held, heapq.heappush, heapq.heappop
        for pair in course.pairs[batch]:
            push(held, pair)
        watermark = course.watermarks[batch]
        released = []
        while held and held[0][0] <= watermark:
            released.append(pop(held))
        return released


class SortedKeys:
    """sortedcontainers' SortedKeyList, keyed by time."""

    def __init__(self) -> None:
        self.held: Any = SortedKeyList(key=_time_of)

    def fill(self, course: Course) -> None:
        """One update."""
        self.held.update(course.held())

    def turn(self, course: Course, batch: int) -> Any:
        """Tuples in, tuples out."""
        held = self.held
        held.update(course.pairs[batch])
        cut = held.bisect_key_right(course.watermarks[batch])
        released = list(held.islice(0, cut))
        del held[:cut]
        return released


def _time_of(pair: Pair) -> int:
    return pair[0]


def _cut(held: list[Pair], watermark: int) -> list[Pair]:
    cut = bisect_right(held, watermark, key=_time_of)
    released = held[:cut]
    del held[:cut]
    return released


PEERS: dict[str, Callable[[], Contestant]] = {
    "numpy stable re-sort": NumpyResort,
    "list.sort": ListSort,
    "heapq": Heap,
    "SortedKeyList": SortedKeys,
    "bisect.insort": Insort,
}


@cache
def course_of(held: int, scale: Scale) -> Course:
    """Exponential delays with a mean of a fifth of the slack K; then four fifths of what comes in the slack are held.

    Closed form: rate (K - mean (1 - e^(-K/mean))), which is 0.8 rate K and a fraction of a percent. The trace goes on
    far beyond what is used, so that its end, where only stragglers come, is not measured.
    """
    slack_s = held / EVENTS_PER_S / 0.8
    filling = int(1.6 * slack_s * EVENTS_PER_S / scale.body_events) + 2
    events = (filling + MEASURED_BATCHES) * scale.body_events
    trace = shape(
        "exponential",
        events + int(2 * slack_s * EVENTS_PER_S),
        scale.seed,
        events_per_s=EVENTS_PER_S,
        mean_s=slack_s / 5,
        sources=1,
        start_ns=0,
    )
    refs = np.zeros(events, dtype=REF)
    refs["place"] = np.arange(events)
    parts = [slice(start, start + scale.body_events) for start in range(0, events, scale.body_events)]
    newest = np.maximum.accumulate(trace.times)
    return Course(
        [trace.times[part] for part in parts],
        [as_rows(refs)[part] for part in parts],
        [list(zip(trace.times[part].tolist(), range(part.start, part.stop), strict=True)) for part in parts],
        [int(newest[part.stop - 1]) - int(slack_s * 1e9) for part in parts],
        filling,
    )


def ns_per_event(make: Callable[[], Contestant], course: Course) -> float:
    """Processor time of the measured batches, in ns an event. The filling is not counted."""
    contestant = make()
    contestant.fill(course)
    begin = time.process_time_ns()
    for batch in range(course.filling, len(course.times)):
        contestant.turn(course, batch)
    return (time.process_time_ns() - begin) / course.measured_events


def check_alike(course: Course, makers: Sequence[Callable[[], Contestant]]) -> None:
    """Raise RuntimeError unless all give back the same events in the same order, batch by batch."""
    contestants = [make() for make in makers]
    for contestant in contestants:
        contestant.fill(course)
    for batch in range(course.filling, len(course.times)):
        first, *others = (_places(contestant.turn(course, batch)) for contestant in contestants)
        if not len(first) or any(not np.array_equal(first, other) for other in others):
            raise RuntimeError(
                f"the contestants do not agree on what batch {batch} releases: no figure would mean anything"
            )


def _places(released: Any) -> Int64s:
    """The places of released events, whatever form they have."""
    if isinstance(released, list):
        return np.fromiter((place for _, place in released), np.int64, len(released))
    places: Int64s = as_refs(released[1])["place"]
    return places


def _prepare(held: int, peer: str, scale: Scale) -> Measure:
    course = course_of(held, scale)
    check_alike(course, [Runs, PEERS[peer]])

    def measure() -> Sample:
        ours, theirs = ns_per_event(Runs, course), ns_per_event(PEERS[peer], course)
        return Sample(ours / theirs, {"ns/event": ours, "peer ns/event": theirs})

    return measure


def rows(scale: Scale) -> list[Row]:
    """A row for each held count and peer: the share of the peer's time that runs take."""
    return [
        Row(f"ordering alone, {held:,} held, against {peer}", "x", partial(_prepare, held, peer))
        for held in scale.held
        for peer in PEERS
    ]

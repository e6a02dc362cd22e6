"""Rows on ordering alone: Strandline's runs against other ways to keep late events sorted, shape by shape.

Before anything is measured all must have given back the same. Only the steady state is measured: the buffer is filled
first, by the runs batch by batch, by their peers in whatever way is quickest. A visit measures all of them, one after
the other; the value is how many times as fast the runs are as the best of their peers, and also as the better of heapq
and SortedKeyList, which is what one would take first in Python.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from functools import partial

import numpy as np

from strandline_loadgen.trace import Int64s

from .courses import SHAPES, Course, Pairs, course_of
from .harness import Also, Measure, Row, Sample, Scale
from .peers import NOT_INSTALLED, Contestant, Peer, PolarsSort, Runs, batches_of, peers_at, places_of

BEST_GOALS = {10_000: 1.0, 1_000_000: 10.0, 10_000_000: 100.0}
OBJECTS = ("heapq", "SortedKeyList")
OBJECTS_GOAL = 15.0
RUNS = "runs"
CHECKED_BATCHES = 20  # all that are measured: the blocks of `reversed` are released by the last ones only


def ns_per_event(make: Callable[[], Contestant], course: Course, pairs: Pairs, batches: int) -> float:
    """Processor time of so many batches in ns an event (wall time for a peer with threads); filling is not counted."""
    contestant = make()
    contestant.fill(course, pairs)
    clock = time.perf_counter_ns if make is PolarsSort else time.process_time_ns
    begin = clock()
    for batch in range(batches):
        contestant.turn(course, pairs, batch)
    return (clock() - begin) / course.events_in(batches)


def releases(make: Callable[[], Contestant], course: Course, pairs: Pairs, batches: int) -> list[Int64s]:
    """The places of what is released after each of so many batches."""
    contestant = make()
    contestant.fill(course, pairs)
    return [places_of(contestant.turn(course, pairs, batch)) for batch in range(batches)]


def check_alike(course: Course, pairs: Pairs, peers: Sequence[Peer], batches: int) -> None:
    """Raise RuntimeError unless all release what the runs release, in the same order, batch by batch."""
    ours = releases(Runs, course, pairs, batches)
    if not any(map(len, ours)):
        raise RuntimeError("nothing is released in what is measured: no figure would mean anything")
    for peer in peers:
        theirs = releases(peer.make, course, pairs, batches_of(peer, len(pairs.held), batches))
        if not all(np.array_equal(one, other) for one, other in zip(ours, theirs, strict=False)):
            raise RuntimeError(f"runs and {peer.name} do not release the same: no figure would mean anything")


def best_of(figures: dict[str, float], names: Sequence[str]) -> str:
    """Who of those named took least."""
    return min(names, key=figures.__getitem__)


def _prepare(name: str, held: int, scale: Scale) -> Measure:
    peers = peers_at(held, full=scale.full)
    course = course_of(name, held, scale)
    check_alike(course, Pairs(course), peers, min(CHECKED_BATCHES, course.measured))
    return lambda: _visit(name, held, peers, scale)


def _visit(name: str, held: int, peers: Sequence[Peer], scale: Scale) -> Sample:
    course = course_of(name, held, scale)
    pairs = Pairs(course)
    figures = {RUNS: ns_per_event(Runs, course, pairs, course.measured)}
    for peer in peers:
        figures[peer.name] = ns_per_event(peer.make, course, pairs, batches_of(peer, held, course.measured))
    best = best_of(figures, [peer.name for peer in peers])
    objects = best_of(figures, OBJECTS)
    return Sample(
        figures[best] / figures[RUNS],
        {f"{key} ns/event": value for key, value in figures.items()},
        {_objects_name(name, held): figures[objects] / figures[RUNS]},
        f"best peer: {best}" + "".join(f"; {absent}: not installed" for absent in NOT_INSTALLED),
    )


def _best_name(shape: str, held: int) -> str:
    return f"ordering alone, {shape}, {held:,} held, against the best peer"


def _objects_name(shape: str, held: int) -> str:
    return f"ordering alone, {shape}, {held:,} held, against {' and '.join(OBJECTS)}"


def rows(scale: Scale) -> list[Row]:
    """A row for each shape and held count: how many times as fast runs are."""
    return [
        Row(
            _best_name(shape, held),
            "x",
            partial(_prepare, shape, held),
            BEST_GOALS.get(held),
            "at least",
            warm=False,
            rounds_at_most=2 if held > max(Scale().held) else 3 if held > 500_000 else 1000,
            also=(Also(_objects_name(shape, held), OBJECTS_GOAL),),
            place={"shape": shape, "held": held},
        )
        for held in scale.held
        for shape in SHAPES
    ]

"""What the contestants of the ordering rows are given: batches that keep so many events held, for each shape.

A course first fills the buffer and then keeps it filled; each batch moves the watermark to the newest time less the
slack, so that in the long run as many events leave as come. What a shape means where so much is held stands beside its
maker. All parameters follow from the events that are to be held, so that a shape is the same at every size.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property, lru_cache
from typing import Any

import numpy as np
from strandline.core.columns import REF, as_rows

from strandline_loadgen.shapes import shape
from strandline_loadgen.trace import Int64s

from .harness import Scale

EVENTS_PER_S = 10_000.0
# Open runs are cut once for a dozen batches: so many are measured that a run has its share of such batches.
MEASURED_BATCHES, MEASURED_BATCHES_LARGE = 80, 40
FILLING_SLACKS = 1.2
LARGE_HELD = 5_000_000  # from here on fewer batches
Pair = tuple[int, int]


@dataclass(slots=True, weakref_slot=True)
class Course:
    """Batches that fill the buffer and then keep it filled, with the watermark after each."""

    times: list[Int64s]
    refs: list[np.ndarray[Any, Any]]
    watermarks: list[int]
    filling: int  # batches before the measuring begins
    measured: int  # batches that are measured

    @property
    def first(self) -> int:
        """Number of the first event that is measured."""
        return sum(map(len, self.times[: self.filling]))

    def events_in(self, batches: int) -> int:
        """Events of so many batches from the first measured one on."""
        return sum(map(len, self.times[self.filling : self.filling + batches]))

    def held_columns(self) -> tuple[Int64s, Int64s]:
        """Times and places of what is held when the measuring begins, in order."""
        times = np.concatenate(self.times[: self.filling])
        places = np.flatnonzero(times > self.watermarks[self.filling - 1])
        order = np.argsort(times[places], kind="stable")
        return times[places][order], places[order]


class Pairs:
    """A course in the form that Python's own containers like best: tuples (time, place), made beforehand."""

    def __init__(self, course: Course) -> None:
        self.course = course

    @cached_property
    def held(self) -> list[Pair]:
        """What is held when the measuring begins, in order."""
        times, places = self.course.held_columns()
        return list(zip(times.tolist(), places.tolist(), strict=True))

    @cached_property
    def batches(self) -> list[list[Pair]]:
        """The batches that are measured."""
        course, at, found = self.course, self.course.first, []
        for times in course.times[course.filling :]:
            found.append(list(zip(times.tolist(), range(at, at + len(times)), strict=True)))
            at += len(times)
        return found


@dataclass(frozen=True, slots=True)
class Plan:
    """Event times in order of arrival (one feed at EVENTS_PER_S), the slack, and the batches until all is steady."""

    times: Int64s
    slack_s: float
    filling: int


def _delayed(name: str, held: int, scale: Scale, slack_s: float, **parameters: float) -> Plan:
    """A shape with delays of at most about the slack; after that long all is steady.

    The trace goes on beyond what is used: its end has stragglers.
    """
    filling = int(FILLING_SLACKS * slack_s * EVENTS_PER_S / scale.body_events) + 2
    events = (filling + batches_measured(held)) * scale.body_events
    more = int(slack_s * EVENTS_PER_S)
    common = {"events_per_s": EVENTS_PER_S, "start_ns": 0} | ({} if name == "bursty_gateways" else {"sources": 1})
    trace = shape(name, events + more, scale.seed, **common, **parameters)
    return Plan(trace.times[:events], slack_s, filling)


def _sorted(held: int, scale: Scale) -> Plan:
    """In order; the slack alone holds them."""
    return _delayed("in_order", held, scale, held / EVENTS_PER_S)


def _one_percent_late(held: int, scale: Scale) -> Plan:
    """In order, but 1 % come later, by up to the slack."""
    slack_s = held / EVENTS_PER_S
    return _delayed("one_percent_late", held, scale, slack_s, late_s_at_most=slack_s)


def _exponential(held: int, scale: Scale) -> Plan:
    """Exponential delays with a mean of a fifth of the slack K; then four fifths of what comes in the slack are held.

    Closed form: rate (K - mean (1 - e^(-K/mean))), which is 0.8 rate K and a fraction of a percent.
    """
    slack_s = held / EVENTS_PER_S / 0.8
    return _delayed("exponential", held, scale, slack_s, mean_s=slack_s / 5)


def _bursty_gateways(held: int, scale: Scale) -> Plan:
    """Gateways that send what they gathered in bursts, each at its own period of a quarter to all of the slack.

    There are 64, and 2,048 where much is held: else what is measured would lie within one burst.
    An event waits in its gateway half a period on average, 5/16 of the slack: the rest of the slack it is held.
    """
    slack_s = held / EVENTS_PER_S / (11 / 16)
    gateways = 64 if held < LARGE_HELD else 2_048
    return _delayed(
        "bursty_gateways", held, scale, slack_s, shortest_s=slack_s / 4, longest_s=slack_s, gateways=gateways
    )


def _random(held: int, scale: Scale) -> Plan:
    """Delays drawn evenly from 0 to the slack: what comes falls anywhere among what is held. Half the slack is held."""
    slack_s = 2 * held / EVENTS_PER_S
    return _delayed("jitter", held, scale, slack_s, bound_s=slack_s)


def _reversed(held: int, scale: Scale) -> Plan:
    """Blocks of some batches, each from its newest event to its oldest: a device that sends the latest first.

    A block's first event moves the watermark by a whole block, and the releases come by the block as well. The slack is
    what is to be held and half a block.
    """
    body = scale.body_events
    batches = min(max(held // (4 * body), 2), 20 if held < LARGE_HELD else 4)
    while batches_measured(held) % batches:  # a whole number of blocks is measured
        batches -= 1
    block = batches * body
    slack_s = (held + block / 2) / EVENTS_PER_S
    blocks = int(slack_s * EVENTS_PER_S / block) + 2
    events = blocks * block + batches_measured(held) * body
    times = shape("in_order", events, scale.seed, events_per_s=EVENTS_PER_S, sources=1, start_ns=0).times
    return Plan(times.reshape(-1, block)[:, ::-1].ravel(), slack_s, blocks * batches)


SHAPES: dict[str, Callable[[int, Scale], Plan]] = {
    "sorted": _sorted,
    "1 % late": _one_percent_late,
    "exponential": _exponential,
    "bursty gateways": _bursty_gateways,
    "random": _random,
    "reversed": _reversed,
}


def batches_measured(held: int) -> int:
    """How many batches are measured with so many events held."""
    return MEASURED_BATCHES if held < LARGE_HELD else MEASURED_BATCHES_LARGE


@lru_cache(maxsize=1)  # a course of 10^7 held takes half a gigabyte and is made in seconds
def course_of(name: str, held: int, scale: Scale) -> Course:
    """The course of a shape with about so many events held."""
    plan = SHAPES[name](held, scale)
    refs = np.zeros(len(plan.times), dtype=REF)
    refs["place"] = np.arange(len(plan.times))
    rows, body = as_rows(refs), scale.body_events
    parts = [slice(start, start + body) for start in range(0, len(plan.times), body)]
    newest = np.maximum.accumulate(plan.times)
    watermarks = [int(newest[part.stop - 1]) - int(plan.slack_s * 1e9) for part in parts]
    times = [plan.times[part] for part in parts]
    return Course(times, [rows[part] for part in parts], watermarks, plan.filling, batches_measured(held))

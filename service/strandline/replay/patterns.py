"""When events are late, and whose: lateness by time of day or since the beginning, and by source.

Columns in, figures out, in one pass. Which slack "late" is judged by is given, so are the sources to look at. No
choice of a slack is made here.
Counts are exact; quantiles lie within RELATIVE_ERROR. A day is one of UTC.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from strandline.core.sketch import Buckets, buckets_of

from .advice import Blocks, Rule, judged
from .basis import Requests

Int64s = NDArray[np.int64]

RELATIVE_ERROR = 0.01
SECOND_NS = 1_000_000_000
DAY_NS = 86_400 * SECOND_NS
HOURS = 24
STEPS_AT_MOST = 24
# Widths of a step, in s: those that a clock shows.
WIDTHS_S = (1, 2, 5, 10, 15, 30, 60, 120, 300, 600, 900, 1800, 3600)


@dataclass(frozen=True, slots=True)
class Lateness:
    """How late some events were. None without any of them."""

    events: int
    late: int
    late_share: float | None
    lateness_ns_p50: float | None
    lateness_ns_p99: float | None
    lateness_ns_max: int | None


@dataclass(frozen=True, slots=True)
class Step:
    """A stretch of time: from midnight UTC, or from the first arrival on."""

    from_ns: int
    to_ns: int
    lateness: Lateness


@dataclass(frozen=True, slots=True)
class Patterns:
    """`by_day`: steps are hours of the day, all days together; else they go from the first arrival to the last."""

    by_day: bool
    steps: list[Step]
    sources: dict[int, Lateness]


class _Groups:
    """Lateness by group: counts by bucket, late ones, the greatest."""

    def __init__(self, groups: int, buckets: Buckets, slack_ns: int) -> None:
        self._buckets, self._slack_ns = buckets, slack_ns
        self._counts = np.zeros((groups, len(buckets)), dtype=np.int64)
        self._late = np.zeros(groups, dtype=np.int64)
        self._max = np.full(groups, -1, dtype=np.int64)

    def add(self, groups: Int64s, lateness: Int64s) -> None:
        """Events, each with the number of its group."""
        places = groups * self._counts.shape[1] + self._buckets.places(lateness)
        self._counts += np.bincount(places, minlength=self._counts.size).reshape(self._counts.shape)
        self._late += np.bincount(groups[lateness > self._slack_ns], minlength=len(self._late))
        np.maximum.at(self._max, groups, lateness)

    def lateness(self, group: int) -> Lateness:
        """Of one group."""
        counts, late = self._counts[group], int(self._late[group])
        events = int(counts.sum())
        if not events:
            return Lateness(0, 0, None, None, None, None)
        greatest = int(self._max[group])
        # A bucket's value stands for all of it, and may lie above the greatest there was.
        p50, p99 = (min(self._buckets.quantile(counts, q), float(greatest)) for q in (0.5, 0.99))
        return Lateness(events, late, late / events, p50, p99, greatest)


def patterns(
    blocks: Blocks, rule: Rule, span_ns: tuple[int, int], slack_ns: int, sources: Sequence[int] = ()
) -> Patterns:
    """One pass over the feed. `span_ns`: the first and the last arrival. Costs some 30 ns an event beside the basis."""
    by_day = span_ns[1] - span_ns[0] >= DAY_NS
    width_ns = DAY_NS // HOURS if by_day else step_ns(span_ns[1] - span_ns[0])
    steps = HOURS if by_day else (span_ns[1] - span_ns[0]) // width_ns + 1
    origin_ns = 0 if by_day else span_ns[0]
    buckets = buckets_of(RELATIVE_ERROR)
    times, owners = _Groups(steps, buckets, slack_ns), _Groups(max(1, len(sources)), buckets, slack_ns)
    wanted = np.sort(np.array(sources, dtype=np.int64))
    for block, lateness in judged(blocks(), rule):
        place = (_row_instants(block) - origin_ns) // width_ns
        times.add(place % HOURS if by_day else np.clip(place, 0, steps - 1), lateness)
        if len(wanted) and block.sources is not None:
            at = np.minimum(np.searchsorted(wanted, block.sources), len(wanted) - 1)
            own = wanted[at] == block.sources
            owners.add(at[own], lateness[own])
    return Patterns(
        by_day,
        [Step(step * width_ns, (step + 1) * width_ns, times.lateness(step)) for step in range(steps)],
        {number: owners.lateness(place) for place, number in enumerate(wanted.tolist())},
    )


def step_ns(span_ns: int) -> int:
    """The width of the steps that cut a span of less than a day: the narrowest one that gives STEPS_AT_MOST."""
    for width_s in WIDTHS_S:
        if span_ns // (width_s * SECOND_NS) < STEPS_AT_MOST:
            return width_s * SECOND_NS
    return WIDTHS_S[-1] * SECOND_NS


def _row_instants(block: Requests) -> Int64s:
    return np.repeat(block.instants, np.diff(block.starts, append=len(block.times)))

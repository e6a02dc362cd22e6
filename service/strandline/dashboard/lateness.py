"""How late events are, coarsely: counts between log-spaced edges, and what other slacks would give. Pure.

The lateness is the one of `core.lateness`: how far an event stood behind what the watermark follows, before the slack;
so an event above the slack is a late one. Every edge is the upper bound of a bucket of that sketch: nothing is split.
"""

from __future__ import annotations

from operator import itemgetter

import numpy as np
from numpy.typing import NDArray

from ..core.lateness import Lateness
from ..core.sketch import GREATEST_NS, LEAST_NS, RELATIVE_ERROR, buckets_of

Counts = NDArray[np.int64]

_BUCKETS = buckets_of(RELATIVE_ERROR, LEAST_NS, GREATEST_NS)


def _places(a_decade: int) -> NDArray[np.int64]:
    """Places of the buckets that hold 1 ms to 100,000 s, so many to a decade."""
    nominal_ns = 10.0 ** (6 + np.arange(8 * a_decade + 1) / a_decade)
    return np.array([_BUCKETS.place(round(each)) for each in nominal_ns])


_EDGES, _SLACKS = _places(3), _places(5)
EDGES_NS: tuple[int, ...] = (0, *_BUCKETS.upper[_EDGES].tolist())
EDGES_S = tuple(edge_ns / 1e9 for edge_ns in EDGES_NS)
COUNTS = len(EDGES_NS) + 1  # counts[i] lie above edge i-1 and at or below edge i; counts[0] are not late at all
_TICK_NS = int(_BUCKETS.upper[0])  # what is late by no more than that (1 us) and what is not late share a bucket
_STARTS = np.concatenate(([0, 1], _EDGES + 1))


class SinceLast:
    """Counts of the events that came since the last look. Some 10 us a look."""

    def __init__(self, memory: Lateness) -> None:
        self._memory = memory
        self._before, self._fades = _coarse(memory), memory.fades

    def take(self) -> Counts:
        """int64[COUNTS] since the last look. Of those that came between it and a fade (once an hour) half are lost."""
        memory, now = self._memory, _coarse(self._memory)
        counts = np.rint(now - self._before * 0.5 ** (memory.fades - self._fades))
        self._before, self._fades = now, memory.fades
        return np.maximum(counts, 0).astype(np.int64)


def _coarse(memory: Lateness) -> NDArray[np.float64]:
    found: NDArray[np.float64] = np.add.reduceat(memory.sketch.counts, _STARTS)
    return found


def every_slack(memory: Lateness, slack_ns: int, hold_ns: float | None) -> list[list[float | None]]:
    """Rows [slack_s, late_share, hold_mean_s] for log-spaced slacks and the present one, ascending.

    The late share is exact but for the present slack, where it is the greater of two bounds within one bucket (2 %).
    `hold_ns` is the mean hold measured with the present slack: another slack would hold an event that much longer or
    shorter, and other ones. None where none was measured; shares are None before anything was seen.

    What it is held beyond that (until others speak, say) is taken to be the same with every slack. It is known within
    one bucket: of the events in the present slack's bucket, which of them were kept is not known. Of the values that
    this leaves open the one nearest to nothing is taken, so a mean hold is at most as wrong as the mean lateness of
    what was kept would move by those events (and by the sketch's 1 %).
    """
    sketch = memory.sketch
    below = np.cumsum(sketch.counts)
    mean_ns = (np.cumsum(sketch.counts * sketch.buckets.values) / np.maximum(below, 1e-300)).tolist()
    present = sketch.buckets.place(slack_ns)
    kept_ns = mean_ns[present] if hold_ns is None else _kept_mean_ns(slack_ns - hold_ns, below, mean_ns, present)
    beyond_ns = None if hold_ns is None else hold_ns - slack_ns + kept_ns
    rows = [(slack_ns, kept_ns, sketch.late_share(max(slack_ns, _TICK_NS)).at_most)]
    for place in _SLACKS.tolist():
        share = max(0.0, float(1 - below[place] / below[-1])) if below[-1] else 0.0
        rows.append((int(sketch.buckets.upper[place]), mean_ns[place], share))
    known = sketch.total > 0
    return [
        [
            slack / 1e9,
            round(share, 9) if known else None,
            None if beyond_ns is None or not known else round(max(0.0, beyond_ns + slack - late_ns) / 1e9, 6),
        ]
        for slack, late_ns, share in sorted(rows, key=itemgetter(0))
    ]


def _kept_mean_ns(likely_ns: float, below: NDArray[np.float64], mean_ns: list[float], present: int) -> float:
    """The mean lateness of what was kept: with, without or with some of the present slack's bucket, so that it is as
    near as can be to `likely_ns` (slack less mean hold: what it was if nothing was held beyond slack less lateness).
    """
    most_ns = mean_ns[present]
    least_ns = mean_ns[present - 1] if present and below[present - 1] else most_ns
    return min(max(likely_ns, least_ns), most_ns)

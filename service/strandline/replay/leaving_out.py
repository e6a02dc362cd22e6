"""A feed as it would be without one of its sources: how late the others would be, how far the basis would stand behind.

One pass serves several sources. What is left out changes the basis only where the source held it: so each block is
judged once as a whole, and for a source only those rows again whose basis is another one. Nothing is chosen here.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from strandline.core.sketch import Buckets, Sketch

from .basis import Basis, Requests, said
from .basis_without import Stood, leaving

Int64s = NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class _Judged:
    """A block with nobody left out. Columns with a value a row end where the first part of the feed ends."""

    block: Requests
    before: Int64s  # by request
    rows: int  # of the first part
    lateness: Int64s
    places: Int64s
    counts: Int64s


class Lag:
    """How far a basis lies behind the arrival clock; it is taken to stand still between two requests."""

    def __init__(self) -> None:
        self._area = self._span = 0.0
        self.last: tuple[int, int] | None = None  # instant, and where the basis stood from then on

    def add(self, instants: Int64s, after: Int64s) -> None:
        """The next requests: when they came and where the basis stood after each."""
        if self.last is not None:
            instants = np.concatenate(([self.last[0]], instants))
            after = np.concatenate(([self.last[1]], after))
        spans = np.diff(instants).astype(np.float64)
        self._area += float(spans @ ((instants - after)[:-1] + spans / 2))
        self._span += float(spans.sum())
        self.last = int(instants[-1]), int(after[-1])

    @property
    def ns_mean(self) -> float | None:
        """Mean over time; None where no time has passed."""
        return self._area / self._span if self._span else None


class Without:
    """The feed without one source: the others' lateness in the first part, the lag, and the source's own late events.

    `late_if_excused`: of the source's own events those that are late with the slack while nobody waits for it.
    """

    def __init__(self, source: int, buckets: Buckets, slack_ns: int) -> None:
        self.source, self._slack_ns = source, slack_ns
        self.sketch = Sketch(buckets)
        self.lag = Lag()
        self.late_if_excused = 0

    def add(self, whole: _Judged, stood: Stood) -> None:
        """The next block of the whole feed, which has events, and where the basis stood without the source."""
        block = whole.block
        assert block.sources is not None
        own = np.flatnonzero(block.sources == self.source)
        self._count(whole, stood.before, own[: int(np.searchsorted(own, whole.rows))])
        requests = own if len(block.starts) == len(block.times) else np.searchsorted(block.starts, own, "right") - 1
        late = stood.before[requests] - block.times[own] > self._slack_ns
        self.late_if_excused += int(np.count_nonzero(late))
        if stood.others.all():
            self.lag.add(block.instants, stood.after)
        elif stood.others.any():
            self.lag.add(block.instants[stood.others], stood.after[stood.others])

    def _count(self, whole: _Judged, before: Int64s, own: Int64s) -> None:
        """Count the others' rows of the first part: as in the whole feed, but for those whose basis is another one."""
        block, rows, sketch = whole.block, whole.rows, self.sketch
        gone = block.by_row(before != whole.before)[:rows].copy()  # judged by another basis
        gone[own] = False
        again = np.flatnonzero(gone)
        gone[own] = True
        row_before = block.by_row(before)[again] if len(again) else before[:0]
        sketch.counts += whole.counts
        sketch.counts -= np.bincount(whole.places[gone], minlength=len(whole.counts))
        sketch.total += rows - len(again) - len(own)
        if whole.lateness.max(initial=0) > sketch.greatest_ns:
            sketch.greatest_ns = max(sketch.greatest_ns, int(whole.lateness[~gone].max(initial=0)))
        sketch.add(np.maximum(row_before - block.times[again], 0))


def leave_out(
    blocks: Iterable[Requests],
    sources: Sequence[int],
    begin: Callable[[], Basis],
    buckets: Buckets,
    cut_ns: int,
    slack_ns: int,
) -> tuple[Lag, list[Without]]:
    """The lag of the whole feed, and the feed without each of these sources; the first part ends at `cut_ns`."""
    basis, lag = leaving(begin, sources), Lag()
    without = [Without(source, buckets, slack_ns) for source in sources]
    for block in blocks:
        if len(block.times):
            moves, stood = basis.add(said(block))
            lag.add(block.instants, moves.after)
            rows = block.first_row(cut_ns)
            lateness = np.maximum(block.by_row(moves.before)[:rows] - block.times[:rows], 0)
            places = buckets.places(lateness)
            counts = np.bincount(places, minlength=len(buckets))
            whole = _Judged(block, moves.before, rows, lateness, places, counts)
            for each, there in zip(without, stood, strict=True):
                each.add(whole, there)
    return lag, without

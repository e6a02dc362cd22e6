"""The contestants of the ordering rows: Strandline's runs and other ways to keep late events sorted.

Every contestant gets the same arrivals in the form that it likes best, made before the clock starts: columns for the
runs, for numpy and for polars, ready-made (time, place) tuples for those that keep Python objects. After each batch the
watermark goes to the newest time less the slack, and each must give back what lies at or before it, in order, ties in
order of arrival.
"""

from __future__ import annotations

import heapq
from bisect import bisect_right, insort
from collections.abc import Callable
from dataclasses import dataclass
from importlib.util import find_spec
from typing import Any, Protocol

import numpy as np
from sortedcontainers import SortedKeyList
from strandline.core.columns import as_refs
from strandline.core.held import Held
from strandline.core.merge import Merger
from strandline.core.sorting import sorted_stably

from strandline_loadgen.trace import Int64s

from .courses import LARGE_HELD, Course, Pair, Pairs


class Contestant(Protocol):
    """Takes a batch, gives back what lies at or before the watermark, as a column or a list of its own form."""

    def fill(self, course: Course, pairs: Pairs) -> None:
        """Hold what is held when the measuring begins."""

    def turn(self, course: Course, pairs: Pairs, batch: int) -> Any:
        """Batch `batch` of those measured in, one release out."""


class Runs:
    """Strandline's own: strands near their release; beyond a bound open runs, cut for many batches."""

    def __init__(self) -> None:
        self.held = Held(Merger())

    def fill(self, course: Course, pairs: Pairs) -> None:
        """Batch by batch, so that the open runs are what they would be."""
        for batch in range(course.filling):
            self.turn(course, pairs, batch - course.filling)

    def turn(self, course: Course, pairs: Pairs, batch: int) -> Any:
        """Columns in, columns out."""
        at = course.filling + batch
        self.held.hold(course.times[at], course.refs[at])
        return self.held.release(course.watermarks[at])


class NumpyResort:
    """A stable re-sort of everything held, at each batch: hard to beat while little is held."""

    def __init__(self) -> None:
        self.times, self.refs = np.empty(0, dtype=np.int64), np.empty(0, dtype="V16")

    def fill(self, course: Course, pairs: Pairs) -> None:
        """One sort."""
        self.times, places = course.held_columns()
        self.refs = np.concatenate(course.refs[: course.filling])[places]

    def turn(self, course: Course, pairs: Pairs, batch: int) -> Any:
        """Columns in, columns out."""
        at = course.filling + batch
        times, refs = np.concatenate((self.times, course.times[at])), np.concatenate((self.refs, course.refs[at]))
        times, order = self._sorted(times)
        refs = refs[order]
        cut = int(np.searchsorted(times, course.watermarks[at], side="right"))
        self.times, self.refs = times[cut:], refs[cut:]
        return times[:cut], refs[:cut]

    def _sorted(self, times: Int64s) -> tuple[Int64s, Int64s]:
        order = np.argsort(times, kind="stable")
        return times[order], order


class PackedResort(NumpyResort):
    """The same with our own packed keys: the hardest peer we know of while little is held."""

    def _sorted(self, times: Int64s) -> tuple[Int64s, Int64s]:
        return sorted_stably(times)


class PolarsSort:
    """A polars DataFrame of everything held, joined with each batch and sorted stably by its own threads."""

    def __init__(self) -> None:
        import polars  # noqa: PLC0415 - only where it is installed

        self._polars = polars
        self.held: Any = None

    def _frame(self, times: Int64s, refs: np.ndarray[Any, Any]) -> Any:
        plain = as_refs(refs)
        return self._polars.DataFrame({"time": times, **{name: plain[name] for name in plain.dtype.names or ()}})

    def fill(self, course: Course, pairs: Pairs) -> None:
        """One sort."""
        times, places = course.held_columns()
        self.held = self._frame(times, np.concatenate(course.refs[: course.filling])[places])

    def turn(self, course: Course, pairs: Pairs, batch: int) -> Any:
        """Columns in, a frame out; the batch's frame shares its columns where polars can."""
        at = course.filling + batch
        fresh = self._frame(course.times[at], course.refs[at])
        whole = self._polars.concat([self.held, fresh]).sort("time", maintain_order=True)
        cut = int(whole["time"].search_sorted(course.watermarks[at], side="right"))
        self.held = whole[cut:]
        return whole[:cut]


class Listed:
    """What contestants that keep one list have in common."""

    def __init__(self) -> None:
        self.held: list[Pair] = []

    def fill(self, course: Course, pairs: Pairs) -> None:
        """A sorted list (which is a heap, too)."""
        self.held = pairs.held.copy()


class ListSort(Listed):
    """list.sort over everything held, at each batch."""

    def turn(self, course: Course, pairs: Pairs, batch: int) -> Any:
        """Tuples in, tuples out."""
        self.held += pairs.batches[batch]
        self.held.sort()
        return _cut(self.held, course.watermarks[course.filling + batch])


class Insort(Listed):
    """bisect.insort for each event into one sorted list."""

    def turn(self, course: Course, pairs: Pairs, batch: int) -> Any:
        """Tuples in, tuples out."""
        held = self.held
        for pair in pairs.batches[batch]:
            insort(held, pair)
        return _cut(held, course.watermarks[course.filling + batch])


class Heap(Listed):
    """heapq: a push for each event, a pop for each release."""

    def turn(self, course: Course, pairs: Pairs, batch: int) -> Any:
        """Tuples in, tuples out."""
        held, push, pop = self.held, heapq.heappush, heapq.heappop
        for pair in pairs.batches[batch]:
            push(held, pair)
        watermark = course.watermarks[course.filling + batch]
        released = []
        while held and held[0][0] <= watermark:
            released.append(pop(held))
        return released


class SortedKeys:
    """sortedcontainers' SortedKeyList, keyed by time."""

    def __init__(self) -> None:
        self.held: Any = SortedKeyList(key=_time_of)

    def fill(self, course: Course, pairs: Pairs) -> None:
        """One update."""
        self.held.update(pairs.held)

    def turn(self, course: Course, pairs: Pairs, batch: int) -> Any:
        """Tuples in, tuples out."""
        held = self.held
        held.update(pairs.batches[batch])
        cut = held.bisect_key_right(course.watermarks[course.filling + batch])
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


def places_of(released: Any) -> Int64s:
    """The places of released events, whatever form they have."""
    if isinstance(released, list):
        return np.fromiter((place for _, place in released), np.int64, len(released))
    if not isinstance(released, tuple):  # a frame
        return np.asarray(released["place"].to_numpy()).astype(np.int64)
    places: Int64s = as_refs(released[1])["place"].astype(np.int64)
    return places


@dataclass(frozen=True, slots=True)
class Peer:
    """A contestant with a name. From `slow_from` held events on only `--full` measures it, over one batch.

    One that sorts anew all that is held takes half a second and more for a batch where that is much: then it is
    measured over a few of them. Its batches cost all the same.
    """

    name: str
    make: Callable[[], Contestant]
    slow_from: int = 10**9
    sorts_anew: bool = False


PEERS = (
    Peer("numpy stable re-sort", NumpyResort, sorts_anew=True),
    Peer("re-sort of packed keys", PackedResort, sorts_anew=True),
    Peer("list.sort", ListSort, sorts_anew=True),
    Peer("heapq", Heap),
    Peer("SortedKeyList", SortedKeys),
    Peer("bisect.insort", Insort, slow_from=500_000),  # 0.3 ms and more for each event
    Peer("polars sort", PolarsSort, sorts_anew=True),
)
BATCHES_ANEW = 4
NOT_INSTALLED = () if find_spec("polars") else ("polars sort",)


def peers_at(held: int, *, full: bool) -> list[Peer]:
    """Who takes part with so many events held."""
    return [peer for peer in PEERS if peer.name not in NOT_INSTALLED and (full or held < peer.slow_from)]


def batches_of(peer: Peer, held: int, measured: int) -> int:
    """Over how many batches a peer is measured."""
    if held >= peer.slow_from:
        return 1
    return min(BATCHES_ANEW, measured) if peer.sorts_anew and held >= LARGE_HELD else measured

"""Reorder density and reorder buffer-occupancy density (RFC 5236, Improved Packet Reordering Metrics, June 2008).

Sequence numbers of one source, int64 in order of arrival; for a feed without them take `ranks` of its event times. Both
densities treat loss and duplicates as the RFC says: a number that comes later than a threshold allows counts as lost.

Where nothing comes as late as that, both follow from sorting, in columns. Where something does, the RFC's algorithms
(sections 7.1 and 7.2) are followed arrival by arrival: for reorder density only over the stretch that is concerned, for
buffer occupancy while the buffer is not empty.
"""

from __future__ import annotations

import heapq
from collections import deque
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .reordering import KEY_GREATEST, KEY_LEAST, first_copies

Int64s = NDArray[np.int64]

THRESHOLD_AT_MOST = 10_000_000
NOT_COUNTED = 2**63 - 1  # in a column: a duplicate, or discarded


@dataclass(frozen=True, slots=True)
class ReorderDensity:
    """RD: counts[k + threshold] arrivals were displaced by k (negative: early, positive: late), |k| <= threshold.

    `receive_index` and `displacement` have a value a row, NOT_COUNTED for duplicates and for what was discarded.
    """

    threshold: int
    counts: Int64s
    receive_index: Int64s
    displacement: Int64s

    def density(self, displacement: int) -> float:
        """RD[k]: the share of the counted arrivals that were displaced by k."""
        if abs(displacement) > self.threshold or not self.counts.sum():
            return 0.0
        return int(self.counts[displacement + self.threshold]) / int(self.counts.sum())

    def late_share(self, successors: int = 3) -> float:
        """The share that came after so many of their successors and more (section 9)."""
        counted = int(self.counts.sum())
        return int(self.counts[self.threshold + max(successors, -self.threshold) :].sum()) / counted if counted else 0.0


@dataclass(frozen=True, slots=True)
class OccupancyDensity:
    """RBD: after counts[b] arrivals b were kept back. `occupancy` has a value a row, -1 where it was ignored."""

    counts: Int64s
    occupancy: Int64s

    def density(self, kept: int) -> float:
        """RBD[b]: the share of the counted arrivals after which b were kept back."""
        counted = int(self.counts.sum())
        return int(self.counts[kept]) / counted if counted and 0 <= kept < len(self.counts) else 0.0

    @property
    def mean(self) -> float:
        """Mean occupancy (section 9)."""
        counted = int(self.counts.sum())
        return float(self.counts @ np.arange(len(self.counts))) / counted if counted else 0.0


def ranks(times: Int64s) -> Int64s:
    """Event times as sequence numbers from 0 on: equal times by order of arrival, so without loss or duplicates."""
    numbers = np.empty(len(times), dtype=np.int64)
    numbers[np.argsort(times, kind="stable")] = np.arange(len(times))
    return numbers


def reorder_density(numbers: Int64s, threshold: int) -> ReorderDensity:
    """RD with displacement threshold DT. Raises ValueError for one below 0 or above 10^7, or numbers beyond 2^62."""
    _require(numbers, threshold)
    receive_index, displacement = np.full((2, len(numbers)), NOT_COUNTED, dtype=np.int64)
    kept = first_copies(numbers)
    distinct = numbers[kept]
    expected = np.sort(distinct)
    receive_index[kept], displacement[kept] = expected, expected - distinct
    for start, after in _beyond(numbers, kept[np.abs(displacement[kept]) > threshold]):
        index, moved, behind = _receive(numbers[start:after].tolist(), threshold)
        if behind:
            index, moved, _ = _receive(numbers[start:].tolist(), threshold)
        receive_index[start : start + len(index)], displacement[start : start + len(index)] = index, moved
        if behind:
            break
    counted = displacement[displacement != NOT_COUNTED]
    counts = np.bincount(counted + threshold, minlength=2 * threshold + 1)
    return ReorderDensity(threshold, counts, receive_index, displacement)


def _beyond(numbers: Int64s, rows: Int64s) -> Iterator[tuple[int, int]]:
    """Stretches of rows (from, up to but not including) that hold one of these rows.

    A stretch ends where everything that came so far is smaller than all that follows; none has to do with another.
    """
    if not len(rows):
        return
    following = np.append(np.minimum.accumulate(numbers[::-1])[::-1][1:], KEY_GREATEST + 1)
    ends = np.flatnonzero(np.maximum.accumulate(numbers) < following)
    for end in np.unique(np.searchsorted(ends, rows)).tolist():
        yield int(ends[end - 1]) + 1 if end else 0, int(ends[end]) + 1


def _receive(numbers: list[int], threshold: int) -> tuple[list[int], list[int], bool]:
    """Section 7.1, arrival by arrival: receive index and displacement of each (NOT_COUNTED where there is none).

    Last, whether the receive index is left behind: a number that is in sight when its index comes, and yet displaced
    beyond the threshold when it is taken, uses up an index without having one. By the RFC's algorithm all that follow
    are then displaced by one more, to the end.
    """
    index, moved = [NOT_COUNTED] * len(numbers), [NOT_COUNTED] * len(numbers)
    window: deque[int] = deque()  # rows that are looked ahead to
    present: set[int] = set()  # numbers in the window, or that left it early, which are not passed yet
    waiting: list[int] = []  # a heap over `present`, with some that have left it
    expected, following = min(numbers), 0

    def pull() -> None:
        nonlocal following
        while following < len(numbers) and len(window) <= threshold:
            number = numbers[following]
            if number >= expected and number not in present:
                window.append(following)
                present.add(number)
                heapq.heappush(waiting, number)
            following += 1

    pull()
    while window:
        while waiting[0] not in present:
            heapq.heappop(waiting)
        expected = waiting[0]  # numbers before it have neither come nor are they in sight: lost
        row = window.popleft()
        number = numbers[row]
        if abs(expected - number) <= threshold:
            index[row], moved[row] = expected, expected - number
            present.discard(expected)
            expected += 1
        else:
            present.discard(number)
        pull()
    return index, moved, bool(present)


def occupancy_density(numbers: Int64s, limit: int, first: int | None = None) -> OccupancyDensity:
    """RBD with buffer limit BT. `first`: the number expected at the start, the least one received if None.

    Raises ValueError for a limit below 0 or above 10^7, or numbers beyond 2^62.
    """
    _require(numbers, limit)
    if not len(numbers):
        return OccupancyDensity(np.zeros(limit + 1, dtype=np.int64), np.empty(0, dtype=np.int64))
    least = int(numbers.min())
    start = least if first is None else first
    occupancy = _complete(numbers, limit) if start == least else None
    if occupancy is None:
        occupancy = _keep_back(numbers, limit, start)
    return OccupancyDensity(np.bincount(occupancy[occupancy >= 0], minlength=limit + 1), occupancy)


def _complete(numbers: Int64s, limit: int) -> Int64s | None:
    """Occupancy where no number is missing, none comes twice and the buffer never overflows; None where that is not so.

    Then what is kept back is what came less what could be passed on: the numbers before the first that has not come
    yet.
    """
    count, least = len(numbers), int(numbers.min())
    if int(numbers.max()) - least != count - 1:
        return None
    came = np.full(count, -1, dtype=np.int64)
    came[numbers - least] = np.arange(count)
    if came.min() < 0:
        return None
    passed = np.cumsum(np.bincount(np.maximum.accumulate(came), minlength=count))
    occupancy = np.arange(1, count + 1) - passed
    return occupancy if occupancy.max() <= limit else None


def _keep_back(numbers: Int64s, limit: int, expected: int) -> Int64s:
    """Section 7.2, arrival by arrival; while nothing is kept back, stretches without a break are passed on at once."""
    occupancy = np.full(len(numbers), -1, dtype=np.int64)
    breaks = np.append(np.flatnonzero(numbers[1:] != numbers[:-1] + 1) + 1, len(numbers))
    buffered: set[int] = set()
    waiting: list[int] = []
    row = 0
    ends = iter(breaks.tolist())
    end = next(ends)
    values = np.ascontiguousarray(numbers).data
    while row < len(numbers):
        number = values[row]
        while end <= row:
            end = next(ends)
        if number == expected and not buffered:
            occupancy[row:end] = 0
            expected += end - row
            row = end
            continue
        if number >= expected and number not in buffered:
            if number != expected and len(buffered) < limit:
                buffered.add(number)
                heapq.heappush(waiting, number)
            else:
                expected = _advance(number, buffered, waiting)
            occupancy[row] = len(buffered)
        row += 1
    return occupancy


def _advance(number: int, buffered: set[int], waiting: list[int]) -> int:
    """Pass on the least of what is kept back and this number, and all that follow without a break; what is expected
    then.

    A number that is expected is the least. One that does not fit costs no slot, whether it is passed on or what lies
    before it, which frees one.
    """
    expected = heapq.heappushpop(waiting, number)
    if expected != number:
        buffered.remove(expected)
        buffered.add(number)
    expected += 1
    while waiting and waiting[0] == expected:
        buffered.remove(heapq.heappop(waiting))
        expected += 1
    return expected


def _require(numbers: Int64s, threshold: int) -> None:
    if not 0 <= threshold <= THRESHOLD_AT_MOST:
        raise ValueError(f"a threshold lies between 0 and {THRESHOLD_AT_MOST}, not at {threshold}")
    if len(numbers) and not (numbers.min() >= KEY_LEAST and numbers.max() <= KEY_GREATEST):
        raise ValueError("numbers must lie between -2^62 and 2^62")

"""Measures of how far an arrival sequence is from being in order, for sequences of 10^7 keys in seconds.

A key is a sequence number or an event time, int64, in order of arrival; equal keys count as being in order. Everything
here is about one sequence of keys and nothing else: what RFC 4737 and RFC 5236 make of it is in `reordering.py` and
`density.py`. Positions count from 0.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Int64s = NDArray[np.int64]
Int32s = NDArray[np.int32]

KEYS_AT_MOST = 2**31 - 2**20  # ranks are int32, and some are added to fill the last block
BASE = 16  # blocks of so many keys are compared pair by pair, at 0.3 ns a pair
WIDE = 4096  # from this width on blocks are merged one by one, only where they overlap


def newest_before(keys: Int64s) -> Int64s:
    """The greatest key that came before each; the first key has itself."""
    newest = np.maximum.accumulate(keys)
    return np.concatenate((keys[:1], newest[:-1]))


def reordered_positions(keys: Int64s) -> Int64s:
    """Positions of the keys that come behind a greater one (RFC 4737, section 3.3)."""
    return np.flatnonzero(keys < newest_before(keys))


def first_greater(keys: Int64s, positions: Int64s) -> Int64s:
    """For reordered positions the position of the first key of all that is greater."""
    return np.searchsorted(np.maximum.accumulate(keys), keys[positions], side="right")


def smallest_slack(keys: Int64s) -> int:
    """The greatest lateness: the smallest slack behind the newest key that loses nothing."""
    return int((newest_before(keys) - keys).max(initial=0))


def smallest_k(keys: Int64s) -> int:
    """The smallest k for which the sequence is k-ordered: what comes more than k positions later is not smaller.

    It is the greatest extent of RFC 4737 (Babu, Srivastava, Widom, ACM TODS 29(3), 2004).
    """
    positions = reordered_positions(keys)
    return int((positions - first_greater(keys, positions)).max(initial=0))


def ascending_runs(keys: Int64s) -> int:
    """Stretches that do not descend."""
    return int(np.count_nonzero(keys[1:] < keys[:-1])) + 1 if len(keys) else 0


def overtakers(keys: Int64s) -> Int64s:
    """For each key how many greater ones came before it.

    The greatest of them is the number of slots that a sorting buffer needs: one of k slots loses just the keys with more
    than k overtakers. Their sum is the number of inversions.
    """
    return _overtaken(keys, None)[0]


def overtaking_bytes(keys: Int64s, lengths: NDArray[np.integer]) -> Int64s:
    """For each key the sum of the lengths of the greater ones that came before it."""
    if len(lengths) != len(keys):
        raise ValueError(f"{len(lengths)} lengths for {len(keys)} keys")
    return _overtaken(keys, lengths.astype(np.int64))[1]


def inversions(keys: Int64s) -> int:
    """Pairs of keys that stand the wrong way round."""
    return int(overtakers(keys).sum())


def consecutive_greater(keys: Int64s) -> Int64s:
    """For each key how many of the ones just before it are greater, without a break: the greatest n of n-reordering."""
    return np.arange(len(keys)) - 1 - earlier_not_greater(keys)


def earlier_not_greater(keys: Int64s) -> Int64s:
    """For each key the nearest earlier position whose key is not greater; -1 where all are.

    By a tree of minima over pairs: climb from the key until a block to the left holds such a key, then descend in it to
    the right, all keys of a level at once. Only keys that stand just behind a greater one need to climb.
    """
    found = np.arange(len(keys), dtype=np.int64) - 1
    positions = np.flatnonzero(keys[1:] < keys[:-1]) + 1
    found[positions] = -1
    levels = [keys]
    blocks = positions
    hits: list[tuple[Int64s, Int64s]] = []  # by level: positions, and the block to the left that holds a smaller key
    while len(blocks):
        level = levels[-1]
        left = np.flatnonzero((blocks & 1) == 1)
        left = left[level[blocks[left] - 1] <= keys[positions[left]]]
        hits.append((positions[left], blocks[left] - 1))
        climbing = np.ones(len(blocks), dtype=np.bool_)
        climbing[left] = False
        climbing &= blocks > 1
        positions, blocks = positions[climbing], blocks[climbing] >> 1
        levels.append(np.minimum(level[: len(level) & ~1 : 2], level[1::2]))  # a last odd one has nothing to its right
    positions, blocks = np.empty((2, 0), dtype=np.int64)
    for at in range(len(hits) - 1, -1, -1):
        positions, blocks = np.concatenate((positions, hits[at][0])), np.concatenate((blocks, hits[at][1]))
        if at:
            right = 2 * blocks + 1
            blocks = right - (levels[at - 1][right] > keys[positions])
    found[positions] = blocks
    return found


def _overtaken(keys: Int64s, lengths: Int64s | None) -> tuple[Int64s, Int64s]:
    """Overtakers of each key, and their bytes (empty without lengths), by merging ever wider sorted blocks of ranks."""
    count = len(keys)
    if count > KEYS_AT_MOST:
        raise ValueError(f"{count} keys are more than the {KEYS_AT_MOST} that one sequence may have")
    order = np.argsort(keys, kind="stable")
    padded = -(-count // WIDE) * WIDE
    ranks = np.arange(padded, dtype=np.int32)  # those that fill the last block are greater than all others
    ranks[order] = np.arange(count, dtype=np.int32)
    weights = None if lengths is None else np.concatenate((lengths[order], np.zeros(padded - count, dtype=np.int64)))
    tally = _Tally(padded, weights)
    own = ranks.copy()
    blocks = ranks.reshape(-1, BASE)
    _compare(blocks, tally)
    blocks.sort(axis=1)
    width = BASE
    while width < WIDE:
        blocks = ranks.reshape(-1, 2 * width)
        _count_across(blocks, width, tally)
        blocks.sort(axis=1)
        width *= 2
    while width < padded:
        for start in range(0, padded - width, 2 * width):
            _merge(ranks[start : start + 2 * width], width, tally)
        width *= 2
    return tally.counts[own[:count]], tally.bytes[own[:count]] if weights is not None else np.empty(0, dtype=np.int64)


class _Tally:
    """Overtakers found so far, by rank."""

    def __init__(self, size: int, weights: Int64s | None) -> None:
        self.weights = weights
        self.counts = np.zeros(size, dtype=np.int64)
        self.bytes = np.zeros(size if weights is not None else 0, dtype=np.int64)


def _compare(blocks: Int32s, tally: _Tally) -> None:
    """Count within each row of a matrix of ranks, every pair of columns."""
    greater = np.zeros(blocks.shape, dtype=np.int8)
    for shift in range(1, blocks.shape[1]):
        greater[:, shift:] += blocks[:, :-shift] > blocks[:, shift:]
    tally.counts[blocks] = greater
    if tally.weights is None:
        return
    own = tally.weights[blocks]
    sums = np.zeros(blocks.shape, dtype=np.int64)
    for shift in range(1, blocks.shape[1]):
        sums[:, shift:] += own[:, :-shift] * (blocks[:, :-shift] > blocks[:, shift:])
    tally.bytes[blocks] = sums


def _count_across(blocks: Int32s, width: int, tally: _Tally) -> None:
    """Count, for each rank in the right half of a row, the greater ones in the left half; both are sorted."""
    rows = np.flatnonzero(blocks[:, width - 1] > blocks[:, width])
    if not len(rows):
        return
    left, right = blocks[rows, :width], blocks[rows, width:]
    row, column = np.nonzero(right < left[:, -1:])
    ranks = right[row, column]
    # A row's number in front of the ranks makes all left halves one ascending column.
    lift = np.arange(len(rows), dtype=np.int64) << 32
    places = np.searchsorted((left + lift[:, None]).ravel(), ranks + lift[row])
    ends = (row + 1) * width
    tally.counts[ranks] += ends - places
    if tally.weights is not None:
        sums = np.concatenate(([0], np.cumsum(tally.weights[left.ravel()])))
        tally.bytes[ranks] += sums[ends] - sums[places]


def _merge(block: Int32s, width: int, tally: _Tally) -> None:
    """Count across two sorted halves and merge them, touching only the stretch in which they overlap."""
    left, right = block[:width], block[width:]
    if left[-1] < right[0]:
        return
    from_left = int(np.searchsorted(left, right[0]))
    of_right = int(np.searchsorted(right, left[-1]))
    left, right = left[from_left:], right[:of_right]
    places = np.searchsorted(left, right)
    tally.counts[right] += len(left) - places
    if tally.weights is not None:
        sums = np.concatenate(([0], np.cumsum(tally.weights[left])))
        tally.bytes[right] += sums[-1] - sums[places]
    block[from_left : width + of_right].sort()

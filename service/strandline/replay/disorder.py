"""Measures of how far an arrival sequence is from being in order, for sequences of 10^7 keys in seconds.

A key is a sequence number or an event time, int64, in order of arrival; equal keys count as being in order. Everything
here is about one sequence of keys and nothing else: what RFC 4737 and RFC 5236 make of it is in `reordering.py` and
`density.py`. Positions count from 0.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Int64s = NDArray[np.int64]

BASE = 16  # blocks of so many keys are compared pair by pair, at 0.3 ns a pair
WIDE = 4096  # from this width on blocks are merged one by one, only where they overlap
RANK = 32  # bits below the rank in an entry
RIGHT = 1 << (RANK - 1)  # the bit that marks the right one of two parts; the bits below it hold a count
GROUPS_AT_MOST = 2**24
KEYS_AT_MOST = 2**31 - 2**20  # so that ranks and counts fit, and those that fill the last block


def rows_by_group(groups: NDArray[np.integer]) -> Int64s:
    """Rows in order of their group (a source's number, say), within a group as they came.

    Group and row in one integer: sorting those takes 5 ns a row, a stable argsort of the groups 49.
    """
    if len(groups) > 2**32 or (len(groups) and not 0 <= int(groups.min()) <= int(groups.max()) < GROUPS_AT_MOST):
        raise ValueError(f"groups must be numbers from 0 to {GROUPS_AT_MOST - 1}")
    packed = groups.astype(np.int64) << 32
    packed |= np.arange(len(groups))
    packed.sort()
    packed &= 2**32 - 1
    return packed


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

    The greatest of them is the number of slots that a sorting buffer needs: one of k slots loses just the keys with
    more than k overtakers. Their sum is the number of inversions.
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
    """Overtakers of each key, and their bytes (empty without lengths), by merging ever wider sorted blocks of ranks.

    An entry is a rank and, below it in the same integer, the overtakers found so far: sorting moves both, and no look
    at a place far away is needed. Blocks of up to WIDE are merged a stretch at a time, which stays in the cache.
    """
    count = len(keys)
    if count > KEYS_AT_MOST:
        raise ValueError(f"{count} keys are more than the {KEYS_AT_MOST} that one sequence may have")
    order = np.argsort(keys, kind="stable")
    padded = -(-count // WIDE) * WIDE
    ranks = np.arange(padded, dtype=np.int64)  # those that fill the last block are greater than all others
    ranks[order] = np.arange(count)
    weights = None if lengths is None else _Weights(lengths[order], padded)
    entries = ranks << RANK
    stretch = WIDE * 16
    for start in range(0, padded, stretch):
        part = entries[start : start + stretch]
        _compare(part.reshape(-1, BASE), ranks[start : start + stretch].reshape(-1, BASE), weights)
        width = BASE
        while width < WIDE:
            _merge(part.reshape(-1, 2 * width), width, weights)
            width *= 2
    width = WIDE
    while width < padded:
        for start in range(0, padded - width, 2 * width):
            _merge_overlap(entries[start : start + 2 * width], width, weights)
        width *= 2
    counts, sums = np.empty((2, count), dtype=np.int64)
    counts[order] = entries[:count] & (RIGHT - 1)
    if weights is None:
        return counts, sums[:0]
    sums[order] = weights.found[:count]
    return counts, sums


class _Weights:
    """Bytes of each key, and the ones that overtook it so far, by rank."""

    def __init__(self, lengths: Int64s, size: int) -> None:
        self.own = np.zeros(size, dtype=np.int64)
        self.own[: len(lengths)] = lengths
        self.found = np.zeros(size, dtype=np.int64)


def _compare(entries: Int64s, ranks: Int64s, weights: _Weights | None) -> None:
    """Count within each row of a matrix, every pair of columns, and sort the rows."""
    small = ranks.astype(np.int32)  # compared twice as fast
    greater = np.zeros(small.shape, dtype=np.int8)
    for shift in range(1, small.shape[1]):
        greater[:, shift:] += small[:, :-shift] > small[:, shift:]
    if weights is not None:
        own, sums = weights.own[ranks], np.zeros(ranks.shape, dtype=np.int64)
        for shift in range(1, small.shape[1]):
            sums[:, shift:] += own[:, :-shift] * (small[:, :-shift] > small[:, shift:])
        weights.found[ranks] = sums
    entries += greater
    entries.sort(axis=1)


def _merge(rows: Int64s, left: int, weights: _Weights | None) -> None:
    """Count across the two parts of each row (the first `left` columns, and the rest) and sort the rows.

    Of what a row holds, an entry of the right part is overtaken by those of the left part that lie beyond it then.
    """
    rows[:, left:] |= RIGHT
    rows.sort(axis=1)
    of_right = (rows >> (RANK - 1)) & 1
    beyond = np.cumsum(of_right, axis=1)
    beyond += left - 1 - np.arange(rows.shape[1])
    beyond *= of_right
    rows &= ~RIGHT
    rows += beyond
    if weights is not None:
        ranks = rows >> RANK
        own = np.cumsum(weights.own[ranks] * (1 - of_right), axis=1)
        weights.found[ranks] += (own[:, -1:] - own) * of_right


def _merge_overlap(block: Int64s, width: int, weights: _Weights | None) -> None:
    """The same for one block, touching only the stretch in which its two sorted parts overlap."""
    left, right = block[:width], block[width:]
    if left[-1] < right[0]:
        return
    from_left = int(np.searchsorted(left, right[0]))
    of_right = int(np.searchsorted(right, left[-1]))
    _merge(block[from_left : width + of_right][None, :], width - from_left, weights)

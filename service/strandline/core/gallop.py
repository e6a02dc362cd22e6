"""Exponential (galloping) search in a sorted time column, counted in comparisons.

Method: doubling then binary search, Bentley & Yao 1976; the probe sequence 0, 1, 3, 7, ... and its cost (1 for position
0, else 2*floor(lg i) + 2) are those of CPython's Objects/listsort.txt. Only searching lives here, no moving of data.
"""

from __future__ import annotations

import numpy as np

from .columns import Times


def _bracket(times: Times, start: int, beyond: int, below: bool, key: int) -> tuple[int, int, int]:
    """Doubling phase: the answer lies in [low, high]; `below` says whether equal values count as before the key."""
    size = beyond - start
    probes, low, offset = 0, 0, 0
    while offset < size:
        probes += 1
        value = int(times[start + offset])
        if not (value <= key if below else value < key):
            return start + low, start + offset, probes
        low = offset + 1
        offset = 2 * offset + 1
    return start + low, beyond, probes


def gallop_right(times: Times, key: int, start: int = 0, stop: int | None = None) -> tuple[int, int]:
    """Position behind the last value <= key in times[start:stop] (ascending), and the comparisons it took."""
    low, high, probes = _bracket(times, start, len(times) if stop is None else stop, True, key)
    if low == high:
        return low, probes
    return low + int(np.searchsorted(times[low:high], key, side="right")), probes + (high - low).bit_length()


def gallop_left(times: Times, key: int, start: int = 0, stop: int | None = None) -> tuple[int, int]:
    """Position before the first value >= key in times[start:stop] (ascending), and the comparisons it took."""
    low, high, probes = _bracket(times, start, len(times) if stop is None else stop, False, key)
    if low == high:
        return low, probes
    return low + int(np.searchsorted(times[low:high], key, side="left")), probes + (high - low).bit_length()

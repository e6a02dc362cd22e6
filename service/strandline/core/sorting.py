"""One stable sort of a time column, by whichever compiled sort is the faster: what runs and merges both need.

No runs and no merging here, only times and the order that they take.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from .columns import Times

# Below about this many rows the six small steps of packing cost more than they save (measured, ordering.md).
PACKED_EVENTS = 256
KEY_BITS = 63
# With fewer falls than one in so many rows the stable sort finds the runs in compiled code, at 0.2 us a fall and 0.7
# ns a row; packing takes 6.3 ns a row whatever the order (measured, ordering.md).
ROWS_A_FALL = 32
SAMPLE_STEP, SAMPLED_FALLS, FALLS_FEW = 16, 4, 2  # every which row is a sample; what share of falls vanishes in it


def sorted_stably(times: Times, *, packing: bool = True) -> tuple[Times, NDArray[np.int64]]:
    """The times in ascending order, and which row of the column each was; equal times stay in the column's order.

    A plain sort of integers runs in vector instructions, at 4 ns a row against 25 to 75 of a stable sort by index. So
    each row's number is packed into the low bits of its time's distance from the least: no two keys are equal, and the
    sorted keys tell both. Where the times lie too far apart for that (for 5,000 rows: 13 days in ns), or the rows are
    few, the stable sort by index answers instead.
    """
    if packing and len(times) >= PACKED_EVENTS:
        found = packed(times, int(times.min()), int(times.max()))
        if found is not None:
            return found
    order = np.argsort(times, kind="stable")
    return times[order], order


def packed(times: Times, least: int, greatest: int) -> tuple[Times, NDArray[np.int64]] | None:
    """The same by packed keys, from the least to the greatest time; None where it would not pay or they do not fit."""
    rows = len(times)
    bits = (rows - 1).bit_length()
    if rows < PACKED_EVENTS or (greatest - least) >> (KEY_BITS - bits):
        return None
    keys = times - least
    keys <<= bits
    keys |= np.arange(rows)
    keys.sort()
    order = keys & ((1 << bits) - 1)
    keys >>= bits
    keys += least
    return keys, order


def sorted_runs(times: Times, falls: int) -> tuple[Times, NDArray[np.int64]]:
    """The same where it is known how often a time is below the one before it.

    Few falls alone do not make the stable sort cheap: it finds forty long runs that interleave, and then merges them at
    5 ns a row for each halving. Rows that came late one by one vanish if only every sixteenth row is looked at; where
    one run ends and the next begins is seen there, too.
    """
    if falls and ROWS_A_FALL * falls < len(times):
        sample = times[::SAMPLE_STEP]
        if falls < FALLS_FEW or SAMPLED_FALLS * int(np.count_nonzero(sample[1:] < sample[:-1])) < falls:
            order = np.argsort(times, kind="stable")
            return times[order], order
    return sorted_stably(times)

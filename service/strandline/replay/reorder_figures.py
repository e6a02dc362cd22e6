"""The figures of RFC 4737 and RFC 5236 of a feed, by event time, summed up as plain values.

How each is worked out is in `reordering` and `density`; here is only the choice of what is told. Needs the whole
sequence in memory (some 300 bytes an event at the peak), so callers bound it.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from .density import THRESHOLD_AT_MOST, occupancy_density, ranks, reorder_density
from .reordering import Reordering

Int64s = NDArray[np.int64]


def reorder_figures(times: Int64s, arrivals: Int64s, threshold: int) -> dict[str, Any]:
    """Figures of event times in order of arrival; equal times are in order. Times in ns, shares between 0 and 1.

    `threshold` is that of RFC 5236: displacements beyond it count as lost there. Raises ValueError for one below 0 or
    above 10^7.
    """
    found = Reordering(times, arrivals, numbered=False)
    numbers = ranks(times)
    occupancy = occupancy_density(numbers, min(len(times), THRESHOLD_AT_MOST))
    extents, late_times = found.extents, found.late_times_ns
    density = reorder_density(numbers, threshold)
    return {
        "events": found.received,
        "reordered": len(found.reordered),
        "reordered_ratio": found.ratio,
        "extent_mean": _mean(extents),
        "extent_max": _greatest(extents),
        "late_time_mean_ns": _mean(late_times),
        "late_time_max_ns": _greatest(late_times),
        "discontinuities": len(found.discontinuities.positions),
        "gap_mean": _mean(found.discontinuities.gaps),
        "free_runs": found.runs.x,
        "free_run_mean": found.runs.mean,
        "n_reordering_greatest": found.n_reordering.greatest,
        "three_reordered_share": found.n_reordering.degree_by_definition(3) if found.received > 3 else 0.0,
        "sorting_slots": _greatest(found.overtakers),
        "threshold": threshold,
        "density": {str(k): density.density(k) for k in range(-min(threshold, 3), min(threshold, 3) + 1)},
        "density_beyond_threshold": int(np.count_nonzero(np.abs(density.displacement) > threshold)),
        "buffer_occupancy_mean": occupancy.mean,
        "buffer_occupancy_max": int(np.flatnonzero(occupancy.counts)[-1]) if len(times) else 0,
    }


def _mean(column: Int64s) -> float | None:
    return float(column.mean()) if len(column) else None


def _greatest(column: Int64s) -> int:
    return int(column.max(initial=0))

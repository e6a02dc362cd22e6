"""A feed's history as the document that a browser draws: rows in, columns of plain values out. Pure.

None stands where something had not come yet, or where there was nothing to take a share of.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from ..core.columns import NO_SOURCE, TIME_MIN
from ..hops import HOPS
from .history import Rows
from .lateness import EDGES_S
from .moments import Json
from .sampling import WHYS

POINTS, POINTS_AT_MOST = 600, 2_000
LANES_AT_MOST = 24
COUNTS = ("held", "open_runs", "received", "released", "late", "duplicate", "quarantined")


def history_document(step_s: int, rows: Rows, names: Sequence[str]) -> Json:
    """Columns of equal length, oldest first; `t_ms` is when each step begins, and a gap in it is time not seen."""
    document: Json = {"step_s": step_s, "t_ms": _ms(rows["t_ns"])}
    document |= {f"{name}_ms": _ms(rows[f"{name}_ns"]) for name in ("watermark", "newest")}
    document["slack_s"] = (rows["slack_ns"] / 1e9).tolist()
    document |= {name: rows[name].tolist() for name in COUNTS}
    document["balanced"] = rows["balanced"].tolist()
    document["hold_why"] = [WHYS[why] for why in rows["hold_why"].tolist()]
    document["hold_source"] = [_name(names, source) for source in rows["hold_source"].tolist()]
    document["late_share"] = _shares(rows)
    document["lateness"] = {"edges_s": EDGES_S, "rows": rows["lateness"].tolist()}
    document["hops"] = {
        name: {
            "waiting": rows["waiting"][:, place].tolist(),
            "oldest_s": (rows["oldest_ns"][:, place] / 1e9).tolist(),
        }
        for place, name in enumerate(HOPS)
    }
    document["lanes"] = _lanes(rows, names)
    return document


def _ms(times: NDArray[np.int64]) -> list[int | None]:
    return [None if time_ns == TIME_MIN else time_ns // 1_000_000 for time_ns in times.tolist()]


def _name(names: Sequence[str], source: int) -> str | None:
    return None if source == NO_SOURCE else names[source]


def _shares(rows: Rows) -> list[float | None]:
    """Late events as a share of those that were put in order or named late."""
    judged = (rows["received"] - rows["duplicate"] - rows["quarantined"]).tolist()
    return [late / of if of > 0 else None for late, of in zip(rows["late"].tolist(), judged, strict=True)]


def _lanes(rows: Rows, names: Sequence[str]) -> Json:
    """Newest event times of the sources that mattered in most steps; of equally many those with lower numbers."""
    used = rows["lane_source"][rows["lane_source"] != NO_SOURCE]
    numbers, counts = np.unique(used, return_counts=True)
    lanes: Json = {}
    for number in numbers[np.lexsort((numbers, -counts))][:LANES_AT_MOST].tolist():
        newest = np.where(rows["lane_source"] == number, rows["lane_newest_ns"], TIME_MIN).max(axis=1, initial=TIME_MIN)
        lanes[names[number]] = {"newest_ms": _ms(newest)}
    return lanes

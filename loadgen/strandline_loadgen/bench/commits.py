"""What the rows on transactional stores load: batches in order of time, each of one commit's size, and their lines."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from strandline.core.columns import REF, Batch
from strandline.ports import Lines

from strandline_loadgen.bodies import Style, bodies, cut_by_count
from strandline_loadgen.shapes import shape

from .harness import Scale

FEED = "bench"
EVENTS_SHARE = 0.2  # of the scale's events


class Blocks(Lines):
    """Lines of blocks in memory, by number of the batch."""

    def __init__(self, names: Sequence[str]) -> None:
        self._names = names
        self.blocks: dict[int, bytes] = {}

    def ndjson(self, batch: Batch) -> bytes:
        """The batch's lines."""
        return self.blocks[batch.number]

    def lines(self, batch: Batch) -> list[bytes]:
        """The same, one by one."""
        return self.blocks[batch.number].split(b"\n")[:-1]

    def source_names(self) -> Sequence[str]:
        """Names of the sources by number."""
        return self._names


def course_of(commit_events: int, scale: Scale) -> tuple[list[Batch], Blocks]:
    """A fifth of the scale's events, but two commits at least."""
    events = max(2 * commit_events, int(scale.events * EVENTS_SHARE) // commit_events * commit_events)
    trace = shape("in_order", events, scale.seed)
    lines = Blocks(trace.source_names)
    batches = []
    for body in bodies(trace, cut_by_count(trace, commit_events), Style("rfc3339")):
        number, start = body.number + 1, body.number * commit_events
        refs = np.zeros(commit_events, dtype=REF)
        refs["length"] = [len(line) for line in bytes(body.payload).split(b"\n")[:-1]]
        refs["source"] = trace.sources[start : start + commit_events]
        times = trace.times[start : start + commit_events]
        lines.blocks[number] = bytes(body.payload)
        batches.append(Batch("ordered", number, times, refs, 0, number))
    return batches, lines

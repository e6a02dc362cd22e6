"""What the journal counts of its own work, as plain numbers that the metrics read. No exposition format lives here."""

from __future__ import annotations

from bisect import bisect_left
from dataclasses import dataclass, field

# Upper bounds of the sync durations' buckets, seconds: a local SSD syncs in 0.2-2 ms, a busy network disk in 0.1-1 s.
SYNC_BOUNDS_S = (0.0005, 0.001, 0.0025, 0.005, 0.01, 0.025, 0.05, 0.1, 0.25, 0.5, 1.0, 2.5, 5.0, 10.0)


@dataclass(slots=True)
class Counters:
    """Since the journal was opened; written by the thread that flushes, read by any (each number by itself is whole).

    `sync_counts[i]` are the syncs that took at most SYNC_BOUNDS_S[i] and longer than the bound before; the last entry
    those that took longer than every bound. `bytes_written` are frames, without segment headers and notes.
    """

    syncs: int = 0
    frames: int = 0
    bytes_written: int = 0
    sync_seconds_last: float = 0.0
    sync_seconds_total: float = 0.0
    sync_counts: list[int] = field(default_factory=lambda: [0] * (len(SYNC_BOUNDS_S) + 1))

    def synced(self, seconds: float) -> None:
        """Count one sync."""
        self.syncs += 1
        self.sync_seconds_last = seconds
        self.sync_seconds_total += seconds
        self.sync_counts[bisect_left(SYNC_BOUNDS_S, seconds)] += 1

    def check(self) -> None:
        """Assert every invariant."""
        assert sum(self.sync_counts) == self.syncs
        assert self.sync_seconds_last <= self.sync_seconds_total or self.syncs == 0

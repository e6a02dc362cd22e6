"""What an observer counts of a cluster since the start of the process: takeovers, their time, how it stands now.

No broker and no asyncio here. What a metric is called and means is `metrics_reference`.
"""

from __future__ import annotations

from bisect import bisect_left
from collections.abc import Mapping
from dataclasses import dataclass, field

# Seconds: an empty log next door takes some 0.1 s; one whose log and messages are large, minutes.
TAKEOVER_BOUNDS_S = (0.05, 0.1, 0.25, 0.5, 1.0, 2.5, 5.0, 10.0, 30.0, 60.0, 300.0)


@dataclass(slots=True)
class Takeovers:
    """Of one feed: a histogram of seconds of those that succeeded, and how many failed."""

    counts: list[int] = field(default_factory=lambda: [0] * (len(TAKEOVER_BOUNDS_S) + 1))
    total_s: float = 0.0
    failed: int = 0

    def note(self, seconds: float) -> None:
        """One has succeeded."""
        self.counts[bisect_left(TAKEOVER_BOUNDS_S, seconds)] += 1
        self.total_s += seconds


@dataclass(frozen=True, slots=True)
class Figures:
    """A cluster at one instant, as this instance sees it. Numbers by the name of the feed.

    `instances` and `nobodys` are None while there is no connection: what was seen last says nothing of now.
    `log_trouble` tells of each partition that runs here, by its own name, whether its log hinders it; `log_lost`
    whether its log was found to have lost its messages, less than a day ago.
    """

    connected: bool
    instances: int | None
    owned: Mapping[str, int]
    nobodys: Mapping[str, int] | None
    takeovers: Mapping[str, Takeovers]
    log_trouble: Mapping[str, bool]
    log_lost: Mapping[str, bool]

"""What an observer sees of one intake: counts since the start of the process, and how long messages were under way.

No broker and no asyncio here. Times in ns since 1970 UTC by the arrival clock.
"""

from __future__ import annotations

from bisect import bisect_left
from dataclasses import dataclass, field

# Seconds from the broker's clock to the arrival: from a broker next door to a backlog of a day.
DELAY_BOUNDS_S = (0.005, 0.01, 0.025, 0.05, 0.1, 0.25, 0.5, 1.0, 2.5, 5.0, 10.0, 30.0, 60.0, 300.0, 3600.0, 86400.0)
OUTCOMES = ("taken", "quarantined", "put_back")


@dataclass(slots=True)
class Delays:
    """A histogram of seconds."""

    counts: list[int] = field(default_factory=lambda: [0] * (len(DELAY_BOUNDS_S) + 1))
    total_s: float = 0.0

    def note(self, seconds: float) -> None:
        """Count one; clocks that differ may give a negative one, which counts as none."""
        seconds = max(0.0, seconds)
        self.counts[bisect_left(DELAY_BOUNDS_S, seconds)] += 1
        self.total_s += seconds


@dataclass(slots=True)
class Counts:
    """The state of one intake. `since_ns`: when it was last connected or lost, whichever it is now."""

    name: str
    kind: str
    since_ns: int
    connected: bool = False
    words: str = "it has not connected yet"
    last_error: str | None = None
    waiting: int | None = None
    in_flight: int = 0
    in_flight_bytes: int = 0
    repeats: int = 0
    losses: int = 0
    paused_until_ns: int | None = None
    outcomes: dict[str, int] = field(default_factory=lambda: dict.fromkeys(OUTCOMES, 0))
    delays: Delays = field(default_factory=Delays)

    def check(self) -> None:
        """Assert that nothing is counted below zero."""
        assert self.in_flight >= 0 and self.in_flight_bytes >= 0
        assert (self.in_flight == 0) <= (self.in_flight_bytes == 0)
        assert set(self.outcomes) == set(OUTCOMES) and min(self.outcomes.values()) >= 0

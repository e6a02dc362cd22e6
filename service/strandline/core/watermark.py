"""Where the watermark may stand: the rule, as a function of the sources, the slack and the arrival clock.

With the event clock it is the least newest event time over the sources that are waited for, minus the slack; with the
arrival clock it is the arrival clock minus the slack. `hold_at_most` pushes it past what has been held too long.
Nothing is set here: `feed.py` turns a candidate into a mark, and only a mark moves the watermark.
"""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass
from itertools import pairwise

from .columns import NO_SOURCE, TIME_MIN
from .records import Cause
from .settings import Settings
from .sources import Sources


@dataclass(frozen=True, slots=True)
class Candidate:
    """A place where the watermark may stand, and why."""

    watermark_ns: int
    cause: Cause
    source: int


class HoldBound:
    """What `hold_at_most` needs to know of the arrivals: pairs (arrival clock, newest event time), both ascending.

    An arrival whose newest event is not newer than an earlier arrival's needs no pair: it is let go with that one.
    """

    def __init__(self) -> None:
        self.pairs: deque[tuple[int, int]] = deque()

    def note(self, arrived_ns: int, newest_ns: int) -> None:
        """Events up to newest_ns came and are held."""
        if not self.pairs or newest_ns > self.pairs[-1][1]:
            self.pairs.append((arrived_ns, newest_ns))

    def due(self, arrived_by_ns: int) -> int:
        """Newest event time among arrivals up to this instant; TIME_MIN if there is none."""
        due_ns = TIME_MIN
        for arrived_ns, newest_ns in self.pairs:
            if arrived_ns > arrived_by_ns:
                break
            due_ns = newest_ns  # walked over once: a mark follows, and forgets what was due
        return due_ns

    def passed(self, watermark_ns: int) -> None:
        """Forget what is released by a watermark."""
        while self.pairs and self.pairs[0][1] <= watermark_ns:
            self.pairs.popleft()

    def check(self, tail_ns: int | None) -> None:
        """Assert that pairs ascend and that the last one is of the newest event held (`tail_ns`)."""
        assert all(one[0] <= other[0] and one[1] < other[1] for one, other in pairwise(self.pairs))
        assert (self.pairs[-1][1] if self.pairs else None) == tail_ns


def candidate(settings: Settings, slack_ns: int, sources: Sources, hold: HoldBound, now_ns: int) -> Candidate:
    """Where the watermark may stand now. Sources that have fallen idle must have been expired before."""
    if settings.clock == "arrival":
        best = Candidate(_behind(now_ns, slack_ns), Cause.CLOCK, NO_SOURCE)
    else:
        least = sources.least()
        if least is None:  # nobody is waited for: the most advanced source leads
            best = Candidate(_behind(sources.newest_ns, slack_ns), Cause.SILENCE, NO_SOURCE)
        else:
            best = Candidate(_behind(least[0], slack_ns), Cause.SOURCES, least[1])
    due = hold.due(now_ns - settings.hold_at_most_ns)
    if due > best.watermark_ns:
        return Candidate(due, Cause.HOLD_AT_MOST, best.source)
    return best


def basis_of(sources: Sources) -> int:
    """What the watermark follows with the event clock, before the slack; NEVER before anything was heard."""
    least = sources.least()
    return sources.newest_ns if least is None else least[0]


def _behind(time_ns: int, slack_ns: int) -> int:
    return max(TIME_MIN, time_ns - slack_ns)  # so NEVER, which is TIME_MIN, stays where it is

"""The six hops of a feed, as an observer sees them: what waits at each, for how long, and when it last advanced.

Bookkeeping for the shell's own hops; what the core and the sinks know of theirs is read where it stands.
"""

from __future__ import annotations

from dataclasses import dataclass

from .core.columns import TIME_MIN
from .ingest.timestamps import format_rfc3339

HOPS = ("ingest", "decode", "journal", "runs", "release", "sinks")


@dataclass(slots=True)
class Hop:
    """One hop. `waiting` counts bodies at ingest and decode, events behind them. Times: arrival clock, ns."""

    waiting: int = 0
    oldest_ns: int | None = None
    advanced_ns: int | None = None


def watermark_words(watermark_ns: int) -> str:
    """Where a watermark stands, for a log."""
    return "no watermark yet" if watermark_ns == TIME_MIN else f"watermark {format_rfc3339(watermark_ns)}"


class Bodies:
    """Request bodies at one hop: when each began to wait, and when one last went on."""

    def __init__(self) -> None:
        self._since: dict[int, int] = {}
        self._count = 0
        self.advanced_ns: int | None = None

    def begin(self, now_ns: int) -> int:
        """A body waits from now on; a ticket to give back."""
        self._count += 1
        self._since[self._count] = now_ns
        return self._count

    def end(self, ticket: int, now_ns: int, *, advanced: bool) -> None:
        """It waits no more: it went on, or was given up."""
        del self._since[ticket]
        if advanced:
            self.advanced_ns = now_ns

    @property
    def waiting(self) -> int:
        """Bodies that wait now."""
        return len(self._since)

    @property
    def ended(self) -> int:
        """Bodies that wait no more, since the start."""
        return self._count - len(self._since)

    def hop(self) -> Hop:
        """As an observer sees it."""
        return Hop(len(self._since), next(iter(self._since.values()), None), self.advanced_ns)

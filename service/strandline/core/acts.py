"""Operators' acts as the fold keeps them: the last ones with who and why, the slack set for a time, paused sinks.

Each act is a record before it has any consequence. Nothing is decided here, and nothing done: what an excuse means is
`sources`, what the slack means is `watermark`, and whoever carries effects out pauses a sink.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Collection
from typing import Any

import msgspec

from .records import ActRecord

ACTS_AT_MOST = 1_000  # kept for observers; the journal has all of them as long as it goes back so far
UNKNOWN = "unknown"  # who did it where nobody was named


class Acts:
    """The last acts, oldest first, and what of them is still in force."""

    def __init__(self) -> None:
        self.kept: deque[ActRecord] = deque(maxlen=ACTS_AT_MOST)
        self.slack_set: ActRecord | None = None  # the slack that holds instead of the configured one, until its end
        self.paused: dict[str, ActRecord] = {}  # by sink

    def take(self, record: ActRecord) -> None:
        """An act was done."""
        self.kept.append(record)
        match record.act:
            case "slack":
                self.slack_set = None if record.slack_ns is None else record
            case "pause":
                self.paused[record.subject] = record
            case "resume":
                self.paused.pop(record.subject, None)
            case _:
                pass  # an excuse and a drain are over once they are done

    def slack_ended(self, now_ns: int) -> bool:
        """Whether a slack is set whose time is over by this instant."""
        chosen = self.slack_set
        return chosen is not None and chosen.until_ns is not None and chosen.until_ns <= now_ns

    def serve(self, sinks: Collection[str]) -> None:
        """From now on these sinks are served: one that is gone is not paused any more."""
        self.paused = {sink: record for sink, record in self.paused.items() if sink in sinks}

    def newest(self, limit: int) -> list[ActRecord]:
        """The last acts, the newest first."""
        return list(self.kept)[::-1][:limit]

    def saved(self) -> dict[str, Any]:
        """All of it as plain values."""
        return {"kept": list(self.kept), "slack": self.slack_set, "paused": self.paused}

    def restore(self, values: dict[str, Any]) -> None:
        """Take over saved values."""
        self.kept.extend(msgspec.convert(values["kept"], list[ActRecord]))
        self.slack_set = msgspec.convert(values["slack"], ActRecord | None)
        self.paused = msgspec.convert(values["paused"], dict[str, ActRecord])

    def check(self, now_ns: int) -> None:
        """Assert that acts stand in order, and that what is in force was set by one and is not over."""
        instants = [record.now_ns for record in self.kept]
        assert instants == sorted(instants) and len(instants) <= ACTS_AT_MOST
        if self.slack_set is not None:
            assert self.slack_set.act == "slack" and self.slack_set.slack_ns is not None
            assert not self.slack_ended(now_ns), "a slack whose time is over still holds"
        assert all((act.act, act.subject) == ("pause", sink) for sink, act in self.paused.items())

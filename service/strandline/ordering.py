"""Ordering any iterable in a Python program, lazily, through the same core as the service: `strandline.order(...)`.

The module must not have the function's name: once imported it would stand in its place in the package. No file, no
clock, no thread. The events stay Python objects here, keyed by the place that the feed gives each of them
in a journal that nobody writes.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from operator import index
from typing import Generic, TypeVar

import numpy as np

from .core.columns import TIME_MAX, TIME_MIN, Arrival
from .core.effects import Append, Deliver, Effect
from .core.feed import Feed
from .core.records import Kind, arrival_body
from .core.settings import Settings

Event = TypeVar("Event")
SLACK_AT_MOST = 2**64 - 1  # no two int64 lie further apart
_FAR = 2**62


def order(
    events: Iterable[Event],
    *,
    time: Callable[[Event], int],
    slack: int,
    source: Callable[[Event], str] | None = None,
    late: Callable[[Event], None] | None = None,
) -> Iterator[Event]:
    """Yield the events in ascending time, ties in the order in which they came, waiting `slack` for stragglers.

    `time` gives an event's time as an integer that fits int64, `slack` is in the same unit. With `source`, the
    watermark follows the least newest time over all sources heard so far. Each event is an arrival of its own; one
    whose time lies before the watermark that stood when it came is not yielded but handed to `late` (without `late` it
    is left out). Raises ValueError if `slack` is negative, TypeError or OverflowError if a time is no integer or does
    not fit.
    """
    slack = index(slack)
    if slack < 0:
        raise ValueError(f"slack must not be negative, it is {slack}")
    return _Ordering(time, min(slack, SLACK_AT_MOST), source, late).run(events)


class _Ordering(Generic[Event]):
    """The feed, and the events that it holds by the place of each."""

    def __init__(
        self,
        time: Callable[[Event], int],
        slack: int,
        source: Callable[[Event], str] | None,
        late: Callable[[Event], None] | None,
    ) -> None:
        settings = Settings(
            "order",
            slack_ns=slack,
            idle_after_ns=_FAR,
            hold_at_most_ns=_FAR,
            ahead_limit_ns=TIME_MAX,
            held_events_at_most=_FAR,
            undelivered_events_at_most=_FAR,
            sources_at_most=_FAR,
        )
        self.feed = Feed(settings)
        self.feed.start(0, {})
        self.time, self.source, self.late = time, source, late
        self.held: dict[int, Event] = {}

    def run(self, events: Iterable[Event]) -> Iterator[Event]:
        """The ordered events."""
        for event in events:
            yield from self._final(self._arrive(event))
        yield from self._final(self.feed.drain(0, 0))

    def _arrive(self, event: Event) -> list[Effect]:
        time = index(self.time(event))
        if not TIME_MIN < time <= TIME_MAX:
            raise OverflowError(f"the time {time} does not fit int64")
        name = self.source(event) if self.source else ""
        sources = self.feed.state.sources
        number = sources.numbers.get(name, len(sources.names))
        arrival = Arrival(
            times=np.array([time], dtype=np.int64),
            sources=np.array([number], dtype=np.uint32),
            lengths=np.zeros(1, dtype=np.uint32),
            payload=b"\n",
            new_sources=() if name in sources.numbers else (name,),
        )
        effects = self.feed.arrive(arrival, 0, 0)
        lsn = next(effect.lsn for effect in effects if isinstance(effect, Append) and effect.kind == Kind.ARRIVAL)
        self.held[arrival_body(arrival, 0, lsn).payload_place] = event
        return effects

    def _final(self, effects: list[Effect]) -> Iterator[Event]:
        del effects  # nothing is written: every record counts as synced at once
        for effect in self.feed.synced(self.feed.next_lsn):
            if not isinstance(effect, Deliver):
                continue
            for place in effect.batch.refs["place"].tolist():
                event = self.held.pop(place)
                if effect.batch.lane == "ordered":
                    yield event
                elif self.late:
                    self.late(event)

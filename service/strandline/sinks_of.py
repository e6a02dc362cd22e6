"""The sinks of one feed as its shell holds them: made from the configuration, asked where they stand, repaired into.

Nothing is delivered here; that is `sinks.delivery`, one for each sink.
"""

from __future__ import annotations

import asyncio
import logging
import random
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Protocol

from .bell import Bell
from .config import Feed as FeedConfig
from .core.columns import Lane
from .errors import StrandlineError
from .ports import Clock, Sink
from .repairing import Repairer, WithoutLate
from .sinks.lanes import LaneStore
from .sinks.repairs import TakesRepairs

log = logging.getLogger(__name__)
LANE_STORE = "lanes"
OPEN_WITHIN_S = 5.0  # a store that does not answer by then is connected to later, by its delivery
DAY_NS = 86_400 * 10**9


class MakeSink(Protocol):
    """Makes a sink by kind and options; see sinks.make_sink."""

    def __call__(self, kind: str, feed: str, clock: Clock, **options: object) -> Sink: ...


@dataclass(slots=True)
class FeedSinks:
    """Every sink of a feed by name, the lane store first, and the repairers of those that take repairs."""

    sinks: dict[str, Sink]
    repairers: dict[str, Repairer] = field(default_factory=dict)

    @classmethod
    def made(cls, config: FeedConfig, store: LaneStore, path: Path, clock: Clock, make: MakeSink) -> FeedSinks:
        """Sinks as configured; nothing is opened yet. Raises StrandlineError."""
        found = cls({LANE_STORE: store})
        for sink in config.sinks:
            made = make(sink.kind, config.name, clock, **sink.options())
            late = getattr(sink, "late", None)
            deliver = getattr(late, "deliver", "lane")
            found.sinks[sink.name] = made if deliver == "lane" else WithoutLate(made)
            if isinstance(made, TakesRepairs):
                found.repairers[sink.name] = Repairer(
                    sink.name,
                    made,
                    store,
                    path,
                    every_s=late.every_ns / 1e9 if late is not None and deliver == "repair" else None,
                    partition_ns=late.partition_ns if late is not None else DAY_NS,
                    random_source=random.Random(),
                )
        return found


class Positions:
    """What the stores say of themselves as they are opened."""

    def __init__(self, feed: str) -> None:
        self._feed = feed
        self._found: dict[str, dict[Lane, int]] = {}
        self._bell = Bell()

    def told(self, name: str, positions: Mapping[Lane, int], ahead_of: Mapping[Lane, int] | None) -> None:
        """A store has answered. Raises StrandlineError if it stands at or beyond `ahead_of`, the next numbers."""
        for lane, number in positions.items():
            if ahead_of is not None and number >= ahead_of[lane]:
                raise StrandlineError(
                    f"the store has taken batch {number} of lane {lane}, this journal has not got there: it was "
                    "replaced by an older one; restart the service, so that it numbers on from there"
                )
        self._found[name] = dict(positions)
        self._bell.ring()

    async def wait(self, names: set[str], *, for_all: bool) -> dict[str, dict[Lane, int]]:
        """Positions by sink. A new journal waits for all of them: it must not use a number twice."""
        while names - self._found.keys():
            bell = self._bell.next
            try:
                async with asyncio.timeout(OPEN_WITHIN_S):
                    await bell.wait()
            except TimeoutError:
                log.warning("%s: no answer yet from sink %s", self._feed, ", ".join(sorted(names - self._found.keys())))
                if not for_all:
                    break
        return dict(self._found)

"""The intakes of a service: begun once the feeds are open, ended first at a stop; and what observers are told of them.

No broker is named here, and nothing is decided about messages.
"""

from __future__ import annotations

import asyncio
import random
from collections.abc import Iterable
from typing import Any

from ..ingest.offload import Aside
from ..ingest.timestamps import format_rfc3339
from ..runtime import FeedRuntime
from . import make_broker
from .counts import Counts
from .taking import Intake

STOP_WITHIN_S = 5.0


class Intakes:
    """All intakes of all feeds."""

    def __init__(self) -> None:
        self._aside = Aside()
        self._intakes: list[Intake] = []

    def start(self, runtimes: Iterable[FeedRuntime]) -> None:
        """Begin to take events into feeds that are open. Raises StrandlineError where a client is not installed."""
        for runtime in runtimes:
            for config in runtime.config.intakes:
                made = Intake(config, runtime, make_broker(config), self._aside, random_source=random.Random())
                self._intakes.append(made)
                runtime.intakes.append(made.counts)
        for intake in self._intakes:
            intake.start()

    async def stop(self, within_s: float) -> None:
        """Take nothing more; what is in flight has so long to be settled. A second call does nothing."""
        intakes, self._intakes = self._intakes, []
        await asyncio.gather(*(intake.stop(min(within_s, STOP_WITHIN_S)) for intake in intakes))
        self._aside.close()


def intake_document(counts: Counts, now_ns: int) -> dict[str, Any]:
    """One intake, as GET /v1/feeds/{feed} shows it."""
    paused_ns = counts.paused_until_ns or 0
    return {
        "kind": counts.kind,
        "connected": counts.connected,
        "since": format_rfc3339(counts.since_ns),
        "words": counts.words if paused_ns <= now_ns else f"paused: {counts.last_error}",
        "paused_until": format_rfc3339(paused_ns) if paused_ns > now_ns else None,
        "waiting_messages": counts.waiting,
        "in_flight_messages": counts.in_flight,
        "in_flight_bytes": counts.in_flight_bytes,
        "messages": dict(counts.outcomes),
        "redelivered": counts.repeats,
        "connections_lost": counts.losses,
        "last_error": counts.last_error,
    }


def intake_documents(runtime: FeedRuntime) -> dict[str, Any]:
    """Every intake of a feed, by name."""
    now_ns = runtime.clock.now_ns()
    return {counts.name: intake_document(counts, now_ns) for counts in runtime.intakes}


def intake_stalls(runtime: FeedRuntime, after_s: float) -> list[str]:
    """Sentences about intakes that have had no broker for longer than this."""
    now_ns, found = runtime.clock.now_ns(), []
    for counts in runtime.intakes:
        away_s = (now_ns - counts.since_ns) / 1e9
        if not counts.connected and away_s > after_s:
            found.append(f"intake {counts.name} has had no broker for {away_s:.0f} s: {counts.words}")
    return found

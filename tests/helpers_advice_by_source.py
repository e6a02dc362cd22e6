"""What advice by source must find, the slow way: request by request, source by source. No column, no cleverness."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from itertools import pairwise

import numpy as np
from strandline.replay.basis import Requests

Event = tuple[int, int]  # event time, source
Feed = Sequence[tuple[int, Sequence[Event]]]  # requests: arrival, events


def blocks_of(feed: Feed, cuts: Sequence[int] = ()) -> Iterator[Requests]:
    """The feed in blocks that end at the requests of these numbers."""
    edges = sorted({0, len(feed), *(cut % len(feed) for cut in cuts)})
    for first, after in pairwise(edges):
        part = feed[first:after]
        sizes = [len(events) for _, events in part]
        yield Requests(
            times=np.array([time for _, events in part for time, _ in events], dtype=np.int64),
            starts=np.cumsum([0, *sizes[:-1]]),
            instants=np.array([arrived for arrived, _ in part], dtype=np.int64),
            sources=np.array([source for _, events in part for _, source in events], dtype=np.uint32),
        )


@dataclass(slots=True)
class Known:
    """One source: its newest event, when it was heard, and where its watermark stands at least."""

    newest: int | None = None
    heard: int = 0
    floor: int | None = None
    held: list[tuple[int, int]] = field(default_factory=list)  # event time, arrival
    holds: list[int] = field(default_factory=list)


def judged(feed: Feed, idle_after: int | None) -> list[tuple[int, int, float]]:
    """Of each event: its arrival, its source and how late it is; infinitely where it comes from before a silence."""
    sources: dict[int, Known] = {}
    found = []
    for arrived, events in feed:
        for known in sources.values():
            if idle_after is not None and known.heard + idle_after <= arrived:
                known.floor = known.newest
        stood = {number: (known.newest, known.floor) for number, known in sources.items()}
        for time, number in events:
            newest, floor = stood.get(number, (None, None))
            lateness = 0.0 if newest is None else float(max(newest - time, 0))
            found.append((arrived, number, math.inf if floor is not None and time < floor else lateness))
            known = sources.setdefault(number, Known())
            known.newest = time if known.newest is None else max(known.newest, time)
            known.heard = arrived
    return found


def held(feed: Feed, idle_after: int | None, slacks: Sequence[int]) -> list[int]:
    """Holds of the events that are on time with these slacks by source, and let go before the feed ends."""
    lateness = iter(judged(feed, idle_after))
    sources: dict[int, Known] = {}

    def let_go(known: Known, up_to: int, at: int) -> None:
        known.holds += [at - arrived for time, arrived in known.held if time <= up_to]
        known.held = [each for each in known.held if each[0] > up_to]

    for arrived, events in feed:
        for known in sources.values():
            if idle_after is not None and known.heard + idle_after <= arrived and known.newest is not None:
                let_go(known, known.newest, known.heard + idle_after)
        for time, number in events:
            _, _, late = next(lateness)
            known = sources.setdefault(number, Known())
            known.newest = time if known.newest is None else max(known.newest, time)
            known.heard = arrived
            if late <= slacks[number]:
                known.held.append((time, arrived))
        for number, known in sources.items():
            if known.newest is not None:
                let_go(known, known.newest - slacks[number], arrived)
    return [hold for known in sources.values() for hold in known.holds]


def least_slack(values: Sequence[float], share: float) -> float:
    """The least slack with which a further value would be above it with this probability at most."""
    descending = sorted(values, reverse=True)
    return descending[max(math.floor(share * (len(values) + 1)) - 1, 0)] if values else 0.0

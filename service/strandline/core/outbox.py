"""Batches on their way to the sinks: numbers, who has taken what, and how much is still undelivered.

A batch stays here until every sink that serves its lane has durably taken it. Nothing is sent from here.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Iterator, Mapping, Sequence

import numpy as np

from .columns import Batch, Lane

LANES: tuple[Lane, ...] = ("ordered", "late", "quarantine")


class Outbox:
    """Undelivered batches of one feed by lane, and each sink's position (number of the last batch durably taken)."""

    def __init__(self) -> None:
        self.next_number: dict[Lane, int] = dict.fromkeys(LANES, 1)
        self.positions: dict[str, dict[Lane, int]] = {}
        self.undelivered_events = 0
        self._batches: dict[Lane, deque[tuple[Batch, int]]] = {lane: deque() for lane in LANES}

    def serve(self, sinks: Mapping[str, Sequence[Lane]]) -> None:
        """From now on these sinks take these lanes; a sink that is known keeps its positions."""
        known = self.positions
        self.positions = {
            name: {lane: known.get(name, {}).get(lane, 0) for lane in lanes} for name, lanes in sinks.items()
        }
        for lane in LANES:
            self._forget_taken(lane)

    def add(self, batch: Batch) -> None:
        """Keep a new batch until it is taken."""
        assert batch.number == self.next_number[batch.lane]
        self.next_number[batch.lane] += 1
        if not any(batch.lane in lanes for lanes in self.positions.values()):
            return  # nobody will ever take it; whoever gets the Deliver effect may still look at it
        if batch.lane == "quarantine":
            place = min(entry.place for entry in batch.entries)
        else:
            place = int(batch.refs["place"].min())
        self._batches[batch.lane].append((batch, place))
        self.undelivered_events += len(batch)

    def taken(self, sink: str, lane: Lane, number: int) -> None:
        """A sink durably holds the lane's batches up to this number."""
        lanes = self.positions.get(sink)
        if lanes is None or lane not in lanes:
            return  # a sink of an earlier configuration
        lanes[lane] = max(lanes[lane], number)
        self._forget_taken(lane)

    def move(self, sink: str, lane: Lane, number: int) -> None:
        """The sink itself says where it stands, be it behind what this journal remembers."""
        self.positions[sink][lane] = number

    def _forget_taken(self, lane: Lane) -> None:
        positions = [lanes[lane] for lanes in self.positions.values() if lane in lanes]
        queue = self._batches[lane]
        while queue and (not positions or queue[0][0].number <= min(positions)):
            self.undelivered_events -= len(queue.popleft()[0])

    def waiting(self, sink: str, lane: Lane) -> Iterator[Batch]:
        """Batches of a lane that this sink has not taken yet, in order."""
        position = self.positions[sink][lane]
        return (batch for batch, _ in self._batches[lane] if batch.number > position)

    def undelivered(self, lane: Lane) -> Iterator[Batch]:
        """Batches of a lane that some sink has not taken yet, in order."""
        return (batch for batch, _ in self._batches[lane])

    @property
    def oldest_place(self) -> int | None:
        """Least place in the journal that an undelivered batch still needs; None when nothing is undelivered."""
        places = [place for queue in self._batches.values() for _, place in queue]
        return min(places) if places else None

    def check(self) -> None:
        """Assert that numbers ascend without gaps towards the next one, and that the count of events is right."""
        for lane, queue in self._batches.items():
            numbers = np.array([batch.number for batch, _ in queue] + [self.next_number[lane]])
            assert np.all(np.diff(numbers) >= 1)
        assert self.undelivered_events == sum(len(batch) for queue in self._batches.values() for batch, _ in queue)

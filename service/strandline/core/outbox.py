"""Batches on their way to the sinks: numbers, who has taken what, and how much is still undelivered.

A batch stays here until every sink that serves its lane has durably taken it. Nothing is sent from here.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Iterator, Mapping, Sequence
from typing import NamedTuple

import numpy as np

from .columns import Batch, Lane

LANES: tuple[Lane, ...] = ("ordered", "late", "quarantine")


class _Needed(NamedTuple):
    """From batch `number` of a lane on, nothing before `place` is needed."""

    number: int
    place: int


class Outbox:
    """Undelivered batches of one feed by lane, and each sink's position (number of the last batch durably taken)."""

    def __init__(self) -> None:
        self.next_number: dict[Lane, int] = dict.fromkeys(LANES, 1)
        self.positions: dict[str, dict[Lane, int]] = {}
        self.undelivered_events = 0
        self.aside_events = 0  # those among them that are late or in quarantine
        self._batches: dict[Lane, deque[Batch]] = {lane: deque() for lane in LANES}
        # The least place over each end of a queue, both columns ascending: the usual minimum over a sliding window.
        self._needed: dict[Lane, deque[_Needed]] = {lane: deque() for lane in LANES}

    def serve(self, sinks: Mapping[str, Sequence[Lane]], stand: Mapping[str, Mapping[Lane, int]]) -> None:
        """From now on these sinks take these lanes; a sink that is known keeps its positions.

        `stand` is what sinks say of themselves: it counts, be it behind what was remembered.
        """
        remembered = self.positions
        self.positions = {
            name: {lane: (remembered.get(name, {}) | dict(stand.get(name, {}))).get(lane, 0) for lane in lanes}
            for name, lanes in sinks.items()
        }
        for lane in LANES:
            self._forget_taken(lane)

    def serves(self, lane: Lane) -> bool:
        """Whether any sink takes this lane."""
        return any(lane in lanes for lanes in self.positions.values())

    def add(self, batch: Batch) -> None:
        """Keep a new batch until it is taken."""
        assert batch.number == self.next_number[batch.lane]
        self.next_number[batch.lane] += 1
        if not self.serves(batch.lane):
            return  # nobody will ever take it; whoever gets the Deliver effect may still look at it
        place = _least_place(batch)
        self._batches[batch.lane].append(batch)
        needed = self._needed[batch.lane]
        number = batch.number
        while needed and needed[-1].place >= place:
            number = needed.pop().number
        needed.append(_Needed(number, place))
        self._count(batch, 1)

    def _count(self, batch: Batch, sign: int) -> None:
        self.undelivered_events += sign * len(batch)
        if batch.lane != "ordered":
            self.aside_events += sign * len(batch)

    def taken(self, sink: str, lane: Lane, number: int) -> None:
        """A sink durably holds the lane's batches up to this number."""
        if self.is_news(sink, lane, number):
            self.positions[sink][lane] = number
            self._forget_taken(lane)

    def is_news(self, sink: str, lane: Lane, number: int) -> bool:
        """Whether a sink's word changes anything; that of a sink of an earlier configuration does not."""
        position = self.positions.get(sink, {}).get(lane)
        return position is not None and number > position

    def _forget_taken(self, lane: Lane) -> None:
        positions = [lanes[lane] for lanes in self.positions.values() if lane in lanes]
        taken = min(positions) if positions else self.next_number[lane]
        queue, needed = self._batches[lane], self._needed[lane]
        while queue and queue[0].number <= taken:
            self._count(queue.popleft(), -1)
        if not queue:
            needed.clear()
        while len(needed) > 1 and needed[1].number <= queue[0].number:
            needed.popleft()

    def waiting(self, sink: str, lane: Lane) -> Iterator[Batch]:
        """Batches of a lane that this sink has not taken yet, in order."""
        position = self.positions[sink][lane]
        return (batch for batch in self._batches[lane] if batch.number > position)

    def undelivered(self, lane: Lane) -> Iterator[Batch]:
        """Batches of a lane that some sink has not taken yet, in order."""
        return iter(self._batches[lane])

    @property
    def oldest_place(self) -> int | None:
        """Least place in the journal that an undelivered batch still needs; None when nothing is undelivered."""
        return min((needed[0].place for needed in self._needed.values() if needed), default=None)

    def check(self) -> None:
        """Assert that numbers ascend towards the next one, that counts are right, and places the least."""
        for lane, queue in self._batches.items():
            numbers = np.array([batch.number for batch in queue] + [self.next_number[lane]])
            assert np.all(np.diff(numbers) >= 1)
            assert not queue or self.serves(lane)
            places = [_least_place(batch) for batch in queue]
            assert [row.place for row in self._needed[lane]][:1] == ([min(places)] if places else [])
        waiting = {lane: sum(map(len, queue)) for lane, queue in self._batches.items()}
        assert self.undelivered_events == sum(waiting.values())
        assert self.aside_events == waiting["late"] + waiting["quarantine"]


def _least_place(batch: Batch) -> int:
    if batch.lane == "quarantine":
        return min(entry.place for entry in batch.entries)
    return int(batch.refs["place"].min())

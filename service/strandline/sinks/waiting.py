"""The batches that one sink has yet to make durable: what waits, what it holds already, how far it is.

Bookkeeping only: no asyncio, no clock, no sink. A batch moves from `untaken` to `taken` when the sink holds it, leaves
when the sink says that it is durable, and moves back when the sink fails. A batch that the sink refuses for ever leaves
at once; the position passes it when everything before it is durable.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from itertools import pairwise

from ..core.columns import Batch, Lane


@dataclass(frozen=True, slots=True)
class LaneState:
    """What an observer sees of one lane. Counts since the start of the process; times in ns since 1970 UTC."""

    batches: int = 0  # waiting: not durable yet
    events: int = 0
    oldest_instant_ns: int | None = None  # arrival clock of the oldest one waiting
    reached: int = 0  # number of the last batch that is settled
    advanced_at_ns: int | None = None  # when `reached` last moved
    delivered_batches: int = 0
    delivered_events: int = 0
    refused_batches: int = 0
    refused_events: int = 0


@dataclass(slots=True)
class _Lane:
    taken: deque[Batch] = field(default_factory=deque)
    untaken: deque[Batch] = field(default_factory=deque)
    refused: set[int] = field(default_factory=set)  # above `reached`
    events: int = 0
    offered: int = 0
    reached: int = 0
    advanced_at_ns: int | None = None
    delivered_batches: int = 0
    delivered_events: int = 0
    refused_batches: int = 0
    refused_events: int = 0


class Waiting:
    """The lanes of one sink. Its owner bounds what is offered; nothing is dropped here."""

    def __init__(self, lanes: Iterable[Lane]) -> None:
        self._lanes: dict[Lane, _Lane] = {lane: _Lane() for lane in lanes}

    @property
    def lanes(self) -> tuple[Lane, ...]:
        """The lanes that the sink takes."""
        return tuple(self._lanes)

    def offer(self, batch: Batch) -> bool:
        """Keep a batch until it is durable. False: not this sink's lane, or offered or durable before."""
        lane = self._lanes.get(batch.lane)
        if lane is None or batch.number <= max(lane.offered, lane.reached):
            return False
        lane.offered = batch.number
        lane.untaken.append(batch)
        lane.events += len(batch)
        return True

    def group(self, events_at_most: int, bytes_at_most: int) -> list[Batch]:
        """The next batches to be taken together: of one lane, consecutive, one at least if anything waits.

        The lane is the one whose next batch stands first in the journal, so no lane starves another.
        """
        heads = [lane.untaken for lane in self._lanes.values() if lane.untaken]
        if not heads:
            return []
        chosen: list[Batch] = []
        for batch in min(heads, key=lambda untaken: untaken[0].ready_lsn):
            events_at_most -= len(batch)
            bytes_at_most -= _bytes(batch)
            if chosen and (events_at_most < 0 or bytes_at_most < 0):
                break
            chosen.append(batch)
        return chosen

    def took(self, group: Sequence[Batch]) -> None:
        """The sink holds the group, the front of what was untaken."""
        lane = self._lanes[group[0].lane]
        for batch in group:
            assert lane.untaken[0] is batch
            lane.taken.append(lane.untaken.popleft())

    def again(self) -> None:
        """The sink may have lost what it held: everything that is not durable is untaken."""
        for lane in self._lanes.values():
            lane.untaken.extendleft(reversed(lane.taken))
            lane.taken.clear()

    def advance(self, name: Lane, number: int, now_ns: int) -> bool:
        """The sink holds the lane durably up to `number`. Whether the lane's position moved."""
        lane = self._lanes.get(name)
        if lane is None:
            return False
        for queue in (lane.taken, lane.untaken):
            while queue and queue[0].number <= number:
                batch = queue.popleft()
                lane.events -= len(batch)
                lane.delivered_batches += 1
                lane.delivered_events += len(batch)
        return self._move(lane, number, now_ns)

    def refuse(self, group: Sequence[Batch], now_ns: int, events: Mapping[int, int] | None = None) -> None:
        """The sink will never take these; they leave, and count as settled once all before them are durable.

        `events`: how many of a batch's events are refused, by its number; the others count as delivered.
        """
        lane = self._lanes[group[0].lane]
        gone = {batch.number for batch in group}
        for batch in group:
            lane.events -= len(batch)
            lane.refused_batches += 1
            refused = len(batch) if events is None else events[batch.number]
            lane.refused_events += refused
            lane.delivered_events += len(batch) - refused
        lane.taken = deque(batch for batch in lane.taken if batch.number not in gone)
        lane.untaken = deque(batch for batch in lane.untaken if batch.number not in gone)
        lane.refused |= gone
        self._move(lane, lane.reached, now_ns)

    @staticmethod
    def _move(lane: _Lane, number: int, now_ns: int) -> bool:
        queue = lane.taken or lane.untaken
        passed = {each for each in lane.refused if not queue or each < queue[0].number}
        lane.refused -= passed
        target = max(number, *passed) if passed else number
        if target <= lane.reached:
            return False
        lane.reached = target
        lane.advanced_at_ns = now_ns
        return True

    def reached(self, name: Lane) -> int:
        """Number of the last batch of a lane that is settled."""
        return self._lanes[name].reached

    @property
    def empty(self) -> bool:
        """Nothing is left that is not durable."""
        return not any(lane.taken or lane.untaken for lane in self._lanes.values())

    @property
    def holding(self) -> bool:
        """The sink holds something that is not durable."""
        return any(lane.taken for lane in self._lanes.values())

    @property
    def idle(self) -> bool:
        """Nothing waits to be taken."""
        return not any(lane.untaken for lane in self._lanes.values())

    def state(self) -> dict[Lane, LaneState]:
        """What an observer sees, by lane."""
        return {name: self._state(lane) for name, lane in self._lanes.items()}

    @staticmethod
    def _state(lane: _Lane) -> LaneState:
        queue = lane.taken or lane.untaken
        return LaneState(
            batches=len(lane.taken) + len(lane.untaken),
            events=lane.events,
            oldest_instant_ns=queue[0].instant_ns if queue else None,
            reached=lane.reached,
            advanced_at_ns=lane.advanced_at_ns,
            delivered_batches=lane.delivered_batches,
            delivered_events=lane.delivered_events,
            refused_batches=lane.refused_batches,
            refused_events=lane.refused_events,
        )

    def check(self) -> None:
        """Assert that numbers ascend above the position, that counts are right, and that nothing is in two places."""
        for name, lane in self._lanes.items():
            queue = [*lane.taken, *lane.untaken]
            numbers = [batch.number for batch in queue]
            assert all(batch.lane == name for batch in queue)
            assert all(first < later for first, later in pairwise([lane.reached, *numbers]))
            assert not numbers or numbers[-1] <= lane.offered
            assert lane.events == sum(map(len, queue))
            assert not lane.refused & set(numbers)
            assert all(number > lane.reached for number in lane.refused)
            assert queue or not lane.refused


def _bytes(batch: Batch) -> int:
    return int(batch.refs["length"].sum()) + sum(entry.length for entry in batch.entries)

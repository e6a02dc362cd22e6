"""Laws of delivery: whatever a sink does, every batch ends in it once or is refused once, in order, and is reported.

And of what waits: any sequence of its operations keeps its invariants and agrees with a plain list.
"""

from __future__ import annotations

import asyncio
import random
from collections.abc import Sequence

from helpers_delivery import ScriptedSink
from helpers_sinks import HeldLines, VirtualTime
from hypothesis import given
from hypothesis import strategies as st
from strandline.core.columns import Batch, Lane
from strandline.errors import SinkRetry
from strandline.sinks.delivery import Delivery
from strandline.sinks.waiting import Waiting

LANES: tuple[Lane, ...] = ("ordered", "late")
STEPS = st.sampled_from(["ok", "retry", "fault", "kept", "buffer"])


class Scenario:
    """One delivery whose reports are judged as they come."""

    def __init__(self, steps: list[str], never: set[int], flush_after_s: float, known: int, group: int) -> None:
        self.sink = ScriptedSink(LANES, never)
        self.sink.flush_after_s = flush_after_s
        self.sink.durable = {lane: list(range(1, known + 1)) for lane in LANES}
        troubles = {"retry": SinkRetry("down", 1.5), "fault": ValueError("a fault")}
        self.sink.script.extend(troubles.get(step, step) for step in steps)
        self.time = VirtualTime()
        self.reported = dict.fromkeys(LANES, 0)
        self.refused: dict[Lane, list[int]] = {lane: [] for lane in LANES}
        self.known = known
        self.delivery = Delivery(
            "river-store",
            self.sink,
            HeldLines(),
            clock=self.time,
            random_source=random.Random(1),
            on_taken=self._taken,
            on_refused=self._refused,
            sleep=self.time.sleep,
            group_events_at_most=group,
        )
        self.sink.watch = self.delivery.check

    def _taken(self, name: str, lane: Lane, number: int) -> None:
        """A report is true when it is made, and never goes back."""
        assert number > self.reported[lane]
        self.reported[lane] = number
        settled = set(self.sink.durable[lane]) | set(self.refused[lane])
        assert settled >= set(range(1, number + 1))

    async def _refused(self, name: str, batches: Sequence[Batch], detail: str) -> None:
        self.refused[batches[0].lane] += [batch.number for batch in batches]


@given(
    steps=st.lists(STEPS, max_size=25),
    offers=st.lists(st.tuples(st.sampled_from(LANES), st.integers(0, 5), st.booleans()), max_size=20),
    never=st.sets(st.integers(1, 12), max_size=4),
    flush_after_s=st.sampled_from([0.0, 3.0]),
    known=st.integers(0, 3),
    group=st.integers(1, 12),
)
def test_every_batch_is_settled_once_and_in_order(
    steps: list[str],
    offers: list[tuple[Lane, int, bool]],
    never: set[int],
    flush_after_s: float,
    known: int,
    group: int,
) -> None:
    async def run() -> None:
        at = Scenario(steps, {number for number in never if number > known}, flush_after_s, known, group)
        lines = HeldLines()
        last = dict.fromkeys(LANES, 0)
        at.delivery.start()
        for lane, rows, pause in offers:
            last[lane] += 1
            at.delivery.offer(lines.batch(lane, last[lane], rows))
            if pause:
                await at.time.advance(0.7)
                at.delivery.check()
        await at.time.advance(40 * 30.0)
        at.delivery.check()
        for lane in LANES:
            assert at.reported[lane] == max(last[lane], known)
            assert at.sink.durable[lane] == [n for n in range(1, max(last[lane], known) + 1) if n not in at.sink.never]
            assert at.refused[lane] == [n for n in range(1, last[lane] + 1) if n in at.sink.never]
        state = at.delivery.state()
        assert not any(lane.batches for lane in state.lanes.values()) and state.failing_since_ns is None
        await at.delivery.close()

    asyncio.run(run())


@given(
    st.lists(
        st.one_of(
            st.tuples(st.just("offer"), st.sampled_from(LANES), st.integers(1, 3)),
            st.tuples(st.just("take"), st.just("ordered"), st.integers(1, 9)),
            st.tuples(st.just("advance"), st.sampled_from(LANES), st.integers(0, 20)),
            st.tuples(st.just("again"), st.just("ordered"), st.just(0)),
            st.tuples(st.just("refuse"), st.just("ordered"), st.integers(1, 3)),
        ),
        max_size=60,
    )
)
def test_what_waits_agrees_with_a_plain_list(steps: list[tuple[str, Lane, int]]) -> None:
    lines = HeldLines()
    waiting = Waiting(LANES)
    offered = dict.fromkeys(LANES, 0)
    left: dict[Lane, list[int]] = {lane: [] for lane in LANES}
    for step, lane, count in steps:
        if step == "offer":
            offered[lane] += count  # numbers may have gaps
            if waiting.offer(lines.batch(lane, offered[lane], count)):
                left[lane].append(offered[lane])
        elif step == "take":
            group = waiting.group(count, 10_000)
            if group:
                waiting.took(group)
        elif step == "advance":
            waiting.advance(lane, count, 5)
            left[lane] = [number for number in left[lane] if number > count]
        elif step == "again":
            waiting.again()
            assert not waiting.holding
        elif group := waiting.group(count, 10_000):
            waiting.refuse(group, 5)
            gone = {batch.number for batch in group}
            left[group[0].lane] = [number for number in left[group[0].lane] if number not in gone]
        waiting.check()
        state = waiting.state()
        assert {each: state[each].batches for each in LANES} == {each: len(left[each]) for each in LANES}
        assert waiting.empty == (not any(left.values()))
    waiting.again()
    seen: dict[Lane, list[int]] = {each: [] for each in LANES}
    while group := waiting.group(2, 10_000):
        seen[group[0].lane] += [batch.number for batch in group]
        waiting.took(group)
    assert seen == left

"""What every sink must do, whatever its store: a suite that each kind of sink inherits.

A subclass says how its sink is made (`make`) and reads its store back (`stored`), nothing else. The store's own
format, its errors and its speed are tested beside each kind.
"""

from __future__ import annotations

import asyncio
import contextlib
import tempfile
from pathlib import Path
from typing import Any

import pytest
from helpers_sinks import HeldLines
from hypothesis import given, settings
from hypothesis import strategies as st
from strandline.core.columns import Batch, Lane
from strandline.errors import StrandlineError
from strandline.ports import Sink

HOSTILE = [
    "quote' double\" back\\slash",
    "line\nfeed\ttab\rreturn",
    "nul\0inside",
    "../../up",
    ".",
    "..",
    "",
    "%2E~x",
    "'; DROP TABLE events; --",
    "x" * 256,
    "ü" * 128,
    "a-ordered-00000000000000000001-00000000000000000001.ndjson",
]

STEPS = st.lists(
    st.one_of(
        st.tuples(st.just("take"), st.integers(0, 1), st.integers(1, 4)),
        st.tuples(st.just("fail"), st.integers(0, 1), st.integers(1, 4)),
        st.tuples(st.just("flush"), st.just(0), st.just(0)),
        st.tuples(st.just("reopen"), st.just(0), st.just(0)),
    ),
    max_size=12,
)


class SinkConformance:
    """Inherit, and give `make` and `stored`."""

    examples = 40

    def make(self, place: Path, feed: str) -> Sink:
        """A sink for this feed whose store lies in `place`."""
        raise NotImplementedError

    def stored(self, place: Path, feed: str, lane: Lane) -> list[tuple[Any, ...]]:
        """What the store durably holds of a lane, in its order, as `HeldLines.expected` gives it."""
        raise NotImplementedError

    async def _deliver(self, sink: Sink, lines: HeldLines, batches: list[Batch], group: int = 3) -> None:
        for start in range(0, len(batches), group):
            await sink.take(batches[start : start + group], lines)
        await sink.flush(lines)

    # ---- laws -------------------------------------------------------------------------------------------------------

    def test_whatever_happens_each_event_is_there_once(self) -> None:
        """Any sequence of takes, failing takes, flushes and new starts; then all is offered again."""

        @settings(max_examples=self.examples, deadline=None)
        @given(STEPS)
        def law(steps: list[tuple[str, int, int]]) -> None:
            with tempfile.TemporaryDirectory() as place:
                asyncio.run(self._law(Path(place), steps))

        law()

    async def _law(self, place: Path, steps: list[tuple[str, int, int]]) -> None:
        lines = HeldLines()
        sink = self.make(place, "river")
        lanes = sink.lanes
        everything = {lane: lines.batches(lane, range(1, 9), 2) for lane in lanes}
        told = {lane: (await sink.open()).get(lane, 0) for lane in lanes}
        after = dict(told)  # the next take begins above this
        for step, which, count in steps:
            lane = lanes[which]
            answer: dict[Lane, int] = {}
            group = [batch for batch in everything[lane] if batch.number > after[lane]][:count]
            if step == "take" and group:
                answer = await sink.take(group, lines)
                after[lane] = group[-1].number
            elif step == "fail" and group:
                lines.fail_at = group[-1].number
                with contextlib.suppress(RuntimeError):  # none comes where the sink still holds that batch
                    answer = await sink.take(group, lines)
                lines.fail_at = None
                after = dict(told)
            elif step == "flush":
                answer = await sink.flush(lines)
            elif step == "reopen":
                await sink.close()
                sink = self.make(place, "river")
                answer = await sink.open()
                assert all(answer.get(lane, 0) >= told[lane] for lane in lanes)
                after = {lane: answer.get(lane, 0) for lane in lanes}
            told = {lane: max(told[lane], answer.get(lane, 0)) for lane in lanes}
        for lane in lanes:
            await self._deliver(sink, lines, everything[lane])
        await sink.close()
        for lane in lanes:
            assert self.stored(place, "river", lane) == lines.expected(everything[lane])

    # ---- cases ------------------------------------------------------------------------------------------------------

    async def test_a_new_store_holds_nothing(self, tmp_path: Path) -> None:
        sink = self.make(tmp_path, "river")
        answer = await sink.open()
        assert set(answer) <= set(sink.lanes) and not any(answer.values())
        await sink.close()
        assert all(self.stored(tmp_path, "river", lane) == [] for lane in sink.lanes)

    async def test_order_is_kept_and_lanes_stay_apart(self, tmp_path: Path) -> None:
        lines = HeldLines()
        sink = self.make(tmp_path, "river")
        await sink.open()
        offered = {lane: lines.batches(lane, [1, 2, 5, 6], 20) for lane in sink.lanes}
        for index in range(4):
            for lane in sink.lanes:
                await sink.take(offered[lane][index : index + 1], lines)
        await sink.flush(lines)
        await sink.close()
        for lane in sink.lanes:
            assert self.stored(tmp_path, "river", lane) == lines.expected(offered[lane])

    async def test_the_position_outlives_the_process(self, tmp_path: Path) -> None:
        lines = HeldLines()
        for last in (3, 7):
            sink = self.make(tmp_path, "river")
            await sink.open()
            for lane in sink.lanes:
                await self._deliver(sink, lines, lines.batches(lane, range(last - 2, last + 1)))
            await sink.close()
            again = self.make(tmp_path, "river")
            assert await again.open() == dict.fromkeys(sink.lanes, last)
            await again.close()

    async def test_a_repeat_is_recognised(self, tmp_path: Path) -> None:
        lines = HeldLines()
        sink = self.make(tmp_path, "river")
        await sink.open()
        for lane in sink.lanes:
            batches = lines.batches(lane, range(1, 6))
            await self._deliver(sink, lines, batches[:3])
            assert (await sink.take(batches[:2], lines))[lane] == 3  # all known
            await self._deliver(sink, lines, batches, group=5)  # some known
            await self._deliver(sink, lines, batches[4:])
            assert self.stored(tmp_path, "river", lane) == lines.expected(batches)
        await sink.close()

    async def test_a_failed_take_is_taken_once_in_the_end(self, tmp_path: Path) -> None:
        lines = HeldLines()
        sink = self.make(tmp_path, "river")
        await sink.open()
        for lane in sink.lanes:
            batches = lines.batches(lane, range(1, 6))
            await sink.take(batches[:1], lines)
            for broken in (3, 4, 5):
                lines.fail_at = broken
                with pytest.raises(RuntimeError):
                    await sink.take(batches, lines)
            lines.fail_at = None
            await self._deliver(sink, lines, batches)
            assert self.stored(tmp_path, "river", lane) == lines.expected(batches)
        await sink.close()

    async def test_a_cancelled_take_is_taken_once_in_the_end(self, tmp_path: Path) -> None:
        for lane in self.make(tmp_path, "river").lanes:
            lines = HeldLines()
            sink = self.make(tmp_path, "river")
            await sink.open()
            batches = lines.batches(lane, range(1, 6))
            lines.hold_at = 3
            task = asyncio.create_task(sink.take(batches, lines))
            await asyncio.to_thread(lines.entered.wait)
            task.cancel()
            with pytest.raises(asyncio.CancelledError):
                await task
            lines.go_on.set()
            await sink.close()  # waits for what still runs
            sink = self.make(tmp_path, "river")
            await sink.open()
            await self._deliver(sink, lines, batches)
            assert self.stored(tmp_path, "river", lane) == lines.expected(batches)
            await sink.close()

    async def test_several_feeds_and_hostile_names_in_one_store(self, tmp_path: Path) -> None:
        sinks, all_lines, offered = {}, {}, {}
        for feed in HOSTILE:
            sinks[feed] = self.make(tmp_path, feed)
            await sinks[feed].open()
            all_lines[feed] = HeldLines(HOSTILE)
        for number in (1, 2):
            for feed, sink in sinks.items():
                for lane in sink.lanes:
                    batch = all_lines[feed].batch(lane, number, len(HOSTILE) * 2, text=f"feed {HOSTILE.index(feed)}")
                    offered.setdefault((feed, lane), []).append(batch)
                    await sink.take([batch], all_lines[feed])
        for feed, sink in sinks.items():
            await sink.flush(all_lines[feed])
            await sink.close()
        for (feed, lane), batches in offered.items():
            assert self.stored(tmp_path, feed, lane) == all_lines[feed].expected(batches)
            again = self.make(tmp_path, feed)
            assert (await again.open())[lane] == 2
            await again.close()

    async def test_an_empty_batch_moves_the_position(self, tmp_path: Path) -> None:
        lines = HeldLines()
        sink = self.make(tmp_path, "river")
        await sink.open()
        for lane in sink.lanes:
            batches = [lines.batch(lane, 1, 2), lines.batch(lane, 2, 0)]
            await self._deliver(sink, lines, batches)
            await self._deliver(sink, lines, [lines.batch(lane, 3, 0)])
            assert (await sink.take(batches, lines))[lane] == 3
            assert self.stored(tmp_path, "river", lane) == lines.expected(batches)
        await sink.close()

    async def test_a_batch_of_fifty_thousand(self, tmp_path: Path) -> None:
        lines = HeldLines()
        sink = self.make(tmp_path, "river")
        await sink.open()
        for lane in sink.lanes:
            batches = [lines.batch(lane, 1, 50_000), lines.batch(lane, 2, 49)]
            await self._deliver(sink, lines, batches)
            assert self.stored(tmp_path, "river", lane) == lines.expected(batches)
        await sink.close()

    async def test_closing_without_a_flush_loses_nothing_that_was_told(self, tmp_path: Path) -> None:
        lines = HeldLines()
        sink = self.make(tmp_path, "river")
        await sink.open()
        told: dict[Lane, int] = {}
        offered = {lane: lines.batches(lane, range(1, 4)) for lane in sink.lanes}
        for lane in sink.lanes:
            told |= await sink.take(offered[lane], lines)
        await sink.close()
        await sink.close()  # a second time does nothing
        again = self.make(tmp_path, "river")
        reached = await again.open()
        for lane in again.lanes:
            assert reached.get(lane, 0) >= told.get(lane, 0)
            await self._deliver(again, lines, offered[lane])
        await again.close()
        assert all(self.stored(tmp_path, "river", lane) == lines.expected(offered[lane]) for lane in sink.lanes)

    async def test_a_take_of_nothing_changes_nothing(self, tmp_path: Path) -> None:
        sink = self.make(tmp_path, "river")
        await sink.open()
        assert not any((await sink.take([], HeldLines())).values())
        assert not any((await sink.flush(HeldLines())).values())
        await sink.close()

    async def test_mixed_lanes_and_disorder_are_errors(self, tmp_path: Path) -> None:
        lines = HeldLines()
        sink = self.make(tmp_path, "river")
        await sink.open()
        first, second = sink.lanes
        for wrong in (
            [lines.batch(first, 1, 1), lines.batch(second, 2, 1)],
            [lines.batch(first, 2, 1), lines.batch(first, 1, 1)],
            [lines.batch(first, 1, 1), lines.batch(first, 1, 1)],
        ):
            with pytest.raises(StrandlineError, match="one lane"):
                await sink.take(wrong, lines)
        await sink.flush(lines)
        await sink.close()
        assert all(self.stored(tmp_path, "river", lane) == [] for lane in sink.lanes)

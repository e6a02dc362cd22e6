"""Delivery into a sink that has a refused batch in part, and what a sink counts, as observers see it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from helpers_delivery import ScriptedSink, desk
from strandline.core.columns import Batch, Lane
from strandline.errors import SinkRefused
from strandline.ports import Counting, Lines
from strandline.repairing import WithoutLate


class PartialSink(ScriptedSink):
    """Has batch 2 but for its rows 0 and 3, and says so once; counts."""

    told = 0

    async def take(self, batches: Sequence[Batch], lines: Lines) -> dict[Lane, int]:
        if any(batch.number == 2 for batch in batches) and not self.told:
            self.told += 1
            raise SinkRefused("two of them are too old", [2], {2: [0, 3]})
        return await super().take(batches, lines)

    def counts(self) -> Mapping[str, int]:
        return {"too_old": self.told}


async def test_only_the_refused_rows_of_a_batch_are_handed_over() -> None:
    handed: list[tuple[list[int], list[int]]] = []
    async with desk(PartialSink()) as at:

        async def keep(name: str, batches: Sequence[Batch], detail: str) -> None:
            handed.append(([batch.number for batch in batches], [int(ref["place"]) for ref in batches[0].refs]))

        at.delivery._on_refused = keep
        at.offer("ordered", 1, 2, 3, rows=5)
        await at.settled()
        assert handed == [([2], [5, 8])]  # places of rows 0 and 3 of the second five
        state = at.delivery.state()
        lane = state.lanes["ordered"]
        assert (lane.refused_batches, lane.refused_events) == (1, 2)
        assert (lane.delivered_events, lane.batches, lane.reached) == (13, 0, 3)
        assert state.counts == {"too_old": 1}


async def test_a_sink_that_counts_is_heard_through_its_wrapper_too() -> None:
    counting, silent = PartialSink(), ScriptedSink()
    assert isinstance(counting, Counting) and not isinstance(silent, Counting)
    for sink, expected in ((counting, {"too_old": 0}), (silent, {})):
        assert WithoutLate(sink).counts() == expected
        async with desk(sink) as at:
            assert at.delivery.state().counts == expected

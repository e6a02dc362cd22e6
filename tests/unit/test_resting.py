"""A feed that holds nothing and owes nothing is ticked at one beat in eight, any other at each."""

from __future__ import annotations

from pathlib import Path

from helpers_service import configuration, eventually, running
from strandline.resting import RESTING_TICKS, Beats, rests


async def test_who_rests_and_how_often_it_is_ticked(tmp_path: Path) -> None:
    async with running(configuration(tmp_path, slack="1h")) as service:
        runtime, beats = service.runtime, Beats()
        feeds = [("a", runtime), ("b", runtime)]
        await eventually(lambda: rests(runtime))
        ticked = [[name for name, _ in beats.due(feeds)] for _ in range(2 * RESTING_TICKS)]
        assert sorted(name for names in ticked for name in names) == ["a", "a", "b", "b"]
        assert max(map(len, ticked)) == 1, "spread over the beats"
        await service.send([1])
        assert runtime.feed.state.runs.held == 1
        assert not rests(runtime)
        for _ in range(RESTING_TICKS):
            assert [name for name, _ in beats.due(feeds)] == ["a", "b"], "what is held is looked after at each beat"

"""A feed that holds nothing and owes nothing is ticked when something can become due, and seldom else."""

from __future__ import annotations

from collections.abc import Iterable
from pathlib import Path

from helpers_service import configuration, eventually, running
from helpers_sinks import START_NS, VirtualTime
from msgspec.structs import replace
from strandline.core.settings import SECOND_NS
from strandline.resting import RESTING_TICKS, UNEASY_TICKS, Beats, is_easy, rests
from strandline.runtime import FeedRuntime


def names_due(beats: Beats, feeds: Iterable[tuple[str, FeedRuntime]]) -> list[str]:
    return [name for name, _ in beats.due(feeds)]


async def test_who_rests_and_how_often_it_is_ticked(tmp_path: Path) -> None:
    clock = VirtualTime()
    async with running(configuration(tmp_path, slack="1h"), clock=clock) as service:
        runtime, beats = service.runtime, Beats(clock)
        feeds = [("a", runtime), ("b", runtime)]
        await eventually(lambda: rests(runtime) and is_easy(runtime))
        ticked = [names_due(beats, feeds) for _ in range(2 * RESTING_TICKS)]
        assert sorted(name for names in ticked for name in names) == ["a", "a", "b", "b"]
        assert max(map(len, ticked)) == 1, "spread over the beats"
        await service.send([1])
        assert runtime.feed.state.runs.held == 1
        assert not rests(runtime)
        for _ in range(RESTING_TICKS):
            assert names_due(beats, feeds) == ["a", "b"], "what is held is looked after at each beat"


async def test_a_folder_that_wants_something_is_looked_after_sooner(tmp_path: Path) -> None:
    clock = VirtualTime()
    async with running(configuration(tmp_path), clock=clock) as service:
        runtime, beats = service.runtime, Beats(clock)
        await eventually(lambda: rests(runtime) and is_easy(runtime))
        runtime.config = replace(runtime.config, lanes_at_most_bytes=-1)  # less than the lanes take
        assert not is_easy(runtime)
        ticked = [names_due(beats, [("a", runtime)]) for _ in range(2 * UNEASY_TICKS)]
        assert sum(map(len, ticked)) == 2


async def test_a_folder_whose_snapshots_come_due_by_the_clock_is_looked_after_sooner(tmp_path: Path) -> None:
    clock = VirtualTime()
    async with running(configuration(tmp_path), clock=clock) as service:
        runtime, beats = service.runtime, Beats(clock)
        await eventually(lambda: rests(runtime) and is_easy(runtime))
        runtime.commit.saves_every_ns = 30 * SECOND_NS  # as a partition's: a tick in ten seconds would make it forty
        ticked = [names_due(beats, [("a", runtime)]) for _ in range(2 * UNEASY_TICKS)]
        assert sum(map(len, ticked)) == 2


async def test_a_resting_feed_is_ticked_at_the_beat_at_which_a_source_falls_idle(tmp_path: Path) -> None:
    clock = VirtualTime()
    async with running(configuration(tmp_path, idle_after="30s"), clock=clock) as service:
        runtime, beats = service.runtime, Beats(clock)
        await service.send([0])
        await eventually(lambda: rests(runtime) and is_easy(runtime))
        feeds, sources = [("a", runtime)], runtime.feed.state.sources
        names_due(beats, feeds)
        clock.now = START_NS + 30 * SECOND_NS - 1
        ticked = [names_due(beats, feeds) for _ in range(RESTING_TICKS)]
        assert sum(map(len, ticked)) == 1, "not before it is time"
        clock.now += 1
        for _, due in beats.due(feeds):
            due.tick()
        assert sources.idle_count() == 1
        await eventually(lambda: rests(runtime))
        assert sum(len(names_due(beats, feeds)) for _ in range(RESTING_TICKS)) == 1


async def test_a_feed_that_is_gone_is_not_remembered(tmp_path: Path) -> None:
    clock = VirtualTime()
    async with running(configuration(tmp_path), clock=clock) as service:
        runtime, beats = service.runtime, Beats(clock)
        await eventually(lambda: rests(runtime))
        for feeds in ([("a", runtime), ("b", runtime), ("c", runtime)], [("a", runtime)]):
            for _ in range(3):
                names_due(beats, feeds)
        assert len(beats._resting) <= 1

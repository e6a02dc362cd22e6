"""P3 in order: the ordered output never goes back in event time, across restarts too, and equal times keep their order.

Random histories of requests, ticks, promises, excuses, drains, stops and crashes. Outside opinions: Python's own stable
sort, and the load generator's judge, which shares no code with the service.
"""

from __future__ import annotations

import numpy as np
from helpers_history import History, Player, histories, some_settings
from hypothesis import event, given, settings
from strandline.core.settings import Settings
from strandline_loadgen.checker import judge
from strandline_loadgen.evidence import Rows, Sent


@settings(max_examples=300)
@given(some_settings, histories)
def test_the_output_is_in_order_at_every_moment_and_across_restarts(chosen: Settings, history: History) -> None:
    player = Player(chosen).play(history)
    out = player.times("ordered")
    assert out == sorted(out)
    assert list(player.batches["ordered"]) == sorted(player.batches["ordered"])
    event(f"{min(player.restarts, 3)} restarts")


@settings(max_examples=300)
@given(some_settings, histories)
def test_all_that_was_accepted_comes_out_as_a_stable_sort_gives_it(chosen: Settings, history: History) -> None:
    player = Player(chosen).play(history).end()
    late, aside = set(player.lines("late")), set(player.lines("quarantine"))
    accepted = [row for row in player.kept() if row[1] not in late | aside]
    assert player.lines("ordered") == [line for _, line in sorted(accepted, key=lambda row: row[0])]


@settings(max_examples=150)
@given(some_settings, histories)
def test_the_judge_finds_nothing_out_of_order_lost_or_twice(chosen: Settings, history: History) -> None:
    player = Player(chosen).play(history).end()
    kept = player.kept()
    number = {line: index for index, (_, line) in enumerate(kept)}
    aside = [number[line] for line in player.lines("quarantine") if line in number]

    def rows(lane: str) -> Rows:
        return Rows.of([(number[line], kept[number[line]][0], 0) for line in player.lines(lane)])

    sent = Sent(Rows.of([(index, time, 0) for index, (time, _) in enumerate(kept)]), requests_of(kept))
    verdict = judge(sent, rows("ordered"), rows("late"), quarantined=np.array(aside, dtype=np.int64), duplicates=0)
    assert verdict.ok, str(verdict)


def requests_of(kept: list[tuple[int, bytes]]) -> np.ndarray:
    """Which request brought each event: the first number of its line."""
    return np.array([int(line.split(b".")[0]) for _, line in kept], dtype=np.int64)

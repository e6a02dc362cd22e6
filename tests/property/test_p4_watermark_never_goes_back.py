"""P4 the watermark never goes back: once it stands at a time, nothing before that time enters the ordered output.

Random histories with stops and crashes; what stood before a crash but was not durable was never told to anybody.
"""

from __future__ import annotations

from helpers_feed import marks
from helpers_history import History, Player, histories, some_settings
from hypothesis import event, given, settings
from strandline.core.settings import Settings

NEVER = -(2**63)


@settings(max_examples=300)
@given(some_settings, histories)
def test_the_marks_of_a_journal_ascend(chosen: Settings, history: History) -> None:
    player = Player(chosen).play(history).end()
    found = marks(player.shell.records)
    assert found == sorted(found)
    assert found[-1:] in ([], [player.feed.state.watermark_ns])


@settings(max_examples=300)
@given(some_settings, histories)
def test_what_has_left_stands_before_all_that_still_comes(chosen: Settings, history: History) -> None:
    """After each step: everything that leaves later is at or behind the watermark that was durable then."""
    player = Player(chosen)
    told, seen = NEVER, 0
    for step, passed in history:
        player.now_ns += passed
        player.step(step)
        player.look()
        out = player.times("ordered")
        assert all(time >= told for time in out[seen:]), "released before a watermark that had been told"
        seen = len(out)
        if player.feed.durable_lsn == player.feed.next_lsn:
            assert player.feed.state.watermark_ns >= told
            told = player.feed.state.watermark_ns
    event("the watermark moved" if told > NEVER else "it never moved")


@settings(max_examples=300)
@given(some_settings, histories)
def test_late_means_before_the_watermark_that_stood(chosen: Settings, history: History) -> None:
    """And an event that is not late is never released behind one that was released before it came."""
    player = Player(chosen).play(history).end()
    for batch in player.batches["late"].values():
        assert batch.behind_ns > NEVER and all(time < batch.behind_ns for time in batch.times.tolist())
        before = [b for b in player.batches["ordered"].values() if b.ready_lsn < batch.ready_lsn]
        assert all(time <= batch.behind_ns for each in before for time in each.times.tolist())

"""Acts in a replay: folded they are what happened, decided anew they are the same, in a what-if they happen again."""

from __future__ import annotations

from pathlib import Path

from helpers_captures import captured, kept
from helpers_feed import Shell, patient
from strandline.core.settings import Settings
from strandline.replay.capture import Capture
from strandline.replay.replaying import Folding, WhatIf
from strandline.replay.verifying import LOOK_AHEAD, Verifying

SECOND = 1_000_000_000


def lived(**keys: object) -> Shell:
    """A slack of 2 s; one of 20 s is set at 103 for 10 s, while events come each second; a sink is paused; a drain."""
    shell = Shell(patient(slack_ns=2 * SECOND, **keys), sinks={"store": ["ordered", "late"]}, start_ns=100 * SECOND)
    for second in range(101, 121):
        shell.events([second * SECOND], second * SECOND)
        match second:
            case 103:
                shell.act("set_slack", 20 * SECOND, 10 * SECOND, "a storm", now_ns=103 * SECOND, who="night shift")
            case 105:
                shell.act("pause", "store", True, "its disk is changed", now_ns=105 * SECOND, who="night shift")
            case 118:
                shell.act("drain", now_ns=118 * SECOND, who="night shift", reason="the shift ends")
    for second in range(LOOK_AHEAD):
        shell.events([(122 + second) * SECOND], (122 + second) * SECOND)
    return shell


def test_a_replay_takes_them_as_what_happened(tmp_path: Path) -> None:
    shell = lived()
    with Capture(kept(tmp_path / "a.capture", captured(shell))) as capture:
        folding = Folding(capture)
        told = [time for batch in folding.batches() for time in batch.times.tolist()]
        assert told == shell.out_times("ordered")
        assert list(folding.state.acts.kept) == list(shell.feed.state.acts.kept)
        now_ns = shell.feed.state.now_ns
        assert list(folding.state.holds.history(now_ns)) == list(shell.feed.state.holds.history(now_ns))


def test_deciding_anew_decides_the_same(tmp_path: Path) -> None:
    with Capture(kept(tmp_path / "a.capture", captured(lived()))) as capture:
        verifying = Verifying(capture)
        assert sum(len(batch) for batch in verifying.batches()) > 0
        assert verifying.unlike is None and verifying.folded_only <= LOOK_AHEAD + 1


def test_in_a_what_if_they_happen_again_with_other_settings(tmp_path: Path) -> None:
    """With a slack of 0 instead of 2 s each event is let go at once, but for the time in which 20 s were set."""
    chosen: Settings = patient(slack_ns=0)
    with Capture(kept(tmp_path / "a.capture", captured(lived()))) as capture:
        what_if = WhatIf(capture, chosen)
        released = [(batch.instant_ns // SECOND, len(batch)) for batch in what_if.batches()]
    at_once = [(second, 1) for second in range(101, 104)]
    assert released[:3] == at_once
    # What came from 104 to 112 is let go at 113, when the time of the slack that was set is over: before 113's event.
    assert released[3:5] == [(113, 9), (113, 1)]
    assert [act.act for act in what_if.feed.state.acts.kept] == ["slack", "drain"], "sinks keep up in a what-if"


def test_a_what_if_ends_the_slack_with_a_tick_where_nothing_comes(tmp_path: Path) -> None:
    shell = Shell(patient(slack_ns=2 * SECOND), start_ns=100 * SECOND)
    shell.events([101 * SECOND], 101 * SECOND)
    shell.act("set_slack", 20 * SECOND, 10 * SECOND, "a storm", now_ns=102 * SECOND, who="night shift")
    shell.events([108 * SECOND], 108 * SECOND)
    shell.events([130 * SECOND], 130 * SECOND)
    with Capture(kept(tmp_path / "a.capture", captured(shell))) as capture:
        what_if = WhatIf(capture, patient(slack_ns=SECOND))
        released = [(batch.instant_ns, batch.times.tolist()) for batch in what_if.batches()]
    assert released[0] == (112 * SECOND, [101 * SECOND]), "at its end, not when something comes"

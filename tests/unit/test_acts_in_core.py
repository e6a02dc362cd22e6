"""Operators' acts in the core: what they let go and hold back, when they end, and that a restart knows of them."""

from __future__ import annotations

import msgspec
import numpy as np
import pytest
from helpers_feed import Shell, patient, saved_bytes
from hypothesis import given
from hypothesis import strategies as st
from strandline.core.acts import ACTS_AT_MOST, UNKNOWN
from strandline.core.effects import Answer, Deliver, Pause
from strandline.core.feed import Feed
from strandline.core.records import ExcuseRecord, Kind, decode_small, encode_small
from strandline.core.settings import Settings
from strandline.core.slack import SteeredSlack

WHO = {"who": "night shift"}


def shell_of(slack_ns: int = 10, **more: object) -> Shell:
    """A feed whose watermark stands at 90: its newest event is 100, its slack 10."""
    shell = Shell(patient(slack_ns=slack_ns, **more), sinks={"store": ["ordered", "late"]})
    shell.events([100], 100)
    return shell


def stands(shell: Shell) -> int:
    return shell.feed.state.watermark_ns


# ---- the slack for a time -------------------------------------------------------------------------------------------


def test_a_longer_slack_holds_the_watermark_where_it_stands_until_it_is_caught_up_with() -> None:
    shell = shell_of()
    shell.act("set_slack", 50, 30, "a storm", now_ns=101, **WHO)
    assert stands(shell) == 90, "it never goes back"
    shell.events([130], 110)
    assert (stands(shell), shell.feed.state.runs.held) == (90, 2)
    shell.events([150], 115)
    assert stands(shell) == 100 and shell.out_times("ordered") == [100]


def test_a_shorter_slack_lets_go_at_once() -> None:
    shell = shell_of()
    shell.act("set_slack", 0, 30, "a calm day", now_ns=101, **WHO)
    assert stands(shell) == 100 and shell.out_times("ordered") == [100]


@pytest.mark.parametrize("by", ["tick", "arrival", "promise", "taken"])
def test_it_ends_by_the_arrival_clock_and_the_configured_slack_holds_again(by: str) -> None:
    shell = shell_of()
    shell.act("set_slack", 50, 30, "a storm", now_ns=101, **WHO)
    shell.events([140], 120)
    shell.tick(130)
    assert (stands(shell), shell.feed.state.slack_ns) == (90, 50), "a moment before its end"
    match by:
        case "tick":
            shell.tick(131)
        case "arrival":
            shell.events([141], 131)
        case "promise":
            shell.act("promise", "gw-0", 1, now_ns=131)
        case "taken":
            shell.taken("store", "ordered", 1, 131)
    assert (shell.feed.state.slack_ns, stands(shell)) == (10, 131 if by == "arrival" else 130)
    assert shell.feed.snapshot(131).slack_set is None


def test_it_ends_early_when_it_is_told_to() -> None:
    shell = shell_of()
    shell.act("set_slack", 50, 30, "a storm", now_ns=101, **WHO)
    shell.events([140], 102)
    assert stands(shell) == 90
    shell.act("set_slack", None, 0, "it is over", now_ns=103, **WHO)
    assert (shell.feed.state.slack_ns, stands(shell)) == (10, 130)


def test_the_last_one_that_was_set_holds() -> None:
    shell = shell_of()
    shell.act("set_slack", 50, 30, "a storm", now_ns=101, **WHO)
    shell.act("set_slack", 20, 100, "less of a storm", now_ns=102, **WHO)
    shell.events([150], 131)
    assert (shell.feed.state.slack_ns, stands(shell)) == (20, 130)
    view = shell.feed.snapshot(131)
    assert view.slack_ns == 20 and view.slack_set is not None and view.slack_set.until_ns == 202


def test_a_shorter_slack_never_takes_the_watermark_past_a_promise() -> None:
    shell = Shell(patient(slack_ns=10))
    shell.events([100], 100, "weir")
    shell.act("promise", "mill", 95, now_ns=100)
    assert stands(shell) == 90, "weir's events need the slack"
    shell.act("set_slack", 0, 30, "a calm day", now_ns=101, **WHO)
    assert stands(shell) == 95, "mill may still send from 95 on"
    shell.act("set_slack", None, 0, "back to normal", now_ns=102, **WHO)
    shell.events([120], 103, "weir")
    assert stands(shell) == 95


def test_the_hold_says_that_the_slack_was_set() -> None:
    shell = shell_of()
    assert shell.feed.snapshot(101).hold.why == "slack"
    shell.act("set_slack", 50, 30, "a storm", now_ns=101, **WHO)
    hold = shell.feed.snapshot(102).hold
    assert (hold.why, hold.since_ns) == ("slack_set", 101)


def test_settings_that_change_meanwhile_hold_once_its_time_is_over() -> None:
    shell = shell_of()
    shell.act("set_slack", 50, 30, "a storm", now_ns=101, **WHO)
    shell.do(shell.feed.start(110, shell.sinks, settings=patient(slack_ns=3)))
    shell.events([160], 120)
    assert stands(shell) == 110
    shell.tick(131)
    assert shell.feed.state.slack_ns == 3


# ---- a steered slack meanwhile --------------------------------------------------------------------------------------

SECOND = 1_000_000_000


def test_a_steered_slack_is_not_misled_by_one_that_was_set() -> None:
    """The same lateness throughout: what it learns while another slack is in force keeps it where it was."""
    generator = np.random.default_rng(7)

    def played(override_ns: int | None) -> SteeredSlack:
        steered = SteeredSlack(0.05, 60 * SECOND)
        for second in range(600):
            lateness = generator.exponential(SECOND, 50).astype(np.int64)
            aside = override_ns is not None and 200 <= second < 400
            in_force = override_ns if aside and override_ns is not None else steered.slack_ns
            late = int(np.count_nonzero(lateness > in_force))
            steered.learn(second * SECOND, len(lateness), late, lateness, set_aside=aside)
        return steered

    for override_ns in (0, 60 * SECOND, None):
        steered = played(override_ns)
        stretch = steered.stretch
        assert stretch is not None
        # The 0.95 quantile of an exponential of mean 1 s is 3.0 s.
        assert 2 * SECOND < steered.slack_ns < 4.5 * SECOND
        # The identity of `slack.md`, which holds for what the stretch counts.
        said = (steered.exact_ns - stretch.first_ns - stretch.clipped_ns) / (stretch.eta_ns * stretch.events)
        assert stretch.late / stretch.events - steered.target == pytest.approx(said, abs=1e-9)
        if override_ns == 0:
            assert steered.late > 200 * 50 * 0.9, "those that really were late are counted as well"


@given(st.lists(st.integers(0, 10**10), min_size=1, max_size=30))
def test_set_aside_makes_no_difference_where_the_slack_in_force_is_its_own(lateness: list[int]) -> None:
    one, other = SteeredSlack(0.1, 10**10), SteeredSlack(0.1, 10**10)
    for _ in range(20):
        column = np.array(lateness, dtype=np.int64)
        late = int(np.count_nonzero(column > one.slack_ns))
        one.learn(0, len(column), late, column)
        other.learn(0, len(column), late, column, set_aside=True)
    assert one.saved() == other.saved()


# ---- pauses ---------------------------------------------------------------------------------------------------------


def test_a_pause_leaves_once_it_is_durable_and_before_its_answer() -> None:
    shell = Shell(patient(), sinks={"store": ["ordered"]}, synchronous=False)
    shell.sync()
    effects = shell.feed.pause("store", True, "its disk is changed", 5, 9, "day shift")
    assert not any(isinstance(effect, Pause | Answer) for effect in effects)
    assert shell.feed.synced(shell.feed.next_lsn) == [Pause("store", True), Answer(9, None)]
    again = shell.feed.pause("store", False, "the disk is changed", 6, 10, "day shift")
    assert again and shell.feed.synced(shell.feed.next_lsn) == [Pause("store", False), Answer(10, None)]
    assert not shell.feed.state.acts.paused


def test_a_sink_that_is_not_there_cannot_be_paused() -> None:
    shell = Shell(patient(), sinks={"store": ["ordered"]})
    with pytest.raises(KeyError):
        shell.feed.pause("archive", True, "why", 1, 1, "day shift")
    assert shell.feed.next_lsn == len(shell.journal)


def test_after_a_restart_a_sink_is_paused_before_it_is_offered_anything() -> None:
    shell = Shell(patient(), sinks={"store": ["ordered"]})
    shell.events([1, 2], 1)
    shell.act("pause", "store", True, "its disk is changed", now_ns=2, who="day shift")
    feed = shell.folded()
    feed.start(3, shell.sinks)
    left = [type(effect) for effect in feed.synced(feed.next_lsn)]
    assert left[:2] == [Pause, Deliver]
    feed.start(4, {"other": ["ordered"]})
    assert not feed.state.acts.paused, "a sink that is gone is not paused any more"


def test_a_feed_that_a_paused_sink_holds_says_so() -> None:
    shell = Shell(patient(undelivered_events_at_most=1), sinks={"store": ["ordered"], "archive": ["ordered"]})
    shell.act("pause", "store", True, "its disk is changed", now_ns=1, who="day shift")
    for at in range(2, 6):
        shell.events([at], at)
        shell.taken("archive", "ordered", at - 1, at)
    hold = shell.feed.snapshot(6).hold
    assert (hold.why, hold.sink) == ("sink_paused", "store")
    shell.act("pause", "store", False, "done", now_ns=7, who="day shift")
    assert shell.feed.snapshot(7).hold.why == "sink_full"


# ---- what is kept ---------------------------------------------------------------------------------------------------


def test_acts_are_kept_with_who_and_why_and_survive_a_restart() -> None:
    shell = shell_of()
    shell.act("excuse", "gw-0", "its link is down", now_ns=101)
    shell.act("drain", now_ns=102, who="night shift", reason="the shift ends")
    shell.act("set_slack", 50, 30, "a storm", now_ns=103, **WHO)
    shell.act("pause", "store", True, "its disk is changed", now_ns=104, who="day shift")
    shell.act("drain", now_ns=105)  # the end of what is put in order, nobody's act
    told = [(act.act, act.subject, act.who, act.reason) for act in shell.feed.state.acts.newest(10)]
    assert told == [
        ("pause", "store", "day shift", "its disk is changed"),
        ("slack", "", "night shift", "a storm"),
        ("drain", "", "night shift", "the shift ends"),
        ("excuse", "gw-0", UNKNOWN, "its link is down"),
    ]
    restored = Feed(shell.settings)
    restored.restore(saved_bytes(shell.feed), shell.feed.next_lsn)
    for feed in (shell.folded(), restored):
        assert feed.state.acts.newest(10) == shell.feed.state.acts.newest(10)
        assert (feed.state.slack_ns, list(feed.state.acts.paused)) == (50, ["store"])


def test_the_last_acts_are_kept() -> None:
    shell = shell_of()
    for number in range(ACTS_AT_MOST + 5):
        shell.act("excuse", "gw-0", str(number), now_ns=200 + number, who="night shift")
    kept = shell.feed.state.acts.newest(ACTS_AT_MOST + 1)
    assert [act.reason for act in kept] == [str(number) for number in range(ACTS_AT_MOST + 4, 4, -1)]


def test_an_excuse_by_nobody_is_written_as_it_always_was() -> None:
    """So that a journal from before `who` was kept is decided byte for byte as it stands."""
    kind, body = encode_small(ExcuseRecord(7, 1, "why"))
    assert kind == Kind.EXCUSE and msgspec.msgpack.decode(body) == [7, 1, "why"]
    assert decode_small(kind, body) == ExcuseRecord(7, 1, "why", "")
    kind, body = encode_small(ExcuseRecord(7, 1, "why", "night shift"))
    assert msgspec.msgpack.decode(body) == [7, 1, "why", "night shift"]


def test_a_snapshot_from_before_acts_and_holds_were_kept_is_read() -> None:
    shell = shell_of()
    body = saved_bytes(shell.feed)
    size = int.from_bytes(body[:8], "little")
    header = msgspec.msgpack.decode(body[8 : 8 + size])
    del header["acts"], header["holds"]
    packed = msgspec.msgpack.encode(header)
    feed = Feed(Settings("river-gauges"))
    feed.restore(len(packed).to_bytes(8, "little") + packed + body[8 + size :], shell.feed.next_lsn)
    feed.check()
    feed.start(200, shell.sinks)
    feed.check()
    assert [each.why for each in feed.state.holds.history(300)] == ["slack"]

"""Cases of the feed that a law would find only by luck: limits, ends of int64, faulty callers, marks, repeats."""

from __future__ import annotations

import numpy as np
import pytest
from helpers_feed import Shell, arrival, patient, saved_bytes
from strandline.core.columns import TIME_MAX, TIME_MIN, Arrival, Fault, RequestKey
from strandline.core.records import Cause

ORDERED = {"store": ["ordered"]}


def fault(line: int = 1) -> Fault:
    return Fault(line, "malformed", "not one JSON object", b"{")


# ---- limits ---------------------------------------------------------------------------------------------------------


def test_held_events_are_bounded_and_the_refused_request_changes_nothing() -> None:
    shell = Shell(patient(slack_ns=1000, held_events_at_most=3))
    shell.events([1, 2], 1)
    before = saved_bytes(shell.feed)
    assert shell.events([3, 4], 2, "gw-new") is None
    assert shell.refusals[2].reason == "held_full" and "3" in shell.refusals[2].detail
    assert saved_bytes(shell.feed) == before and shell.feed.refusals == {"held_full": 1}
    assert shell.events([3], 3) is not None


def test_faulty_lines_are_taken_when_the_runs_are_full() -> None:
    shell = Shell(patient(slack_ns=1000, held_events_at_most=1))
    shell.events([1], 1)
    outcome = shell.events([], 2, faults=[fault()])
    assert outcome is not None and outcome.quarantined == 1


def test_late_and_quarantined_events_that_no_sink_takes_are_bounded() -> None:
    lanes = {"store": ["ordered"], "lanes": ["late", "quarantine"]}
    shell = Shell(patient(undelivered_events_at_most=4), sinks=lanes)
    shell.events([100], 1)
    for _ in range(2):
        assert shell.events([5, 6], 2) is not None
    assert shell.events([7], 3) is None
    assert shell.refusals[shell.tokens].reason == "lanes_full"
    assert shell.events([], 3, faults=[fault()]) is None
    shell.taken("lanes", "late", 1, 4)
    assert shell.events([7], 5) is not None
    assert shell.events([], 6, faults=[fault()]) is not None


def test_one_large_request_is_not_refused_for_ever() -> None:
    shell = Shell(patient(undelivered_events_at_most=2), sinks={"lanes": ["late"]})
    assert shell.events([1, 2, 3, 4], 1) is not None


def test_sources_are_bounded() -> None:
    shell = Shell(patient(sources_at_most=2))
    assert shell.events([1, 2], 1, ["a", "b"]) is not None
    assert shell.events([3], 1, "c") is None
    shell.act("promise", "c", 1, now_ns=1)
    assert [refusal.reason for refusal in shell.refusals.values()] == ["sources_full"] * 2
    assert shell.events([4], 1, "a") is not None


def test_no_mark_while_a_sink_is_full_and_marks_again_once_it_takes() -> None:
    shell = Shell(patient(undelivered_events_at_most=1), sinks=ORDERED)
    shell.events([1, 2], 1)
    assert shell.out_times("ordered") == [1, 2]
    shell.events([3], 2)
    shell.tick(3)
    assert shell.feed.snapshot(3).hold.why == "sink_full" and shell.out_times("ordered") == [1, 2]
    assert shell.feed.state.watermark_ns == 2
    shell.taken("store", "ordered", 1, 4)
    assert shell.out_times("ordered") == [1, 2, 3]


def test_the_same_position_said_twice_is_journaled_once() -> None:
    shell = Shell(patient(), sinks=ORDERED)
    shell.events([1], 1)
    shell.taken("store", "ordered", 1, 2)
    before = len(shell.records)
    shell.taken("store", "ordered", 1, 3)
    shell.taken("gone", "ordered", 1, 3)
    assert len(shell.records) == before


def test_a_release_is_split_into_batches() -> None:
    shell = Shell(patient(slack_ns=50, batch_events_at_most=3), sinks=ORDERED)
    shell.events(list(range(8)), 1)
    shell.act("drain", now_ns=2)
    assert [len(batch) for batch in shell.batches["ordered"]] == [3, 3, 2]
    assert [batch.number for batch in shell.batches["ordered"]] == [1, 2, 3]


# ---- faulty callers: nothing may reach the journal ------------------------------------------------------------------


@pytest.mark.parametrize(
    "given",
    [
        arrival([1], 3),
        arrival([1], 3, new_sources=["c"]),
        arrival([1], 0, new_sources=["a"]),
        arrival([1], 2, new_sources=["c", "c"]),
        Arrival(np.zeros(2, np.int64), np.zeros(1, np.uint32), np.ones(2, np.uint32), b"x\ny\n"),
        Arrival(np.zeros(2, np.int64), np.zeros(2, np.uint32), np.ones(1, np.uint32), b"x\ny\n"),
        Arrival(np.zeros(1, np.int64), np.zeros(1, np.uint32), np.ones(1, np.uint32), b"xyz\n"),
        arrival([1, 2], 0, identities=[1]),
        arrival([1, 2], 0, line_numbers=[1, 2, 3]),
    ],
)
def test_an_arrival_that_contradicts_itself_is_refused_before_it_is_journaled(given: Arrival) -> None:
    shell = Shell(patient())
    shell.events([1, 1], 1, ["a", "b"])
    with pytest.raises(ValueError, match="arrival"):
        shell.feed.arrive(given, 2, 9)
    shell.feed.check()
    assert shell.feed.next_lsn == len(shell.journal)


def test_an_unknown_source_cannot_be_excused() -> None:
    shell = Shell(patient())
    with pytest.raises(KeyError):
        shell.feed.excuse("nobody", "why", 1, 1)
    assert shell.feed.next_lsn == len(shell.journal)


# ---- ends of int64 --------------------------------------------------------------------------------------------------


def test_the_ends_of_int64_are_ordinary_times() -> None:
    shell = Shell(patient(clock="event"), start_ns=TIME_MAX)
    shell.events([TIME_MIN, 0, TIME_MAX], TIME_MAX, ["a", "b", "c"])
    shell.events([TIME_MAX], TIME_MAX, "a")
    shell.act("drain", now_ns=TIME_MAX)
    assert shell.out_times("ordered") == [TIME_MIN, 0, TIME_MAX, TIME_MAX]


def test_lateness_at_the_ends_of_int64_does_not_wrap_round() -> None:
    shell = Shell(patient(), start_ns=TIME_MAX)
    shell.events([TIME_MAX], TIME_MAX)
    shell.events([TIME_MIN], TIME_MAX)
    counts = shell.feed.state.figures.lateness.counts
    assert counts[0] == 1 and counts[-1] == 1


def test_an_arrival_clock_near_the_start_of_int64_has_a_watermark_that_fits() -> None:
    shell = Shell(patient(clock="arrival", slack_ns=10), start_ns=TIME_MIN + 5)
    shell.events([TIME_MIN + 1], TIME_MIN + 6)
    shell.events([TIME_MIN + 15], TIME_MIN + 20)
    shell.tick(TIME_MIN + 25)
    assert shell.out_times("ordered") == [TIME_MIN + 1, TIME_MIN + 15]


def test_too_far_ahead_at_the_end_of_int64() -> None:
    shell = Shell(patient(ahead_limit_ns=10), start_ns=0)
    outcome = shell.events([TIME_MAX, 10, 11], 0)
    assert outcome is not None and (outcome.quarantined, outcome.accepted) == (2, 1)
    assert [entry.line for entry in shell.batches["quarantine"][0].entries] == [1, 3]
    assert shell.out("quarantine") == [b"1.0", b"1.2"]


# ---- marks ----------------------------------------------------------------------------------------------------------


def test_an_event_with_exactly_the_watermarks_time_follows_and_does_not_move_it() -> None:
    shell = Shell(patient())
    shell.events([10], 1)
    moved_ns, cause = shell.feed.state.marked_ns, shell.feed.state.cause
    assert shell.events([10], 50) is not None
    state = shell.feed.state
    assert shell.out("ordered") == [b"1.0", b"2.0"]
    assert (state.watermark_ns, state.marked_ns, state.cause) == (10, moved_ns, cause)


def test_a_source_that_is_behind_does_not_pull_the_watermark_back() -> None:
    shell = Shell(patient(slack_ns=1))
    shell.events([10], 1, "a")
    outcome = shell.events([3, 9], 2, "b")
    assert outcome is not None and (outcome.late, outcome.accepted) == (1, 1)
    assert shell.feed.state.watermark_ns == 9 and shell.out_times("ordered") == [9]


def test_a_feed_that_falls_silent_drains() -> None:
    shell = Shell(patient(slack_ns=100, hold_at_most_ns=30, idle_after_ns=10))
    shell.events([5, 50], 1)
    for now in range(2, 31):
        shell.tick(now)
        assert not shell.batches["ordered"]
    shell.tick(31)
    assert shell.out_times("ordered") == [5, 50]
    assert shell.feed.state.cause is Cause.HOLD_AT_MOST


def test_a_longer_hold_never_lets_an_event_go_before_its_time() -> None:
    settings = patient(slack_ns=1000, hold_at_most_ns=10, undelivered_events_at_most=1)
    shell = Shell(settings, sinks=ORDERED)
    shell.events([1, 2], 0)
    shell.act("drain", now_ns=0)  # two events undelivered: no mark from here on
    shell.events([10], 1)
    shell.events([20], 5)
    shell.tick(20)  # both are due, but nothing may leave
    later = patient(slack_ns=1000, hold_at_most_ns=20)
    shell.do(shell.feed.start(21, ORDERED, settings=later))
    shell.tick(21)  # now only the first is due
    assert shell.feed.state.runs.held == 1


def test_an_excused_source_is_not_waited_for_until_it_speaks() -> None:
    shell = Shell(patient())
    shell.events([10, 50], 1, ["slow", "quick"])
    assert shell.out_times("ordered") == [10]
    shell.act("excuse", "slow", "its link is down", now_ns=2)
    assert shell.out_times("ordered") == [10, 50]
    shell.events([55], 3, "slow")
    shell.events([90], 4, "quick")
    assert shell.out_times("ordered") == [10, 50, 55]


def test_a_promise_beyond_the_limit_is_refused() -> None:
    shell = Shell(patient(ahead_limit_ns=10))
    token = shell.act("promise", "gw-0", 12, now_ns=1)
    assert shell.refusals[token].reason == "promise_ahead" and token not in shell.answers
    token = shell.act("promise", "gw-0", 11, now_ns=1)
    assert shell.answers[token] is None


# ---- repeats --------------------------------------------------------------------------------------------------------


def test_lateness_is_judged_against_the_state_before_the_request_when_part_of_it_is_a_repeat() -> None:
    one, other = Shell(patient(slack_ns=100)), Shell(patient(slack_ns=100))
    for shell in (one, other):
        shell.events([10], 1, identities=[7])
    one.events([50, 20], 2, identities=[8, 9])
    other.events([10, 50, 20], 2, identities=[7, 8, 9])  # the same, and one repeat
    counts = [shell.feed.state.figures.lateness.counts.tolist() for shell in (one, other)]
    assert counts[0] == counts[1] and sum(counts[0]) == 3 and counts[0][0] == 3


def test_a_request_of_repeats_only_is_a_word_of_its_sources() -> None:
    shell = Shell(patient(idle_after_ns=10, slack_ns=5))
    shell.events([100, 90], 1, ["a", "b"], identities=[1, 2])
    outcome = shell.events([90], 9, "b", identities=[2])
    assert outcome is not None and (outcome.duplicate, outcome.accepted) == (1, 0)
    shell.tick(12)
    assert not shell.feed.state.sources.is_active("a") and shell.feed.state.sources.is_active("b")


def test_a_key_is_forgotten_after_its_time_and_may_be_used_again() -> None:
    shell = Shell(patient(keys_kept_for_ns=10))
    faulty = [fault(), fault(2)]
    first = RequestKey("k", b"1")
    shell.events([1], 0, faults=faulty, key=first)
    shell.events([2], 1, key=RequestKey("other", b"2"))
    assert shell.events([1], 10, faults=faulty, key=first) == shell.answers[1]
    assert len(shell.requests) == 2  # answered from memory
    outcome = shell.events([3], 11, key=RequestKey("k", b"3"))
    assert outcome is not None and outcome.received == 1 and len(shell.requests) == 3
    assert list(shell.feed.state.keys.kept) == ["other", "k"]
    shell.events([4], 12, key=RequestKey("third", b"4"))
    assert list(shell.feed.state.keys.kept) == ["k", "third"], "the oldest go first"


def test_a_key_with_another_body_is_refused_and_one_whose_request_waits_too() -> None:
    shell = Shell(patient(), synchronous=False)
    shell.events([1], 0, key=RequestKey("k", b"1"))
    shell.events([1], 0, key=RequestKey("k", b"1"))
    assert shell.refusals[2].reason == "key_in_flight"
    shell.sync()
    assert shell.events([1], 0, key=RequestKey("k", b"1")) == shell.answers[1]
    shell.events([2], 0, key=RequestKey("k", b"2"))
    assert shell.refusals[4].reason == "key_reused"
    assert len(shell.requests) == 1

"""Cases of the feed that a law would find only by luck: reloads, restarts, limits, ends of int64, faulty callers."""

from __future__ import annotations

import numpy as np
import pytest
from helpers_feed import FOR_EVER_NS, Shell, arrival, patient, saved_bytes
from strandline.core.columns import TIME_MAX, TIME_MIN, Arrival, Fault, RequestKey
from strandline.core.effects import Answer, Deliver
from strandline.core.feed import Feed
from strandline.core.records import VERSION, Cause, Kind
from strandline.core.saved import restore

ORDERED = {"store": ["ordered"]}


def fault(line: int = 1) -> Fault:
    return Fault(line, "malformed", "not one JSON object", b"{")


# ---- waiting for a sync ---------------------------------------------------------------------------------------------


def test_nothing_leaves_before_its_record_is_durable() -> None:
    shell = Shell(patient(), sinks={"store": ["ordered", "late"]}, synchronous=False)
    shell.events([10], 1)
    assert not shell.answers and not shell.batches["ordered"]
    first = shell.sync_asked
    shell.events([20, 5], 2)
    shell.do(shell.feed.synced(first))
    assert list(shell.answers) == [1] and shell.out("ordered") == [b"1.0"] and not shell.batches["late"]
    shell.sync()
    assert list(shell.answers) == [1, 2] and shell.out("late") == [b"2.1"]


def test_new_settings_lose_no_answer_that_waits_for_a_sync() -> None:
    shell = Shell(patient(slack_ns=5), synchronous=False)
    shell.events([10, 20], 1)
    shell.do(shell.feed.start(2, ORDERED, settings=patient(slack_ns=6)))
    shell.sync()
    assert shell.answers[1] is not None and shell.answers[1].accepted == 2


def test_new_settings_lose_no_batch_of_a_lane_that_nobody_serves() -> None:
    shell = Shell(patient(), sinks={"store": ["late"]}, synchronous=False)
    shell.events([10, 20], 1)
    shell.do(shell.feed.start(2, {"store": ["late"]}, settings=patient(slack_ns=6)))
    shell.sync()
    assert shell.out("ordered") == [b"1.0", b"1.1"]


def test_batches_that_wait_for_a_sync_leave_once_when_settings_change() -> None:
    shell = Shell(patient(), sinks=ORDERED, synchronous=False)
    shell.events([10, 20], 1)
    shell.do(shell.feed.start(2, ORDERED, settings=patient(slack_ns=6)))
    shell.sync()
    assert shell.out("ordered") == [b"1.0", b"1.1"]


def test_a_lane_that_is_served_from_now_on_loses_no_batch_that_waits_for_a_sync() -> None:
    shell = Shell(patient(), sinks={}, synchronous=False)
    shell.events([10, 20], 1)
    shell.do(shell.feed.start(2, ORDERED))
    shell.sync()
    assert shell.out("ordered") == [b"1.0", b"1.1"]


def test_new_settings_deliver_nothing_again_but_what_a_new_sink_needs() -> None:
    shell = Shell(patient(), sinks={"store": ["ordered", "late"]})
    shell.events([10, 20], 1)
    shell.events([30, 5], 2)
    shell.do(shell.feed.start(3, {"store": ["ordered", "late"]}, settings=patient(slack_ns=6)))
    assert [batch.number for batch in shell.batches["ordered"]] == [1, 2]
    shell.do(shell.feed.start(4, {"store": ["ordered", "late"], "copy": ["ordered"]}))
    assert [batch.number for batch in shell.batches["ordered"]] == [1, 2, 1, 2]
    assert [batch.number for batch in shell.batches["late"]] == [1]


def test_an_empty_request_is_answered_at_once_and_not_journaled() -> None:
    shell = Shell(patient(), synchronous=False)
    before = len(shell.records)
    outcome = shell.send(arrival([]), 1)
    assert outcome is not None and outcome.received == 0 and len(shell.records) == before


# ---- start and restart ----------------------------------------------------------------------------------------------


def restarted(
    shell: Shell, now_ns: int, positions: dict[str, dict[str, int]], sinks: object = ORDERED
) -> tuple[Feed, list]:
    feed = shell.folded()
    effects = feed.start(now_ns, sinks, positions)  # type: ignore[arg-type]
    feed.check()
    return feed, effects + feed.synced(feed.next_lsn)


def test_what_a_sink_already_holds_is_not_delivered_again() -> None:
    shell = Shell(patient(), sinks=ORDERED)
    for index in range(5):
        shell.events([index], index)
    shell.taken("store", "ordered", 2, 10)
    feed, effects = restarted(shell, 20, {"store": {"ordered": 4}})
    assert [effect.batch.number for effect in effects if isinstance(effect, Deliver)] == [5]
    assert feed.state.outbox.undelivered_events == 1


def test_a_sink_that_stands_behind_its_last_word_gets_what_is_still_there() -> None:
    both = {"store": ["ordered"], "copy": ["ordered"]}
    shell = Shell(patient(), sinks=both)
    for index in range(5):
        shell.events([index], index)
    shell.taken("store", "ordered", 4, 10)
    shell.taken("copy", "ordered", 1, 10)
    feed, effects = restarted(shell, 20, {"store": {"ordered": 2}}, both)
    assert [effect.batch.number for effect in effects if isinstance(effect, Deliver)] == [2, 3, 4, 5]
    assert feed.state.outbox.positions == {"store": {"ordered": 2}, "copy": {"ordered": 1}}


def test_numbers_that_a_store_has_seen_are_not_used_again() -> None:
    shell = Shell(patient(), sinks=ORDERED)
    feed, _ = restarted(shell, 1, {"store": {"ordered": 7}})
    assert feed.state.outbox.next_number["ordered"] == 8


def test_a_lane_that_a_sink_does_not_serve_is_not_kept_for_it() -> None:
    shell = Shell(patient(), sinks=ORDERED)
    feed, _ = restarted(shell, 1, {"store": {"ordered": 0, "late": 0}, "gone": {"ordered": 3}})
    assert feed.state.outbox.positions == {"store": {"ordered": 0}}


def test_expected_sources_named_twice_are_one() -> None:
    shell = Shell(patient(expect_sources=("gw-1", "gw-1")))
    assert shell.feed.state.sources.names == ["gw-1"]


def test_new_settings_do_not_wake_an_expected_source_that_fell_idle() -> None:
    settings = patient(expect_sources=("gw-1",), idle_after_ns=10)
    shell = Shell(settings)
    shell.events([100], 15, "gw-2")
    assert shell.out_times("ordered") == [100]
    shell.do(shell.feed.start(16, {}, settings=patient(expect_sources=("gw-1", "gw-3"), idle_after_ns=10)))
    sources = shell.feed.state.sources
    assert not sources.is_active("gw-1") and sources.is_active("gw-3")


def test_a_restart_waits_for_expected_sources_again() -> None:
    settings = patient(expect_sources=("gw-1",), idle_after_ns=10)
    shell = Shell(settings)
    shell.events([100], 15, "gw-2")
    feed, _ = restarted(shell, 1000, {})
    feed.start(1000, {}, settings=settings)
    assert feed.state.sources.is_active("gw-1") and feed.state.sources.is_active("gw-2")


def test_records_are_folded_without_gaps() -> None:
    shell = Shell(patient())
    shell.events([1], 1)
    feed = shell.folded(upto=2)
    last = shell.records[-1]
    with pytest.raises(ValueError, match="position"):
        feed.fold(last.kind, VERSION, last.body, last.lsn + 8)


def test_a_newer_record_is_refused_with_its_place() -> None:
    with pytest.raises(ValueError, match="version 2 at 0"):
        Feed(patient()).fold(int(Kind.MARK), VERSION + 1, bytes(40), 0)
    with pytest.raises(ValueError, match="77"):
        Feed(patient()).fold(77, VERSION, bytes(40), 0)


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


# ---- what is saved --------------------------------------------------------------------------------------------------


def test_a_saved_state_is_not_changed_by_what_comes_after() -> None:
    shell = Shell(patient(slack_ns=100), sinks=ORDERED)
    shell.events([5, 50], 1, ["a", "b"])
    parts = shell.feed.save()
    before = b"".join(bytes(part) for part in parts)
    shell.events([200, 900], 2, ["a", "b"])
    shell.act("excuse", "a", "why", now_ns=3)
    assert b"".join(bytes(part) for part in parts) == before


def test_a_saved_state_that_is_cut_short_or_newer_is_refused() -> None:
    shell = Shell(patient(slack_ns=100), sinks={"store": ["ordered", "late", "quarantine"]})
    shell.events([5, 50], 1, faults=[fault()])
    body = saved_bytes(shell.feed)
    for size in range(len(body)):
        with pytest.raises(ValueError, match="snapshot"):
            restore(body[:size])
    with pytest.raises(ValueError, match="snapshot"):
        restore(body.replace(b"\xa7version\x01", b"\xa7version\x02"))
    with pytest.raises(ValueError, match="snapshot"):
        restore(body + b"\0")


def test_the_journal_is_needed_from_the_oldest_line_that_is_held_or_undelivered() -> None:
    shell = Shell(patient(), sinks={"store": ["ordered", "late"]})
    assert shell.feed.needed_place == shell.feed.next_lsn
    shell.events([10], 1)
    first = int(shell.batches["ordered"][0].refs["place"][0])
    shell.events([20, 3], 2)
    late = int(shell.batches["late"][0].refs["place"][0])
    assert shell.feed.needed_place == first
    shell.taken("store", "ordered", 2, 3)
    assert shell.feed.needed_place == late
    shell.taken("store", "late", 1, 3)
    assert shell.feed.needed_place == shell.feed.next_lsn
    shell.events([15, 20], 4, "gw-1")
    shell.taken("store", "late", 2, 5)
    shell.taken("store", "ordered", 3, 5)
    shell.events([30], 5)
    held = int(shell.feed.state.arrivals.oldest_place or 0)
    assert shell.feed.needed_place == held


def test_the_hold_names_who_holds_the_feed_and_since_when() -> None:
    shell = Shell(patient(idle_after_ns=100, expect_sources=("gw-1",)))
    shell.events([50], 1, "gw-0")
    view = shell.feed.snapshot(2)
    assert (view.hold.why, view.hold_source, view.hold.since_ns) == ("expected_source", "gw-1", 1)
    shell.events([10], 3, "gw-1")
    shell.events([60], 4, "gw-0")
    view = shell.feed.snapshot(4)
    assert (view.hold.why, view.hold_source, view.hold.since_ns) == ("slow_source", "gw-1", 3)
    shell.tick(30)
    assert shell.feed.snapshot(30).hold.why == "silent_source"
    assert shell.feed.snapshot(30).hold.since_ns == 30


def test_effects_come_in_an_order_in_which_they_can_be_carried_out() -> None:
    feed = Feed(patient())
    feed.start(0, {})
    effects = feed.arrive(arrival([FOR_EVER_NS // 2], 0, new_sources=["a"]), 0, 1)
    kinds = [effect.kind for effect in effects[:-1]]  # type: ignore[union-attr]
    assert kinds == [Kind.SOURCES, Kind.ARRIVAL, Kind.MARK]
    assert isinstance(feed.synced(feed.next_lsn)[-2], Answer)


# ---- the journal is the complete input ------------------------------------------------------------------------------


def test_sources_that_fell_idle_are_idle_for_whoever_folds_the_journal() -> None:
    shell = Shell(patient(idle_after_ns=10, slack_ns=5))
    shell.events([100, 20], 1, ["a", "b"])
    shell.tick(11)  # both fall idle; nothing is released by it
    assert shell.feed.state.sources.active_count() == 0
    assert saved_bytes(shell.feed) == saved_bytes(shell.folded())
    shell.do(shell.feed.start(12, {}, settings=patient(idle_after_ns=100, slack_ns=5)))
    assert saved_bytes(shell.feed) == saved_bytes(shell.folded())


def test_a_tick_that_decides_nothing_leaves_no_trace() -> None:
    shell = Shell(patient(slack_ns=5))
    shell.events([100], 1)
    before, records = saved_bytes(shell.feed), len(shell.records)
    shell.tick(50)
    assert saved_bytes(shell.feed) == before and len(shell.records) == records


def test_where_the_sinks_said_they_stand_is_in_the_journal() -> None:
    both = {"store": ["ordered"], "copy": ["ordered"]}
    shell = Shell(patient(), sinks=both)
    for index in range(5):
        shell.events([index], index)
    shell.taken("store", "ordered", 4, 10)
    shell.do(shell.feed.start(20, both, {"store": {"ordered": 2}, "copy": {"ordered": 9}}))
    assert shell.feed.state.outbox.next_number["ordered"] == 10
    assert saved_bytes(shell.feed) == saved_bytes(shell.folded())


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

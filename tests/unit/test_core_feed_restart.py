"""Cases of what outlives a moment: waiting for a sync, new settings, restarts, saved states, the journal as input."""

from __future__ import annotations

import pytest
from helpers_feed import FOR_EVER_NS, Shell, arrival, patient, saved_bytes
from strandline.core.columns import Fault
from strandline.core.effects import Answer, Deliver
from strandline.core.feed import Feed
from strandline.core.records import VERSION, Kind
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
    assert shell.feed.snapshot(30).hold.since_ns == 29, "the first instant beyond a quarter of idle_after"


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

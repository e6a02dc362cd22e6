"""Promises of sources: what they let go, and what is said when one is broken."""

from __future__ import annotations

import numpy as np
from strandline.core.columns import Arrival
from strandline.core.effects import Append, Deliver, Effect, Refuse
from strandline.core.feed import Feed
from strandline.core.settings import SECOND_NS, Settings
from strandline.core.view import sources_of

NOW = 1_000 * SECOND_NS


def feed_of_two() -> Feed:
    feed = Feed(Settings("gauges", slack_ns=0, idle_after_ns=3600 * SECOND_NS, hold_at_most_ns=7200 * SECOND_NS))
    feed.start(NOW, {})
    send(feed, [(990, 0), (900, 1)], ("weir", "mill"))
    return feed


def send(feed: Feed, rows: list[tuple[int, int]], new: tuple[str, ...] = ()) -> list[Effect]:
    lengths = np.ones(len(rows), dtype=np.uint32)
    times = np.array([second * SECOND_NS for second, _ in rows], dtype=np.int64)
    sources = np.array([source for _, source in rows], dtype=np.uint32)
    effects = feed.arrive(Arrival(times, sources, lengths, b"x\n" * len(rows), new), NOW, 1)
    feed.check()
    return effects


def released(feed: Feed) -> list[int]:
    batches = [effect.batch for effect in feed.synced(feed.next_lsn) if isinstance(effect, Deliver)]
    return [time // SECOND_NS for batch in batches if batch.lane == "ordered" for time in batch.times.tolist()]


def test_a_promise_moves_the_watermark_past_a_silent_source() -> None:
    feed = feed_of_two()
    assert released(feed) == [900]
    feed.promise("mill", 995 * SECOND_NS, NOW, 2)
    feed.check()
    assert released(feed) == [990], "weir is the one behind now"
    assert feed.state.watermark_ns == 990 * SECOND_NS


def test_a_broken_promise_is_counted_and_its_source_is_named() -> None:
    feed = feed_of_two()
    feed.promise("mill", 995 * SECOND_NS, NOW, 2)
    send(feed, [(994, 1), (995, 1), (996, 1), (994, 0), (989, 1)])
    view = feed.snapshot(NOW)
    assert (view.promises_broken, view.promises_broken_by) == (2, "mill")
    assert [source.promises_broken for source in sources_of(feed.state, 0, 10)] == [0, 2]
    assert sources_of(feed.state, 0, 10)[1].promised_ns == 995 * SECOND_NS


def test_promises_survive_a_restart_by_records_and_by_a_snapshot() -> None:
    feed, effects = feed_of_two(), list[Effect]()
    replica = Feed(feed.state.settings)
    effects += feed.promise("mill", 995 * SECOND_NS, NOW, 2)
    effects += send(feed, [(994, 1)])
    replica.restore(b"".join(feed.save()), feed.next_lsn)
    replica.check()
    assert replica.snapshot(NOW).promises_broken == 1
    assert b"".join(replica.save()) == b"".join(feed.save())
    assert sum(isinstance(effect, Append) for effect in effects) >= 2
    send(feed, [(993, 1)])
    send(replica, [(993, 1)])
    assert replica.snapshot(NOW).promises_broken == feed.snapshot(NOW).promises_broken == 2


def test_a_promise_from_the_future_is_refused_and_moves_nothing() -> None:
    feed = feed_of_two()
    before = feed.state.watermark_ns
    effects = feed.promise("mill", NOW + 11 * SECOND_NS, NOW, 2)
    assert [effect.reason for effect in effects if isinstance(effect, Refuse)] == ["promise_ahead"]
    assert feed.state.watermark_ns == before


def test_a_source_that_was_never_heard_can_promise() -> None:
    feed = feed_of_two()
    feed.promise("ford", 980 * SECOND_NS, NOW, 2)
    feed.check()
    assert feed.state.sources.names == ["weir", "mill", "ford"]
    assert feed.snapshot(NOW).sources_active == 3


def test_a_promise_lets_the_watermark_go_right_up_to_it() -> None:
    settings = Settings("gauges", slack_ns=50 * SECOND_NS, idle_after_ns=3600 * SECOND_NS)
    feed = Feed(settings)
    feed.start(NOW, {})
    send(feed, [(990, 0)], ("weir",))
    assert feed.state.watermark_ns == 940 * SECOND_NS
    feed.promise("weir", 991 * SECOND_NS, NOW, 2)
    feed.check()
    assert feed.state.watermark_ns == 991 * SECOND_NS, "no slack is needed behind a promise"
    assert released(feed) == [990]

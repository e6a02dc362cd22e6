"""Arrivals that are handed over in a row, their marks put off to the last: nothing is judged otherwise for it.

The same requests come at the same instants to two feeds, one of which sets its marks after each. What each request is
answered, what is late, and what leaves in which order is the same; only the batches are fewer.
"""

from __future__ import annotations

from typing import Any

from helpers_feed import FOR_EVER_NS, Shell, saved_bytes
from hypothesis import event, given, settings
from hypothesis import strategies as st
from strandline.core.columns import RequestKey
from strandline.core.settings import Settings

NAMES = ("gw-0", "gw-1", "gw-2")
SINKS = {"store": ["ordered"], "lanes": ["late", "quarantine"]}

times = st.integers(-5, 40)
rows = st.lists(st.tuples(times, st.sampled_from(NAMES), st.integers(1, 30)), max_size=8)
keys = st.sampled_from((None, None, "a", "b"))
histories = st.lists(st.tuples(st.lists(st.tuples(rows, keys), max_size=6), st.sampled_from((0, 1, 2, 5))), max_size=8)
limits = {
    "name": st.just("river-gauges"),
    "slack_ns": st.sampled_from((0, 1, 3, 10)),
    "idle_after_ns": st.sampled_from((3, FOR_EVER_NS)),
    "hold_at_most_ns": st.sampled_from((1, 5, FOR_EVER_NS)),
    "ahead_limit_ns": st.sampled_from((20, FOR_EVER_NS)),
    "late_share": st.sampled_from((None, 0.2)),
    "expect_sources": st.sampled_from(((), ("gw-0",))),
    "batch_events_at_most": st.sampled_from((2, 50_000)),
    "held_events_at_most": st.sampled_from((5, 12, 10_000)),
}
chosen = st.builds(Settings, **limits, clock=st.sampled_from(("event", "arrival")))
by_source = st.builds(Settings, **limits, order=st.just("source"))


def run(given_settings: Settings, history: list[tuple[list[Any], int]], *, more: bool) -> Shell:
    shell = Shell(given_settings, SINKS, more=more)
    now_ns = 0
    for requests, passed in history:
        now_ns += passed
        for found, text in requests:
            key = None if text is None else RequestKey(text, repr(found).encode())
            columns = ([row[place] for row in found] for place in range(3))
            moments, names, identities = columns
            shell.events(moments, now_ns, names, identities=identities, key=key)
        if more:
            shell.do(shell.feed.mark(now_ns))
    return shell


@given(chosen | by_source, histories)
@settings(max_examples=400)
def test_marks_that_are_put_off_change_no_judgement(given_settings: Settings, history: list[Any]) -> None:
    one, other = (run(given_settings, history, more=more) for more in (False, True))
    assert one.answers == other.answers
    assert {token: refusal.reason for token, refusal in one.refusals.items()} == {
        token: refusal.reason for token, refusal in other.refusals.items()
    }
    for lane in ("ordered", "late", "quarantine"):
        assert one.out(lane) == other.out(lane)
        assert one.out_times(lane) == other.out_times(lane)
    states = one.feed.state, other.feed.state
    assert states[0].ledger == states[1].ledger and states[0].watermark_ns == states[1].watermark_ns
    stands = [None if state.own is None else state.own.at.tolist() for state in states]
    assert stands[0] == stands[1]
    for figure in ("lateness", "hold", "run_length"):
        counts = [getattr(state.figures, figure) for state in states]
        assert counts[0].counts.tolist() == counts[1].counts.tolist() and counts[0].total == counts[1].total
    assert states[0].lateness.sketch.counts.tolist() == states[1].lateness.sketch.counts.tolist()
    assert states[1].figures.marks <= states[0].figures.marks
    event(f"marks saved: {min(states[0].figures.marks - states[1].figures.marks, 3)}")
    assert saved_bytes(other.folded()) == saved_bytes(other.feed)


def test_a_row_that_is_never_ended_is_marked_by_the_next_tick() -> None:
    shell = Shell(Settings(name="river-gauges", slack_ns=0, idle_after_ns=FOR_EVER_NS), SINKS, more=True)
    for number in range(3):
        shell.events([number], 10)
    assert shell.out_times("ordered") == []
    shell.tick(11)
    assert shell.out_times("ordered") == [0, 1, 2]

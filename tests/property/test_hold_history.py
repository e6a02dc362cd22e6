"""Laws of the history of holds: it covers the time without gaps, and long holds stand in it exactly as they were."""

from __future__ import annotations

from collections import Counter
from itertools import pairwise

from helpers_feed import Shell, patient, saved_bytes
from hypothesis import given, settings
from hypothesis import strategies as st
from strandline.core.columns import NO_SOURCE
from strandline.core.holds import BRIEF_NS, ROWS_AFTER, ROWS_AT_MOST, Held, Holder, Holds
from strandline.core.view import HOLD_WHYS

HOLDERS: list[Holder] = [
    ("nothing_held", NO_SOURCE, ""), ("slow_source", 0, ""), ("slow_source", 1, ""), ("sink_full", NO_SOURCE, "store")
]  # fmt: skip
SECOND = 1_000_000_000
steps = st.lists(
    st.tuples(st.sampled_from((0, 1, SECOND // 3, SECOND - 1, SECOND, 5 * SECOND)), st.sampled_from(HOLDERS)),
    min_size=1,
    max_size=60,
)


def told(given_steps: list[tuple[int, Holder]]) -> tuple[Holds, list[Held], int]:
    """A history of these holders, each beginning so long after the one before, and what really was."""
    holds, raw, now = Holds(), list[Held](), 1_000
    for passed, holder in given_steps:
        now += passed
        holds.note(now, holder, None)
        holds.check()
        raw.append(Held(*holder, now, None))
    ends = [*(each.from_ns for each in raw[1:]), now]
    return holds, [each._replace(to_ns=end) for each, end in zip(raw, ends, strict=True)], now


def who(held: Held) -> Holder:
    return held.why, held.source, held.sink


def merged(raw: list[Held]) -> list[Held]:
    """The same with neighbours of one holder as one."""
    found: list[Held] = []
    for held in raw:
        if found and who(found[-1]) == who(held):
            found[-1] = found[-1]._replace(to_ns=held.to_ns)
        elif held.from_ns != held.to_ns:
            found.append(held)
    return found


@settings(max_examples=200)
@given(steps)
def test_it_covers_the_time_in_order_and_without_gaps(given_steps: list[tuple[int, Holder]]) -> None:
    holds, _, now = told(given_steps)
    history = list(holds.history(now))
    assert history[0].from_ns == 1_000 + given_steps[0][0] and history[-1].to_ns is None
    for one, other in pairwise(history):
        assert one.from_ns < (one.to_ns or 0) == other.from_ns, "a gap, or an overlap"
        assert who(one) != who(other), "neighbours of one holder"
    assert history[-1].from_ns <= now


@settings(max_examples=200)
@given(steps)
def test_a_hold_of_a_second_or_longer_stands_in_it_as_it_was(given_steps: list[tuple[int, Holder]]) -> None:
    holds, raw, now = told(given_steps)
    history = list(holds.history(now))
    for held in merged(raw):
        assert held.to_ns is not None
        if held.to_ns - held.from_ns >= BRIEF_NS:
            around = [h for h in history if h.from_ns <= held.from_ns and (h.to_ns is None or h.to_ns >= held.to_ns)]
            assert [who(each) for each in around] == [who(held)], held


@settings(max_examples=200)
@given(steps)
def test_a_stretch_of_short_ones_counts_for_the_one_that_had_most_of_it(given_steps: list[tuple[int, Holder]]) -> None:
    holds, raw, now = told(given_steps)
    for held in holds.history(now):
        within: Counter[Holder] = Counter()
        for each in raw:
            overlap = min(each.to_ns or now, held.to_ns or now) - max(each.from_ns, held.from_ns)
            within[who(each)] += max(0, overlap)
        lasted = (held.to_ns or now) - held.from_ns
        # Rows that were joined have most of each of their stretches, of which there are at most three kinds of holders.
        assert within[who(held)] * len(HOLDERS) >= lasted


@settings(max_examples=100)
@given(steps, st.data())
def test_a_restored_history_goes_on_as_it_was(given_steps: list[tuple[int, Holder]], data: st.DataObject) -> None:
    holds, _, now = told(given_steps)
    other = Holds()
    other.restore(holds.saved())
    other.check()
    for passed, holder in data.draw(steps):
        now += passed
        for each in (holds, other):
            each.note(now, holder, None)
    assert list(holds.history(now)) == list(other.history(now))
    assert holds.saved() == other.saved()


def test_it_stays_bounded_and_keeps_the_newest_exactly() -> None:
    """1,000 holders by turns, 1.5 s each: the older half is told again in stretches of a minute."""
    holds, turns = Holds(), 60_000
    length = 3 * SECOND // 2
    for turn in range(turns):
        holds.note(turn * length, ("slow_source", turn % 1000, ""), None)
        assert len(holds._telling.rows) <= ROWS_AT_MOST
    holds.check()
    history = list(holds.history(turns * length))
    assert ROWS_AT_MOST // 2 < len(history) <= ROWS_AT_MOST + 1
    assert all(one.to_ns == other.from_ns for one, other in pairwise(history))
    newest = history[-ROWS_AT_MOST // 4 : -1]
    assert all((each.to_ns or 0) - each.from_ns == length for each in newest)
    oldest = history[: ROWS_AT_MOST // 50]
    assert all((each.to_ns or 0) - each.from_ns >= 60 * SECOND for each in oldest)


def test_the_oldest_go_where_a_minute_a_row_is_not_enough() -> None:
    holds, minute = Holds(), 60 * SECOND
    for turn in range(ROWS_AT_MOST + 3):
        holds.note(turn * minute, ("slow_source", turn % 7, ""), None)
    assert len(holds._telling.rows) == ROWS_AFTER
    # Beside the rows there are the last two: the present one, and the one before it, which is not told yet.
    assert next(holds.history(turn * minute)).from_ns == (turn - 1 - ROWS_AFTER) * minute


# ---- of a feed ------------------------------------------------------------------------------------------------------

inputs = st.lists(
    st.tuples(st.integers(0, 3), st.integers(-4, 2), st.sampled_from(("gw-1", "gw-2")), st.sampled_from("eeeeetxds")),
    max_size=30,
)


@settings(max_examples=60)
@given(inputs, st.sampled_from((0, 2)))
def test_the_history_is_what_the_records_say(
    given_inputs: list[tuple[int, int, str, str]], undelivered: int
) -> None:
    """Time goes by seconds; the same records folded again, or from a saved state on, tell the same history."""
    chosen = patient(
        slack_ns=SECOND, idle_after_ns=8 * SECOND, hold_at_most_ns=6 * SECOND,
        undelivered_events_at_most=undelivered or 10**6,
    )  # fmt: skip
    shell, now, before = Shell(chosen, sinks={"store": ["ordered"]}, start_ns=100 * SECOND), 100, None
    for passed, behind, name, what in given_inputs:
        now += passed
        match what:
            case "e":
                shell.events([(now + behind) * SECOND], now * SECOND, name)
            case "t":
                shell.tick(now * SECOND)
            case "x" if name in shell.feed.state.sources.numbers:
                shell.act("excuse", name, "why", now_ns=now * SECOND, who="night shift")
            case "d":
                shell.act("drain", now_ns=now * SECOND, who="night shift")
            case "s":
                before = saved_bytes(shell.feed), shell.feed.next_lsn
    history = list(shell.feed.state.holds.history(now * SECOND))
    assert history[0].from_ns == 100 * SECOND and {each.why for each in history} <= set(HOLD_WHYS)
    assert all(one.to_ns == other.from_ns for one, other in pairwise(history))
    view = shell.feed.snapshot(now * SECOND)
    assert (view.hold.why, view.hold.source) == (history[-1].why, history[-1].source), "the present hold is the last"
    for feed in (shell.folded(), *([shell.folded(*before)] if before else [])):
        assert list(feed.state.holds.history(now * SECOND)) == history
        assert saved_bytes(feed) == saved_bytes(shell.feed)


def test_the_time_in_which_the_service_was_stopped_counts_for_nobody() -> None:
    shell = Shell(patient(slack_ns=5 * SECOND), start_ns=100 * SECOND)
    shell.events([101 * SECOND], 101 * SECOND)
    shell.tick(104 * SECOND)
    shell.feed = shell.folded()
    shell.do(shell.feed.start(160 * SECOND, {}))
    shell.act("drain", now_ns=170 * SECOND)
    shell.feed = shell.folded()
    shell.do(shell.feed.start(200 * SECOND, {}))
    told_ = [(each.why, each.from_ns // SECOND) for each in shell.feed.state.holds.history(210 * SECOND)]
    assert told_ == [("nothing_held", 100), ("stopped", 101), ("slack", 160), ("nothing_held", 170)]


def test_what_a_promise_says_is_told_of_its_source() -> None:
    shell = Shell(patient(slack_ns=0))
    shell.act("promise", "mill", 20, now_ns=100)
    shell.events([50], 101, "weir")
    assert shell.feed.snapshot(101).hold.why == "promised_source"
    shell.events([30], 102, "mill")
    assert shell.feed.snapshot(102).hold.why == "slow_source"

"""Laws of `order = "source"`, for random sequences of requests, ticks, promises, excuses, drains, slacks and settings.

Each source's watermark is checked against the model in `helpers_by_source.py`, order against Python's own stable sort,
and every sequence is folded again from its journal: from the start, and from a state that was saved on the way.
"""

from __future__ import annotations

import itertools
from typing import Any

from helpers_by_source import NAMES, SINKS, Model, carry_out, histories, one_event, small, small_settings, steps
from helpers_feed import Shell, batches_of, held_no_longer, saved_bytes
from hypothesis import event, given, settings
from hypothesis import strategies as st
from strandline.core.columns import Batch
from strandline.core.settings import Settings

History = list[tuple[tuple[Any, ...], int]]
steered = small_settings(late_share=0.3, slack_ns=10, idle_after_ns=10**9, hold_at_most_ns=10**9)
fresh = st.sampled_from((0, 3, 1 << 14))


def told(batch: Batch) -> tuple[Any, ...]:
    head = batch.lane, batch.number, batch.instant_ns, batch.ready_lsn, batch.behind_ns, list(batch.entries)
    return *head, batch.times.tobytes(), batch.refs.tobytes(), batch.behind.tobytes()


def played(chosen: Settings, history: History) -> Shell:
    shell, now_ns = Shell(chosen, sinks=SINKS), 0
    for step, passed in history:
        now_ns += passed
        carry_out(shell, step, now_ns)
    return shell


def sources_of(shell: Shell) -> dict[bytes, str]:
    """The source of each line."""
    names = shell.feed.state.sources.names
    found: dict[bytes, str] = {}
    for request in shell.requests.values():
        lines = bytes(request.payload).split(b"\n")[:-1]
        found |= {line: names[number] for line, number in zip(lines, request.sources.tolist(), strict=True)}
    return found


@settings(max_examples=400)
@given(small_settings(undelivered_events_at_most=1_000_000) | small_settings() | steered, histories, fresh)
def test_each_source_follows_the_rule(chosen: Settings, history: History, fresh_events: int) -> None:
    with small(fresh_events):
        shell = Shell(chosen, sinks={"store": ["ordered"]})
        model = Model.of(chosen, shell)
        numbers: dict[bytes, int] = {}
        now_ns = 0
        for drawn, passed in history:
            now_ns += passed
            step = drawn
            first = len(numbers)
            if drawn[0] in ("events", "identified"):
                numbers |= {f"{shell.tokens + 1}.{row}".encode(): first + row for row in range(len(drawn[1]))}
            if drawn[0] == "taken":
                outbox = shell.feed.state.outbox
                shell.taken("store", "ordered", outbox.next_number["ordered"] - 1, now_ns)
            else:
                carry_out(shell, step, now_ns)
            model.tell(step, now_ns, first)
            state = shell.feed.state
            assert state.own is not None
            stands = dict(zip(state.sources.names, state.own.at.tolist(), strict=True))
            assert stands == {name: source.stands for name, source in model.sources.items()}
            slacks = state.slacks_ns if isinstance(state.slacks_ns, int) else state.slacks_ns.tolist()
            in_force = [model.slack_of(name) for name in state.sources.names]
            assert in_force == ([slacks] * len(in_force) if isinstance(slacks, int) else slacks)
            assert [numbers[line] for line in shell.out("ordered")] == [number for _, number in model.released]
            late = [(numbers[line], stood) for batch in shell.batches["late"]
                    for line, stood in zip(shell.lines(batch), batch.behind.tolist(), strict=True)]  # fmt: skip
            assert late == model.late
            assert [numbers[line] for line in shell.out("quarantine")] == model.ahead
            assert state.runs.held == len(model.held) and state.ledger.duplicate == len(model.repeats)
    event("something was late" if model.late else "nothing was late")
    event(f"stretches: {max((source.begun for source in model.sources.values()), default=0)}")


@settings(max_examples=250)
@given(small_settings(), histories, fresh)
def test_the_books_balance_and_each_source_comes_out_once_and_in_order(
    chosen: Settings, history: History, fresh_events: int
) -> None:
    with small(fresh_events):
        shell = played(chosen, history)
        shell.act("drain", now_ns=10_000)
    ledger = shell.feed.state.ledger
    assert ledger.balance() == 0 and shell.feed.state.runs.held == ledger.buffered == 0
    sent, source = shell.taken_in(), sources_of(shell)
    ordered, late, quarantine = shell.out("ordered"), shell.out("late"), shell.out("quarantine")
    repeats = {line for _, line in sent} - {*ordered, *late, *quarantine}
    everywhere = [*ordered, *late, *quarantine]
    assert len(set(everywhere)) == len(everywhere) == len(sent) - len(repeats)
    accepted = [row for row in sent if row[1] in {*ordered}]
    for name in NAMES:
        # Outside opinion: Python's own stable sort of what was accepted of this source, in order of arrival.
        of_source = sorted((row for row in accepted if source[row[1]] == name), key=lambda row: row[0])
        assert [line for line in ordered if source[line] == name] == [line for _, line in of_source]
    place = {line: index for index, (_, line) in enumerate(sent)}
    for _, batches in itertools.groupby(shell.batches["ordered"], key=lambda batch: batch.ready_lsn):
        rows = [(time, place[line]) for batch in batches
                for time, line in zip(batch.times.tolist(), shell.lines(batch), strict=True)]  # fmt: skip
        assert rows == sorted(rows), "a release goes by time, then arrival"
    for batch in shell.batches["late"]:
        assert batch.behind_ns == batch.behind.max() and all(batch.times < batch.behind)


@settings(max_examples=150)
@given(small_settings(), histories, st.randoms(use_true_random=False))
def test_the_order_inside_a_request_changes_nothing_but_the_order_of_equal_times(
    chosen: Settings, history: History, random: Any
) -> None:
    history = [row for row in history if row[0][0] != "identified"]
    mixed: History = []
    for step, passed in history:
        rows = random.sample(step[1], len(step[1])) if step[0] == "events" else None
        mixed.append((step if rows is None else ("events", rows), passed))
    one, other = played(chosen, history), played(chosen, mixed)
    assert one.out_times("ordered") == other.out_times("ordered")
    assert sorted(one.out_times("late")) == sorted(other.out_times("late"))
    assert one.feed.state.ledger == other.feed.state.ledger


# ---- fold again -----------------------------------------------------------------------------------------------------

as_a_whole = st.builds(
    Settings,
    st.just("river-gauges"),
    slack_ns=st.sampled_from((0, 3, 10)),
    hold_at_most_ns=st.sampled_from((5, 10**9)),
    idle_after_ns=st.sampled_from((4, 10**9)),
)
changes = st.tuples(st.just("settings"), small_settings() | as_a_whole)
eventful = st.lists(
    st.tuples(st.one_of(steps, steps, steps, changes), st.sampled_from((0, 1, 1, 2, 5, -1))), max_size=25
)


@settings(max_examples=300)
@given(small_settings() | as_a_whole, eventful, st.integers(0, 25), fresh)
def test_the_journal_folded_again_gives_the_same_state_and_the_same_batches(
    chosen: Settings, history: History, pause: int, fresh_events: int
) -> None:
    with small(fresh_events):
        shell, now_ns = Shell(chosen, sinks=SINKS), 0
        saved, lsn = saved_bytes(shell.feed), shell.feed.next_lsn
        for index, (step, passed) in enumerate(history):
            now_ns += passed
            carry_out(shell, step, now_ns)
            if index == pause:
                saved, lsn = saved_bytes(shell.feed), shell.feed.next_lsn
                shell.feed.restore(saved, lsn)  # and goes on from what was saved
        live = saved_bytes(shell.feed)
        assert saved_bytes(shell.folded()) == live
        assert saved_bytes(shell.folded(saved, lsn)) == live
        determined = {(batch.lane, batch.number): batch for batch in batches_of(shell.records, chosen)}
    left = [batch for batches in shell.batches.values() for batch in batches]
    assert {(batch.lane, batch.number) for batch in left} == set(determined)
    for batch in left:
        assert told(batch) == told(determined[batch.lane, batch.number])
    event(f"orders: {len({step[1].order for step, _ in history if step[0] == 'settings'})}")


@settings(max_examples=150)
@given(small_settings() | as_a_whole, eventful)
def test_no_source_goes_back_when_the_order_is_changed(chosen: Settings, history: History) -> None:
    shell = played(chosen, history)
    shell.act("drain", now_ns=10_000)
    source = sources_of(shell)
    place = {line: index for index, (_, line) in enumerate(shell.taken_in())}
    by_number = sorted({batch.number: batch for batch in shell.batches["ordered"]}.items())
    rows = [(time, line) for _, batch in by_number
            for time, line in zip(batch.times.tolist(), shell.lines(batch), strict=True)]  # fmt: skip
    for name in NAMES:
        of_source = [(time, place[line]) for time, line in rows if source[line] == name]
        assert of_source == sorted(of_source)
    lines = [line for _, line in rows]
    assert len(lines) == len(set(lines)) == shell.feed.state.ledger.released


@settings(max_examples=150)
@given(small_settings(), st.lists(st.tuples(steps, st.sampled_from((0, 1, 2))), max_size=25), st.integers(0, 25))
def test_a_restart_goes_on_with_the_same_numbers_and_loses_nothing(
    chosen: Settings, history: History, crash: int
) -> None:
    shell = played(chosen, history[:crash])
    now_ns = sum(passed for _, passed in history[:crash])
    shell.feed = shell.folded()
    before = {(batch.lane, batch.number): told(batch) for batches in shell.batches.values() for batch in batches}
    shell.do(shell.feed.start(now_ns, SINKS))
    for step, passed in history[crash:]:
        now_ns += passed
        carry_out(shell, step, now_ns)
    shell.act("drain", now_ns=10_000)
    found = [batch for batches in shell.batches.values() for batch in batches]
    for batch in found:
        assert before.setdefault((batch.lane, batch.number), told(batch)) == told(batch)
    assert sum(len(b) for b in {(b.lane, b.number): b for b in found}.values()) + shell.feed.state.ledger.duplicate == (
        len(shell.taken_in())
    )
    assert saved_bytes(shell.feed) == saved_bytes(shell.folded())


@settings(max_examples=100)
@given(small_settings(hold_at_most_ns=5, undelivered_events_at_most=1_000_000), histories)
def test_no_event_is_held_longer_than_the_limit(chosen: Settings, history: History) -> None:
    held_no_longer(Shell(chosen, sinks=SINKS), history, carry_out, 5)


# ---- what the order is for ------------------------------------------------------------------------------------------


@settings(max_examples=100)
@given(st.lists(st.lists(one_event, min_size=1, max_size=9), max_size=12), st.sampled_from((0, 1, 3)))
def test_a_source_is_released_as_if_it_had_the_feed_to_itself(
    requests: list[list[tuple[int, str]]], slack: int
) -> None:
    """Times of each source's releases, and what of it is late, against a feed in order as a whole with it alone."""
    limits = {"slack_ns": slack, "idle_after_ns": 10**6, "hold_at_most_ns": 10**6, "ahead_limit_ns": 10**6}
    together = Shell(Settings("river-gauges", order="source", **limits), sinks=SINKS)
    alone = {name: Shell(Settings("river-gauges", **limits), sinks=SINKS) for name in NAMES}
    for now_ns, rows in enumerate(requests):
        together.events([time for time, _ in rows], now_ns, [name for _, name in rows])
        for name, shell in alone.items():
            shell.events([time for time, of in rows if of == name], now_ns, name)
    source = sources_of(together)
    for lane in ("ordered", "late"):
        rows_out = list(zip(together.out_times(lane), together.out(lane), strict=True))
        for name, shell in alone.items():
            assert [time for time, line in rows_out if source[line] == name] == shell.out_times(lane)

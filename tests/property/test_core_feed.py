"""Laws of the feed, for random sequences of requests, ticks, promises, excuses, drains, positions and settings.

The rule of the watermark is checked against `helpers_model.py`, order against Python's own stable sort, and every
sequence is folded again from its journal: from the start, and from a state that was saved on the way.
"""

from __future__ import annotations

import dataclasses
import itertools
from typing import Any

from helpers_feed import FOR_EVER_NS, Shell, batches_of, held_no_longer, marks, same_batch, saved_bytes
from helpers_model import Model
from helpers_strands import NEAR, near_at_most
from hypothesis import event, given, settings
from hypothesis import strategies as st
from strandline.core.columns import Fault, RequestKey
from strandline.core.settings import Settings

NAMES = ("gw-0", "gw-1", "gw-2", "gw-3")
SINKS = {"store": ["ordered"], "lanes": ["late", "quarantine"]}

times = st.integers(-5, 40)  # few values, so that ties are common
one_event = st.tuples(times, st.sampled_from(NAMES))
faults = st.lists(st.builds(Fault, st.integers(1, 9), st.just("malformed"), st.just("no object"), st.binary()))
steps = st.one_of(
    st.tuples(st.just("events"), st.lists(one_event, max_size=6), faults.filter(lambda found: len(found) < 3)),
    st.tuples(st.just("events"), st.lists(one_event, min_size=1, max_size=40), st.just([])),
    st.tuples(st.just("identified"), st.lists(st.tuples(times, st.sampled_from(NAMES), st.integers(1, 9)), max_size=6)),
    st.tuples(st.just("tick")),
    st.tuples(st.just("promise"), st.sampled_from(NAMES), times),
    st.tuples(st.just("excuse"), st.sampled_from(NAMES)),
    st.tuples(st.just("drain")),
    st.tuples(st.just("taken"), st.sampled_from(("store", "lanes")), st.integers(0, 3)),
)
# Mostly small steps of the clock, sometimes none, sometimes back (the feed's own clock then stands still).
histories = st.lists(st.tuples(steps, st.sampled_from((0, 0, 1, 1, 2, 3, 7, -2))), max_size=25)

near = st.sampled_from(NEAR)


def small_settings(**fixed: Any) -> st.SearchStrategy[Settings]:
    chosen: dict[str, Any] = {
        "name": st.just("river-gauges"),
        "slack_ns": st.sampled_from((0, 1, 3, 10)),
        "idle_after_ns": st.sampled_from((1, 4, 10, FOR_EVER_NS)),
        "hold_at_most_ns": st.sampled_from((1, 5, 12, FOR_EVER_NS)),
        "ahead_limit_ns": st.sampled_from((0, 6, 20, FOR_EVER_NS)),
        "clock": st.sampled_from(("event", "arrival")),
        "expect_sources": st.sampled_from(((), ("gw-0",), ("gw-1", "gw-2"))),
        "undelivered_events_at_most": st.sampled_from((0, 3, 1_000_000)),
        "batch_events_at_most": st.sampled_from((1, 2, 50_000)),
        "batch_bytes_at_most": st.sampled_from((1, 7, 2**20)),
        "keys_at_most": st.sampled_from((1, 10)),
        "keys_kept_for_ns": st.sampled_from((3, 1000)),
    }
    return st.builds(Settings, **chosen | {name: st.just(value) for name, value in fixed.items()})


def carry_out(shell: Shell, step: tuple[Any, ...], now_ns: int) -> None:
    """One step of a history."""
    match step:
        case ("events", rows, bad):
            shell.events([time for time, _ in rows], now_ns, [name for _, name in rows], bad)
        case ("identified", rows):
            times_of, names, identities = ([row[place] for row in rows] for place in range(3))
            shell.events(times_of, now_ns, names, identities=identities)
        case ("keyed", text, rows):
            key = RequestKey(text, repr(rows).encode())
            shell.events([time for time, _ in rows], now_ns, [name for _, name in rows], key=key)
        case ("taken", sink, behind):
            for lane in SINKS[sink]:
                number = shell.feed.state.outbox.next_number[lane] - 1 - behind
                shell.taken(sink, lane, number, now_ns)
        case ("settings", chosen, positions):
            shell.do(shell.feed.start(now_ns, SINKS, positions, chosen))
        case _:
            shell.step(step, now_ns)


def played(chosen: Settings, history: list[tuple[tuple[Any, ...], int]], **given: Any) -> Shell:
    shell = Shell(chosen, sinks=SINKS, **given)
    now_ns = 0
    for step, passed in history:
        now_ns += passed
        carry_out(shell, step, now_ns)
    return shell


# ---- the watermark's rule -------------------------------------------------------------------------------------------


def model_of(chosen: Settings) -> Model:
    model = Model(
        slack=chosen.slack_ns,
        idle_after=chosen.idle_after_ns,
        hold_at_most=chosen.hold_at_most_ns,
        ahead_limit=chosen.ahead_limit_ns,
        clock=chosen.clock,
        undelivered_at_most=chosen.undelivered_events_at_most,
    )
    model.start(chosen.expect_sources, 0)
    return model


def tell(model: Model, step: tuple[Any, ...], now_ns: int, first: int) -> None:
    """The same step for the model; events of a request are numbered from `first`."""
    match step:
        case ("events", rows, _):
            if rows:
                model.arrive([(time, first + index, name, None) for index, (time, name) in enumerate(rows)], now_ns)
        case ("identified", rows):
            if rows:
                model.arrive([(t, first + index, name, i) for index, (t, name, i) in enumerate(rows)], now_ns)
        case ("tick",):
            model.tick(now_ns)
        case ("promise", name, time):
            model.promise(name, time, now_ns)
        case ("excuse", name):
            if name in model.sources:
                model.excuse(name, now_ns)
        case ("drain",):
            model.drain(now_ns)
        case ("taken", _, _):
            model.undelivered = 0
            model.tick(now_ns)


@settings(max_examples=400)
@given(small_settings(), histories)
def test_the_feed_follows_the_rule_of_the_watermark(
    chosen: Settings, history: list[tuple[tuple[Any, ...], int]]
) -> None:
    shell, model = Shell(chosen, sinks={"store": ["ordered"]}), model_of(chosen)
    numbers: dict[bytes, int] = {}
    now_ns = sent = 0
    for drawn, passed in history:
        now_ns += passed
        step = drawn
        if drawn[0] in ("events", "identified"):
            step = ("events", drawn[1], []) if drawn[0] == "events" else drawn
            numbers |= {f"{shell.tokens + 1}.{index}".encode(): sent + index for index in range(len(drawn[1]))}
        elif drawn[0] == "taken":
            step = ("taken", "store", 0)
        carry_out(shell, step, now_ns)
        tell(model, step, now_ns, sent)
        sent = len(numbers)
        assert shell.feed.state.watermark_ns == model.watermark
        assert [numbers[line] for line in shell.out("ordered")] == [number for _, number in model.released]
        assert shell.out_times("ordered") == [time for time, _ in model.released]
        assert [numbers[line] for line in shell.out("late")] == model.late
        assert [numbers[line] for line in shell.out("quarantine")] == model.ahead
        assert shell.feed.state.runs.held == len(model.held)
        assert shell.feed.state.ledger.duplicate == len(model.repeats)
    event("something was late" if model.late else "nothing was late")
    event("something came twice" if model.repeats else "nothing came twice")


# ---- order, books, once ---------------------------------------------------------------------------------------------


@settings(max_examples=250)
@given(small_settings(), histories, near)
def test_the_books_balance_and_everything_comes_out_once_and_in_order(
    chosen: Settings, history: list[tuple[tuple[Any, ...], int]], near_events: int
) -> None:
    with near_at_most(near_events):
        shell = played(chosen, history)
    ledger = shell.feed.state.ledger
    assert ledger.balance() == 0
    shell.act("drain", now_ns=10_000)
    assert shell.feed.state.runs.held == 0 and ledger.buffered == 0
    sent, bad = shell.taken_in(), sum(len(request.faults) for request in shell.requests.values())
    late, ordered, quarantine = shell.out("late"), shell.out("ordered"), shell.out("quarantine")
    repeats = {line for _, line in sent} - {*late, *ordered, *quarantine}
    accepted = [row for row in sent if row[1] not in {*late, *quarantine, *repeats}]
    # Outside opinion: Python's own stable sort of what was accepted, in order of arrival.
    assert ordered == [line for _, line in sorted(accepted, key=lambda row: row[0])]
    assert shell.out_times("ordered") == sorted(time for time, _ in accepted)
    assert late == [line for _, line in sent if line in set(late)], "the late lane is in order of arrival"
    assert ledger == dataclasses.replace(
        ledger,
        received=len(sent) + bad,
        released=len(ordered),
        late=len(late),
        duplicate=len(repeats),
        quarantined=len(quarantine),
    )
    assert len(ordered) + len(late) + len(repeats) + len(quarantine) == len(sent) + bad
    known = set[int]()
    for line, identity in identified(shell):
        assert line not in repeats or identity in known, "only what came before can be a repeat"
        known |= {identity} if line not in quarantine else set()
    outcomes = [outcome for token, outcome in shell.answers.items() if token in shell.requests and outcome]
    assert sum(outcome.received for outcome in outcomes) == ledger.received
    assert sum(outcome.accepted for outcome in outcomes) == ledger.released
    assert sum(outcome.late for outcome in outcomes) == ledger.late
    assert sum(outcome.quarantined for outcome in outcomes) == ledger.quarantined
    event("something was late" if late else "nothing was late")


def identified(shell: Shell) -> list[tuple[bytes, int | None]]:
    """(line, identity or None) of every event, in order of arrival."""
    found: list[tuple[bytes, int | None]] = []
    for request in shell.requests.values():
        lines = bytes(request.payload).split(b"\n")[:-1]
        of = [None] * len(lines) if request.identities is None else request.identities.tolist()
        found += zip(lines, of, strict=True)
    return found


@settings(max_examples=150)
@given(small_settings(), histories)
def test_the_watermark_and_the_released_times_never_go_back(
    chosen: Settings, history: list[tuple[tuple[Any, ...], int]]
) -> None:
    shell = played(chosen, history)
    set_by_marks, out = marks(shell.records), shell.out_times("ordered")
    assert set_by_marks == sorted(set_by_marks) and out == sorted(out)
    numbers = [batch.number for batch in shell.batches["ordered"]]
    assert numbers == list(range(1, len(numbers) + 1))
    for batch in shell.batches["ordered"]:
        assert len(batch) <= chosen.batch_events_at_most
        assert len(batch) == 1 or sum(map(len, shell.lines(batch))) <= chosen.batch_bytes_at_most
    for one, other in itertools.pairwise(shell.batches["ordered"]):
        if one.ready_lsn == other.ready_lsn:  # of one release: the first is as full as it may be
            more = sum(map(len, shell.lines(one))) + len(shell.lines(other)[0])
            assert len(one) == chosen.batch_events_at_most or more > chosen.batch_bytes_at_most
    for batch in shell.batches["late"]:
        assert max(batch.times.tolist()) < batch.behind_ns


# ---- a request is one arrival ---------------------------------------------------------------------------------------


@settings(max_examples=150)
@given(small_settings(), histories, st.randoms(use_true_random=False))
def test_the_order_inside_a_request_changes_nothing_but_the_order_of_equal_times(
    chosen: Settings, history: list[tuple[tuple[Any, ...], int]], random: Any
) -> None:
    # Of two events of one request with one identity the first is taken: with identities order does matter.
    history = [row for row in history if row[0][0] != "identified"]
    mixed = []
    for step, passed in history:
        if step[0] == "events":
            rows = list(step[1])
            random.shuffle(rows)
            mixed.append((("events", rows, step[2]), passed))
        else:
            mixed.append((step, passed))
    one, other = played(chosen, history), played(chosen, mixed)
    assert one.out_times("ordered") == other.out_times("ordered")
    assert sorted(one.out_times("late")) == sorted(other.out_times("late"))
    assert marks(one.records) == marks(other.records)
    assert one.feed.state.ledger == other.feed.state.ledger
    assert counts(one) == counts(other)


def counts(shell: Shell) -> dict[int, tuple[int, ...] | None]:
    """The answers without the lines that they name."""
    return {
        token: outcome and (outcome.received, outcome.accepted, outcome.late, outcome.duplicate, outcome.quarantined)
        for token, outcome in shell.answers.items()
    }


# ---- fold again -----------------------------------------------------------------------------------------------------

steered = small_settings(late_share=0.2, slack_ns=12, slack_at_least_ns=1)
changes = st.tuples(
    st.just("settings"),
    small_settings() | steered,
    st.dictionaries(
        st.sampled_from(("store", "lanes", "gone")),
        st.dictionaries(st.sampled_from(("ordered", "late", "quarantine")), st.integers(0, 9), max_size=2),
        max_size=2,
    ),
)
keyed = st.tuples(st.just("keyed"), st.sampled_from("kl"), st.lists(one_event, min_size=1, max_size=2))
passing = st.sampled_from((0, 1, 1, 2, 5, -1))
eventful = st.lists(st.tuples(st.one_of(steps, steps, steps, changes, keyed), passing), max_size=25)


@settings(max_examples=250)
@given(small_settings() | steered, eventful, st.integers(0, 25), st.booleans(), near)
def test_the_journal_folded_again_gives_the_same_state_and_the_same_batches(
    chosen: Settings, history: list[tuple[tuple[Any, ...], int]], pause: int, synchronous: bool, near_events: int
) -> None:
    with near_at_most(near_events, WARM_UP_EVENTS=5):
        folded_again(chosen, history, pause, synchronous)


def folded_again(chosen: Settings, history: list[tuple[tuple[Any, ...], int]], pause: int, synchronous: bool) -> None:
    shell = Shell(chosen, sinks=SINKS, synchronous=synchronous)
    now_ns, saved, lsn = 0, saved_bytes(shell.feed), shell.feed.next_lsn
    for index, (step, passed) in enumerate(history):
        now_ns += passed
        carry_out(shell, step, now_ns)
        if index == pause:
            saved, lsn = saved_bytes(shell.feed), shell.feed.next_lsn
    live = saved_bytes(shell.feed)
    assert saved_bytes(shell.folded()) == live
    assert saved_bytes(shell.folded(saved, lsn)) == live
    shell.sync()
    final = batches_of(shell.records, chosen)
    for lane, left in shell.batches.items():
        again = {batch.number: batch for batch in final if batch.lane == lane}
        for batch in left:  # after new settings a batch may be delivered again
            assert same_batch(batch, again[batch.number])
        if synchronous:  # else a position that a sink claims may overtake what was never offered to it
            assert {batch.number for batch in left} == set(again)


@settings(max_examples=150)
@given(small_settings() | steered, eventful, st.integers(0, 25))
def test_a_restart_goes_on_with_the_same_numbers_and_loses_nothing(
    chosen: Settings, history: list[tuple[tuple[Any, ...], int]], crash: int
) -> None:
    """A process that died after any step: what was answered is there, what was released is not released anew."""
    history = [row for row in history if row[0][0] != "settings"]
    shell = Shell(chosen, sinks=SINKS)
    now_ns = 0
    for step, passed in history[:crash]:
        now_ns += passed
        carry_out(shell, step, now_ns)
    shell.feed = shell.folded()
    before = {lane: {batch.number: batch for batch in found} for lane, found in shell.batches.items()}
    for found in shell.batches.values():
        found.clear()
    shell.do(shell.feed.start(now_ns, SINKS))
    for lane, found in shell.batches.items():  # delivered again: exactly what the sinks have not taken
        queue = list(shell.feed.state.outbox.undelivered(lane))
        assert [batch.number for batch in found] == [batch.number for batch in queue]
        assert all(same_batch(batch, before[lane][batch.number]) for batch in found)
    for step, passed in history[crash:]:
        now_ns += passed
        carry_out(shell, step, now_ns)
    shell.act("drain", now_ns=10_000)
    for lane, found in shell.batches.items():
        before[lane] |= {batch.number: batch for batch in found}
    lines = {lane: [line for _, b in sorted(rows.items()) for line in shell.lines(b)] for lane, rows in before.items()}
    sent = shell.taken_in()
    repeats = {line for _, line in sent} - {*lines["late"], *lines["quarantine"], *lines["ordered"]}
    assert len(repeats) == shell.feed.state.ledger.duplicate
    accepted = [row for row in sent if row[1] not in {*lines["late"], *lines["quarantine"], *repeats}]
    assert lines["ordered"] == [line for _, line in sorted(accepted, key=lambda row: row[0])]
    assert saved_bytes(shell.feed) == saved_bytes(shell.folded())


# ---- a bound on holding ---------------------------------------------------------------------------------------------


@settings(max_examples=150)
@given(small_settings(hold_at_most_ns=5, undelivered_events_at_most=1_000_000), histories)
def test_no_event_is_held_longer_than_the_limit(chosen: Settings, history: list[tuple[tuple[Any, ...], int]]) -> None:
    held_no_longer(Shell(chosen, sinks=SINKS), history, carry_out, 5)

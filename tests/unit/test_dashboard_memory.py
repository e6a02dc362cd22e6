"""What the dashboard remembers: samples agree with the books; late events by source; every slack; the history.

Time is the test's own: samples are taken when a test says so.
"""

from __future__ import annotations

from pathlib import Path
from statistics import fmean as mean
from typing import Any

import numpy as np
import pytest
from helpers_feed import Shell, patient
from helpers_service import BEGIN_S, body_of, configuration, event_line, eventually, running
from helpers_sinks import VirtualTime
from helpers_watches import memory_of
from hypothesis import example, given, settings
from hypothesis import strategies as st
from strandline.core.columns import REF, Batch
from strandline.core.lateness import Lateness
from strandline.dashboard import late as late_module
from strandline.dashboard import live
from strandline.dashboard.late import RecentLate
from strandline.dashboard.lateness import COUNTS, EDGES_NS, SinceLast, every_slack
from strandline.dashboard.sampling import RATES_OVER_NS, FeedMemory

SECOND_NS = 10**9
START_NS = BEGIN_S * SECOND_NS


@pytest.fixture(autouse=True)
def by_hand(monkeypatch: pytest.MonkeyPatch) -> None:
    """No sample is taken but the first one and those that a test asks for."""
    monkeypatch.setattr(live, "SAMPLE_EVERY_S", 3600.0)


# ---- samples and the history asked for ------------------------------------------------------------------------------


async def test_the_history_is_what_the_books_say(tmp_path: Path) -> None:
    """Six seconds, a body in each; sums over the history are the ledger, and every column is as long as the steps."""
    clock = VirtualTime(START_NS)
    async with running(configuration(tmp_path, slack="2s", sinks=""), clock=clock) as service:
        memory = memory_of(service)
        for second in range(1, 7):
            clock.now = START_NS + second * SECOND_NS
            await service.send([second, second - 0.5], "gw-1")
            await service.send([second - 3.5], "gw-2")
            await service.post("events", body_of(b"{"))
            memory.sample()
        found = (await service.get(f"history?from_ms={START_NS // 10**6}&to_ms={clock.now // 10**6}")).json
        document = await service.document()
        ledger = document["ledger"]
        for name in ("received", "released", "late", "duplicate", "quarantined"):
            assert sum(found[name]) == ledger[name], name
        assert found["step_s"] == 1 and found["t_ms"] == [START_NS // 10**6 + 1000 * second for second in range(7)]
        length = len(found["t_ms"])
        columns = [*(found[name] for name in found if isinstance(found[name], list) and name not in ("acts", "holds"))]
        columns += [found["lateness"]["rows"], *(lane["newest_ms"] for lane in found["lanes"].values())]
        columns += [column for hop in found["hops"].values() for column in hop.values()]
        assert {len(column) for column in columns} == {length}
        assert found["watermark_ms"][-1] == document["watermark_ns"] // 10**6
        assert (found["held"][-1], found["open_runs"][-1]) == (ledger["buffered"], document["held"]["open_runs"])
        assert (found["hold_why"][-1], found["hold_source"][-1]) == (document["hold"]["why"], "gw-2")
        assert all(found["balanced"]) and found["slack_s"] == [2.0] * length
        judged = sum(map(sum, found["lateness"]["rows"]))
        assert judged == ledger["received"] - ledger["quarantined"]
        assert found["late_share"][0] is None
        assert all(
            share == late / (received - quarantined)
            for share, late, received, quarantined in list(
                zip(found["late_share"], found["late"], found["received"], found["quarantined"], strict=True)
            )[1:]
        )
        newest = found["lanes"]["gw-2"]["newest_ms"]
        assert newest[1:] == [START_NS // 10**6 + 1000 * second - 3500 for second in range(1, 7)]
        told = (await service.get("holds")).json["holds"]
        assert [hold["why"] for hold in found["holds"]] == [hold["why"] for hold in told] and told
        coarse = (await service.get(f"history?from_ms={START_NS // 10**6}&points=2")).json
        assert len(coarse["t_ms"]) <= 2 and sum(coarse["received"]) == ledger["received"]


async def test_a_history_without_anything_in_it(tmp_path: Path) -> None:
    async with running(configuration(tmp_path), clock=VirtualTime(START_NS)) as service:
        found = (await service.get("history?from_ms=0&to_ms=1")).json
        assert (found["t_ms"], found["lanes"], found["lateness"]["rows"]) == ([], {}, [])
        assert found["acts"] == found["holds"] == []


async def test_acts_are_told_with_the_time_asked_for(tmp_path: Path) -> None:
    clock = VirtualTime(START_NS)
    async with running(configuration(tmp_path, slack="5s"), clock=clock) as service:
        await service.send([1])
        for second in (10, 20):
            clock.now = START_NS + second * SECOND_NS
            await service.post("excuse", {"source": "gw-1", "reason": f"link {second}"})
        found = (await service.get(f"history?from_ms={(START_NS + 15 * SECOND_NS) // 10**6}")).json
        assert [act["reason"] for act in found["acts"]] == ["link 20"]


async def test_a_still_feed_is_told_as_if_it_had_been_looked_at(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Two memories of one feed, one of which makes each row anew: the same rows in traffic, in silence and after it."""
    clock = VirtualTime(START_NS)
    async with running(configuration(tmp_path, slack="0s"), clock=clock) as service:
        runtime = service.runtime
        quick, slow = FeedMemory(runtime), FeedMemory(runtime)
        monkeypatch.setattr(slow, "_traces", lambda: None)
        made = 0
        real = quick._row

        def counted(now_ns: int) -> Any:
            nonlocal made
            made += 1
            return real(now_ns)

        monkeypatch.setattr(quick, "_row", counted)
        for second in range(1, 41):
            clock.now = START_NS + second * SECOND_NS
            if second in (1, 2, 20, 21):
                await service.send([second, second - 30 * (second == 21)])
            if second == 30:
                await service.post("events", body_of(b"{"))
            await eventually(lambda: runtime.feed.state.outbox.undelivered_events == 0)
            await eventually(lambda: runtime.feed.durable_lsn == runtime.feed.next_lsn)
            quick.sample()
            slow.sample()
        assert quick.history.rows(0).tobytes() == slow.history.rows(0).tobytes()
        assert made < 20
        rates = [memory.rates(clock.now + 1, runtime.hops()) for memory in (quick, slow)]
        assert rates[0] == rates[1]


async def test_rates_are_those_of_the_last_seconds(tmp_path: Path) -> None:
    """10 events a second for 8 s: the window of 5 s sees 10 a second; then none, and 0 once they have left it."""
    clock = VirtualTime(START_NS)
    async with running(configuration(tmp_path, slack="0s"), clock=clock) as service:
        memory, runtime = memory_of(service), service.runtime

        def rates() -> Any:
            return memory.rates(clock.now, runtime.hops())

        for second in range(1, 9):
            clock.now = START_NS + second * SECOND_NS
            await service.send([second + part / 100 for part in range(10)])
            await eventually(lambda: runtime.feed.state.outbox.undelivered_events == 0)
            memory.sample()
        found = rates()
        assert found.books["received"] == found.books["released"] == pytest.approx(10)
        assert found.books["late"] == found.books["quarantined"] == 0
        assert found.passed["ingest"] == found.passed["decode"] == pytest.approx(1)  # bodies
        assert {name: found.passed[name] for name in ("journal", "runs", "release", "sinks")} == pytest.approx(
            dict.fromkeys(("journal", "runs", "release", "sinks"), 10)
        )
        clock.now += RATES_OVER_NS
        memory.sample()
        clock.now += SECOND_NS
        assert rates().books["received"] == 0


async def test_the_last_minute_is_counted_up_to_now(tmp_path: Path) -> None:
    """Two events a second of which one is a repeat, sampled once a second; the last body came after the last sample."""
    clock = VirtualTime(START_NS)
    async with running(configuration(tmp_path, slack="0s", id="/id"), clock=clock) as service:
        memory = memory_of(service)
        for second in range(1, 91):
            clock.now = START_NS + second * SECOND_NS
            line = event_line(second, "gw-1", id=f"e{second}")
            await service.post("events", body_of(line, line))
            if second < 90:
                memory.sample()
        found = memory.minute(clock.now)
        assert (found["received"], found["duplicate"], found["late"]) == (120, 60, 0)
        clock.now += 30 * SECOND_NS
        assert memory.minute(clock.now)["duplicate"] == 30


async def test_a_sample_that_fails_stops_nothing(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, caplog: pytest.LogCaptureFixture
) -> None:
    monkeypatch.setattr(live, "SAMPLE_EVERY_S", 0.0)
    async with running(configuration(tmp_path)) as service:
        memory = memory_of(service)
        real = memory.history.add
        calls = 0

        def failing(row: Any) -> None:
            nonlocal calls
            calls += 1
            if calls == 1:
                raise RuntimeError("once")
            real(row)

        monkeypatch.setattr(memory.history, "add", failing)
        await eventually(lambda: calls >= 3)
        assert "unforeseen error in a sample" in caplog.text
        await service.send([1])


# ---- late events by source ------------------------------------------------------------------------------------------


def late_batch(number: int, arrived_ns: int, rows: list[tuple[int, int]]) -> Batch:
    """A batch of the late lane: (time, source)."""
    refs = np.zeros(len(rows), dtype=REF)
    refs["source"] = [source for _, source in rows]
    return Batch("late", number, np.array([time for time, _ in rows]), refs, arrived_ns, 0)


@given(st.lists(st.lists(st.tuples(st.integers(0, 99), st.integers(0, 4)), min_size=1, max_size=9), max_size=12))
@settings(deadline=None)
def test_the_last_late_events_of_each_source_are_kept(batches: list[list[tuple[int, int]]]) -> None:
    recent, rows = RecentLate(), []
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(late_module, "EVENTS_AT_MOST", 10)
        for number, batch in enumerate(batches, 1):
            for _ in range(2):  # it leaves again, to another sink: that is no new late event
                recent.note(late_batch(number, number * 100, batch))
                recent.check()
            rows += [(source, (number * 100, time)) for time, source in batch]
    least = rows[-10:]
    found = recent.rows([0, 1, 2, 3, 4], 3)
    for source, told in found.items():
        every = [row for number, row in rows if number == source]
        surely = [row for number, row in least if number == source]
        assert told == every[len(every) - len(told) :] and len(told) >= min(3, len(surely))
    assert sum(len(told) for told in recent.rows([0, 1, 2, 3, 4], 1000).values()) <= 10 + 9
    last_first = list(dict.fromkeys(number for number, _ in reversed(least)))
    assert set(last_first) <= set(recent.sources())
    recent.forget_before(len(batches) * 100)
    assert recent.rows([0, 1, 2, 3, 4], 9) == {
        source: [row for number, row in rows if number == source and row[0] == len(batches) * 100][-9:]
        for source in range(5)
    }


# ---- lateness, and every slack --------------------------------------------------------------------------------------


@given(st.lists(st.lists(st.integers(0, 2 * 10**14), min_size=1, max_size=20), min_size=1, max_size=10))
def test_lateness_between_two_looks_is_what_came_in_between(columns: list[list[int]]) -> None:
    memory = Lateness()
    since = SinceLast(memory)
    for index, column in enumerate(columns):
        memory.note(index, len(column), np.array(column))
        expected = [0] * COUNTS
        for lateness_ns in column:
            if lateness_ns <= memory.sketch.buckets.upper[0]:  # some 1 us: the sketch knows no less
                expected[0] += 1
            else:
                expected[next((place for place, edge in enumerate(EDGES_NS) if lateness_ns <= edge), COUNTS - 1)] += 1
        assert since.take().tolist() == expected
    assert not since.take().any()


def test_a_fade_in_between_takes_nothing_from_what_came_after_it() -> None:
    memory = Lateness()
    memory.note(0, 200_000, np.full(200_000, 5 * SECOND_NS))
    since = SinceLast(memory)
    memory.note(3600 * SECOND_NS, 3, np.full(3, 5 * SECOND_NS))
    assert memory.fades == 1
    assert since.take().sum() == 3


@given(st.lists(st.integers(0, 60_000), min_size=1, max_size=60), st.sampled_from([0, 500, 5_000, 20_000]))
@example([0, 5_001], 5_000)  # one just above the slack shares its bucket, and was not kept
def test_every_slack_is_told_as_if_it_had_been_set(lateness_ms: list[int], slack_ms: int) -> None:
    """Judged one by one: with slack S the events that are later are late, and the others wait S less their lateness."""
    memory, slack_ns = Lateness(), slack_ms * 10**6
    lateness_ns = np.array(lateness_ms) * 10**6
    memory.note(0, len(lateness_ns), lateness_ns)
    waits = [slack_ns - late for late in lateness_ns.tolist() if late <= slack_ns]
    hold_ns = sum(waits) / len(waits) if waits else 0.0
    rows = every_slack(memory, slack_ns, hold_ns)
    assert rows == sorted(rows) and slack_ns / 1e9 in [row[0] for row in rows]
    for slack_s, share, hold_s in rows:
        assert slack_s is not None
        other_ns = slack_s * 1e9
        kept = [late for late in lateness_ns.tolist() if late <= other_ns + 0.5]
        if other_ns != slack_ns:
            assert share == pytest.approx(1 - len(kept) / len(lateness_ns), abs=2e-9)
        if kept and waits:
            expected_s = sum(other_ns - late for late in kept) / len(kept) / 1e9
            # What the sketch answers with is within 1 % of a lateness, here and at the present slack.
            assert hold_s == pytest.approx(expected_s, abs=0.01 * (max(kept) + max(lateness_ns)) / 1e9 + 1e-5)


@given(
    st.lists(st.integers(0, 60_000), min_size=1, max_size=60),
    st.sampled_from([500, 5_000, 20_000]),
    st.integers(0, 10_000),
)
@example([0, 5_001], 5_000, 700)  # one event just above the slack shares its bucket
@example([4_990, 4_999, 5_001], 5_000, 0)
def test_what_is_held_beyond_the_slack_is_the_same_with_every_slack(
    lateness_ms: list[int], slack_ms: int, beyond_ms: int
) -> None:
    """Every event waits so much longer than the slack asks. The bound is the contract's: the present slack's bucket."""
    memory, slack_ns, beyond_ns = Lateness(), slack_ms * 10**6, beyond_ms * 10**6
    late_ns = [late * 10**6 for late in lateness_ms]
    memory.note(0, len(late_ns), np.array(late_ns))
    place = memory.sketch.buckets.place
    below = [late for late in late_ns if place(late) < place(slack_ns)]
    within = [late for late in late_ns if place(late) == place(slack_ns)]
    kept = [late for late in late_ns if late <= slack_ns]
    hold_ns = slack_ns + beyond_ns - mean(kept) if kept else 0.0
    bound_ns = mean(below + within) - mean(below) if below and within else 0.0
    for slack_s, _, hold_s in every_slack(memory, slack_ns, hold_ns):
        assert slack_s is not None
        other_ns = slack_s * 1e9
        judged = [late for late in late_ns if late <= other_ns + 0.5]
        if kept and other_ns == slack_ns:
            assert hold_s == pytest.approx(hold_ns / 1e9, abs=1e-6)  # as it was measured
        elif kept and judged:
            expected_s = (other_ns + beyond_ns - mean(judged)) / 1e9
            sketched_s = 0.01 * (max(judged) + max(late_ns)) / 1e9
            assert hold_s == pytest.approx(expected_s, abs=bound_ns / 1e9 + sketched_s + 1e-5)


def test_nothing_is_claimed_where_nothing_was_seen() -> None:
    assert {tuple(row[1:]) for row in every_slack(Lateness(), 5 * SECOND_NS, None)} == {(None, None)}


def test_the_lateness_is_judged_as_the_watermark_judges_it() -> None:
    """An event above the slack's edge is one that the feed named late."""
    shell = Shell(patient(slack_ns=EDGES_NS[9]))
    since = SinceLast(shell.feed.state.lateness)
    chance = np.random.default_rng(5)
    for now in range(1, 400):
        shell.events([START_NS + now * 10**8 - int(chance.exponential(3e8))], now)
    counts = since.take()
    assert counts.sum() == 399
    assert counts[10:].sum() == shell.feed.state.ledger.late > 0

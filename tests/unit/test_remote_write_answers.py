"""The remote-write sink and its receiver's answers: what each means, answers that are lost, what is refused for ever.

Against a receiver with the measured rules, over HTTP; a real one is in tests/e2e/test_remote_write_store.py.
"""

from __future__ import annotations

import asyncio
import sqlite3
from email.utils import formatdate
from pathlib import Path

import pytest
from helpers_remote_sink import LEVEL, MS, counted, event, held, sink_for, station, take
from helpers_remote_write import OK, Events, Model, Told, decoded, request, served
from helpers_sinks import START_NS, VirtualTime
from strandline.errors import SinkRefused, SinkRetry, StrandlineError
from strandline.sinks import make_sink
from strandline.sinks.remote_write import RemoteWriteSink
from strandline.sinks.remote_write_series import REASONS
from strandline.sinks.repairs import Repair, RepairRow, TakesRepairs
from strandline.sinks.rows import rows_of

# ---- what an answer means -------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("told", "reason"),
    [
        ((400, "out of order sample\n"), "out_of_order"),
        ((400, "duplicate sample for timestamp\n"), "duplicate_timestamp"),
        ((400, "out of bounds\n"), "out_of_bounds"),
        ((500, "too old sample\n"), "too_old"),
    ],
)
async def test_refusals_for_ever_are_counted_by_reason(tmp_path: Path, told: Told, reason: str) -> None:
    async with served() as server:
        sink = sink_for(server, tmp_path)
        await sink.open()
        events = Events()
        bad = START_NS // MS + 3
        server.script = lambda body: told if any(bad in dict(samples) for _, samples in decoded(body)) else None
        batches = [events.batch(1, [event(time, time) for time in range(3)]),
                   events.batch(2, [event(time, time) for time in range(3, 6)])]  # fmt: skip
        with pytest.raises(SinkRefused, match=f"1 {reason}") as refusal:
            await sink.take(batches, events)
        assert (refusal.value.numbers, refusal.value.rows) == ([2], {2: [0]})
        assert held(server) == {station("weir-1"): {0: 0.0, 1: 1.0, 2: 2.0, 4: 4.0, 5: 5.0}}
        assert counted(sink) == {reason: 1} and set(sink.counts()) == set(REASONS)
        assert await sink.take(batches[:1], events) == {"ordered": 2}  # as delivery offers what is left
        assert len(server.seen) <= 1 + 2 * 3  # halved, not tried one by one
        await sink.close()


@pytest.mark.parametrize(
    ("told", "headers", "match", "after_s"),
    [
        ((503, "compacting"), {"Retry-After": "7"}, "503 Service Unavailable: compacting", 7.0),
        ((429, ""), {"Retry-After": formatdate(START_NS / 1e9 + 30, usegmt=True)}, "429 Too Many Requests", 30.0),
        ((500, "disk full"), {}, "500 Internal Server Error: disk full", None),
        ((400, "snappy: corrupt input"), {}, "400 Bad Request: snappy", None),
        ((401, "who are you"), {}, "401 Unauthorized", None),
        ((404, "remote write receiver needs to be enabled"), {}, "404 Not Found: remote write receiver needs", None),
        ((413, "one is too large"), {}, "413", None),
        ((302, ""), {"Location": "/elsewhere"}, "302 Found", None),
        ((502, "out of order sample"), {}, "502", None),
    ],
)
async def test_everything_else_is_tried_again(
    tmp_path: Path, told: Told, headers: dict[str, str], match: str, after_s: float | None
) -> None:
    async with served() as server:
        sink = sink_for(server, tmp_path)
        await sink.open()
        events = Events()
        batch = events.batch(1, [event(0, 1)])
        server.script, server.headers = lambda body: told, headers
        for _ in range(2):
            with pytest.raises(SinkRetry, match=match) as retry:
                await sink.take([batch], events)
            assert retry.value.retry_after_s == after_s
        server.script, server.headers = lambda body: None, {}
        assert await sink.take([batch], events) == {"ordered": 1}
        assert held(server) == {station("weir-1"): {0: 1.0}} and counted(sink) == {}
        await sink.close()


async def test_a_receiver_that_does_not_answer_or_is_not_there(tmp_path: Path) -> None:
    async with served() as server:
        sink = sink_for(server, tmp_path, timeout_s=0.2)
        await sink.open()
        events = Events()
        batch = events.batch(1, [event(0, 1), event(1, 2)])
        server.script = lambda body: "hang"  # it stored them all the same
        with pytest.raises(SinkRetry, match=r"did not answer in 0\.2 s"):
            await sink.take([batch], events)
        server.script = lambda body: None
    with pytest.raises(SinkRetry, match="cannot be reached"):
        await sink.take([batch], events)
    await sink.close()


async def test_smaller_requests_where_the_receiver_wants_them(tmp_path: Path) -> None:
    async with served() as server:

        def script(body: bytes) -> Told | None:
            return (413, "too large") if sum(len(samples) for _, samples in decoded(body)) > 3 else None

        server.script = script
        sink = sink_for(server, tmp_path)
        await take(sink, Events(), [event(time, time) for time in range(10)])
        assert server.model.count == 10 and counted(sink) == {}


# ---- answers that are lost ------------------------------------------------------------------------------------------


async def test_a_lost_answer_costs_two_requests_where_the_series_are_known(tmp_path: Path) -> None:
    async with served() as server:
        sink = sink_for(server, tmp_path)
        await sink.open()
        events = Events()
        await sink.take([events.batch(1, [event(0, 0, name) for name in "abc"])], events)
        steps = iter(["lose"])
        server.script = lambda body: next(steps, None)
        batch = events.batch(2, [event(time, time, name) for time in range(1, 101) for name in "abc"])
        with pytest.raises(SinkRetry):
            await sink.take([batch], events)
        assert await sink.take([batch], events) == {"ordered": 2}
        assert len(server.seen) == 4  # the first batch; the second; again, refused; the last sample of each series
        assert server.model.count == 303 and counted(sink) == {"already_there": 297}
        await sink.close()


async def test_a_process_that_ended_before_the_answer_leaves_exactly_that_request_in_doubt(tmp_path: Path) -> None:
    async with served() as server:
        events = Events()
        batches = [events.batch(number, [event(3 * number + row, row) for row in range(3)]) for number in range(1, 9)]
        sink = sink_for(server, tmp_path, samples_at_most=6)
        await sink.open()
        steps = iter(["ok", "ok", "hang"])
        server.script = lambda body: next(steps, None)
        taking = asyncio.create_task(sink.take(batches, events))
        while len(server.seen) < 3:
            await asyncio.sleep(0.005)
        taking.cancel()
        with pytest.raises(asyncio.CancelledError):
            await taking
        await sink.close()
        assert server.model.count == 18  # the third was stored before the process ended
        again = sink_for(server, tmp_path, samples_at_most=6)
        assert await again.open() == {"ordered": 4}
        assert await again.take(batches[4:], events) == {"ordered": 8}
        again.check()
        await again.close()
        assert server.model.count == 24 and counted(again) == {"already_there": 5}


async def test_a_position_is_there_at_the_next_start(tmp_path: Path) -> None:
    async with served() as server:
        assert await take(sink_for(server, tmp_path), Events(), [event(0, 1)], [event(1, 2)]) == 2
        other = RemoteWriteSink(server.url, "estuary", VirtualTime(), [LEVEL], tmp_path / "progress.db")
        assert await other.open() == {}  # a feed of its own
        await other.close()
        again = sink_for(server, tmp_path)
        assert await again.open() == {"ordered": 2}
        events = Events()
        batches = [events.batch(number, [event(number - 1, number)]) for number in (1, 2)]
        assert await again.take(batches, events) == {"ordered": 2}
        assert await again.take([], events) == {} == await again.flush(events)
        await again.close()
        assert len(server.model.requests) == 1


async def test_refusals_that_nobody_kept_are_told_again_and_no_good_sample_is_sent_again(tmp_path: Path) -> None:
    async with served() as server:
        server.model.write(request(({"__name__": "water_level_meters", "station": "a"}, [(START_NS // MS + 1, 9.0)])))
        events = Events()
        batches = [events.batch(1, [event(0, 1, "a"), event(0, 2, "b")]), events.batch(2, [event(2, 3, "a")])]
        for _ in range(3):  # processes that end before the refusal is kept
            sink = sink_for(server, tmp_path)
            await sink.open()
            with pytest.raises(SinkRefused, match="1 out_of_order") as refusal:
                await sink.take(batches, events)
            assert (refusal.value.numbers, refusal.value.rows) == ([1], {1: [0]})
            await sink.close()
        assert held(server) == {station("a"): {1: 9.0, 2: 3.0}, station("b"): {0: 2.0}}
        sent = len(server.seen)
        sink = sink_for(server, tmp_path)
        assert await sink.open() == {}  # whoever kept it knows
        assert await sink.take([batches[1]], events) == {"ordered": 2}  # the first is kept now
        await sink.close()
        assert len(server.seen) == sent
        again = sink_for(server, tmp_path)
        assert await again.open() == {"ordered": 2}
        await again.close()


def test_a_refusals_rows_are_a_batch_of_their_own() -> None:
    events = Events()
    batch = events.batch(7, [event(0, 1), event(1, 2), event(2, 3)])
    part = rows_of(batch, [0, 2])
    assert (part.number, part.lane, len(part)) == (7, "ordered", 2)
    assert events.lines(part) == [events.held[0], events.held[2]]
    assert part.times.tolist() == [START_NS, START_NS + 2 * MS]
    assert rows_of(batch, None) is batch


# ---- late events ----------------------------------------------------------------------------------------------------


async def test_late_events_go_apart_and_what_is_too_old_is_told(tmp_path: Path) -> None:
    async with served(Model(window_ms=5_000)) as server:
        sink = sink_for(server, tmp_path)
        assert sink.lanes == ("ordered", "late")
        await sink.open()
        events = Events()
        assert await sink.take([events.batch(1, [event(10_000, 1)])], events) == {"ordered": 1}
        late = events.batch(1, [event(9_000, 4), event(6_000, 3), event(4_000, 2)], "late")
        with pytest.raises(SinkRefused, match="1 too_old") as refusal:
            await sink.take([late], events)
        assert refusal.value.rows == {1: [2]}
        assert held(server) == {station("weir-1"): {10_000: 1.0, 9_000: 4.0, 6_000: 3.0}}
        for body in server.model.requests:
            for _, samples in decoded(body):
                assert samples == sorted(samples)
        await sink.close()


async def test_repairs_are_sent_sorted_and_told_when_they_never_will_be(tmp_path: Path) -> None:
    rows = [RepairRow(n, START_NS + time * MS, "x", 0, 0, b'{"level":%d,"station":"a"}' % n) for n, time in
            enumerate([7_000, 6_000, 9_000, 8_000])]  # fmt: skip
    async with served(Model(window_ms=5_000)) as server:
        sink = sink_for(server, tmp_path, samples_at_most=2)
        assert isinstance(sink, TakesRepairs)
        await sink.open()
        events = Events()
        await sink.take([events.batch(1, [event(10_000, 1, "a")])], events)
        steps = iter(["lose"])
        server.script = lambda body: next(steps, None)
        with pytest.raises(SinkRetry):
            await sink.repair(Repair(1, 0, rows))
        await sink.repair(Repair(1, 0, rows))
        assert held(server) == {station("a"): {10_000: 1.0, 7_000: 0.0, 6_000: 1.0, 9_000: 2.0, 8_000: 3.0}}
        old = [*rows[:1], RepairRow(9, START_NS, "x", 0, 0, b'{"level":1,"station":"a"}')]
        with pytest.raises(SinkRefused, match="1 too_old") as refusal:
            await sink.repair(Repair(2, 0, old))
        assert refusal.value.numbers == [2] and counted(sink) == {"too_old": 1}
        assert all(samples == sorted(samples) for body in server.model.requests for _, samples in decoded(body))
        await sink.close()


# ---- the file, the token, the making --------------------------------------------------------------------------------


async def test_a_token_is_read_from_its_file_for_each_request(tmp_path: Path) -> None:
    file = tmp_path / "token"
    async with served() as server:
        sink = sink_for(server, tmp_path, token_file=file)
        with pytest.raises(SinkRetry, match="cannot be read"):
            await sink.open()
        file.write_text("one\n")
        await sink.open()
        events = Events()
        await sink.take([events.batch(1, [event(0, 1)])], events)
        file.write_text("two\n")
        await sink.take([events.batch(2, [event(1, 1)])], events)
        await sink.close()
        assert [headers["Authorization"] for headers in server.seen] == ["Bearer one", "Bearer two"]


async def test_a_file_that_cannot_be_written_stops_before_anything_is_sent(tmp_path: Path) -> None:
    async with served() as server:
        sink = sink_for(server, tmp_path)
        await sink.open()
        events = Events()
        batch = events.batch(1, [event(0, 1)])
        with sqlite3.connect(tmp_path / "progress.db") as other:
            other.execute("BEGIN IMMEDIATE")
            with pytest.raises(SinkRetry, match="locked by another program"):
                await sink.take([batch], events)
            other.rollback()
        other.close()
        assert server.seen == []
        assert await sink.take([batch], events) == {"ordered": 1}
        await sink.close()


async def test_mixed_lanes_and_disorder_are_errors(tmp_path: Path) -> None:
    async with served() as server:
        sink = sink_for(server, tmp_path)
        await sink.open()
        events = Events()
        for wrong in ([events.batch(1, []), events.batch(2, [], "late")], [events.batch(2, []), events.batch(1, [])]):
            with pytest.raises(StrandlineError, match="one lane"):
                await sink.take(wrong, events)
        await sink.close()


async def test_it_is_made_by_its_kind(tmp_path: Path) -> None:
    sink = make_sink(
        "remote_write", "river", VirtualTime(), url="http://127.0.0.1:1/w", series=(LEVEL,), path=tmp_path / "p.db"
    )
    assert isinstance(sink, RemoteWriteSink) and sink.flush_after_s == 0.0
    await sink.close()
    with pytest.raises(StrandlineError, match="needs url, series, path"):
        make_sink("remote_write", "river", VirtualTime())


def test_an_answer_is_a_status_and_a_text() -> None:
    assert Model().write(request(({"__name__": "m"}, [(1, 1.0)]))) == OK

"""The remote-write sink, case by case: what a request holds, what each answer means, what is counted, what is kept.

Against a receiver with the measured rules, over HTTP; a real one is in tests/e2e/test_remote_write_store.py.
"""

from __future__ import annotations

import asyncio
import sqlite3
from collections.abc import Callable
from email.utils import formatdate
from pathlib import Path
from typing import Any

import pytest
from helpers_remote_write import OK, Events, Labels, Model, Served, Told, decoded, request, served
from helpers_sinks import START_NS, VirtualTime
from strandline.core.columns import Lane
from strandline.errors import SinkRefused, SinkRetry, StrandlineError
from strandline.sinks import make_sink
from strandline.sinks.remote_write import RemoteWriteSink
from strandline.sinks.remote_write_series import REASONS, SeriesRule
from strandline.sinks.rows import rows_of

LEVEL = SeriesRule("water_level_meters", "/level", (("station", "/station"),))
MS = 1_000_000
Start = Callable[..., RemoteWriteSink]


def sink_for(server: Served, place: Path, *rules: SeriesRule, **options: Any) -> RemoteWriteSink:
    series = rules or (LEVEL,)
    return RemoteWriteSink(server.url, "river", VirtualTime(), series, place / "progress.db", **options)


def event(time_ms: int, level: object, station: object = "weir-1", **more: object) -> tuple[int, object]:
    return START_NS + time_ms * MS, {"level": level, "station": station, **more}


def station(name: str) -> Labels:
    return (("__name__", "water_level_meters"), ("station", name))


def counted(sink: RemoteWriteSink) -> dict[str, int]:
    return {reason: count for reason, count in sink.counts().items() if count}


def held(server: Served) -> dict[Labels, dict[int, float]]:
    """What the model stores, times from START_NS on."""
    start = START_NS // MS
    return {key: {time - start: value for time, value in found.items()} for key, found in server.model.series.items()}


async def take(sink: RemoteWriteSink, events: Events, *groups: list[tuple[int, object]], lane: Lane = "ordered") -> int:
    """Open, take these batches in one take, close; the position told."""
    await sink.open()
    answer = await sink.take([events.batch(number, group, lane) for number, group in enumerate(groups, 1)], events)
    sink.check()
    await sink.close()
    return answer[lane]


# ---- what a request holds ---------------------------------------------------------------------------------------------


async def test_a_request_is_sorted_and_says_what_it_is(tmp_path: Path) -> None:
    async with served() as server:
        sink = sink_for(server, tmp_path, external_labels=(("zone", "north"), ("a", "b")))
        assert await take(sink, Events(), [event(5, 1.5), event(7, 2, "weir-2")], [event(7, 3)]) == 2
        (body,) = server.model.requests
        start = START_NS // MS
        labels = (("__name__", "water_level_meters"), ("a", "b"), ("station", "weir-1"), ("zone", "north"))
        other = tuple(("station", "weir-2") if name == "station" else (name, text) for name, text in labels)
        assert decoded(body) == [(labels, [(start + 5, 1.5), (start + 7, 3.0)]), (other, [(start + 7, 2.0)])]
        headers = server.seen[0]
        assert headers["Content-Encoding"] == "snappy" and headers["Content-Type"] == "application/x-protobuf"
        assert headers["X-Prometheus-Remote-Write-Version"] == "0.1.0" and "Authorization" not in headers


async def test_several_series_of_one_event_and_pointers_into_it(tmp_path: Path) -> None:
    rules = (
        SeriesRule("level", "/m/level", (("gauge", "/id/0"), ("buoy", "/id/1"))),
        SeriesRule("flow", "/m/flow"),
    )
    async with served() as server:
        sink = sink_for(server, tmp_path, *rules)
        line = {"m": {"level": 1, "flow": 2.5}, "id": ["g", 7]}
        await take(sink, Events(), [(START_NS, line), (START_NS + MS, {"m": {"flow": 3}})])
        assert held(server) == {
            (("__name__", "level"), ("buoy", "7"), ("gauge", "g")): {0: 1.0},
            (("__name__", "flow"),): {0: 2.5, 1: 3.0},
        }
        assert counted(sink) == {"value_missing": 1}


@pytest.mark.parametrize(
    ("value", "text"),
    [("a b", "a b"), (7, "7"), (-1, "-1"), (True, "true"), (False, "false"), ("", None), (None, None), ("ü\0", "ü\0")],
)
async def test_labels_are_texts_integers_and_booleans(tmp_path: Path, value: object, text: str | None) -> None:
    """An empty label is to a receiver no label (Prometheus, "Data model"), so it is left out like an absent one."""
    async with served() as server:
        await take(sink_for(server, tmp_path), Events(), [event(0, 1, value)])
        name = ("__name__", "water_level_meters")
        assert list(held(server)) == [(name,) if text is None else (name, ("station", text))]


@pytest.mark.parametrize("value", [1.5, [], {}, "x" * 1025, "ü" * 513, 10**400])
async def test_what_is_no_label_is_counted_and_not_sent(tmp_path: Path, value: object) -> None:
    async with served() as server:
        sink = sink_for(server, tmp_path)
        assert await take(sink, Events(), [event(0, 1, value), event(1, 2, "x" * 1024)]) == 1
        assert held(server) == {station("x" * 1024): {1: 2.0}}
        assert counted(sink) == {"label_invalid": 1}


@pytest.mark.parametrize("value", [None, "1", True, [1], {"x": 1}, 10**400])
async def test_what_is_no_number_is_counted_and_not_sent(tmp_path: Path, value: object) -> None:
    async with served() as server:
        sink = sink_for(server, tmp_path)
        lines = [event(0, value), (START_NS, {"station": "weir-1"}), (START_NS, b'{"level":1e999}'), event(1, 2)]
        assert await take(sink, Events(), lines) == 1
        assert held(server) == {station("weir-1"): {1: 2.0}}
        assert counted(sink) == {"value_missing": 3}


async def test_an_integer_beyond_53_bits_is_rounded_as_a_double(tmp_path: Path) -> None:
    async with served() as server:
        await take(sink_for(server, tmp_path), Events(), [event(0, 2**53 + 1), event(1, -(2**64))])
        assert held(server)[station("weir-1")] == {0: 2.0**53, 1: -(2.0**64)}


@pytest.mark.parametrize(("time_ns", "time_ms"), [(999_999, 0), (1_000_000, 1), (-1, -1), (-1_000_001, -2)])
async def test_times_are_rounded_down_before_1970_too(tmp_path: Path, time_ns: int, time_ms: int) -> None:
    async with served() as server:
        await take(sink_for(server, tmp_path), Events(), [(time_ns, {"level": 1})])
        assert decoded(server.model.requests[0])[0][1] == [(time_ms, 1.0)]


async def test_requests_hold_so_many_samples_whatever_the_batches(tmp_path: Path) -> None:
    async with served() as server:
        sink = sink_for(server, tmp_path, samples_at_most=4)
        groups = [[event(3 * batch + row, row) for row in range(3)] for batch in range(5)]
        assert await take(sink, Events(), *groups, []) == 6
        sizes = [sum(len(samples) for _, samples in decoded(body)) for body in server.model.requests]
        assert sizes == [4, 4, 4, 3] and server.model.count == 15


async def test_what_has_no_samples_is_no_request(tmp_path: Path) -> None:
    async with served() as server:
        sink = sink_for(server, tmp_path)
        assert await take(sink, Events(), [], [event(0, None)], []) == 3
        assert server.model.requests == [] and counted(sink) == {"value_missing": 1}


async def test_more_series_than_are_remembered(tmp_path: Path) -> None:
    async with served() as server:
        sink = sink_for(server, tmp_path)
        sink._maker._known_at_most = 3
        await sink.open()
        events = Events()
        for number in range(1, 6):
            await sink.take([events.batch(number, [event(number, row, f"weir-{row}") for row in range(4)])], events)
        await sink.close()
        assert server.model.count == 20 and counted(sink) == {}


# ---- equal times ------------------------------------------------------------------------------------------------------


async def test_equal_times_in_one_request_the_last_to_come_wins(tmp_path: Path) -> None:
    """The receiver itself would keep the first without a word (measured)."""
    async with served() as server:
        sink = sink_for(server, tmp_path)
        lines = [(START_NS + ns, {"level": level, "station": "a"}) for ns, level in [(0, 1), (5, 2), (999_999, 3)]]
        await take(sink, Events(), [*lines, (START_NS + MS, {"level": 4, "station": "a"})])
        assert held(server) == {station("a"): {0: 3.0, 1: 4.0}}
        assert counted(sink) == {"equal_time": 2}


async def test_equal_times_with_equal_values_are_no_loss(tmp_path: Path) -> None:
    async with served() as server:
        sink = sink_for(server, tmp_path)
        await sink.open()
        events = Events()
        await sink.take([events.batch(1, [event(0, 1), event(0, 1)])], events)
        await sink.take([events.batch(2, [event(0, 1)])], events)
        await sink.close()
        assert held(server) == {station("weir-1"): {0: 1.0}} and counted(sink) == {}
        assert len(server.model.requests) == 1


async def test_another_value_at_a_time_that_was_sent_is_counted(tmp_path: Path) -> None:
    async with served() as server:
        sink = sink_for(server, tmp_path)
        await sink.open()
        events = Events()
        await sink.take([events.batch(1, [event(0, 1)])], events)
        assert await sink.take([events.batch(2, [event(0, 2), event(1, 3)])], events) == {"ordered": 2}
        await sink.close()
        assert held(server) == {station("weir-1"): {0: 1.0, 1: 3.0}} and counted(sink) == {"equal_time": 1}


async def test_two_rules_that_feed_one_series_share_its_times(tmp_path: Path) -> None:
    rules = (SeriesRule("m", "/a", (("x", "/n"),)), SeriesRule("m", "/b", (("x", "/n"),)))
    async with served() as server:
        sink = sink_for(server, tmp_path, *rules)
        await take(sink, Events(), [(START_NS, {"a": 1, "b": 2, "n": "1"})], [(START_NS + MS, {"b": 3, "n": 1})])
        assert held(server) == {(("__name__", "m"), ("x", "1")): {0: 2.0, 1: 3.0}}
        assert counted(sink) == {"equal_time": 1, "value_missing": 1}


# ---- the future -------------------------------------------------------------------------------------------------------


async def test_nothing_from_the_future_is_sent(tmp_path: Path) -> None:
    async with served() as server:
        sink = sink_for(server, tmp_path, ahead_at_most_s=1.0)
        await sink.open()
        events = Events()
        batch = events.batch(1, [event(1000, 1), event(1001, 2), event(86_400_000, 3)])
        with pytest.raises(SinkRefused, match="2 future") as refusal:
            await sink.take([batch], events)
        assert refusal.value.rows == {1: [1, 2]} and counted(sink) == {"future": 2}
        assert held(server) == {station("weir-1"): {1000: 1.0}}
        await sink.close()


async def test_the_receivers_clock_counts_where_it_is_behind(tmp_path: Path) -> None:
    async with served() as server:
        server.headers["Date"] = formatdate(START_NS / 1e9 - 60, usegmt=True)
        sink = sink_for(server, tmp_path, ahead_at_most_s=10.0)
        await sink.open()
        events = Events()
        await sink.take([events.batch(1, [event(-90_000, 1)])], events)  # its answer tells the clock
        with pytest.raises(SinkRefused, match="1 future"):
            await sink.take([events.batch(2, [event(-49_000, 2), event(-40_000, 3)])], events)
        assert held(server) == {station("weir-1"): {-90_000: 1.0, -49_000: 2.0}}
        server.headers["Date"] = formatdate(START_NS / 1e9 + 3600, usegmt=True)
        await sink.take([events.batch(3, [event(-40_000, 4)])], events)  # its answer tells another
        with pytest.raises(SinkRefused, match="1 future"):
            await sink.take([events.batch(4, [event(10_001, 5)])], events)  # one that is ahead does not count
        await sink.close()


# ---- what an answer means ---------------------------------------------------------------------------------------------


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


# ---- answers that are lost --------------------------------------------------------------------------------------------


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


# ---- late events ------------------------------------------------------------------------------------------------------


async def test_late_events_are_taken_only_where_they_are_asked_for(tmp_path: Path) -> None:
    async with served(Model(window_ms=5_000)) as server:
        assert sink_for(server, tmp_path).lanes == ("ordered",)
        sink = sink_for(server, tmp_path, late="send")
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


# ---- the file, the token, the making ----------------------------------------------------------------------------------


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
        sink = sink_for(server, tmp_path, late="send")
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
    with pytest.raises(StrandlineError, match="needs path, series, url"):
        make_sink("remote_write", "river", VirtualTime())


def test_an_answer_is_a_status_and_a_text() -> None:
    assert Model().write(request(({"__name__": "m"}, [(1, 1.0)]))) == OK

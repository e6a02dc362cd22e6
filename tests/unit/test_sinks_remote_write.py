"""The remote-write sink, case by case: what a request holds, equal times, the future, what is counted.

Against a receiver with the measured rules, over HTTP; a real one is in tests/e2e/test_remote_write_store.py.
"""

from __future__ import annotations

from email.utils import formatdate
from pathlib import Path

import pytest
from helpers_remote_sink import MS, counted, event, held, sink_for, station, take
from helpers_remote_write import Events, decoded, served
from helpers_sinks import START_NS
from strandline.errors import SinkRefused
from strandline.sinks.remote_write_series import SeriesRule

# ---- what a request holds -------------------------------------------------------------------------------------------


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


# ---- equal times ----------------------------------------------------------------------------------------------------


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


# ---- the future -----------------------------------------------------------------------------------------------------


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

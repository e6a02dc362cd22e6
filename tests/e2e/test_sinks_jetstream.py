"""The JetStream sink against a real server: the suite of all sinks, parts, positions, and what stands in the way."""

from __future__ import annotations

import asyncio
import hashlib
import signal
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import msgspec
import pytest
from helpers_brokers import Nats
from helpers_sinks import HeldLines
from nats.js import api
from nats.js.errors import NotFoundError
from sink_conformance import SinkConformance
from strandline.core.columns import Batch, Lane
from strandline.errors import SinkRefused, SinkRetry, StrandlineError
from strandline.ports import Sink
from strandline.sinks.jetstream import JetstreamSink

STREAM = "ORDERED"


@pytest.fixture(scope="module")
def server(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Nats]:
    """One server whose stream takes everything below `out`. A short window: it must not be what tells repeats."""
    with Nats(tmp_path_factory.mktemp("jetstream"), "max_payload: 1MB", synced=False) as server:
        asyncio.run(make(server))
        yield server


async def make(server: Nats, name: str = STREAM, subject: str = "out.>", **more: Any) -> None:
    client = await server.client()
    config = api.StreamConfig(name=name, subjects=[subject], duplicate_window=0.1, **more)
    await client.jetstream().add_stream(config)
    await client.close()


async def messages(server: Nats, subject: str) -> list[tuple[dict[str, str], bytes]]:
    """What the stream holds of a subject, in its order."""
    client = await server.client()
    stream, found, number = client.jetstream(), [], 0
    try:
        while True:
            each = await stream.get_msg(STREAM, seq=number + 1, subject=subject, next=True)
            number = int(each.seq or 0)
            found.append((dict(each.headers or {}), each.data or b""))
    except NotFoundError:
        return found
    finally:
        await client.close()


def prefix_of(place: Path) -> str:
    return f"out.{hashlib.sha256(str(place).encode()).hexdigest()[:16]}"


def subject_of(place: Path, feed: str, lane: Lane) -> str:
    return JetstreamSink([], STREAM, feed, subject=prefix_of(place))._subjects[lane]


def facts(line: bytes) -> tuple[object, ...]:
    row = msgspec.json.decode(line, type=dict[str, msgspec.Raw])
    names = ("time_ns", "source", "arrived_ns", "late_by_ns")
    return (*(msgspec.json.decode(row[name]) for name in names), bytes(row["event"]))


class TestConformance(SinkConformance):
    examples = 15
    bytes_at_most = 2**20

    @pytest.fixture(autouse=True)
    def _serve(self, server: Nats) -> None:
        self.server = server

    def make(self, place: Path, feed: str) -> Sink:
        options = {"subject": prefix_of(place), "message_bytes_at_most": self.bytes_at_most}
        return JetstreamSink([self.server.url], STREAM, feed, **options)  # type: ignore[arg-type]

    def stored(self, place: Path, feed: str, lane: Lane) -> list[tuple[object, ...]]:
        work = messages(self.server, subject_of(place, feed, lane))
        found: list[tuple[dict[str, str], bytes]] = []
        try:
            asyncio.get_running_loop()
        except RuntimeError:
            found = asyncio.run(work)
        else:  # a test that is on a loop asks from a thread with one of its own
            from concurrent.futures import ThreadPoolExecutor  # noqa: PLC0415

            with ThreadPoolExecutor(1) as thread:
                found = thread.submit(asyncio.run, work).result()
        lines = [line for _, body in found for line in body.split(b"\n")[:-1]]
        return [(line,) for line in lines] if lane == "ordered" else [facts(line) for line in lines]


class TestConformanceOfManyParts(TestConformance):
    bytes_at_most = 1_200
    test_a_batch_of_fifty_thousand = None  # each event would be a message of its own, half a minute


async def test_a_message_says_what_it_is(server: Nats, tmp_path: Path) -> None:
    lines = HeldLines()
    sink = JetstreamSink([server.url], STREAM, "river", subject=prefix_of(tmp_path), message_bytes_at_most=150)
    await sink.open()
    await sink.take(lines.batches("ordered", [7, 8], 5), lines)
    await sink.close()
    found = await messages(server, f"{prefix_of(tmp_path)}.river.ordered")
    told = [(each["Nats-Msg-Id"], each["Strandline-First"], each["Strandline-Last"]) for each, _ in found]
    assert told[0] == (f"{prefix_of(tmp_path)}/river/ordered/7", "0", "0") and told[-1][2] == "1"
    assert len(told) == 6 and all(len(body) <= 150 for _, body in found)
    assert [name for name, first, _ in told if first != "0"] == [
        f"{prefix_of(tmp_path)}/river/ordered/{number}/{first}" for number in (7, 8) for first in (2, 4)
    ]
    assert {each["Strandline-Batch"] for each, _ in found} == {"7", "8"}
    assert found[0][0]["Content-Type"] == "application/x-ndjson"


@pytest.mark.parametrize("stops_after", [0, 1, 2])
async def test_a_batch_that_was_cut_off_goes_on_where_it_stopped(
    server: Nats, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, stops_after: int
) -> None:
    """Long after the window in which the server would tell a repeat; with another size of messages, too."""
    lines = HeldLines()
    batches = lines.batches("ordered", [1, 2], 9)
    publish, sent = JetstreamSink._publish, []

    async def cut(self: JetstreamSink, *given: Any) -> None:
        if len(sent) >= 3 + stops_after:
            raise SinkRetry("cut off")
        sent.append(given)
        await publish(self, *given)

    options = {"subject": prefix_of(tmp_path)}
    sink = JetstreamSink([server.url], STREAM, "river", message_bytes_at_most=150, **options)
    await sink.open()
    with monkeypatch.context() as patch:
        patch.setattr(JetstreamSink, "_publish", cut)
        with pytest.raises(SinkRetry, match="cut off"):
            await sink.take(batches, lines)
    await sink.close()
    again = JetstreamSink([server.url], STREAM, "river", message_bytes_at_most=250, **options)
    reached = (await again.open())["ordered"]
    assert reached in (0, 1)
    assert (await again.take([batch for batch in batches if batch.number > reached], lines))["ordered"] == 2
    await again.close()
    found = await messages(server, f"{prefix_of(tmp_path)}.river.ordered")
    assert b"".join(body for _, body in found) == b"".join(lines.ndjson(batch) for batch in batches)


async def test_an_event_that_fits_in_no_message_is_refused_and_the_rest_is_there(server: Nats, tmp_path: Path) -> None:
    lines = HeldLines()
    small, large = lines.batch("ordered", 1, 3), lines.batch("ordered", 2, 3)
    lines.held[large.refs["place"][1]] = b'{"text":"' + b"x" * 400 + b'"}'
    sink = JetstreamSink([server.url], STREAM, "river", subject=prefix_of(tmp_path), message_bytes_at_most=300)
    await sink.open()
    for _ in range(2):  # offered again after a crash it is refused again, and nothing is there twice
        with pytest.raises(SinkRefused) as caught:
            await sink.take([small, large], lines)
        assert (caught.value.numbers, caught.value.rows) == ([2], {2: [1]})
    last = lines.batch("ordered", 3, 1)
    assert (await sink.take([last], lines))["ordered"] == 3
    await sink.close()
    found = await messages(server, f"{prefix_of(tmp_path)}.river.ordered")
    wanted = [*lines.lines(small), lines.lines(large)[0], lines.lines(large)[2], *lines.lines(last)]
    assert b"".join(body for _, body in found).split(b"\n")[:-1] == wanted


async def test_what_stands_in_the_way_is_told(server: Nats, tmp_path: Path) -> None:
    lines = HeldLines()
    batch = lines.batch("ordered", 1, 1)
    for sink, words in (
        (JetstreamSink(["nats://127.0.0.1:1"], STREAM, "a"), "no server answers as it should"),
        (JetstreamSink([server.url], "NOWHERE", "a"), "there is no stream NOWHERE"),
    ):
        with pytest.raises(SinkRetry, match=words):
            await sink.open()
        await sink.close()
    sink = JetstreamSink([server.url], STREAM, "a", subject="elsewhere")
    await sink.open()
    with pytest.raises(SinkRetry, match=r"no stream takes elsewhere\.a\.ordered: add it"):
        await sink.take([batch], lines)
    await sink.close()
    client = await server.client()
    await client.jetstream().publish(f"{prefix_of(tmp_path)}.a.late", b"{}\n")
    await client.close()
    sink = JetstreamSink([server.url], STREAM, "a", subject=prefix_of(tmp_path))
    with pytest.raises(StrandlineError, match="is not this sink's"):
        await sink.open()
    await sink.close()


async def test_a_server_that_restarts(tmp_path: Path) -> None:
    with Nats(tmp_path) as server:
        await make(server)
        lines = HeldLines()
        sink = JetstreamSink([server.url], STREAM, "river", subject="out")
        await sink.open()
        await sink.take(lines.batches("ordered", [1, 2]), lines)
        server.end(signal.SIGKILL)
        with pytest.raises(SinkRetry):
            await sink.take(lines.batches("ordered", [3]), lines)
        server.start()
        batches = lines.batches("ordered", [1, 2, 3])
        assert (await sink.take(batches, lines))["ordered"] == 3
        await sink.close()
        assert len(await messages(server, "out.river.ordered")) == 3


# ---- two sinks for one feed -----------------------------------------------------------------------------------------


async def forgotten(server: Nats, place: Path) -> None:
    """Wait until the stream's window has passed over all that was published until now."""
    client = await server.client()
    stream, repeat = client.jetstream(), True
    await stream.publish(f"{prefix_of(place)}.beside", b"", headers={"Nats-Msg-Id": str(place)})
    while repeat:
        again = await stream.publish(f"{prefix_of(place)}.beside", b"", headers={"Nats-Msg-Id": str(place)})
        repeat = bool(again.duplicate)
    await client.close()


async def until_taken(sink: JetstreamSink, batches: list[Batch], lines: HeldLines) -> int:
    while True:
        try:
            return (await sink.take(batches, lines))["ordered"]
        except SinkRetry:
            await asyncio.sleep(0)


@pytest.mark.parametrize("in_window", [True, False])
async def test_one_that_wakes_late_publishes_nothing_twice(server: Nats, tmp_path: Path, in_window: bool) -> None:
    """Whether the server still knows the messages' ids or not."""
    lines = HeldLines()
    batches = lines.batches("ordered", range(1, 7))
    earlier, later = (JetstreamSink([server.url], STREAM, "river", subject=prefix_of(tmp_path)) for _ in range(2))
    await earlier.open()
    await earlier.take(batches[:2], lines)
    assert (await later.open())["ordered"] == 2
    await later.take(batches[2:5], lines)
    if not in_window:
        await forgotten(server, tmp_path)
    with pytest.raises(SinkRetry, match="wrong last sequence"):
        await earlier.take(batches[2:4], lines)
    assert (await earlier.take(batches[2:], lines))["ordered"] == 6
    assert await until_taken(later, batches[5:], lines) == 6
    await earlier.close()
    await later.close()
    found = await messages(server, f"{prefix_of(tmp_path)}.river.ordered")
    assert [body for _, body in found] == [lines.ndjson(batch) for batch in batches]


@pytest.mark.parametrize("sizes", [(150, 150), (150, 250)])
async def test_two_at_the_same_moment_do_not_mix(server: Nats, tmp_path: Path, sizes: tuple[int, int]) -> None:
    """Part by part, cut alike or not, whoever of them is ahead."""
    lines = HeldLines()
    batches = lines.batches("ordered", range(1, 13), 9)
    sinks = [
        JetstreamSink([server.url], STREAM, "river", subject=prefix_of(tmp_path), message_bytes_at_most=size)
        for size in sizes
    ]
    await asyncio.gather(*(sink.open() for sink in sinks))
    for start in range(0, len(batches), 3):
        await asyncio.gather(*(until_taken(sink, batches[start : start + 3], lines) for sink in sinks))
    await asyncio.gather(*(sink.close() for sink in sinks))
    found = await messages(server, f"{prefix_of(tmp_path)}.river.ordered")
    assert b"".join(body for _, body in found) == b"".join(lines.ndjson(batch) for batch in batches)


async def test_what_was_deleted_is_there_again_once_the_server_has_forgotten_it(server: Nats) -> None:
    """What the server drops for a repeat does not count as stored unless it still stands there."""
    lines = HeldLines()
    batches = lines.batches("ordered", [1, 2])
    client = await server.client()
    stream = client.jetstream()
    await stream.add_stream(api.StreamConfig(name="DELETED", subjects=["deleted.>"], duplicate_window=1))
    sink = JetstreamSink([server.url], "DELETED", "river", subject="deleted")
    await sink.open()
    await sink.take(batches, lines)
    await stream.purge_stream("DELETED")
    await sink.open()
    with pytest.raises(SinkRetry, match="does so no more"):
        await sink.take(batches, lines)
    assert await until_taken(sink, batches, lines) == 2
    assert (await stream.stream_info("DELETED")).state.messages == 2
    await sink.close()
    await client.close()

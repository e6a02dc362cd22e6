"""The harness of the cluster tests itself: brokers elect and come back, sources stay in their partition, the producer
loses nothing of its own accord, and the judge finds faults that are planted."""

from __future__ import annotations

import asyncio
import time
from collections.abc import Iterator, Sequence
from pathlib import Path

import nats
import pytest
from helpers_broker_cluster import Brokers
from helpers_brokers import STREAM
from helpers_cluster import Pause, cluster_configuration, judged, partition_feed, until_stored
from helpers_gates import Gates
from helpers_postgres import ask, make_schema, shared
from helpers_producer import Producer, course, sent_of
from helpers_service import config_of
from nats.aio.client import Client
from nats.js.api import StreamInfo
from strandline_loadgen.evidence import FAULTS

PARTITIONS = 4
SOURCES = 24


@pytest.fixture(scope="module")
def brokers(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Brokers]:
    with Brokers(tmp_path_factory.mktemp("brokers"), PARTITIONS) as brokers:
        brokers.make_stream()
        yield brokers


def test_sources_stay_in_their_partition_while_leaders_are_killed(brokers: Brokers) -> None:
    """Everything that was acknowledged is in the stream, once, whichever node led it."""
    schedule = course(1, SOURCES, 10_000, 60.0)
    with Producer(brokers.urls, schedule, SOURCES, "harness") as producer:
        wait(lambda: producer.acknowledged >= 100)
        before = brokers.partitions_by_source()
        first = brokers.leader()
        first.kill()
        second = brokers.leader()
        assert second is not first
        count = producer.acknowledged
        wait(lambda: producer.acknowledged >= count + 100)
        first.start()
        brokers.whole()
        second.stop()
        third = brokers.leader()
        assert third is not second
        second.go_on()
        brokers.whole()
        producer.finish()
    assert producer.acknowledged == len(producer.begun) and max(each.tries for each in producer.begun) > 1
    after = brokers.partitions_by_source()
    assert len(after) == SOURCES and before.items() <= after.items() and set(after.values()) == {*range(PARTITIONS)}
    held = brokers.info().state
    assert held.messages == len(producer.begun) and held.last_seq == held.messages


def wait(true: object, within_s: float = 60.0) -> None:
    deadline = time.monotonic() + within_s
    while not true():  # type: ignore[operator]
        assert time.monotonic() < deadline
        time.sleep(0.01)


def test_without_a_majority_nothing_is_acknowledged(brokers: Brokers) -> None:
    brokers.whole()
    leader = brokers.leader()
    others = [node for node in brokers.nodes if node is not leader]
    for node in others:
        node.stop()

    async def publish(client: Client) -> None:
        await client.jetstream(timeout=1.0).publish("feed.lonely", b"{}")

    try:
        with pytest.raises(AssertionError, match="no broker answers as it should"):
            brokers.ask(publish, within_s=2.0)
    finally:
        for node in others:
            node.go_on()
    brokers.whole()
    brokers.ask(publish)


def test_a_network_that_falls_silent_and_is_mended(brokers: Brokers) -> None:
    """What was sent into it arrives late, and the connection is the same one."""
    brokers.whole()

    async def through(gates: Gates) -> tuple[int, int, int]:
        client = await nats.connect(gates.urls[0], allow_reconnect=False)
        stream = client.jetstream(timeout=5.0)
        before = (await stream.publish("feed.gated", b"{}")).seq
        gates.shut()
        with pytest.raises(TimeoutError):
            await stream.publish("feed.gated", b"{}", timeout=0.3)
        silent = (await direct()).state.last_seq
        gates.open()
        after = (await stream.publish("feed.gated", b"{}")).seq
        await client.close()
        return before, silent, after

    async def direct() -> StreamInfo:
        client = await nats.connect(brokers.urls[0], allow_reconnect=False)
        try:
            return await client.jetstream(timeout=5.0).stream_info(STREAM)
        finally:
            await client.close()

    with Gates([node.port for node in brokers.nodes]) as gates:
        before, silent, after = asyncio.run(through(gates))
    assert (silent, after) == (before, before + 2)


# ---- the judge ------------------------------------------------------------------------------------------------------

TABLE = """CREATE TABLE {schema}.{name} (feed text, batch bigint, position bigint, time_ns bigint, source text,
    event text)"""


class Told(Producer):
    """A producer whose messages were all acknowledged, without any broker."""

    def __init__(self, messages: int) -> None:
        super().__init__([], course(7, SOURCES, messages, 50.0), SOURCES)
        self.bodies: list[bytes] = []
        for message in self._schedule:
            self.bodies.append(message.body(self.names[message.source], 1_700_000_000_000_000_000))
            message.begun_ns = 1 + 2 * message.number
            message.acknowledged_ns = message.begun_ns + 1
            self.begun.append(message)


Stored = tuple[str, int, int, int, str, str]


def as_stored(producer: Told, by_source: dict[str, int]) -> list[Stored]:
    """What the partitions would hold if all went well: each in order of time, ties in order of arrival."""
    by_feed: dict[str, list[tuple[int, str, str]]] = {}
    for message, body in zip(producer.begun, producer.bodies, strict=True):
        source = producer.names[message.source]
        lines = body.decode().splitlines()
        rows = [(int(at), source, line) for at, line in zip(message.times, lines, strict=True)]
        by_feed.setdefault(partition_feed(by_source[source]), []).extend(rows)
    found: list[Stored] = []
    for feed, rows in by_feed.items():
        rows.sort(key=lambda row: row[0])
        found += [(feed, number // 50, number % 50, *row) for number, row in enumerate(rows)]
    return found


def verdict_on(rows: Sequence[Stored], producer: Told, by_source: dict[str, int], folder: Path) -> dict[str, int]:
    """Counts of faults over all partitions, without those that are none."""
    schema = make_schema(shared(), folder)
    for name in ("events", "late"):
        ask(shared(), TABLE.format(schema=schema, name=name))
    columns = [list(column) for column in zip(*rows, strict=True)]
    kinds = ("text", "bigint", "bigint", "bigint", "text", "text")
    arrays = ", ".join(f"${place}::{kind}[]" for place, kind in enumerate(kinds, 1))
    ask(shared(), f"INSERT INTO {schema}.events SELECT * FROM unnest({arrays})", *columns)
    verdicts = judged(producer, by_source, PARTITIONS, shared(), schema)
    sums = {fault: sum(getattr(verdict, fault) for verdict in verdicts.values()) for fault in FAULTS}
    return {fault: count for fault, count in sums.items() if count}


def test_the_judge_finds_what_is_planted(tmp_path: Path) -> None:
    producer = Told(120)
    by_source = {name: number % PARTITIONS for number, name in enumerate(producer.names)}
    good = as_stored(producer, by_source)
    assert len(good) == len(sent_of(producer.begun).rows) > 3_000

    def found(name: str, rows: Sequence[Stored]) -> dict[str, int]:
        return verdict_on(rows, producer, by_source, tmp_path / name)

    assert found("good", good) == {}
    assert found("lost", good[:70] + good[71:]) == {"lost": 1}
    feed, batch, place, *rest = good[70]
    assert found("twice", [*good, (feed, batch, place + 1_000, *rest)]) == {"duplicated": 1, "disordered": 1}
    at = next(at for at in range(100, 2_000) if good[at][3] < good[at + 1][3] and good[at][0] == good[at + 1][0])
    first, second = good[at], good[at + 1]
    swapped = [(*first[:3], *second[3:]), (*second[:3], *first[3:])]
    assert found("swapped", [*good[:at], *swapped, *good[at + 2 :]]) == {"disordered": 1}
    altered = (*good[70][:5], good[70][5].replace('"level":', '"level":9'))
    assert found("altered", [*good[:70], altered, *good[71:]]) == {"unexpected": 1, "lost": 1}
    elsewhere = (partition_feed(3), 10_000, 0, *good[70][3:])
    assert good[70][0] != partition_feed(3)
    assert found("elsewhere", [*good[:70], *good[71:], elsewhere]).keys() >= {"unexpected", "lost"}
    with pytest.raises(AssertionError, match="which is no partition"):
        found("foreign", [*good, ("river-gauges", 1, 0, *good[0][3:])])


def test_pauses_are_seen_as_they_are(tmp_path: Path) -> None:
    schema = make_schema(shared(), tmp_path)
    feeds = [partition_feed(number) for number in range(2)]
    begun = time.monotonic()
    with Pause(shared(), schema, feeds) as pause:
        ask(shared(), f"CREATE TABLE {schema}.strandline_position (feed text, lane text, batch bigint)")
        for feed in feeds:
            ask(shared(), f"INSERT INTO {schema}.strandline_position VALUES ('{feed}', 'ordered', 0)")
        moved = 0
        while time.monotonic() - begun < 1.5:
            moved += 1
            which = feeds if time.monotonic() - begun < 0.5 else feeds[:1]
            for feed in which:
                ask(shared(), f"UPDATE {schema}.strandline_position SET batch = {moved} WHERE feed = '{feed}'")
        ended = time.monotonic()
    longest = pause.longest(begun, ended)
    assert longest[feeds[0]] < 0.8 < longest[feeds[1]] < ended - begun


def test_a_store_is_waited_for(tmp_path: Path) -> None:
    schema = make_schema(shared(), tmp_path)
    for name in ("events", "late"):
        ask(shared(), TABLE.format(schema=schema, name=name))
    until_stored(0, shared(), schema)
    with pytest.raises(AssertionError, match="0 events are stored, 1 were sent"):
        until_stored(1, shared(), schema, within_s=0.05)


def test_the_configuration_is_one(brokers: Brokers, tmp_path: Path) -> None:
    text = cluster_configuration(
        tmp_path, brokers.urls, shared(), "public", number=2, partitions=PARTITIONS, lease="4s"
    )
    assert STREAM in text
    config = config_of(text)
    assert config.cluster is not None and config.cluster.instance == "strandline-2"

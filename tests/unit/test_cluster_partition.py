"""Partitions that change hands, with one SQLite file as the sink of all owners: every event once, in order, for all."""

from __future__ import annotations

import asyncio
import json
import random
import signal
import sqlite3
import time
from collections import Counter
from collections.abc import AsyncIterator
from contextlib import AsyncExitStack
from dataclasses import replace
from pathlib import Path

import pytest
from helpers_brokers import Nats
from helpers_partition import FEED, RIVER, SUBJECT, Instance, line, linked, make_river, publish, until
from helpers_service import POLL_S
from nats.errors import Error
from strandline.cluster import log as log_module
from strandline.cluster.commit import ReplicatedCommit
from strandline.cluster.log import PartitionLog, Place
from strandline.cluster.partition import Partition
from strandline.core.columns import TIME_MIN

SMALL = """
source = "/s"
slack = "100ms"
idle_after = "500ms"
hold_at_most = "2s"
ahead_limit = "1h"
decoded_bytes_at_most = "60KiB"
body_bytes_at_most = "60KiB"
event_bytes_at_most = "2KiB"
journal = { segment_bytes = "64KiB", at_most = "64MiB" }
"""
ROWS = 10  # events of a message


@pytest.fixture
async def server(tmp_path: Path) -> AsyncIterator[Nats]:
    """A broker with the producers' stream."""
    with Nats(tmp_path) as found:
        await make_river(found)
        yield found


class Producer:
    """Publishes messages, some events late for good, until it is stopped; a broker may restart meanwhile."""

    def __init__(self, server: Nats, seed: int) -> None:
        self.published, self._server, self._chance = 0, server, random.Random(seed)
        self._task = asyncio.ensure_future(self._run())
        self._enough = False

    async def __aenter__(self) -> Producer:
        return self

    async def __aexit__(self, *of: object) -> None:
        await self.stop()  # cancelled it might go on: the client passes over some cancellings

    async def stop(self) -> int:
        """Publish no more; how many events there are, numbered from 0."""
        self._enough = True
        await self._task
        return self.published * ROWS

    async def _run(self) -> None:
        body = b""
        while body or not self._enough:
            try:
                client = await self._server.client()
                stream = client.jetstream()
                while body or not self._enough:
                    body = body or self._body()
                    # The number tells the broker of a repeat, where the answer to the first try was lost.
                    await stream.publish(SUBJECT, body, headers={"Nats-Msg-Id": f"m-{self.published}"})
                    self.published, body = self.published + 1, b""
                await client.close()
            except (Error, OSError, TimeoutError):
                await asyncio.sleep(POLL_S)

    def _body(self) -> bytes:
        chance, now_ns = self._chance, time.time_ns()
        rows = []
        for row in range(ROWS):
            behind_ns = chance.randrange(80_000_000) + 60 * 10**9 * (chance.random() < 0.01)
            rows.append(line(self.published * ROWS + row, now_ns - behind_ns, f"gw-{chance.randrange(4)}", x="y" * 60))
        return b"".join(rows)


class Store:
    """What the shared file holds."""

    def __init__(self, folder: Path) -> None:
        with sqlite3.connect(folder / "store.db") as database:
            self.ordered = database.execute("SELECT time_ns, event FROM events ORDER BY batch, position").fetchall()
            self.late = database.execute("SELECT event FROM late").fetchall()
        database.close()

    def judge(self, events: int) -> None:
        """Assert: each event once, in order."""
        numbers = Counter(json.loads(row[-1])["n"] for row in [*self.ordered, *self.late])
        assert numbers == Counter(range(events))
        times = [row[0] for row in self.ordered]
        assert times == sorted(times)


async def settled(instance: Instance, events: int) -> None:
    """Wait until the owner has taken in everything and the sink has what was released."""
    runtime = instance.runtime

    def through() -> bool:
        view = runtime.view()
        return view.ledger["received"] == events and view.held_events == 0 and view.undelivered_events == 0

    await until(through, f"a feed that is through with {events} events")
    view = runtime.view()
    assert view.balance == 0
    runtime.feed.state.check()
    assert view.ledger["released"] + view.ledger["late"] == events


def kill(instance: Instance, partition: Partition) -> None:
    """As a process that is killed: none of its tasks goes on, nothing is closed, what is under way stays so."""
    runtime = instance.ground.feeds.pop(f"{FEED}-0", None)
    taking, commit = partition._taking, partition._commit
    assert runtime is not None and taking is not None and commit is not None
    tasks = [taking._task, commit._task, runtime._housekeeping]
    tasks += [each for delivery in runtime.deliveries.values() for each in (delivery._worker, delivery._flush_timer)]
    runtime._housekeeping = None
    partition._log.give_up()
    for task in tasks:
        if task is not None:
            task.cancel()
    client = partition._link._client
    if client is not None and client._transport is not None:
        client._transport.close()


def received(instance: Instance) -> int:
    """How many events its feed has received."""
    return int(instance.runtime.view().ledger["received"])


@pytest.mark.parametrize("seed", range(5))
async def test_however_owners_follow_one_another_each_event_comes_once_and_in_order(
    server: Nats, tmp_path: Path, seed: int
) -> None:
    chance = random.Random(seed)
    async with AsyncExitStack() as stack:
        here, there = [await stack.enter_async_context(Instance(tmp_path, server, each, feed=SMALL)) for each in "ab"]
        producer = await stack.enter_async_context(Producer(server, seed))
        partition, reached = await here.own(1), TIME_MIN
        for fence in range(2, 7):
            goal = received(here) + chance.randrange(100, 500)
            await until(lambda here=here, goal=goal: received(here) >= goal, "events")
            watermark_ns, way = _durable_watermark(here), chance.randrange(4)
            reached = max(reached, watermark_ns)
            if way == 0:
                kill(here, partition)
                # What comes back after that is another process, so nothing of the one that was killed meets it.
                here = await stack.enter_async_context(Instance(tmp_path, server, f"again-{fence}", feed=SMALL))
            elif way == 1:
                await partition.stop(drain=True)
            elif way == 2:
                server.end(signal.SIGKILL)
                server.start()
                continue
            following = await there.own(fence)
            assert there.runtime.feed.state.watermark_ns >= reached
            if way == 3:  # the former one goes on until it notices
                await asyncio.wait_for(partition.ended.wait(), 30)
                assert "taken over by another instance" in partition.why
                await partition.stop(drain=False)
            partition, here, there = following, there, here
        events = await producer.stop()
        await settled(here, events)
        late = here.runtime.view().ledger["late"]
        await partition.stop(drain=True)
    store = Store(tmp_path)
    store.judge(events)
    assert len(store.late) == late


def _durable_watermark(instance: Instance) -> int:
    """The watermark, where the log holds the mark that set it; else whatever was before."""
    runtime = instance.runtime
    durable = runtime.commit.durable_lsn == runtime.feed.next_lsn
    return runtime.feed.state.watermark_ns if durable else TIME_MIN


async def test_the_log_is_shortened_and_a_take_over_reads_only_the_rest(server: Nats, tmp_path: Path) -> None:
    async with Instance(tmp_path, server, "a", feed=SMALL) as a, Instance(tmp_path, server, "b", feed=SMALL) as b:
        partition = await a.own(1)
        async with Producer(server, 1) as producer:
            await until(lambda: received(a) >= 3_000, "events")
        events = await producer.stop()
        await settled(a, events)
        async with linked(server, "look") as (link,):
            stream = await link.jetstream()
            subject = f"river-log.groups.{FEED}.0"
            groups = (await stream.stream_info("river-log", subjects_filter=subject)).state.subjects
            # Of some thousand messages' groups those stay that came since a snapshot of 64 KiB and more.
            assert 0 < sum((groups or {}).values()) < events // ROWS // 2
        await partition.stop(drain=True)
        await b.own(2)
        await settled(b, events)
    Store(tmp_path).judge(events)


async def test_when_the_feed_is_full_messages_wait_in_their_order(server: Nats, tmp_path: Path) -> None:
    lines = SMALL + "held_events_at_most = 50\nevents_at_most = 20\n"
    async with Instance(tmp_path, server, "a", feed=lines) as a, Instance(tmp_path, server, "b", feed=lines) as b:
        now_ns = time.time_ns()
        bodies = [b"".join(line(m * 10 + n, now_ns + m * 10**6 + n, "gw") for n in range(10)) for m in range(30)]
        partition = await a.own(1)
        await publish(server, bodies)
        await until(lambda: a.runtime.view().refusals.get("held_full", 0) > 0, "a full feed")
        await until(lambda: "takes nothing now: 50 events are held" in partition.words, "words about it")
        behind = partition.status()["behind_messages"]
        await publish(server, bodies[:1])  # what is in hand, and what comes meanwhile
        await until(lambda: partition.status()["behind_messages"] == behind + 1, "what waits, told")
        kill(a, partition)
        await b.own(2)
        await settled(b, 310)
        assert b.runtime.view().ledger["late"] == 10, "the first message once more, far behind"
    assert [json.loads(event)["n"] for _, event in Store(tmp_path).ordered] == list(range(300))


async def test_what_was_delivered_may_go_from_the_stream_once_a_snapshot_stands_for_it(
    server: Nats, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Size alone would let days pass until a slow partition's snapshot; whoever takes over needs what came since."""
    assert ReplicatedCommit.saves_every_ns == 30 * 10**9
    monkeypatch.setattr(ReplicatedCommit, "saves_every_ns", 10**6)
    async with Instance(tmp_path, server, "a", feed=SMALL) as a, Instance(tmp_path, server, "b", feed=SMALL) as b:
        partition = await a.own(1)
        await publish(server, [line(n, time.time_ns(), f"gw-{n % 3}") for n in range(40)])
        await settled(a, 40)
        lsn = a.runtime.feed.next_lsn
        await until(lambda: a.runtime._house._saved_lsn >= lsn, "a snapshot")
        client = await server.client()
        await client.jetstream().purge_stream(RIVER)
        await client.close()
        kill(a, partition)
        await b.own(2)
        await publish(server, [line(n, time.time_ns(), f"gw-{n % 3}") for n in range(40, 50)])
        await settled(b, 50)
    Store(tmp_path).judge(50)


async def test_a_zombie_that_is_cut_off_in_its_snapshot_does_no_harm(
    server: Nats, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(log_module, "LOG_MESSAGE_BYTES", 20_000)
    async with Instance(tmp_path, server, "a", feed=SMALL) as a, Instance(tmp_path, server, "b", feed=SMALL) as b:
        zombie = await a.own(1)
        await publish(server, [line(n, time.time_ns(), f"gw-{n % 3}") for n in range(40)])
        await until(lambda: received(a) == 40, "events")
        saving = asyncio.ensure_future(a.runtime._house.save())
        await asyncio.sleep(0)
        owner = await b.own(2)
        await saving
        await asyncio.wait_for(zombie.ended.wait(), 30)
        await zombie.stop(drain=False)
        await b.runtime._house.save()  # which lets go whatever the zombie left
        await owner.stop(drain=True)
        await a.own(3)
        await settled(a, 40)
    Store(tmp_path).judge(40)


async def test_a_stop_may_come_twice_and_be_cancelled(server: Nats, tmp_path: Path) -> None:
    async with Instance(tmp_path, server, "a", feed=SMALL) as a:
        partition = await a.own(1)
        await publish(server, [line(n, time.time_ns(), "gw") for n in range(20)])
        await until(lambda: received(a) == 20, "events")
        for turns in (0, 1, 3, 10):
            stopping = asyncio.ensure_future(partition.stop(drain=True))
            for _ in range(turns):
                await asyncio.sleep(0)
            stopping.cancel()
            await asyncio.wait([stopping])
        await asyncio.gather(partition.stop(drain=True), partition.stop(drain=False))
        await partition.stop(drain=True)
        assert partition.status()
        again = await a.own(2)
        await settled(a, 20)
        await again.stop(drain=False)
    Store(tmp_path).judge(20)


@pytest.mark.parametrize("drain", [False, True])
async def test_a_stop_with_the_broker_away_ends_in_time(server: Nats, tmp_path: Path, drain: bool) -> None:
    async with AsyncExitStack() as stack:
        a = await stack.enter_async_context(Instance(tmp_path, server, "a", feed=SMALL))
        a.ground = replace(a.ground, drain_at_most_s=1.0)
        partition = await a.own(1)
        producer = await stack.enter_async_context(Producer(server, 3))
        await until(lambda: received(a) >= 300, "events")
        server.end(signal.SIGKILL)
        await until(lambda: partition.words != "" and bool(partition._log.words), "words about the broker")
        begun_s = time.monotonic()
        await partition.stop(drain=drain)
        took_s = time.monotonic() - begun_s
        assert took_s < (1.0 + 5.0 if drain else 0.0) + 5.0  # the limit, the log's grace, the client's own waits
        server.start()
        await a.own(2)
        events = await producer.stop()
        await settled(a, events)
    Store(tmp_path).judge(events)


async def test_nothing_is_left_of_a_partition_that_was_stopped(server: Nats, tmp_path: Path) -> None:
    async with Instance(tmp_path, server, "a", feed=SMALL) as a:
        before = asyncio.all_tasks()
        for fence in range(1, 4):
            partition = await a.own(fence)
            await publish(server, [line(fence, time.time_ns(), "gw")])
            await until(lambda fence=fence: received(a) == fence, "an event")
            await partition.stop(drain=fence % 2 == 0)
        await until(lambda: asyncio.all_tasks() <= before, f"the end of {asyncio.all_tasks() - before}")
        async with linked(server, "look") as (link,):
            stream = await link.jetstream()
            assert (await stream.stream_info(RIVER)).state.consumer_count == 0
            assert (await stream.stream_info("river-log")).state.consumer_count == 0
        assert not a.ground.feeds


async def test_a_message_with_more_new_sources_than_fit_goes_to_quarantine(server: Nats, tmp_path: Path) -> None:
    lines = 'source = "/s"\nslack = "0s"\n'
    async with Instance(tmp_path, server, "a", feed=lines) as a, Instance(tmp_path, server, "b", feed=lines) as b:
        await a.own(1)
        many = b"".join(line(n, time.time_ns(), f"{n}-" + "s" * 240) for n in range(1_500))
        await publish(server, [many, line(1, time.time_ns(), "gw")])
        await until(lambda: received(a) == 2, "both messages")
        assert a.runtime.view().ledger["quarantined"] == 1
        await b.own(2)
        assert b.runtime.view().ledger == a.runtime.view().ledger


async def test_an_id_made_to_look_like_that_of_a_quarantined_message_stops_nothing(tmp_path: Path) -> None:
    with Nats(tmp_path) as server:
        await make_river(server, duplicate_window=0.1)
        async with Instance(tmp_path, server, "a", feed=SMALL) as a:
            await a.own(1)
            ids, client = ["foo", f"foo:message 3 of stream {RIVER}:refused", "foo", "last"], await server.client()
            for number, told in enumerate(ids):
                body, headers = line(number, time.time_ns(), "gw"), {"Nats-Msg-Id": told}
                while (await client.jetstream().publish(SUBJECT, body, headers=headers)).duplicate:
                    await asyncio.sleep(POLL_S)
            await client.close()
            await until(lambda: received(a) == 4, "all messages")
            assert a.runtime.view().ledger["quarantined"] == 1


async def test_an_owner_that_is_overtaken_says_so(server: Nats, tmp_path: Path) -> None:
    async with Instance(tmp_path, server, "a", feed=SMALL) as a:
        partition = await a.own(5)
        async with linked(server, "other") as (link,):
            contents = await PartitionLog(link, Place.of("river", FEED, 0), 6).take_over()
            assert contents.groups[-1].fence == 6
        await publish(server, [line(1, time.time_ns(), "gw")])
        await asyncio.wait_for(partition.ended.wait(), 30)
        assert "taken over by another instance" in partition.why
        await partition.stop(drain=True)


async def test_a_partition_that_is_new_has_no_past(server: Nats, tmp_path: Path) -> None:
    """The record that a taking over puts into the log moves no clock: a hold begins when there is one."""
    async with Instance(tmp_path, server, "a", feed=SMALL) as a:
        begun_ns = time.time_ns()
        partition = await a.own(1)
        since_ns = a.runtime.view().hold.since_ns
        assert since_ns is None or since_ns >= begun_ns
        assert a.runtime.feed.state.now_ns >= begun_ns
        await partition.stop(drain=True)

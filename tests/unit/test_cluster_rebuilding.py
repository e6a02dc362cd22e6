"""A partition's journal made again from the log and the messages: byte for byte the former owner's."""

from __future__ import annotations

import asyncio
import gzip
import random
import time
from collections.abc import AsyncIterator
from contextlib import aclosing
from pathlib import Path

import msgspec
import pytest
import zstandard
from helpers_brokers import Nats
from helpers_partition import FEED, RIVER, SUBJECT, Instance, line, linked, make_river, publish, until
from strandline.cluster.entries import Taken, placed
from strandline.cluster.link import Away, Reader, everything
from strandline.cluster.log import Contents, PartitionLog, Place
from strandline.cluster.partition import Partition
from strandline.cluster.rebuilding import Rebuilding
from strandline.config_intakes import SubjectToken
from strandline.core.records import Kind
from strandline.errors import StrandlineError
from strandline.journal.disk import LocalDisk
from strandline.journal.journal import Journal

Frames = dict[int, tuple[int, int, bytes]]
LIMITS = """
slack = "20s"
ahead_limit = "1h"
hold_at_most = "1h"
faults_at_most = 6
body_bytes_at_most = "600KiB"
event_bytes_at_most = "2KiB"
decoded_bytes_at_most = "900KiB"
journal = { segment_bytes = "1MiB", at_most = "64MiB" }
"""
ORDERS = {
    "feed": 'source = "/s"\nid = "/i"\n',
    "source": 'source = "/s"\norder = "source"\n',
    "steered": 'source = "/s"\n',
    "no source": "",
}
STEERED = 'slack = { late_share = 0.01, at_most = "20s" }'


@pytest.fixture
async def server(tmp_path: Path) -> AsyncIterator[Nats]:
    """A broker with the producers' stream."""
    with Nats(tmp_path) as found:
        await make_river(found, duplicate_window=0.1)
        yield found


def frames_of(journal: Journal) -> Frames:
    """All that a journal holds, by position."""
    return {frame.lsn: (frame.kind, frame.version, bytes(frame.body)) for frame in journal.frames()}


def drawn(chance: random.Random, number: int) -> tuple[bytes, dict[str, str]]:
    """A message, as good or as bad as producers make them, and its headers."""
    now_ns, headers = time.time_ns(), dict[str, str]()
    sources = chance.sample([f"gw-{n}" for n in range(30 + number)], chance.randrange(1, 8))
    times = [now_ns - chance.randrange(30 * 10**9) for _ in range(chance.randrange(60))]
    rows = [
        line(number * 100 + n, time_ns, chance.choice(sources), i=f"{chance.randrange(400)}")
        for n, time_ns in enumerate(times)
    ]
    match chance.randrange(12):
        case 0:
            rows.insert(chance.randrange(len(rows) + 1), b"{no event\n")
        case 1:
            rows[:0] = [b"[]\n"] * 9  # too many faults
        case 2:
            headers["Content-Type"] = "image/png"
        case 3:
            rows = [b" " * 700_000]  # too large
        case 4:
            rows += [b"\xff\xfe\n", line(1, now_ns, "x" * 3000)]
        case 5:
            headers["Nats-Msg-Id"] = f"id-{chance.randrange(3)}"  # again, with another body
        case 6:  # decoded aside: large, and not all of it good
            rows = [line(n, now_ns - n, f"new-{number}-{n % 50}", x="y" * 150) for n in range(2_200)] + [b"?\n"]
        case 7:
            rows = []
    body = b"".join(rows)
    coding = chance.choice(["", "", "gzip", "zstd"])
    if coding and body:
        headers["Content-Encoding"] = coding
        body = gzip.compress(body) if coding == "gzip" else zstandard.compress(body)
    return body, headers


async def taken_in(partition: Partition, instance: Instance, last: int) -> None:
    """Wait until the messages up to this one are in the log."""
    taking = partition._taking
    assert taking is not None
    await until(lambda: taking._next > last, f"message {last}: {partition.words}")
    taking.check()
    await instance.runtime._settle()


async def rebuilt(instance: Instance, server: Nats, folder: Path, fence: int = 99) -> tuple[Contents, Journal]:
    """The journal as the next owner makes it; the former one is overtaken."""
    own = instance.part(fence).own
    async with linked(server, "next") as (link,):
        intake = Partition(instance.ground, instance.part(fence), link)._intake
        contents = await PartitionLog(link, Place.of("river", FEED, 0), fence).take_over()
        await Rebuilding(own, intake, link, instance.aside).run(contents, LocalDisk(folder, synced=False))
    kept = own.journal
    journal = Journal.open(
        LocalDisk(folder, synced=False), f"feeds/{own.name}", segment_bytes=kept.segment_bytes,
        journal_bytes_at_most=kept.at_most_bytes,
    )  # fmt: skip
    return contents, journal


def compare(former: Frames, contents: Contents, journal: Journal) -> int:
    """Assert that both hold the same from the first record that is needed; how many arrivals that were."""
    found = frames_of(journal)
    end_lsn, begin_lsn = contents.groups[-1].lsn, min(found)
    saved = contents.saved
    assert begin_lsn <= (0 if saved is None else min(saved.lsn, saved.needed_lsn))
    wanted = {lsn: each for lsn, each in former.items() if begin_lsn <= lsn < end_lsn}
    assert {lsn: each for lsn, each in found.items() if lsn < end_lsn} == wanted
    assert [found[lsn][0] for lsn in found if lsn >= end_lsn] == [Kind.SOURCES]
    if saved is not None:
        assert [(lsn, bytes(body)) for lsn, body in journal.intact_snapshots()] == [(saved.lsn, contents.snapshot)]
    return sum(kind == Kind.ARRIVAL for kind, _, _ in wanted.values())


@pytest.mark.parametrize("seed", [1, 2])
@pytest.mark.parametrize("order", ORDERS)
async def test_the_journal_is_the_former_owners_byte_for_byte(
    server: Nats, tmp_path: Path, order: str, seed: int
) -> None:
    chance = random.Random(seed)
    lines = LIMITS.replace('slack = "20s"', STEERED) if order == "steered" else LIMITS
    async with Instance(tmp_path, server, "a", feed=lines + ORDERS[order]) as instance:
        partition = await instance.own(1)
        client = await server.client()
        stream, last = client.jetstream(), 0
        for number in range(60):
            body, headers = drawn(chance, number)
            last = (await stream.publish(SUBJECT, body, headers=headers)).seq
            if not number % 10:
                await taken_in(partition, instance, last)  # so that groups and snapshots are many
        await client.close()
        await taken_in(partition, instance, last)
        refused = instance.runtime.intakes[0].outcomes["quarantined"]
        assert refused > 3
        contents, journal = await rebuilt(instance, server, tmp_path / "again")
        former = frames_of(instance.runtime.journal)
        arrivals = compare(former, contents, journal)
        journal.close()
    assert arrivals > 5
    named = [each.entry for each in placed(contents.groups) if isinstance(each.entry, Taken)]
    assert any(entry.refused for entry in named)


async def test_sources_from_the_subject_come_out_the_same(server: Nats, tmp_path: Path) -> None:
    async with Instance(tmp_path, server, "a", feed=LIMITS) as instance:
        partitions = msgspec.structs.replace(instance.feed.partitions, source=SubjectToken(3))
        instance.feed = msgspec.structs.replace(instance.feed, partitions=partitions)
        client = await server.client()
        stream = client.jetstream()
        partition = await instance.own(1)
        for number in range(40):
            subject = f"part.0.gw-{number * 7 % 11}" if number % 9 else "part.0.x." + "y" * 300
            rows = [line(number * 10 + n, time.time_ns(), "ignored") for n in range(5)]
            last = (await stream.publish(subject, b"".join(rows) + b"?\n" * (number % 3))).seq
        await client.close()
        await taken_in(partition, instance, last)
        contents, journal = await rebuilt(instance, server, tmp_path / "again")
        assert compare(frames_of(instance.runtime.journal), contents, journal) == 40
        journal.close()


@pytest.mark.parametrize("gone", [range(4, 5), range(10, 11), range(1, 11)], ids=["inside", "the last", "all"])
async def test_a_message_that_is_gone_is_told(server: Nats, tmp_path: Path, gone: range) -> None:
    async with Instance(tmp_path, server, "a", feed=LIMITS) as instance:
        partition = await instance.own(1)
        await publish(server, [line(n, time.time_ns(), "x") for n in range(10)])
        await taken_in(partition, instance, 10)
        async with linked(server, "other") as (link,):
            for sequence in gone:
                await (await link.jetstream()).delete_msg(RIVER, sequence)
        with pytest.raises(StrandlineError, match=f"message {gone[0]} of stream RIVER is gone"):
            await rebuilt(instance, server, tmp_path / "again")


@pytest.mark.parametrize("change", ['source = "/n"', 'source = "/s"\ntime = { at = "/u", unit = "ns" }'])
async def test_a_change_while_events_are_held_is_told_and_after_a_drain_it_is_fine(
    server: Nats, tmp_path: Path, change: str
) -> None:
    first = LIMITS + 'source = "/s"\n'
    async with Instance(tmp_path, server, "a", feed=first) as before:
        partition = await before.own(1)
        rows = [line(n, time.time_ns() - n * 10**9, f"gw-{n}", u=time.time_ns()) for n in range(5)]
        await publish(server, rows)
        await taken_in(partition, before, 5)
        await partition.stop(drain=True)
    # The instance's file was changed; its events are still held.
    second = LIMITS.replace('slack = "20s"', 'slack = "0s"') + change + "\n"
    async with Instance(tmp_path, server, "b", feed=second) as after:
        with pytest.raises(StrandlineError, match="gives another record than when it was taken"):
            await after.own(2)
    # Set back, and drained: with no slack and silent sources nothing is held any more.
    drained = first.replace('slack = "20s"', 'slack = "0s"').replace('hold_at_most = "1h"', 'hold_at_most = "1ms"')
    async with Instance(tmp_path, server, "a", feed=drained) as again:
        partition = await again.own(3)
        await until(lambda: again.runtime.view().held_events == 0, "an empty feed")
        await partition.stop(drain=True)
    async with Instance(tmp_path, server, "b", feed=second) as after:
        await after.own(4)
        assert after.runtime.view().ledger["received"] == 5


async def test_what_is_lost_on_its_way_is_noticed(server: Nats) -> None:
    """A client that is given more than it keeps drops it silently; what comes after, or the server's count, tells."""
    await publish(server, [bytes([n]) * 4_000 for n in range(30)])
    async with linked(server, "slow") as (link,):
        for at_once in (30, 25):
            reader = Reader(link, RIVER, SUBJECT)
            await reader.begin(1)
            assert reader._subscription is not None
            reader._subscription._sub._pending_bytes_limit = 20_000
            with pytest.raises(Away, match="a message was lost on its way"):
                for _ in range(10):
                    for message in await reader.fetch(at_once):
                        assert message.data
                    await reader.waiting()
        async with aclosing(everything(Reader(link, RIVER, SUBJECT), 1)) as messages:
            assert [message.data[0] async for message in messages] == list(range(30))


async def test_reading_again_and_again_leaves_nothing_behind(server: Nats) -> None:
    await publish(server, [b"x"] * 3)
    async with linked(server, "reader", "other") as (link, other):
        for _ in range(20):
            async with aclosing(everything(Reader(link, RIVER, SUBJECT), 1)) as messages:
                assert len([message async for message in messages]) == 3
        assert len((await link.client())._subs) <= 1  # the client's own, for answers
        info = await (await other.jetstream()).stream_info(RIVER)
        assert info.state.consumer_count == 0


async def test_what_is_rebuilt_can_be_cancelled_and_leaves_no_open_file(server: Nats, tmp_path: Path) -> None:
    async with Instance(tmp_path, server, "a", feed=LIMITS + 'source = "/s"\n') as instance:
        partition = await instance.own(1)
        await publish(server, [line(n, time.time_ns(), "x") * 20 for n in range(50)])
        await taken_in(partition, instance, 50)
        await partition.stop(drain=False)
        for turns in range(0, 60, 3):
            taking_over = asyncio.ensure_future(instance.own(2 + turns))
            for _ in range(turns):
                await asyncio.sleep(0)
            taking_over.cancel()
            with pytest.raises(asyncio.CancelledError):
                await taking_over
        scratch = str(instance.data_dir / "scratch")
        assert not list((instance.data_dir / "scratch" / "feeds").iterdir())
        assert not [name for name in _open_files() if name.startswith(scratch)]
        await instance.own(100)
        assert instance.runtime.view().ledger["received"] == 1000


def _open_files() -> list[str]:
    found = []
    for each in Path("/proc/self/fd").iterdir():
        try:
            found.append(str(each.readlink()))
        except OSError:
            continue  # the listing's own
    return found

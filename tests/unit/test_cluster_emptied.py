"""A partition's log that somebody emptied: whoever takes it over says so, as do later owners; a real broker."""

from __future__ import annotations

import asyncio
import logging
import time
from collections.abc import AsyncIterator
from pathlib import Path

import pytest
from helpers_brokers import Nats
from helpers_in_cluster import at_work, cluster_of, make_parted_stream, member, publish_to
from helpers_partition import FEED, Instance, line, linked, make_river, publish, until
from helpers_service import FEED as SERVED
from helpers_service import eventually, running
from strandline.cluster import emptied as emptied_module
from strandline.cluster import partition as partition_module
from strandline.cluster.emptied import WORDS
from strandline.cluster.entries import Whole
from strandline.cluster.link import Link
from strandline.cluster.log import Contents, PartitionLog, Place, make_stream
from strandline.cluster.words import said
from strandline.core.records import VERSION, Kind, frame_bytes

LOG = "river-log"
HTTP_ONLY = '[[feed.sink]]\nkind = "http"\nurl = "http://127.0.0.1:9/"\n'  # nobody answers there


@pytest.fixture
async def server(tmp_path: Path) -> AsyncIterator[Nats]:
    """A broker with the producers' stream."""
    with Nats(tmp_path, synced=False) as found:
        await make_river(found)
        yield found


async def taken_over(link: Link, fence: int, number: int = 0) -> tuple[PartitionLog, Contents]:
    """The log of a partition in the hands of another owner, in a stream that is made where it is absent."""
    await make_stream(link, "river", 1, 64 << 20)
    log = PartitionLog(link, Place.of("river", FEED, number), fence)
    return log, await log.take_over()


async def purge(server: Nats, subject: str | None = None) -> None:
    """What somebody does who should not."""
    client = await server.client()
    await client.jetstream().purge_stream(LOG, subject=subject)
    await client.close()


def warnings(caplog: pytest.LogCaptureFixture) -> list[str]:
    """What was told of emptied logs."""
    found = [each for each in caplog.records if each.name == "strandline.cluster.emptied"]
    assert all(each.levelno == logging.WARNING for each in found)
    return [each.getMessage() for each in found]


async def test_a_log_that_is_new_or_was_shortened_by_its_owner_has_lost_nothing(
    server: Nats, caplog: pytest.LogCaptureFixture
) -> None:
    async with linked(server, "a") as (link,):
        for fence in range(1, 4):
            log, contents = await taken_over(link, fence)
            assert contents.lost_ns is None and contents.is_new == (fence == 1)
            await log.append(contents.end_lsn, [Whole(Kind.ACT, VERSION, bytes(8))])
            end_lsn = contents.end_lsn + frame_bytes(8)
            saved = await log.store_snapshot(end_lsn, [b"state"], end_lsn)
            await log.append(end_lsn, [saved])
            await log.let_go(saved, log.last)
        _, other = await taken_over(link, 9, number=1)  # which comes late to a stream that has let much go
        assert other.lost_ns is None and other.is_new
    assert warnings(caplog) == []


@pytest.mark.parametrize("whole", [True, False])
async def test_a_log_that_was_emptied_is_told_by_every_owner_from_then_on(
    server: Nats, caplog: pytest.LogCaptureFixture, whole: bool
) -> None:
    """Of a stream that was purged as a whole each partition tells, of one subject's messages that one alone."""
    async with linked(server, "a") as (link,):
        for number in range(2):
            await taken_over(link, 1, number)
        before_ns = time.time_ns()
        await purge(server, None if whole else f"{LOG}.groups.{FEED}.0")
        told = []
        for number in range(2):
            for fence in (2, 3):
                _, contents = await taken_over(link, fence, number)
                told.append(contents.lost_ns)
    assert told[0] == told[1] and told[2] == told[3]
    assert told[0] is not None and abs(told[0] - before_ns) < 60 * 10**9
    assert (told[2] is not None) == whole
    found = warnings(caplog)
    assert len(found) == 1 + whole, "once for each, by the one that began it anew"
    assert all("begins again with the first message" in each and "deploy/cluster.md" in each for each in found)


@pytest.mark.parametrize("whole", [True, False])
async def test_a_loss_is_told_although_who_found_it_crashed_first(
    server: Nats, caplog: pytest.LogCaptureFixture, whole: bool
) -> None:
    async with linked(server, "a") as (link,):
        await taken_over(link, 1)
        await purge(server, None if whole else f"{LOG}.groups.{FEED}.0")
        await make_stream(link, "river", 1, 64 << 20)
        crashed = PartitionLog(link, Place.of("river", FEED, 0), 2)
        await crashed.append(0, [Whole(Kind.ACT, VERSION, bytes(8))])  # it has the log now, and comes no further
        told = [(await taken_over(link, fence))[1].lost_ns for fence in (3, 4)]
    assert told[0] is not None and told[0] == told[1]
    assert len(warnings(caplog)) == 1


async def test_a_stream_older_than_marks_has_lost_nothing(server: Nats, caplog: pytest.LogCaptureFixture) -> None:
    async with linked(server, "a") as (link,):
        log, contents = await taken_over(link, 1)
        saved = await log.store_snapshot(contents.end_lsn, [b"state"], contents.end_lsn)
        await log.append(contents.end_lsn, [saved])
        await log.let_go(saved, log.last)
        for subject in ("made", "begun.>"):
            await purge(server, f"{LOG}.{subject}")
        for number in (1, 0):
            _, contents = await taken_over(link, 2, number)
            assert contents.lost_ns is None
        await purge(server)
        assert (await taken_over(link, 3, 1))[1].lost_ns is not None, "it has marks from then on"
    assert len(warnings(caplog)) == 1


async def test_a_partition_that_is_added_a_day_after_a_purge_is_new(
    server: Nats, caplog: pytest.LogCaptureFixture, monkeypatch: pytest.MonkeyPatch
) -> None:
    async with linked(server, "a") as (link,):
        await taken_over(link, 1)
        await purge(server)
        assert (await taken_over(link, 2))[1].lost_ns is not None
        monkeypatch.setattr(emptied_module, "TOLD_FOR_NS", 0)
        assert (await taken_over(link, 1, 1))[1].lost_ns is None
    assert len(warnings(caplog)) == 1


async def test_of_two_that_race_for_a_new_log_none_takes_it_for_an_emptied_one(
    server: Nats, caplog: pytest.LogCaptureFixture
) -> None:
    async with linked(server, *"abcd") as links:
        await asyncio.gather(*(taken_over(link, fence) for fence, link in enumerate(links, 1)), return_exceptions=True)
        _, contents = await taken_over(links[0], 9)
    assert contents.lost_ns is None and len(contents.groups) >= 2
    assert warnings(caplog) == []


async def test_a_partition_says_for_a_day_that_its_log_was_emptied(
    server: Nats, tmp_path: Path, caplog: pytest.LogCaptureFixture, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A sink that tells no position, so that marks alone are the evidence."""
    async with Instance(tmp_path, server, "a", sink=HTTP_ONLY) as a:
        first = await a.own(1)
        await publish(server, [line(1, time.time_ns(), "gw")])
        await until(lambda: a.runtime.view().ledger["received"] == 1, "an event")
        await first.stop(drain=False)
        assert first.words != WORDS and warnings(caplog) == []
        await purge(server)
        second = await a.own(2)
        assert second.status()["words"] == WORDS and len(warnings(caplog)) == 1
        assert "it had messages before" in warnings(caplog)[0]
        await until(lambda: a.runtime.view().ledger["received"] == 1, "the first message, again")
        await second.stop(drain=False)
        third = await a.own(3)
        assert third.status()["words"] == WORDS and len(warnings(caplog)) == 1
        monkeypatch.setattr(partition_module, "TOLD_FOR_NS", 0)
        assert third.words != WORDS


async def test_a_log_that_was_emptied_hides_no_sink_that_fails(
    server: Nats, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(partition_module, "FAILING_NS", 0)
    async with Instance(tmp_path, server, "a", sink=HTTP_ONLY, feed='slack = "0s"') as a:
        await (await a.own(1)).stop(drain=False)
        await purge(server)
        second = await a.own(2)
        await publish(server, [line(n, time.time_ns(), "gw") for n in range(3)])
        await until(lambda: second.words.startswith(f"{WORDS}; sink "), "both told")
        assert second.is_lost


async def test_of_a_stream_of_logs_that_was_deleted_the_sinks_tell(
    server: Nats, tmp_path: Path, caplog: pytest.LogCaptureFixture
) -> None:
    async with Instance(tmp_path, server, "a", feed='slack = "0s"') as a:
        first = await a.own(1)
        await publish(server, [line(n, time.time_ns(), "gw") for n in range(3)])
        await until(lambda: a.runtime.view().ledger["received"] == 3, "events")
        await first.stop(drain=True)
        client = await server.client()
        await client.jetstream().delete_stream(LOG)
        await client.close()
        second = await a.own(2)
        assert second.words == WORDS
        (told,) = warnings(caplog)
        assert "a sink has batches of this partition up to" in told
        await second.stop(drain=False)
        third = await a.own(3)
        assert third.words == WORDS and len(warnings(caplog)) == 1


async def test_every_instance_shows_it(tmp_path: Path, caplog: pytest.LogCaptureFixture) -> None:
    with Nats(tmp_path, synced=False) as server:
        await make_parted_stream(server)
        async with running(member(tmp_path, server.url, 0, partitions=2)) as one:
            await eventually(lambda: at_work(one) == [{0, 1}])
            await publish_to(server, 0, [1, 2, 3])
            cluster = await cluster_of(one)
            assert [row["words"] for row in cluster["partitions"]] == ["", ""]
        client = await server.client()
        await client.jetstream().purge_stream(LOG)
        await client.close()
        async with running(member(tmp_path, server.url, 1, partitions=2)) as other:
            await eventually(lambda: at_work(other) == [{0, 1}])
            cluster = await cluster_of(other)
            assert [row["words"] for row in cluster["partitions"]] == [WORDS, WORDS]
            judged = said(cluster)
            assert judged.level == "watch" and "has lost its messages" in judged.says
            shown = (await other.get("/metrics")).content.decode()
            assert all(f'strandline_cluster_log_lost{{feed="{SERVED}-{n}"}} 1.0' in shown for n in range(2))
            assert SERVED in judged.says or "2 of 2 partitions" in judged.says
    assert len(warnings(caplog)) == 2

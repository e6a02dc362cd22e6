"""What observers see of partitions that come and go: streams, memory, metrics, the command, health; a real broker."""

from __future__ import annotations

import asyncio
import gc
import json
import weakref
from collections.abc import AsyncIterator
from pathlib import Path
from typing import Any

import pytest
import pytest_asyncio
from helpers_brokers import STREAM, Nats
from helpers_in_cluster import at_work, cluster_of, make_parted_stream, member, publish_to
from helpers_service import DEADLINE_S, FEED, POLL_S, Running, configuration, eventually, problem_of, running
from prometheus_client.parser import text_string_to_metric_families as plain_text
from strandline.cli import main
from strandline.cluster.words import said
from strandline.dashboard import live
from strandline.dashboard.live import WATCHES, Watches
from strandline.replay.capture import Capture
from strandline.reporting.http import AT_ONE_TIME, TURNS
from strandline.runtime import FeedRuntime
from strandline.tracing.http import Traces
from strandline.tracing.question import Question


@pytest_asyncio.fixture(name="server")
async def _server(tmp_path: Path) -> AsyncIterator[Nats]:
    with Nats(tmp_path, synced=False) as server:
        await make_parted_stream(server)
        yield server


def watches_of(service: Running) -> Watches:
    assert service.service._runner is not None
    watches: Watches = service.service._runner.app[WATCHES]
    return watches


def owner_at(service: Running, number: int) -> str | None:
    """Who owns a partition, as this service sees it."""
    assert service.service._cluster is not None
    owner: str | None = service.service._cluster.document()["partitions"][number]["owner"]
    return owner


def watched(service: Running) -> set[str]:
    """The feeds that are sampled."""
    return {watch.runtime.config.name for watch in watches_of(service).all()}


async def cluster_samples(service: Running) -> dict[tuple[str, ...], float]:
    """Samples of the cluster: their names without the beginning, then their labels' values."""
    families = plain_text((await service.get("/metrics")).content.decode())
    samples = [each for family in families for each in family.samples if each.name.startswith("strandline_cluster_")]
    return {(each.name.removeprefix("strandline_cluster_"), *each.labels.values()): each.value for each in samples}


async def told(service: Running, *arguments: str) -> int:
    """The exit code of the command against this service; it runs in a thread, for the service is in this one."""
    return await asyncio.to_thread(main, ["cluster", "--url", service.url, *arguments])


async def rest_of(service: Running, path: str) -> asyncio.Task[bytes]:
    """A stream whose beginning has come; what it holds in the end, which must come cleanly."""
    begun = asyncio.Event()

    async def read() -> bytes:
        async with service.session.get(f"{service.url}/v1/feeds/{path}", read_bufsize=2**22) as answer:
            assert answer.status == 200
            found = b""
            async for piece in answer.content.iter_any():
                found += piece
                begun.set()
            return found

    task = asyncio.create_task(read())
    async with asyncio.timeout(DEADLINE_S):
        await begun.wait()
    return task


async def where_it_is(service: Running, path: str) -> str:
    """What is said of a partition that is elsewhere, once the instance is not cut off: a busy machine may do that."""
    async with asyncio.timeout(DEADLINE_S):
        while "is cut off from the cluster" in (detail := problem_of(await service.get(path), 404)):
            await asyncio.sleep(POLL_S)
    return detail


# ---- partitions that come and go ------------------------------------------------------------------------------------


async def test_a_partition_that_goes_ends_its_streams_and_leaves_nothing(
    server: Nats, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(live, "SAMPLE_EVERY_S", 0.05)
    async with running(member(tmp_path, server.url, 0, partitions=2)) as one:
        await eventually(lambda: at_work(one) == [{0, 1}])
        await eventually(lambda: watched(one) == {f"{FEED}-0", f"{FEED}-1"}, "each has its watch once it is taken")
        for number in range(2):
            await publish_to(server, number, [1, 2, 3])
        await eventually(lambda: all(each.recent.reached for each in one.service.feeds.values()))
        streams = {
            number: [
                await rest_of(one, f"{FEED}-{number}/{path}")
                for path in ("live", "ordered?after=0", "capture?seconds=600")
            ]
            for number in range(2)
        }
        memories = {n: weakref.ref(watches_of(one)[f"{FEED}-{n}"].memory) for n in range(2)}
        async with running(member(tmp_path, server.url, 1, partitions=2)) as other:
            await eventually(lambda: sorted(map(len, at_work(one, other))) == [1, 1])
            (gone,), (stays,) = at_work(other, one)
            async with asyncio.timeout(DEADLINE_S):
                moments, ordered, capture = await asyncio.gather(*streams[gone])
            assert moments.endswith(b"event: gone\ndata: {}\n\n") and moments.count(b"event: moment") >= 1
            assert [json.loads(line)["batch"] for line in ordered.split()] == [1, 2, 3]
            assert capture, "what was recorded counts"
            assert not any(task.done() for task in streams[stays])
            await eventually(lambda: watched(one) == {f"{FEED}-{stays}"} and watched(other) == {f"{FEED}-{gone}"})
            await eventually(lambda: gc.collect() >= 0 and memories[gone]() is None, "its memory is dropped")
            assert memories[stays]() is not None
            await eventually(lambda: owner_at(one, gone) == "strandline-1")
            for path in ("", "/live", "/history", "/report", "/trace?id=1", "/ordered", "/capture", "/late"):
                detail = await where_it_is(one, f"/v1/feeds/{FEED}-{gone}{path}")
                owned_by = f"strandline-1 ({other.service.address})"
                assert detail == f"partition {FEED}-{gone} is owned by {owned_by}: ask there", path
            detail = problem_of(await one.get(f"/v1/feeds/{FEED}"), 404)
            assert detail.startswith(f"feed {FEED} has partitions, {FEED}-0 to -1: ask for one of them; `strandline cl")
            assert "there is no feed" in problem_of(await one.get(f"/v1/feeds/{FEED}-2"), 404)
            for document in (await cluster_of(one), await cluster_of(other)):
                ports = {each["instance"]: each["listen"] for each in document["instances"]}
                assert ports == {"strandline-0": str(one.service.address), "strandline-1": str(other.service.address)}
        await eventually(lambda: at_work(one) == [{0, 1}], "the other was stopped")
        await eventually(lambda: watched(one) == {f"{FEED}-0", f"{FEED}-1"})
        (left,) = (await cluster_of(one))["gone"]
        assert (left["instance"], left["stopped"]) == ("strandline-1", True)
        for task in streams[stays]:
            task.cancel()
        await asyncio.gather(*streams[stays], return_exceptions=True)


async def test_a_service_without_a_cluster_says_so(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    async with running(configuration(tmp_path)) as service:
        assert (await service.get("/v1/feeds")).json["cluster"] is False
        assert "in no cluster" in problem_of(await service.get("/v1/cluster"), 404)
        assert await cluster_samples(service) == {}
        assert await told(service) == 2
        assert "in no cluster" in capsys.readouterr().err
    assert main(["cluster", "--url", "http://127.0.0.1:1"]) == 3
    assert "could not be reached" in capsys.readouterr().err


async def test_what_is_being_answered_about_a_partition_that_goes_is_answered(
    server: Nats, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A report waits for its turn, a trace for its thread, a capture for its end, and the partition goes meanwhile."""
    may_go_on, waiting, traced = asyncio.Event(), list[str](), Traces.answer

    async def held_up(traces: Traces, runtime: FeedRuntime, question: Question) -> bytes:
        waiting.append(question.feed)
        await may_go_on.wait()
        return await traced(traces, runtime, question)

    monkeypatch.setattr(Traces, "answer", held_up)
    async with running(member(tmp_path, server.url, 0, partitions=2, id="/id")) as one:
        await eventually(lambda: at_work(one) == [{0, 1}])
        assert one.service._runner is not None
        turns = one.service._runner.app[TURNS]
        for _ in range(AT_ONE_TIME):
            await turns.acquire()
        asked = {
            (number, path): asyncio.create_task(one.get(f"/v1/feeds/{FEED}-{number}/{path}"))
            for number in range(2)
            for path in ("report?format=json", "trace?id=7", "capture?seconds=600")
        }
        await eventually(lambda: len(waiting) == 2 and all(each.recording for each in one.service.feeds.values()))
        async with running(member(tmp_path, server.url, 1, partitions=2, id="/id")) as other:
            await eventually(lambda: sorted(map(len, at_work(one, other))) == [1, 1])
            (gone,), (stays,) = at_work(other, one)
            async with asyncio.timeout(DEADLINE_S):
                capture = await asked[gone, "capture?seconds=600"]
                for _ in range(AT_ONE_TIME):
                    turns.release()
                may_go_on.set()
                reports = [await asked[number, "report?format=json"] for number in range(2)]
                lost, found = await asked[gone, "trace?id=7"], await asked[stays, "trace?id=7"]
        (tmp_path / "capture").write_bytes(capture.content)
        with Capture(tmp_path / "capture") as recorded:
            assert recorded.cut is None, "it ends as one that was recorded to its end"
        assert [answer.status for answer in reports] == [200, 200]
        assert found.status == 200
        assert lost.status == 200 or "has gone from this instance meanwhile" in problem_of(lost, 503)
        asked[stays, "capture?seconds=600"].cancel()
        await asyncio.gather(*asked.values(), return_exceptions=True)


# ---- metrics and the command ----------------------------------------------------------------------------------------


async def test_metrics_and_the_command_tell_what_the_document_says(
    server: Nats, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    async with running(member(tmp_path, server.url, 0, partitions=3)) as one:
        await eventually(lambda: at_work(one) == [{0, 1, 2}])
        async with running(member(tmp_path, server.url, 1, partitions=3)) as other:
            await eventually(lambda: sorted(map(len, at_work(one, other))) == [1, 2])
            for service in (one, other):
                document = await settled(service)
                found, here = await cluster_samples(service), at_work(service)[0]
                assert (found["connected",], found["instances",]) == (1, 2)
                assert found["partitions_owned", FEED] == len(here)
                assert found["partitions_nobodys", FEED] == 0
                taken = {("strandline-0",): 3, ("strandline-1",): len(at_work(other)[0])}[document["instance"],]
                assert found["takeover_seconds_count", FEED] == found["takeover_seconds_bucket", FEED, "+Inf"] == taken
                assert 0 < found["takeover_seconds_sum", FEED] < DEADLINE_S
                assert found["takeover_failures_total", FEED] == 0
                trouble = {key[1]: value for key, value in found.items() if key[0] == "log_trouble"}
                assert trouble == {f"{FEED}-{number}": 0 for number in here}
                assert {key[1]: value for key, value in found.items() if key[0] == "log_lost"} == trouble
            capsys.readouterr()
            assert await told(other, "--json") == 0
            shown = json.loads(capsys.readouterr().out)
            assert [each["runtime"] for each in shown["partitions"]] == [f"{FEED}-{number}" for number in range(3)]
            assert await told(other) == 0
            lines = capsys.readouterr().out.splitlines()
            assert lines[:3] == [
                "All 3 partitions are owned, by 2 instances.",
                "",
                "instance\tlast seen\tpartitions\tlistens at",
            ]
            assert [line.split("\t")[0] for line in lines[3:5]] == ["strandline-0", "strandline-1"]
            assert lines[4].split("\t")[1] == "asked" and lines[5] == ""
            assert lines[6].split("\t") == ["partition", "state", "owner", "since", "messages behind", "watermark age"]
            owners = {line.split("\t")[0]: line.split("\t")[1:3] for line in lines[7:]}
            assert owners == {each["runtime"]: ["owned", each["owner"]] for each in shown["partitions"]}


async def settled(service: Running) -> Any:
    """The document, once every partition is owned in it."""
    while True:
        document = await cluster_of(service)
        if all(each["state"] == "owned" for each in document["partitions"]):
            return document


async def test_a_partition_that_nobody_can_take_is_told_by_all(
    server: Nats, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    text = member(tmp_path, server.url, 0, partitions=2)
    feeds = tmp_path / "strandline-0" / "data" / "feeds"
    feeds.mkdir(parents=True)
    (feeds / f"{FEED}-1").write_text("in the way of the partition's folder")
    async with running(text) as one:
        await eventually(lambda: at_work(one) == [{0}])
        deadline = asyncio.get_running_loop().time() + DEADLINE_S
        while await told(one) != 1:  # it is tried again now and then, and is being taken over for that moment
            assert asyncio.get_running_loop().time() < deadline
        out = capsys.readouterr().out
        first, next, *_ = out[out.rindex("1 of 2 partitions") :].splitlines()
        assert first.startswith("1 of 2 partitions is nobody's, ")
        assert f": strandline-0 could not take over {FEED}-1: " in first and "File exists" in first
        assert "Mend what hinders it" in next and "File exists" not in next
        rows = [line.split("\t") for line in out[out.rindex("partition\tstate") :].splitlines()[1:]]
        assert [(cells[0], cells[1][:8]) for cells in rows] == [(f"{FEED}-1", "nobody's"), (f"{FEED}-0", "owned")]
        found = await cluster_samples(one)
        assert found["takeover_failures_total", FEED] >= 1 and found["takeover_seconds_count", FEED] == 1
        assert (await one.get("/health/ready")).status == 200, "an update that mends it must be able to go on"


async def test_partitions_without_their_stream_are_told_as_hindered_wherever_one_asks(
    server: Nats, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    lines = [member(tmp_path, server.url, number, partitions=2) for number in range(2)]
    async with running(lines[0]) as one, running(lines[1]) as other:
        await eventually(lambda: sorted(map(len, at_work(one, other))) == [1, 1])
        client = await server.client()
        await client.jetstream().delete_stream(STREAM)
        await client.close()
        hindered = f"2 of 2 partitions are hindered: there is no stream {STREAM}: make it."
        for service in (one, other):
            cluster = service.service._cluster
            assert cluster is not None
            await eventually(lambda cluster=cluster: said(cluster.document()).says == hindered)
            assert await told(service) == 1
            out = capsys.readouterr().out
            assert hindered in out and "Next: Mend what it says." in out
            rows = [line.split("\t") for line in out[out.rindex("partition\tstate") :].splitlines()]
            assert [cells[-1] for cells in rows] == ["hindered by", *[f"there is no stream {STREAM}: make it"] * 2]
        await make_parted_stream(server)
        for service in (one, other):
            cluster = service.service._cluster
            assert cluster is not None
            await eventually(lambda cluster=cluster: said(cluster.document()).level == "fine")
            assert await told(service) == 0


# ---- health ---------------------------------------------------------------------------------------------------------


async def until_ready(service: Running) -> None:
    deadline = asyncio.get_running_loop().time() + DEADLINE_S
    while (answer := await service.get("/health/ready")).status != 200:
        assert asyncio.get_running_loop().time() < deadline, answer.content
        await asyncio.sleep(0.05)


async def test_an_instance_is_ready_once_it_has_joined_and_not_when_it_is_away_for_longer_than_its_lease(
    server: Nats, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    server.end()
    async with running(member(tmp_path, server.url, 0, partitions=1)) as one:
        assert (await one.get("/health/live")).status == 200, "a restart would not help"
        detail = problem_of(await one.get("/health/ready"), 503)
        assert detail.startswith("cluster river: strandline-0 has not joined it yet: ")
        assert (await cluster_samples(one))["connected",] == 0
        server.start()
        await until_ready(one)
        await eventually(lambda: at_work(one) == [{0}])
        server.end()
        cluster = one.service._cluster
        assert cluster is not None
        assert (await one.get("/health/ready")).status == 200, "its lease has not ended"
        await eventually(lambda: cluster.unready() != "")
        detail = problem_of(await one.get("/health/ready"), 503)
        assert "strandline-0 has been away for 2 s, longer than its lease of 2 s, so it owns nothing: " in detail
        found = await cluster_samples(one)
        assert found["connected",] == 0 and not {name for name, *_ in found} & {"instances", "partitions_nobodys"}
        await eventually(lambda: owner_at(one, 0) is None, "it is being stopped, and its lease is not kept beyond that")
        assert await told(one) == 1
        out = capsys.readouterr().out
        assert "strandline-0 has had no broker for " in out and f"{FEED}-0\tnot known\t" in out
        assert "others take" not in out
        server.start()
        await until_ready(one)
        await eventually(lambda: at_work(one) == [{0}])

"""Live moments over a real socket: they agree with GET and the core, and cost nothing while nobody watches."""

from __future__ import annotations

import asyncio
import json
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from pathlib import Path
from typing import Any

import aiohttp
import pytest
from helpers_service import (
    BEGIN_S,
    DEADLINE_S,
    Running,
    body_of,
    configuration,
    event_line,
    eventually,
    problem_of,
    retry_after,
    running,
)
from helpers_watches import watch_of
from strandline.dashboard import live
from strandline.dashboard.live import Moment, Variant
from strandline.ingest.timestamps import parse_rfc3339

HOSTILE = [
    '<img src=x onerror="alert(1)">',
    "a\nevent: end\ndata: {}\n\n",
    "a\r\rdata: {}",
    "\u2028\u2029\x01\u202e",
    "ü" * 128,
    '"\\',
    "\U0001f30a",
    "__proto__",
]


@pytest.fixture(autouse=True)
def quick(monkeypatch: pytest.MonkeyPatch) -> None:
    """Moments follow each other at once, so that no test waits for half a second."""
    monkeypatch.setattr(live, "EVERY_S", 0.01)


class Moments:
    """The moments of one stream, as they come."""

    def __init__(self, answer: aiohttp.ClientResponse) -> None:
        self.answer, self.instant_ms = answer, 0

    async def next(self) -> Any:
        """The next moment, by the rules of the HTML standard's section 9.2.6 as far as they are needed."""
        event, data = "message", []
        while True:
            async with asyncio.timeout(DEADLINE_S):
                whole = await self.answer.content.readuntil(b"\n")
            assert whole.endswith(b"\n"), "the stream has ended"
            line = whole[:-1].decode()
            if line.startswith("event: "):
                event = line[7:]
            elif line.startswith("data: "):
                data.append(line[6:])
            elif line.startswith("id: "):
                number = int(line[4:])
            elif not line and data:
                assert (event, len(data)) == ("moment", 1)
                moment = json.loads(data[0])
                assert moment["now_ms"] == number > self.instant_ms, "none comes twice"
                self.instant_ms = number
                return moment
            elif not line:
                event = "message"
            else:
                assert line == "retry: 1000"

    async def until(self, true: Any) -> Any:
        """The first moment of which something is true."""
        async with asyncio.timeout(DEADLINE_S):
            while not true(moment := await self.next()):
                pass
        return moment


@asynccontextmanager
async def watching(service: Running, query: str = "") -> AsyncIterator[Moments]:
    """A browser that watches."""
    async with service.session.get(f"{service.feed_url}/live{query}", read_bufsize=2**22) as answer:
        assert answer.status == 200 and answer.headers["Content-Type"] == "text/event-stream"
        assert answer.headers["Cache-Control"] == "no-store"
        yield Moments(answer)


def ms(text: str | None) -> int | None:
    """RFC 3339 text in milliseconds."""
    return None if text is None else parse_rfc3339(text) // 10**6


# ---- what a moment says ---------------------------------------------------------------------------------------------


def delivered(moment: Any) -> bool:
    """Whether nothing waits but what is held."""
    return not any(hop["waiting"] for hop in moment["hops"] if hop["name"] != "runs")


async def test_a_moment_agrees_with_the_feeds_document(tmp_path: Path) -> None:
    async with running(configuration(tmp_path, slack="5s")) as service:
        async with watching(service) as moments:
            empty = await moments.next()
            assert (empty["watermark_ms"], empty["newest_ms"], empty["lanes"]) == (None, None, [])
            assert empty["slacks"][0][1:] == [None, None] and empty["state"] == "running"
            await service.send([10, 20, 21.5])
            await service.send([12, 3], "gw-2")
            await service.post("events", body_of(b"{", event_line(19, "gw-3")))
            await eventually(lambda: service.runtime.feed.state.outbox.undelivered_events == 0)
            moment = await moments.until(lambda moment: moment["ledger"]["received"] == 7 and delivered(moment))
        found = await service.document()
    assert moment["ledger"] == found["ledger"] and moment["ledger"]["balanced"] is True
    assert (moment["watermark_ms"], moment["newest_ms"]) == (ms(found["watermark"]), ms(found["newest"]))
    assert moment["watermark_ms"] == (BEGIN_S + 16.5) * 1000
    for key in ("slack_s", "clock", "state", "failure", "steering"):
        assert moment[key] == found[key], key
    assert moment["feed"] == found["name"]
    assert {key: moment["hold"][key] for key in ("why", "source", "explanation")} == {
        key: found["hold"][key] for key in ("why", "source", "explanation")
    }
    assert moment["hold"]["since_ms"] == ms(found["hold"]["since"])
    held = moment["held"]
    assert (held["events"], held["open_runs"], held["longest_runs"]) == tuple(
        found["held"][key] for key in ("events", "open_runs", "longest_runs")
    )
    assert held["oldest_ms"] == ms(found["held"]["oldest_arrived"])
    assert [hop["name"] for hop in moment["hops"]] == list(found["hops"])
    assert {hop["name"]: hop["waiting"] for hop in moment["hops"]} == {
        name: hop["waiting"] for name, hop in found["hops"].items()
    }
    assert {sink["name"] for sink in moment["sinks"]} == set(found["sinks"])
    assert all(sink["waiting_events"] == 0 and sink["connected"] for sink in moment["sinks"])


async def test_the_lanes_of_a_moment_agree_with_the_sources_and_the_core(tmp_path: Path) -> None:
    async with running(configuration(tmp_path, slack="5s")) as service:
        await service.send(range(100, 110))
        await service.send([103, 102, 95, 107], "gw-2")
        await service.post("excuse", {"source": "gw-2", "reason": "its link is down", "who": "ada"})
        await service.post("marks", {"source": "gw-1", "time": "2023-11-14T22:15:00Z"})
        async with watching(service) as moments:
            moment = await moments.next()
        told = {row["source"]: row for row in (await service.get("sources")).json["sources"]}
        lanes = {lane["source"]: lane for lane in moment["lanes"]}
        assert set(lanes) == set(told) == {"gw-1", "gw-2"}
        for name, lane in lanes.items():
            row = told[name]
            assert (lane["active"], lane["excused"]) == (row["active"], row["excused"])
            assert (lane["newest_ms"], lane["heard_ms"]) == (ms(row["newest"]), ms(row["last_heard"]))
            assert lane["promised_ms"] == ms(row["promised"])
        # gw-2's events of 103, 102 and 95 came behind the watermark of 104: which is read back from where they lie.
        late = (await service.get("late?source=gw-2")).json["late"]
        assert lanes["gw-2"]["late"] == [[row["arrived_ns"] // 10**6, row["time_ns"] // 10**6] for row in late]
        assert [time for _, time in lanes["gw-2"]["late"]] == [(BEGIN_S + second) * 1000 for second in (103, 102, 95)]
        held = service.runtime.feed.state.runs.held
        assert sum(lane["held_events"] for lane in lanes.values()) == held == moment["held"]["events"]
        assert moment["rest"] == {"sources": 0, "active": 0, "silent": 0, "held_events": 0}
        assert lanes["gw-2"]["role"] == "excused"
        assert [(act["act"], act["subject"], act["who"]) for act in moment["acts"]] == [("excuse", "gw-2", "ada")]
        assert moment["acts"] == (await service.get("acts")).json["acts"]


async def test_lateness_is_counted_from_one_moment_to_the_next(tmp_path: Path) -> None:
    """How far behind the newest time each event came: 2 s and 7 s, after one that was not late at all."""
    async with running(configuration(tmp_path, slack="5s")) as service, watching(service) as moments:
        moment = await moments.next()
        edges = moment["lateness"]["edges_s"]
        assert len(moment["lateness"]["counts"]) == len(edges) + 1 and edges == sorted(edges)
        sums = [0] * (len(edges) + 1)
        await service.send([100])
        await service.send([98, 93])
        async with asyncio.timeout(DEADLINE_S):
            while sum(sums) < 3:
                moment = await moments.next()
                sums = [a + b for a, b in zip(sums, moment["lateness"]["counts"], strict=True)]
        expected = [0] * (len(edges) + 1)
        for lateness_s in (0, 2, 7):
            expected[next(index for index, edge in enumerate(edges) if lateness_s <= edge)] += 1
        assert sums == expected
        slacks = {slack_s: share for slack_s, share, _ in moment["slacks"]}
        answer = (await service.get(f"slack?at={','.join(f'{slack_s:.9f}s' for slack_s in list(slacks)[:40])}")).json
        for row in answer["slacks"]:
            assert slacks[row["slack_s"]] == pytest.approx(row["late_share_at_most"], abs=1e-9), row
        assert slacks[5.0] == pytest.approx(1 / 3) and 38 <= len(slacks) <= 45


async def test_who_holds_the_feed_is_shown_however_few_lanes_and_a_search_comes_next(tmp_path: Path) -> None:
    async with running(configuration(tmp_path, slack="5s")) as service:
        lines = [event_line(100 + number, f"gw-{number}") for number in range(30)]
        await service.post("events", body_of(*lines))
        async with watching(service, "?lanes=1") as one, watching(service, "?q=GW-2&lanes=5") as searched:
            moment = await one.next()
            assert [(lane["source"], lane["role"]) for lane in moment["lanes"]] == [("gw-0", "holding")]
            assert moment["rest"]["sources"] == 29
            moment = await searched.next()
            names = [lane["source"] for lane in moment["lanes"]]
            assert names == ["gw-0", "gw-2", "gw-20", "gw-21", "gw-22"]
            assert [lane["found"] for lane in moment["lanes"]] == [False, True, True, True, True]


async def test_hostile_names_come_through_unchanged(tmp_path: Path) -> None:
    async with running(configuration(tmp_path, slack="5s")) as service:
        lines = [json.dumps({"observed_at": "2023-11-14T22:13:29Z", "station": name}).encode() for name in HOSTILE]
        assert (await service.post("events", body_of(*lines))).json["accepted"] == len(HOSTILE)
        async with watching(service) as moments:
            shown = [lane["source"] for lane in (await moments.next())["lanes"]]
        assert set(shown) == set(HOSTILE)
        watch_of(service).memory.sample()
        answer = await service.get("history")
        assert set(answer.json["lanes"]) == set(shown)


# ---- who watches ----------------------------------------------------------------------------------------------------


async def test_a_moment_is_computed_once_however_many_watch_and_never_while_nobody_does(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    async with running(configuration(tmp_path)) as service:
        watch = watch_of(service)
        assert (watch.computed, watch._task) == (0, None)
        real, made = watch._lanes, list[tuple[int, Variant]]()

        def noted(moment: Moment, variant: Variant) -> Any:
            made.append((moment.view.now_ns, variant))
            return real(moment, variant)

        monkeypatch.setattr(watch, "_lanes", noted)
        async with watching(service) as one, watching(service) as other, watching(service, "?lanes=3") as third:
            for _ in range(5):
                await asyncio.gather(one.next(), other.next(), third.next())
            assert len(watch.variants) == 2 and watch.streams == 3
            task = watch._task
            assert len(made) == len(set(made)) and len({variant for _, variant in made}) == 2
            assert watch.computed == len({now_ns for now_ns, _ in made}) >= 5
        await eventually(lambda: watch.streams == 0)
        assert watch._task is None and not watch._frames
        assert task is not None
        await eventually(task.done)
        computed = watch.computed
        for _ in range(3):
            await service.document()
        assert watch.computed == computed


async def test_no_more_than_so_many_streams(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(live, "STREAMS_AT_MOST", 2)
    async with running(configuration(tmp_path)) as service:
        async with watching(service) as one, watching(service):
            answer = await service.get("live")
            assert "2 streams" in problem_of(answer, 429) and retry_after(answer) >= 1
            await one.next()
        await eventually(lambda: watch_of(service).streams == 0)
        async with watching(service) as again:
            await again.next()


@pytest.mark.parametrize(
    "query", ["live?lanes=0", "live?lanes=101", "live?lanes=x", f"live?q={'a' * 257}", "history?points=1",
              "history?from_ms=-1", "history?from_ms=9&to_ms=8", "history?to_ms=9223372036855"],
)  # fmt: skip
async def test_what_cannot_be_asked_for_is_refused(tmp_path: Path, query: str) -> None:
    async with running(configuration(tmp_path)) as service:
        problem_of(await service.get(query), 400)
        problem_of(await service.get(f"/v1/feeds/sea-gauges/{query}"), 404)


async def test_streams_end_when_the_service_stops(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service, watching(service) as moments:
        await moments.next()
        stopping = asyncio.create_task(service.service.stop())
        async with asyncio.timeout(DEADLINE_S):
            rest = await moments.answer.content.read()  # ends cleanly, or this would raise
        await stopping
        assert rest.endswith(b"\n\n") or not rest
        assert watch_of(service).streams == 0 and watch_of(service)._task is None


async def test_a_moment_that_cannot_be_computed_ends_no_stream(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, caplog: pytest.LogCaptureFixture
) -> None:
    async with running(configuration(tmp_path)) as service, watching(service) as moments:
        await moments.next()
        real = service.runtime.hops

        def broken() -> Any:
            monkeypatch.setattr(service.runtime, "hops", real)
            raise RuntimeError("once")

        monkeypatch.setattr(service.runtime, "hops", broken)
        await eventually(lambda: "unforeseen" in caplog.text)
        now_ms = (await moments.next())["now_ms"]
        assert (await moments.until(lambda moment: moment["now_ms"] > now_ms))["state"] == "running"

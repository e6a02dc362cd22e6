"""The report over HTTP and on the command line, of real incidents: a gateway that falls silent, is excused, is late."""

from __future__ import annotations

import asyncio
import json
import re
import threading
import time
from pathlib import Path
from typing import Any

import msgspec
import pytest
from helpers_faulty import planted, scripted
from helpers_service import (
    BEGIN_S,
    DEADLINE_S,
    FEED,
    Process,
    Running,
    configuration,
    events,
    eventually,
    problem_of,
    running,
)
from helpers_sinks import VirtualTime
from helpers_watches import memory_of
from strandline.cli import main
from strandline.errors import SinkRetry
from strandline.reporting import http
from strandline.reporting.facts import Facts
from strandline.reporting.html import report_html
from strandline.reporting.http import written
from strandline.reporting.markdown import report_markdown
from strandline.reporting.sentences import summary
from strandline.reporting.words import plain
from strandline.sinks.lanes import late_rows

SECOND = 10**9


def instant(second: float) -> str:
    """A second of the tests as the query has it; BEGIN_S is 22:13:20."""
    return time.strftime("%Y-%m-%dT%H:%M:%SZ", time.gmtime(BEGIN_S + second))


async def report(service: Running, form: str = "json", **query: str) -> Any:
    answer = await service.get("report", params={"format": form, **query})
    assert answer.status == 200, answer.content
    return answer


async def facts_of(service: Running, begin: float = 0, end: float = 3600) -> Facts:
    answer = await report(service, **{"from": instant(begin), "to": instant(end)})
    return msgspec.json.decode(answer.content, type=Facts)


def said(facts: Facts) -> str:
    return "\n".join(plain(words) for words in summary(facts))


class Clocked:
    """A service whose clock the test turns, and that is sampled at each second."""

    def __init__(self, service: Running, clock: VirtualTime) -> None:
        self.service, self.clock = service, clock
        self.memory = memory_of(service)

    async def to(self, second: int, *sending: str) -> None:
        """Let seconds pass; in each the gateways send one event."""
        while self.clock.now < (BEGIN_S + second) * SECOND:
            self.clock.now += SECOND
            now = self.clock.now // SECOND - BEGIN_S
            for gateway in sending:
                await self.service.send([now], gateway)
            self.service.runtime.tick()
            self.memory.sample()


async def an_incident(service: Running, clock: VirtualTime) -> None:
    """20 s of peace; gw-2 silent from second 20, excused at 50, back at 70 with 30 late events; peace until 100."""
    stage = Clocked(service, clock)
    await stage.to(20, "gw-1", "gw-2")
    await stage.to(50, "gw-1")
    answer = await service.post("excuse", {"source": "gw-2", "reason": "no | mains <b>", "who": "night shift"})
    assert answer.status == 204
    await stage.to(70, "gw-1")
    answer = await service.post("events", events(range(21, 51), "gw-2"))
    assert answer.json["late"] == 30
    await stage.to(100, "gw-1", "gw-2")
    await eventually(lambda: len(late_rows(service.runtime.lanes_file)) == 30)
    await eventually(lambda: not service.runtime.hops()["sinks"].waiting)
    clock.now += SECOND // 2


def at_the_beginning() -> VirtualTime:
    clock = VirtualTime()
    clock.now = BEGIN_S * SECOND
    return clock


SETTINGS = {"slack": "5s", "idle_after": "60s", "hold_at_most": "2m"}


async def test_an_incident_is_told_with_its_numbers(tmp_path: Path) -> None:
    clock = at_the_beginning()
    async with running(configuration(tmp_path, **SETTINGS), clock=clock) as service:
        await an_incident(service, clock)
        facts = await facts_of(service)
        ledger = (await service.document())["ledger"]
    text = said(facts)
    (stall,) = facts.holds.stalls
    assert (stall.source, [phase.why for phase in stall.phases]) == ("gw-2", ["silent_source"])
    assert abs(stall.from_ns - (BEGIN_S + 20) * SECOND) <= SECOND and stall.to_ns == (BEGIN_S + 50) * SECOND
    assert "source gw-2 held the feed: it was silent, and waited for." in text
    assert "It ended as night shift excused gw-2 at 22:14:10." in text
    assert "In that time the ordered output stood at most 35 s behind the newest event (usually 5 s), at 22:14:" in text
    assert "it was current again, at most 6 s behind, at 22:14:1" in text
    assert "30 events of gw-2 came too late to be put in order. The late lane keeps them." in text
    assert "They came at 22:14:30, at most 44 s behind the watermark." in text
    assert facts.books.end is not None
    assert {name: getattr(facts.books.end, name) for name in ledger if name != "balanced"} == {
        name: count for name, count in ledger.items() if name != "balanced"
    }
    assert f"{ledger['received']} events were received." in text and "The books balance" in text
    assert "At 22:14:10 night shift excused gw-2 (reason given: no | mains <b>)." in text


async def test_each_part_of_the_time_tells_only_its_own(tmp_path: Path) -> None:
    """Cut at second 60, the books of the two parts are those of the whole, and what happened stands in one of them."""
    clock = at_the_beginning()
    async with running(configuration(tmp_path, **SETTINGS), clock=clock) as service:
        await an_incident(service, clock)
        whole, first, second = [await facts_of(service, *span) for span in ((0, 200), (0, 60), (60, 200))]
    assert (len(first.holds.stalls), len(second.holds.stalls)) == (1, 0)
    assert (len(first.acts.listed), len(second.acts.listed)) == (1, 0)
    assert first.late is not None and second.late is not None
    assert (first.late.events, second.late.events) == (0, 30)
    assert first.books.begin == whole.books.begin and second.books.end == whole.books.end
    assert first.books.end == second.books.begin
    assert whole.to_ns == (BEGIN_S + 100) * SECOND + SECOND // 2, "what lies ahead is cut off"


async def test_the_formats_say_the_same_and_keep_browsers_from_doing_anything(tmp_path: Path) -> None:
    clock = at_the_beginning()
    async with running(configuration(tmp_path, **SETTINGS), clock=clock) as service:
        await an_incident(service, clock)
        query = {"from": instant(0), "to": instant(90)}
        html, markdown = [await report(service, form, **query) for form in ("html", "markdown")]
        facts = msgspec.json.decode((await report(service, **query)).content, type=Facts)
        assert html.content.decode() == report_html(facts)
        assert markdown.content.decode() == report_markdown(facts)
        assert written(facts, "html") == (html.content, "text/html")
        assert html.headers["Content-Type"] == "text/html; charset=utf-8"
        assert markdown.headers["Content-Type"] == "text/markdown; charset=utf-8"
        policy = html.headers["Content-Security-Policy"]
        assert policy.startswith("default-src 'none'; style-src 'unsafe-inline'") and "script" not in policy
        assert html.headers["X-Content-Type-Options"] == "nosniff"
        assert "no | mains &lt;b&gt;" in html.content.decode()
        assert r"no \| mains &lt;b&gt;" in markdown.content.decode()
        assert (await service.get("report")).headers["Content-Type"].startswith("text/html")


async def test_questions_that_cannot_be_answered_say_why(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service:
        for query, words in {
            "format=pdf": "?format= must be one of html, markdown, json",
            "from=yesterday": "?from= must be a time of RFC 3339",
            "from=2026-05-01T03:00:00Z&to=2026-05-01T02:00:00Z": "?from= must be earlier than ?to=",
            "from=2250-01-01T00:00:00Z": "there is nothing to report yet",
            "from=1970-01-01T00:00:00Z": "31 days at most",
        }.items():
            assert words in problem_of(await service.get(f"report?{query}"), 400)
        problem_of(await service.get("/v1/feeds/none/report"), 404)


async def test_a_failing_sink_is_told_from_when_to_when(tmp_path: Path) -> None:
    clock = at_the_beginning()
    toml, sinks = scripted("river", "archive")
    mended = asyncio.Event()  # opened, then refused once; the second try waits for its store
    sinks["archive"].script.extend(["ok", SinkRetry("its store is away"), mended])
    async with running(configuration(tmp_path, sinks=toml), clock=clock, make=planted(**sinks)) as service:
        stage = Clocked(service, clock)
        await stage.to(1, "gw-1")
        failing = service.runtime.deliveries["archive"]
        await eventually(lambda: failing.state().failing_since_ns is not None)
        await stage.to(3)
        mended.set()
        await eventually(lambda: failing.state().failing_since_ns is None)
        await stage.to(6)
        facts = await facts_of(service)
    (stretch,) = facts.trouble.failing
    assert stretch.sink == "archive" and not stretch.goes_on
    assert (BEGIN_S + 1) * SECOND <= stretch.from_ns < stretch.to_ns <= (BEGIN_S + 5) * SECOND
    assert "Sink archive was failing from 22:13:2" in said(facts)
    assert [each.last_error for each in facts.trouble.sinks if each.sink == "archive"] == ["its store is away"]
    assert {each.sink for each in facts.trouble.sinks} == {"river", "archive", "lanes, the service's own"}


async def test_refused_requests_are_told(tmp_path: Path) -> None:
    clock = at_the_beginning()
    toml, sinks = scripted("archive")
    text = configuration(tmp_path, sinks=toml, held_events_at_most=3, events_at_most=3, slack="5s")
    async with running(text, clock=clock, make=planted(**sinks)) as service:
        stage = Clocked(service, clock)
        await stage.to(3, "gw-1")
        assert (await service.post("events", events([0, 1, 2]))).status == 429
        await stage.to(5)
        facts = await facts_of(service)
    assert facts.trouble.refused_requests == 1
    assert facts.trouble.refusals_since_start == {"held_full": 1}
    assert "1 request was refused whole" in said(facts)


async def test_a_file_of_late_events_that_cannot_be_read_is_said(tmp_path: Path) -> None:
    clock = at_the_beginning()
    async with running(configuration(tmp_path, **SETTINGS), clock=clock) as service:
        await Clocked(service, clock).to(5, "gw-1")
        await service.service.feeds[FEED].lane_store.close()
        for file in service.runtime.lanes_file.parent.glob("lanes.db*"):
            file.unlink()
        service.runtime.lanes_file.write_bytes(b"no database" * 1000)
        facts = await facts_of(service)
    assert facts.late is None and facts.trouble.refused_rows is None
    assert "The late lane could not be read" in said(facts)


async def test_reports_do_not_hold_the_loop_up(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """While several are asked for at once the service goes on answering, and all say the same."""
    clock, begun, answered = at_the_beginning(), list[str](), threading.Event()

    def waits(facts: Facts, form: str) -> tuple[bytes, str]:
        begun.append(form)
        meanwhile = answered.wait(DEADLINE_S)
        answered.set()  # the others need not wait as long
        assert meanwhile, "nothing else was answered meanwhile"
        return written(facts, form)

    monkeypatch.setattr(http, "written", waits)
    async with running(configuration(tmp_path, **SETTINGS), clock=clock) as service:
        await an_incident(service, clock)
        asked = [asyncio.create_task(report(service, "html", **{"from": instant(0)})) for _ in range(8)]
        await eventually(lambda: len(begun) == http.AT_ONE_TIME)
        await service.send([100], "gw-1")
        answered.set()
        answers = await asyncio.gather(*asked)
        bodies = {re.sub(rb"22:1\d:\d\d(\.\d)?", b"", answer.content) for answer in answers}
        assert len(bodies) <= 2, "before and after the event that came meanwhile"


def test_after_a_crash_holds_acts_and_late_events_are_still_told(tmp_path: Path) -> None:
    """And what the process kept in memory is said to be unknown."""
    text = configuration(tmp_path, slack="1s", idle_after="1h", hold_at_most="1h")
    with Process(tmp_path, text) as service:
        path = f"/v1/feeds/{FEED}"
        assert service.ask(f"{path}/events", events([100], "gw-1") + events([100], "gw-2")).status == 200
        assert service.ask(f"{path}/events", events([50], "gw-2")).json["late"] == 1
        assert service.ask(f"{path}/events", events([200], "gw-1")).status == 200
        excuse = json.dumps({"source": "gw-2", "reason": "no mains", "who": "night shift"}).encode()
        headers = {"Content-Type": "application/json"}
        assert service.ask(f"{path}/excuse", excuse, headers).status == 204
        service.until(lambda: bool(service.ask(f"{path}/late").json["late"]), "the late event is not kept")
        service.kill()
        service.start()
        found = msgspec.json.decode(service.ask(f"{path}/report?format=json").content, type=Facts)
        assert found.late is not None and [each.source for each in found.late.sources] == ["gw-2"]
        assert [(act.act, act.who) for act in found.acts.listed] == [("excuse", "night shift")]
        assert any(hold.why == "stopped" for hold in found.holds.listed)
        page = service.ask(f"{path}/report?format=markdown").content.decode()
        assert "the service was stopped or starting; what was held waited for it" in page
        assert "the process was started then, or keeps no more" in page or "has none of this time" in page
        _command_line(service, tmp_path)


def _command_line(service: Process, folder: Path) -> None:
    """`strandline report` against a real process: files, folder, and the exit codes."""
    asked = ["report", "--feed", FEED, "--url", service.url]
    assert main([*asked, "--from", "1h", "--out", str(folder / "night.html")]) == 0
    assert "<svg" in (folder / "night.html").read_text() and "night shift" in (folder / "night.html").read_text()
    assert main([*asked, "--out", str(folder / "night.md")]) == 0
    assert (folder / "night.md").read_text().startswith("# What happened to river-gauges, ")
    assert main([*asked, "--out", str(folder / "reports")]) == 0
    names = sorted(path.name for path in (folder / "reports").iterdir())
    assert [re.sub(r"\d{8}T\d{6}Z", "TIME", name) for name in names] == [
        f"report-{FEED}-TIME.html",
        f"report-{FEED}-TIME.md",
    ]
    assert main([*asked, "--out", str(folder / "night.pdf")]) == 2
    assert main([*asked, "--from", "long ago"]) == 2
    assert main(["report", "--feed", "none", "--url", service.url]) == 2
    assert main(["report", "--feed", FEED, "--url", "http://127.0.0.1:9"]) == 3


def test_the_command_line_prints_markdown_and_json(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    with Process(tmp_path, configuration(tmp_path)) as service:
        assert service.ask(f"/v1/feeds/{FEED}/events", events([100])).status == 200
        asked = ["report", "--feed", FEED, "--url", service.url, "--from", "1h"]
        assert main(asked) == 0
        assert capsys.readouterr().out.startswith("# What happened to river-gauges, ")
        assert main([*asked, "--json"]) == 0
        answer = json.loads(capsys.readouterr().out)
        assert answer["summary"][0].startswith("Feed river-gauges, from ")
        assert answer["books"]["end"]["received"] == 1



"""`trace` as it is used: over HTTP, on the command line, and on the folder while the service is down."""

from __future__ import annotations

import asyncio
import json
import shutil
import threading
from pathlib import Path
from typing import Any

import pytest
from helpers_service import (
    BEGIN_S,
    DEADLINE_S,
    FEED,
    NDJSON,
    Process,
    Running,
    body_of,
    configuration,
    event_line,
    eventually,
    problem_of,
    retry_after,
    running,
)
from strandline import cli
from strandline.sinks.lanes import late_rows
from strandline.tracing.http import TRACES

AHEAD = 10**9  # some thirty years
HOSTILE = (
    '"; DROP TABLE late; --', "../../etc/passwd", "a b&source=x#?", "%2e%2e", "\u202egw", "\x1b[31mred", "é\u0000",
)


def second(seconds: int) -> str:
    """An event time of `event_line`, as its event writes it."""
    return str(json.loads(event_line(seconds))["observed_at"])


def in_ns(seconds: int) -> int:
    return (BEGIN_S + seconds) * 10**9


async def traced(service: Running, **query: str) -> Any:
    """The answer, which must be one."""
    answer = await service.get("trace", params=query)
    assert answer.status == 200, answer.content
    return answer.json


async def fill(service: Running) -> None:
    """One event of every fate. The slack is 5 s: released up to 20, held 22 and 25, late 3, a repeat, quarantine."""
    first = body_of(event_line(10, id="a"), event_line(12, id="b"))
    await service.post("events", first, headers={"Idempotency-Key": '"one"'})
    await service.post("events", body_of(event_line(25, id="c"), event_line(22, id="d")))
    faulty = b'{"station":"gw-1","id":"f"}', b'{"id":"g"', event_line(AHEAD, id="h")
    answer = await service.post("events", body_of(event_line(3, id="e"), event_line(10, id="a"), *faulty))
    assert answer.json["late"] == 1 and answer.json["duplicate"] == 1 and answer.json["quarantined"] == 3
    path = service.runtime.lanes_file
    await eventually(lambda: len(late_rows(path)) == 1 and not service.runtime.feed.state.outbox.undelivered_events)


async def test_each_fate_over_http(tmp_path: Path) -> None:
    async with running(configuration(tmp_path, slack="5s", id="/id", ahead_limit="1h")) as service:
        await fill(service)
        released = (await traced(service, id="b"))["matches"]
        assert [match["fate"] for match in released] == ["released"]
        assert released[0]["arrival"]["line"] == 2 and released[0]["arrival"]["events"] == 2
        assert released[0]["arrival"]["idempotency_key"] == "one"
        mark = released[0]["released"]["mark"]
        assert (mark["cause"], mark["source"], mark["at_ns"]) == ("sources", "gw-1", in_ns(20))
        assert {name: each["state"] for name, each in released[0]["sinks"].items()} == {"sqlite": "taken"}
        held = (await traced(service, id="c"))["matches"][0]
        assert held["fate"] == "held" and held["held"]["lacks_s"] == 5.0 and held["held"]["watermark_ns"] == in_ns(20)
        assert held["held"]["hold"]["source"] == "gw-1"
        late = (await traced(service, time=second(3), source="gw-1"))["matches"][0]
        assert late["fate"] == "late" and late["late"]["late_by_s"] == 17.0 and late["kept_as"] == 1
        assert late["watermark"]["at_ns"] == in_ns(20) and late["watermark"]["source"] == "gw-1"
        assert {name: each["state"] for name, each in late["sinks"].items()} == {"lanes": "taken", "sqlite": "taken"}
        twice = (await traced(service, id="a"))["matches"]
        assert [match["fate"] for match in twice] == ["released", "duplicate"]
        assert twice[1]["duplicate"]["of"]["position"] == twice[0]["arrival"]["position"]
        for id, reason, by in (("f", "time_missing", "id"), ("g", "malformed", "text"), ("h", "ahead", "id")):
            match = (await traced(service, id=id))["matches"][0]
            assert (match["fate"], match["quarantined"]["reason"], match["matched_by"]) == ("quarantined", reason, by)
        for each in (*released, held, late, *twice):
            assert each["verified"] and each["explanation"]


async def test_what_is_not_found_says_what_was_searched(tmp_path: Path) -> None:
    async with running(configuration(tmp_path, id="/id")) as service:
        await fill(service)
        for query in (
            {"id": "absent"}, {"time": second(77)}, {"id": "a", "source": "gw-9"}, {"time": second(3), "source": "gw-9"}
        ):  # fmt: skip
            found = await traced(service, **query)
            assert (found["found"], found["matches"]) == (0, [])
            searched = found["searched"]
            assert searched["complete"] and searched["from_position"] == 0
            assert 0 < searched["bytes_read"] <= searched["to_position"] == service.runtime.journal.durable_lsn


async def test_hostile_names_are_texts_and_nothing_else(tmp_path: Path) -> None:
    async with running(configuration(tmp_path, id="/id")) as service:
        good = [text for text in HOSTILE if "\0" not in text]
        lines = [event_line(number, text, id=text) for number, text in enumerate(good)]
        await service.post("events", body_of(*lines))
        for text in good:
            match = (await traced(service, id=text, source=text))["matches"]
            assert [json.loads(each["event"])["id"] for each in match] == [text]
            assert (await traced(service, id=text + "x"))["found"] == 0
        for text in HOSTILE:
            await traced(service, id=text)
            for path in (f"/v1/feeds/{FEED}%00/trace?id=a", "/v1/feeds/..%2f..%2fetc/trace?id=a"):
                problem_of(await service.get(path), 404)


@pytest.mark.parametrize(
    ("query", "says"),
    [
        ({}, "either an id or a time"),
        ({"id": "a", "time": "5"}, "either an id or a time"),
        ({"id": ""}, "1 to 1024 bytes"),
        ({"id": "a" * 1025}, "1 to 1024 bytes"),
        ({"id": "a", "source": "b" * 257}, "1 to 256 bytes"),
        ({"id": "a", "source": "b\0"}, "U+0000"),
        ({"time": "noon"}, "no RFC 3339 time"),
        ({"time": "2023-11-14T22:13:29 01:00"}, "%2B"),
        ({"time": "5"}, "no RFC 3339 time"),
    ],
)
async def test_wrong_questions_are_told_so(tmp_path: Path, query: dict[str, str], says: str) -> None:
    async with running(configuration(tmp_path, id="/id")) as service:
        assert says in problem_of(await service.get("trace", params=query), 400)


async def test_a_feed_without_ids_says_so(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service:
        assert "name a time" in problem_of(await service.get("trace", params={"id": "a"}), 400)


async def test_one_trace_of_a_feed_at_a_time_and_none_for_a_client_that_left(tmp_path: Path) -> None:
    async with running(configuration(tmp_path, id="/id")) as service:
        await service.send([1])
        assert service.service._runner is not None
        traces = service.service._runner.app[TRACES]
        release = threading.Event()
        blocked = traces._thread.submit(release.wait, DEADLINE_S)
        first = asyncio.create_task(service.get("trace", params={"id": "a"}))
        await eventually(lambda: FEED in traces.busy)
        second_one = await service.get("trace", params={"id": "a"})
        problem_of(second_one, 429)
        assert retry_after(second_one) > 0
        first.cancel()  # it never began, since the thread is busy
        await eventually(lambda: not traces.busy)
        release.set()
        assert await asyncio.wrap_future(blocked)
        assert (await traced(service, id="a"))["found"] == 0


async def test_a_limit_is_kept_and_said(tmp_path: Path) -> None:
    async with running(configuration(tmp_path, id="/id")) as service:
        await fill(service)
        assert service.service._runner is not None
        traces = service.service._runner.app[TRACES]
        traces.bytes_at_most = 300
        found = await traced(service, id="c")
        assert not found["searched"]["complete"] and found["searched"]["bytes_read"] <= 300
        assert any("limit of 300 bytes" in note for note in found["notes"])


def called(capsys: pytest.CaptureFixture[str], *arguments: str) -> tuple[int, str, str]:
    """The command line in this process."""
    code = cli.main(["trace", "--feed", FEED, *arguments])
    said = capsys.readouterr()
    return code, said.out, said.err


def test_the_command_asks_the_service_and_reads_the_folder_while_it_is_down(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    text = configuration(tmp_path, slack="5s", id="/id")
    folder = ("--data-dir", str(tmp_path / "data"))
    place = tmp_path / "service"
    place.mkdir()
    with Process(place, text) as process:
        body = body_of(event_line(10, id="a"), event_line(30, id="\x1b[31mb"))
        assert process.ask(f"/v1/feeds/{FEED}/events", body, {"Content-Type": NDJSON}).status == 200
        process.until(lambda: process.document()["ledger"]["released"] == 1, "a is released")
        late = body_of(event_line(3, id="late"))
        assert process.ask(f"/v1/feeds/{FEED}/events", late, {"Content-Type": NDJSON}).json["late"] == 1
        path = f"/v1/feeds/{FEED}/late"
        process.until(lambda: bool(process.ask(path).json["late"]), "the late event is kept")
        url = ("--url", process.url)
        assert _fates(capsys, "--id", "a", *url) == ["released"]
        assert _fates(capsys, "--time", second(30), "--source", "gw-1", *url) == ["held"]
        assert _fates(capsys, "--id", "a", *folder) == ["released"], "also beside the running service"
        code, out, _ = called(capsys, "--id", "\x1b[31mb", *url)
        assert code == 0 and "\x1b" not in out and "at the latest" in out
        code, out, _ = called(capsys, "--id", "absent", *url)
        assert code == 1 and "searched" in out and "from position 0" in out
        assert called(capsys, "--id", "x" * 2000, *url)[0] == 2
        assert process.terminate() == 0
        dead = process.url
    assert called(capsys, "--id", "a", "--url", dead)[0] == 3
    assert called(capsys, "--id", "a", "--url", dead, "--config", str(process.file))[0] == 0
    code, out, err = called(capsys, "--id", "a", "--config", str(process.file))
    assert code == 0 and "released" in out, err
    assert _fates(capsys, "--id", "a", *folder) == ["released"]
    assert "when the feed is running again" in called(capsys, "--time", second(30), *folder)[1]
    assert called(capsys, "--id", "absent", *folder)[0] == 1
    assert called(capsys, "--id", "a", "--data-dir", str(tmp_path / "nowhere"))[0] == 3
    assert cli.main(["trace", "--feed", "../data", "--id", "a", *folder]) == 3
    assert called(capsys, "--time", "noon", *folder)[0] == 2
    _without_a_journal(capsys, tmp_path)
    document = json.loads(called(capsys, "--id", "a", "--json", *folder)[1])
    assert not document["matches"][0]["verified"] and any("digest" in note for note in document["notes"])


def _without_a_journal(capsys: pytest.CaptureFixture[str], folder: Path) -> None:
    """As on the disk of a partition's former owner: the lane store alone, or not even that."""
    place = folder / "former" / "feeds" / FEED
    place.mkdir(parents=True)
    former = ("--data-dir", str(folder / "former"))
    code, out, err = called(capsys, "--id", "a", *former)
    assert code == 3 and not out and "there is no journal in it" in err
    shutil.copy(folder / "data" / "feeds" / FEED / "lanes.db", place)
    code, out, _ = called(capsys, "--id", "late", *former)
    assert code == 0 and out.startswith("late: ") and "Which sinks took it is not known any more." in out
    assert "note: there is no journal in this folder" in out
    code, out, _ = called(capsys, "--id", "a", *former)
    assert code == 1 and "searched   the lane store; there is no journal in this folder" in out
    assert [path.name for path in place.iterdir() if not path.name.startswith("lanes.db")] == [], "nothing is made"


def _fates(capsys: pytest.CaptureFixture[str], *arguments: str) -> list[str]:
    code, out, err = called(capsys, "--json", *arguments)
    assert code == 0, err
    return [match["fate"] for match in json.loads(out)["matches"]]

"""The command `send` against a real service: every format, the verdict on what the store holds, progress, a rate."""

from __future__ import annotations

import asyncio
import json
from pathlib import Path

import msgspec
import pytest
from helpers_service import configuration, running, store_in
from strandline_loadgen.bodies import bodies, cut_by_count
from strandline_loadgen.cli import main
from strandline_loadgen.driver import at_rate
from strandline_loadgen.formats import FORMATS
from strandline_loadgen.progress import Standing, said
from strandline_loadgen.shapes import shape

BODY = next(iter(bodies(shape("jitter", 3, 1), cut_by_count(shape("jitter", 3, 1), 3))))
EVENTS = msgspec.json.Decoder().decode_lines(BODY.payload)


@pytest.mark.parametrize("name", FORMATS)
def test_a_body_says_the_same_in_every_format(name: str) -> None:
    body = FORMATS[name].encode(BODY.payload)
    if name == "msgpack":
        assert msgspec.msgpack.decode(body) == EVENTS
    elif name == "cloudevents":
        found = msgspec.json.decode(body)
        assert [event["data"] for event in found] == EVENTS
        assert [event["id"] for event in found] == [str(event["id"]) for event in EVENTS]
    elif name == "json":
        assert msgspec.json.decode(body) == EVENTS
    else:
        assert msgspec.json.Decoder().decode_lines(body.replace(b"\x1e", b"")) == EVENTS
        assert body.count(b"\x1e") == (3 if name == "json-seq" else 0)


def send(folder: Path, url: str, *more: str) -> int:
    """The command, on 3,000 events with jitter, judged by the store."""
    given = ["send", "jitter", "--feed", "river-gauges", "--url", url, "--events", "3000", "--body-events", "100"]
    return main([*given, "--check", str(store_in(folder)), "--json", *more])


@pytest.mark.parametrize("name", [name for name in FORMATS if name != "cloudevents"])
async def test_what_was_sent_in_a_format_is_what_the_store_holds(
    name: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    async with running(configuration(tmp_path, slack="10s")) as service:
        code = await asyncio.to_thread(send, tmp_path, service.url, "--format", name, "--rate", "30000")
    result = json.loads(capsys.readouterr().out)
    assert code == 0, result
    assert result["verdict"]["ok"] is True
    assert result["received"] == 3000
    assert list(result["latency_s"]) == ["p50", "p90", "p99", "p99.9", "max"]


async def test_a_store_that_holds_something_else_is_told(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    async with running(configuration(tmp_path, slack="10s")) as service:
        assert await asyncio.to_thread(send, tmp_path, service.url) == 0
        assert await asyncio.to_thread(send, tmp_path, service.url, "--seed", "2") == 1
    assert "NOT well" in json.loads(capsys.readouterr().out.splitlines()[-1])["verdict"]["text"]


def test_a_rate_counts_events_not_bodies() -> None:
    trace = shape("jitter", 250, 1)
    due = [at_rate(1000.0)(body) for body in bodies(trace, cut_by_count(trace, 100))]
    assert due == [0.0, 0.1, 0.2]


def test_progress_says_what_a_person_must_know() -> None:
    calm = Standing(10, 9, 900, 0, 0, 0.0, 2.0, 0.004)
    assert said(calm) == "450 events/s, latency up to 4 ms"
    assert said(calm._replace(behind_s=3.25, refused=2)).endswith("3.2 s behind its schedule, refused 2, resent 0")


def test_wrong_use_of_check_and_format(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["send", "jitter", "--feed", "a", "--check", str(tmp_path / "absent.db")]) == 2
    assert "there is no such file or folder" in capsys.readouterr().err
    assert main(["send", "jitter", "--feed", "a", "--format", "csv"]) == 2
    assert "formats are ndjson, jsonl, json, json-seq, cloudevents, msgpack; csv was given" in capsys.readouterr().err

"""The command line of the load generator: what it prints, and the exit code that says how it went."""

from __future__ import annotations

import asyncio
import json
import subprocess
import sys
import threading
from collections.abc import Iterator

import pytest
from aiohttp import web
from strandline_loadgen.cli import main
from strandline_loadgen.shapes import SHAPES

COUNTS = {"accepted": 0, "late": 0, "duplicate": 0, "quarantined": 0}


@pytest.fixture
def server() -> Iterator[str]:
    """Takes every body of the feed `river`, refuses those of any other; in a thread, since the command blocks."""

    async def take(request: web.Request) -> web.Response:
        lines = (await request.read()).count(b"\n")
        if request.match_info["feed"] != "river":
            return web.Response(status=404, text="no such feed")
        return web.json_response(COUNTS | {"received": lines, "accepted": lines})

    ready, done = threading.Event(), threading.Event()
    url = ""

    async def serve() -> None:
        nonlocal url
        app = web.Application()
        app.router.add_post("/v1/feeds/{feed}/events", take)
        runner = web.AppRunner(app)
        await runner.setup()
        await web.TCPSite(runner, "127.0.0.1", 0).start()
        url = f"http://127.0.0.1:{runner.addresses[0][1]}"
        ready.set()
        await asyncio.to_thread(done.wait)
        await runner.cleanup()

    thread = threading.Thread(target=asyncio.run, args=(serve(),))
    thread.start()
    assert ready.wait(10)
    yield url
    done.set()
    thread.join()


def test_shapes_are_listed_for_people_and_for_programs(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["shapes"]) == 0
    text = capsys.readouterr().out
    assert all(f"{name}\n    " in text for name in SHAPES)
    assert "gateways=64" in text
    assert main(["shapes", "--json"]) == 0
    plain = {shape["name"]: shape for shape in json.loads(capsys.readouterr().out)}
    assert set(plain) == set(SHAPES)
    assert plain["exponential"]["parameters"]["mean_s"] == 2.0


def test_send_tells_what_became_of_it(server: str, capsys: pytest.CaptureFixture[str]) -> None:
    given = ["send", "exponential", "--feed", "river", "--url", server, "--events", "1000", "--set", "mean_s=1.5"]
    assert main([*given, "--encodings", "identity,gzip", "--json"]) == 0
    result = json.loads(capsys.readouterr().out)
    assert result["bodies"] == result["answered"] == 2
    assert result["received"] == result["accepted"] == 1000
    assert result["latency_s"]["p50"] <= result["latency_s"]["max"]
    assert main([*given, "--window-ms", "1000", "--speed", "1000", "--time-unit", "ns"]) == 0
    text = capsys.readouterr().out
    assert "received 1,000: accepted 1,000, late 0" in text
    assert main([*given, "--interval-ms", "1", "--body-events", "10"]) == 0
    assert "100 of 100 bodies answered" in capsys.readouterr().out


def test_a_body_without_success_is_a_no(server: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["send", "jitter", "--feed", "lake", "--url", server, "--events", "10"]) == 1
    out, err = capsys.readouterr()
    assert "0 of 1 bodies answered" in out
    assert "body 0: 404 no such feed" in err


def test_a_service_that_is_not_there_is_not_reached(capsys: pytest.CaptureFixture[str]) -> None:
    given = ["send", "jitter", "--feed", "river", "--events", "10", "--seconds-at-most", "0.3"]
    assert main([*given, "--url", "http://127.0.0.1:1"]) == 3
    assert "Cannot connect" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("wrong", "message"),
    [
        (["send", "jittery", "--feed", "river"], "there is no shape 'jittery'"),
        (["send", "jitter", "--feed", "river", "--set", "bound=1"], "--set bound=1: the shape jitter has bound_s"),
        (["send", "jitter", "--feed", "river", "--set", "bound_s=much"], "could not convert"),
        (["send", "jitter", "--feed", "river", "--encodings", "br"], "encodings are identity, gzip, zstd"),
        (["send", "jitter", "--feed", "river", "--url", "http://gauge.example"], "not an address of this machine"),
        (["send", "jitter", "--feed", "river", "--body-events", "0"], "a body of 0 events"),
        (["bench", "--rounds", "0"], "--rounds must be at least 1"),
        (["bench", "--only", "nothing"], "no row has 'nothing' in its name"),
    ],
)
def test_wrong_use_says_what_would_be_right(wrong: list[str], message: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(wrong) == 2
    assert message in capsys.readouterr().err


def test_bench_names_its_rows(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["bench", "--list"]) == 0
    rows = capsys.readouterr().out.splitlines()
    assert "body to ordered bytes, sorted" in rows
    assert "service over HTTP, bodies of 500 events" in rows


def test_python_m_is_the_same_command() -> None:
    command = [sys.executable, "-m", "strandline_loadgen", "bench", "--list"]
    done = subprocess.run(command, capture_output=True, text=True, check=True, timeout=60)
    assert "heap at 1,000,000 held, exponential, events of 2,000 bytes" in done.stdout

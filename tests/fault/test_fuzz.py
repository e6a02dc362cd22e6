"""The fuzz lane in CI's budget: 100,000 inputs of fixed numbers, and 2,000 requests over sockets. More: tests/fuzz.py.

The laws stand with the targets; here it is asked that every outcome comes up, that nothing stays behind, and that the
lane finds what it is for.
"""

from __future__ import annotations

import asyncio
import gzip
import json
from pathlib import Path
from random import Random

import msgspec
import pytest
from fuzz import CI_INPUTS, GROWTH_BYTES_AT_MOST, TARGETS, Finding, fuzz, growth, main
from fuzz_mutate import TOKENS, mutated
from fuzz_targets import Target
from fuzz_targets_journal import story
from helpers_raw import LAST, Reply, chunked, exchange, post, replies
from helpers_service import FEED, PROBLEM, body_of, configuration, event_line, running

# Statuses that the OpenAPI document has, 404 and 405 of addresses that it does not have, and the answers to Expect.
STATUSES = {100, 417, 200, 204, 400, 404, 405, 408, 409, 410, 413, 415, 421, 422, 429, 503}
REQUESTS, AT_A_TIME = 2_000, 40


def test_it_is_as_many_as_promised() -> None:
    assert CI_INPUTS >= 100_000


@pytest.mark.parametrize("name", TARGETS)
def test_no_input_breaks_its_law(name: str) -> None:
    target = TARGETS[name]
    assert set(fuzz(name, 0, target.inputs)) >= target.seen


@pytest.mark.parametrize("name", TARGETS)
def test_no_input_leaves_anything_behind(name: str) -> None:
    """Measured by tracemalloc, which makes everything some five times as slow: hence few."""
    left, most = growth(name, 10_000_000, 60 if name == "folders" else 200)
    assert left < GROWTH_BYTES_AT_MOST
    assert most < TARGETS[name].peak_bytes


def test_a_finding_names_the_input_and_how_to_try_it_again(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    def trips(given: object) -> str:
        assert not str(given).startswith("9"), "a nine"
        return "good"

    monkeypatch.setitem(TARGETS, "amounts", Target(1, lambda draw: draw.randrange(100), trips, frozenset({"good"})))
    with pytest.raises(Finding, match="a nine") as caught:
        fuzz("amounts", 0, 100)
    number = str(caught.value).split("--from ")[1].split()[0]
    assert main(["--target", "amounts", "--from", number, "--inputs", "1"]) == 1
    assert "a nine" in capsys.readouterr().err
    assert main(["--target", "amounts", "--from", str(int(number) - 1), "--inputs", "1"]) == 0


# --- found before ------------------------------------------------------------------------------------------------


def test_a_pointer_of_hundreds_of_steps() -> None:
    """It recursed to death; no event is nested so deep that it could stand for anything."""
    assert TARGETS["pointers"].run(("/a" * 201, "/x", b"{}")) == "refused"
    assert TARGETS["pointers"].run(("/a" * 200, "/x", b"{}")) == "nothing there"


@pytest.mark.parametrize("wrong", [None, "x", 5, [], {}, [[1]], {"a": 1}], ids=repr)
def test_a_snapshot_with_anything_in_its_header(wrong: object) -> None:
    """A text where numbers are expected got through as an AttributeError, which would have kept the service down."""
    saved = story().saved
    size = int.from_bytes(saved[:8], "little")
    header = msgspec.msgpack.decode(saved[8 : 8 + size])
    for name in header:
        changed = msgspec.msgpack.encode({**header, name: wrong})
        body = len(changed).to_bytes(8, "little") + changed + saved[8 + size :]
        assert TARGETS["snapshots"].run(body) in ("refused", "good"), name


# --- requests ----------------------------------------------------------------------------------------------------

LINES = body_of(event_line(1), event_line(2, "gw-2", id="x"), b"odd")
FEED_PATH = f"/v1/feeds/{FEED}"
SEEDS = (
    post(LINES),
    post(gzip.compress(LINES, mtime=0), content_encoding="gzip"),
    post(b"", content_length="", transfer_encoding="chunked") + chunked([LINES[:30], LINES[30:]]),
    post(b"[" + event_line(3) + b"]", content_type="application/json", idempotency_key='"a-1"'),
    post(LINES, expect="100-continue"),
    post(json.dumps({"source": "gw-1", "time": "2023-01-01T00:00:00Z"}).encode(), FEED_PATH + "/marks"),
    post(json.dumps({"source": "gw-1", "reason": "x"}).encode(), FEED_PATH + "/excuse"),
    post(b"", FEED_PATH + "/drain"),
    f"GET {FEED_PATH}/late?after=0&limit=5 HTTP/1.1\r\nhost: localhost\r\n\r\n".encode(),
    f"GET {FEED_PATH}/sources?after=99 HTTP/1.1\r\nhost: localhost\r\n\r\n".encode(),
    b"GET /metrics HTTP/1.1\r\nhost: localhost\r\naccept: application/openmetrics-text\r\n\r\n",
    b"OPTIONS * HTTP/1.1\r\nhost: localhost\r\n\r\n",
    b"GET /health/ready HTTP/1.0\r\n\r\n",
)
HTTP_TOKENS = (
    *TOKENS, b"HTTP/1.1", b"content-length: 5\r\n", b"transfer-encoding: chunked\r\n", b"\r\n\r\n", b"GET ", b"%00",
    b"upgrade: websocket\r\nconnection: upgrade\r\n", b"host: b\r\n", b"\t", b"content-encoding: gzip\r\n", b"%zz",
    b"ffffffffffffffff\r\n", b"-1\r\n", b"expect: x\r\n", b"ce-id: 1\r\n", b"connection: close\r\n", b"a" * 9000,
    b"..", b"//", b"?",
)  # fmt: skip


def request_of(number: int) -> bytes:
    """One or a few requests one after the other, damaged; then one that is answered with the end of the connection."""
    draw = Random(number)
    many = draw.choice((1, 1, 1, 2, 5))
    return b"".join(mutated(draw, draw.choice(SEEDS), SEEDS, HTTP_TOKENS) for _ in range(many)) + LAST


def check(number: int, data: bytes) -> list[Reply]:
    """Every answer is one of those that are documented; every error a problem."""
    try:
        found = [] if b"Transfer-Encoding: chunked" in data else replies(data)
        for reply in found:
            assert reply.status in STATUSES
            if reply.status >= 400 and reply.content:
                assert reply.headers["content-type"] == PROBLEM
                assert json.loads(reply.content)["status"] == reply.status
    except (AssertionError, ValueError, KeyError) as error:
        raise AssertionError(f"request_of({number}): {error!r}\n{request_of(number)!r}\n{data!r}") from error
    return found


async def test_no_request_breaks_the_service(tmp_path: Path, caplog: pytest.LogCaptureFixture) -> None:
    top = '[limits]\nbody_within = "100ms"\nidle_connection_within = "300ms"'
    async with running(configuration(tmp_path, top=top, sources_at_most=20)) as service:
        address, statuses = service.service.address, set[int]()
        numbers = iter(range(REQUESTS))

        async def client() -> None:
            for number in numbers:
                data = await exchange(address.host, address.port, [request_of(number)])
                statuses.update(reply.status for reply in check(number, data))

        await asyncio.gather(*(client() for _ in range(AT_A_TIME)))
        assert statuses >= {200, 204, 400, 404, 405, 408, 415, 422}
        service.runtime.feed.check()
        document = await service.document()
        assert document["ledger"]["balanced"] is True
        assert (await service.get("/health/ready")).status == 200
        await service.send([10**6])
    assert not [record.getMessage() for record in caplog.records if record.levelname in ("ERROR", "CRITICAL")]

"""A real process under hostile input: every request gets one named answer, and afterwards all is as before.

Each test ends with the same question (`is_well`): ready, books balanced, memory bounded, nothing unforeseen in the log.
Beside every expensive body somebody else asks for the service's health: no body may hold the loop up for seconds.
"""

from __future__ import annotations

import asyncio
import gzip
import json
import re
import socket
import sqlite3
import struct
import sys
import threading
import time
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from pathlib import Path
from subprocess import DEVNULL, PIPE, Popen

import pytest
import zstandard
from helpers_raw import LAST, Reply, chunked, exchange, post, replies
from helpers_service import (
    DEADLINE_S,
    FEED,
    NDJSON,
    Answer,
    Process,
    body_of,
    configuration,
    event_line,
    problem_of,
    small_journal,
    store_in,
)

JSON, SEQUENCE, MSGPACK = "application/json", "application/json-seq", "application/vnd.msgpack"
MIB = 2**20
# What the process may take beside what it takes when it has just started: one body at its limits in every stage at once
# (64 MiB as it came, decoded, as lines, as records), the thread's share, and what the allocator keeps. Measured: 420.
RSS_GROWTH_AT_MOST = 700 * MIB
HEALTH_WITHIN_S = 2.0  # on a busy machine; measured 0.05 to 0.3 (C calls that hold the interpreter's lock)
FEEDS = """
[[feed]]
name = "counts"
time = { at = "/ts", unit = "ns" }
source = "/station"
slack = "0s"
ahead_limit = "1h"
idle_after = "1h"
hold_at_most = "1h"
sources_at_most = 100_000
faults_at_most = 100_000
[[feed.sink]]
kind = "ndjson"
"""


class Target(Process):
    """The process, with what its memory was when it had started."""

    def start(self) -> None:
        super().start()
        self.rss_bytes = self.memory("VmRSS")

    def memory(self, name: str) -> int:
        assert self.process is not None
        status = Path(f"/proc/{self.process.pid}/status").read_text()
        found = re.search(rf"{name}:\s+(\d+) kB", status)
        assert found
        return int(found[1]) * 1024

    @property
    def address(self) -> tuple[str, int]:
        host, port = self.url.removeprefix("http://").split(":")
        return host, int(port)

    def send(self, *requests: bytes) -> list[Reply]:
        """Requests on one connection, and the answers to them."""
        found = replies(asyncio.run(exchange(*self.address, [b"".join(requests) + LAST])))
        assert json.loads(found[-1].content) == {"live": True}
        return found[:-1]

    def post(self, body: bytes, media_type: str = NDJSON, feed: str = FEED, **headers: str) -> Answer:
        """One body; meanwhile somebody asks for health, again and again."""
        with self.asked_for_health():
            path = f"/v1/feeds/{feed}/events"
            (reply,) = self.send(post(body, path, content_type=media_type, **headers))
        return Answer(reply.status, {name.title(): text for name, text in reply.headers.items()}, reply.content)

    @contextmanager
    def asked_for_health(self) -> Iterator[None]:
        over, longest = threading.Event(), 0.0

        def ask() -> None:
            nonlocal longest
            while not over.is_set():
                start = time.monotonic()
                assert self.status("/health/live") == 200
                longest = max(longest, time.monotonic() - start)

        asking = threading.Thread(target=ask)
        asking.start()
        try:
            yield
        finally:
            over.set()
            asking.join()
        print(f"longest wait for health: {longest:.3f} s; memory {(self.memory('VmRSS') - self.rss_bytes) // MIB} MiB more")
        assert longest < HEALTH_WITHIN_S, f"somebody waited {longest:.2f} s for the service's health"

    def is_well(self) -> None:
        assert self.status("/health/ready") == 200
        for document in self.ask("/v1/feeds").json["feeds"]:
            assert document["ledger"]["balanced"] is True
        log = self.log.read_text(errors="replace")
        assert not re.search("unforeseen|Traceback|CRITICAL|Task was destroyed", log), log[-3000:]
        assert self.memory("VmRSS") - self.rss_bytes < RSS_GROWTH_AT_MOST


@pytest.fixture(scope="module")
def running(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Target]:
    folder = tmp_path_factory.mktemp("hostile")
    limits = '[limits]\nbody_within = "1s"\nconnections_at_most = 1_200'
    with Target(folder, configuration(folder, top=limits, sources_at_most=1000) + FEEDS) as process:
        yield process
        assert process.terminate() == 0


@pytest.fixture
def process(running: Target) -> Iterator[Target]:
    yield running
    running.is_well()


# ---- bodies that cost much ------------------------------------------------------------------------------------------


def zeros(count: int) -> bytes:
    return bytes(count)


BOMBS = {
    "gzip": ("gzip", lambda: gzip.compress(zeros(1000 * MIB), 1), 413),
    "gzip in gzip": ("gzip, gzip", lambda: gzip.compress(gzip.compress(zeros(1000 * MIB), 1)), 413),
    "gzip in gzip, the inner one small": ("gzip, gzip", lambda: gzip.compress(gzip.compress(zeros(65 * MIB), 1)), 413),
    "zstd": ("zstd", lambda: zstandard.compress(zeros(1000 * MIB)), 413),
    "zstd in zstd": ("zstd, zstd", lambda: zstandard.compress(zstandard.compress(zeros(1000 * MIB))), 413),
    "zstd in gzip": ("zstd, gzip", lambda: gzip.compress(zstandard.compress(zeros(1000 * MIB))), 413),
    "three times gzip": ("gzip, gzip, gzip", lambda: gzip.compress(b""), 415),
    "empty gzip members": ("gzip", lambda: gzip.compress(b"") * 300_000, 422),
    "empty zstd frames": ("zstd", lambda: zstandard.compress(b"") * 300_000, 422),
    "blanks without end": ("gzip", lambda: gzip.compress(b"\n" * (64 * MIB), 1), 413),
    "line feeds": ("gzip", lambda: gzip.compress(b"\n" * 500_000), 413),
}


@pytest.mark.parametrize("name", BOMBS)
def test_compression_bombs(process: Target, name: str) -> None:
    coding, made, status = BOMBS[name]
    problem_of(process.post(made(), content_encoding=coding), status)


def nested(depth: int) -> bytes:
    return b'{"observed_at":"2023-01-01T00:00:00Z","station":"a","x":' + b"[" * depth + b"]" * depth + b"}"


NESTED = {
    "lines": (NDJSON, b"\n".join([event_line(1), nested(100_000), event_line(2)])),
    "open": (NDJSON, b"\n".join([event_line(1), b'{"a":' * 100_000, event_line(2)])),
    "array": (JSON, b"[" + b",".join([event_line(1), nested(100_000), event_line(2)]) + b"]"),
    "sequence": (SEQUENCE, b"".join(b"\x1e" + text for text in (event_line(1), nested(100_000), event_line(2)))),
}


@pytest.mark.parametrize("name", NESTED)
def test_nesting_of_100_000_is_a_fault_of_its_line(process: Target, name: str) -> None:
    media_type, body = NESTED[name]
    found = process.post(body, media_type)
    assert found.status == 200, found.content
    assert [(fault["line"], fault["reason"]) for fault in found.json["faults"]] == [(2, "too_deep")]
    assert found.json["received"] == 3


@pytest.mark.parametrize("body", [b"\x91" * 100_000 + b"\xc0", b"\x81\xa1a" * 100_000 + b"\xc0", b"\xdd" + b"\xff" * 4])
def test_messagepack_without_end_is_refused(process: Target, body: bytes) -> None:
    assert process.post(body, MSGPACK).status in (413, 422)


def filled(line: bytes) -> bytes:
    return (line + b"\n") * min(100_000, 16 * MIB // (len(line) + 1))


COSTLY = {
    "every line is garbage": (filled(b"{}"), NDJSON),
    "every line has a bad time": (filled(b'{"ts":"0001-01-01","station":"a"}'), NDJSON),
    "every line has half a pair": (filled(b'{"ts":1,"station":"a","x":"\\ud800"}'), NDJSON),
    "one line without an end": (b'{"ts":1,"station":"a","x":"' + b"\\ud800" * 2_000_000, NDJSON),
    "long lines have half a pair": (filled(b'{"ts":1,"x":"\\ud800","y":[' + b"[]," * 300_000 + b"1]}"), NDJSON),
    "empty maps": (b"\x91" * 2 + b"\xdd\x00\xf0\x00\x00" + b"\x80" * 0xF00000, MSGPACK),
    "maps of empty maps": (b"\xdc\x00\x0f" + (b"\x81\xa1x\xdd\x00\x0f\x00\x00" + b"\x80" * 0x0F0000) * 15, MSGPACK),
    "nothing but separators": (b"\x1e" * 10 * MIB, SEQUENCE),
    "commas": (b"[" + b"1," * 5_000_000 + b"1]", JSON),
}


@pytest.mark.parametrize("name", COSTLY)
def test_a_costly_body_holds_nobody_up(process: Target, name: str) -> None:
    """At the limits, on a feed that takes as many faults as events: such a body keeps a core busy for seconds."""
    body, media_type = COSTLY[name]
    found = process.post(body, media_type, "counts")
    assert found.status in (200, 413, 422)
    if found.status == 200:
        assert found.json["received"] == found.json["quarantined"] == len(found.json["faults"])


def test_too_many_faults_refuse_a_body_and_are_counted(process: Target) -> None:
    before = process.document()["refusals"].get("too_many_faults", 0)
    found = process.post(event_line(1, "never-heard") + b"\n" + b"{}\n" * 50_000)
    detail = problem_of(found, 422, "too_many_faults")
    assert "more than 10000 lines" in detail and "line 2: time_missing" in detail
    assert [fault["line"] for fault in found.json["faults"]] == list(range(2, 12))
    assert process.document()["refusals"]["too_many_faults"] == before + 1
    sources = process.ask(f"/v1/feeds/{FEED}/sources?limit=1000").json["sources"]
    assert "never-heard" not in [each["source"] for each in sources]


# ---- lines that are odd ---------------------------------------------------------------------------------------------

# Line -> the reason why it is no event; None: it is one, and must come out as it went in.
ODD: dict[bytes, str | None] = {
    b'{"observed_at":"2023-01-01T00:00:00Z","station":"a","x":"\\ud800"}': "malformed",
    b'{"observed_at":"2023-01-01T00:00:00Z","station":"\\udc00\\ud800"}': "source_invalid",
    b'{"observed_at":"2023-01-01T00:00:01Z","station":"a","x":"\\ud83d\\ude00"}': None,
    b'{"observed_at":"2023-01-01T00:00:02Z","station":"a","x":"\\u0000"}': None,
    b'{"observed_at":"2023-01-01T00:00:00Z","station":"a\\u0000b"}': "source_invalid",
    b'{"observed_at":"2023-01-01T00:00:00Z","station":"a","x":"\x00"}': "malformed",
    b'{"observed_at":"2023-01-01T00:00:00Z","station":"a"}\x00': "malformed",
    b"\x00": "malformed",
    b'{"observed_at":"yesterday","station":"","observed_at":"2023-01-01T00:00:03Z","station":"a"}': None,
    b'{"observed_at":"2023-01-01T00:00:03Z","observed_at":"yesterday","station":"a"}': "time_invalid",
    b'{"observed_at":"2023-01-01T00:00:00Z","station":"a","x":"\xff"}': "malformed",
    b'{"observed_at":"2023-01-01T00:00:00Z","station":"a","x":{"y":["\xed\xa0\x80"]}}': "malformed",
    b'{"observed_at":"2023-01-01T00:00:00Z","station":"a","\xc0\x80":1}': "malformed",
    b'\xef\xbb\xbf{"observed_at":"2023-01-01T00:00:00Z","station":"a"}': "malformed",
    b'{"observed_at":"2023-01-01T00:00:04Z","station":"a","x":1e999,"y":' + b"9" * 5000 + b"}": None,
    b'{"observed_at":"2023-01-01T00:00:05Z","station":"a","x":"\\"},{\\"","":{"":[]}}': None,
    b'{"observed_at":"2023-01-01T00:00:00Z","station":"a","x":NaN}': "malformed",
    b'{"observed_at":"2023-01-01T00:00:00Z","station":' + b"9" * 5000 + b"}": "source_invalid",
    b'{"observed_at":"1998-12-31T23:59:60Z","station":"\\u202e<script>"}': None,
    b'{"observed_at":"0001-01-01T00:00:00Z","station":"a"}': "time_out_of_range",
    b'{"observed_at":"9999-12-31T23:59:59Z","station":"a"}': "time_out_of_range",
    b'{"observed_at":"2262-04-11T23:47:16.854775807Z","station":"a"}': "ahead",
    b'{"observed_at":"1677-09-21T00:12:43.145224192Z","station":"a"}': None,
}


def test_odd_lines_are_named_or_come_out_as_they_went_in(tmp_path: Path) -> None:
    text = configuration(tmp_path, sinks="").replace('station"', 'station"', 1)
    with Target(tmp_path, text) as process:
        found = process.post(b"\n".join(ODD))
        assert found.status == 200
        expected = [(line, reason) for line, reason in enumerate(ODD.values(), 1) if reason]
        assert [(fault["line"], fault["reason"]) for fault in found.json["faults"]] == expected
        process.drain()
        process.is_well()
        assert process.terminate() == 0
    with sqlite3.connect(store_in(tmp_path)) as store:
        rows = store.execute("SELECT time_ns, CAST(event AS BLOB) FROM events ORDER BY batch, position").fetchall()
    assert sorted(event for _, event in rows) == sorted(line for line, reason in ODD.items() if not reason)
    assert [time_ns for time_ns, _ in rows] == sorted(time_ns for time_ns, _ in rows)


def test_events_at_the_ends_of_int64(process: Target) -> None:
    ends = [-(2**63), -(2**63) + 1, -1, 0, 2**63 - 1, 2**63 - 2, 2**63, -(2**63) - 1, 2**64, 10**400]
    found = process.post(body_of(*(b'{"ts":%d,"station":"end"}' % end for end in ends)), feed="counts")
    assert found.status == 200
    assert [(fault["line"], fault["reason"]) for fault in found.json["faults"]] == [
        (5, "ahead"), (6, "ahead"), *((line, "time_out_of_range") for line in (7, 8, 9, 10))
    ]  # fmt: skip
    again = process.post(body_of(b'{"ts":%d,"station":"end"}' % -(2**63)), feed="counts")
    assert (again.json["late"], again.json["accepted"]) == (1, 0)
    assert process.ask("/v1/feeds/counts/drain", b"").status == 204
    late = "/v1/feeds/counts/late?source=end"
    process.until(lambda: process.ask(late).json["late"] != [], "the late event is not shown")
    assert process.ask(late).json["late"][0]["time_ns"] == -(2**63)


# ---- many sources ---------------------------------------------------------------------------------------------------


def test_100_000_sources_in_a_minute_and_no_more(process: Target) -> None:
    before, start = process.memory("VmRSS"), time.monotonic()
    known = process.ask("/v1/feeds/counts/sources").json["known"]
    for first in range(0, 99_000, 9_900):
        lines = (b'{"ts":%d,"station":"gw-%d"}' % (number, number) for number in range(first, first + 9_900))
        answer = process.post(body_of(*lines), feed="counts")
        assert (answer.status, answer.json["quarantined"]) == (200, 0)
    seconds = time.monotonic() - start
    more = [b'{"ts":0,"station":"one-more-%d"}' % number for number in range(1_001)]
    detail = problem_of(process.post(body_of(*more), feed="counts"), 429, "sources_full")
    assert "sources_at_most" in detail
    document = process.ask("/v1/feeds/counts").json
    assert process.ask("/v1/feeds/counts/sources").json["known"] == known + 99_000
    assert document["refusals"]["sources_full"] >= 1
    grown = process.memory("VmRSS") - before
    print(f"99,000 sources in {seconds:.1f} s, {grown / 99_000:.0f} bytes of memory each")
    assert seconds < 60
    assert grown < 99_000 * 1_500
    assert process.post(b'{"ts":0,"station":"gw-5"}\n', feed="counts").status == 200


# ---- connections ----------------------------------------------------------------------------------------------------


def connect(process: Target) -> socket.socket:
    return socket.create_connection(process.address, timeout=DEADLINE_S)


def read_all(wire: socket.socket) -> bytes:
    data = b""
    while piece := wire.recv(65536):
        data += piece
    return data


def test_a_byte_at_a_time_is_given_up(process: Target) -> None:
    """A byte every tenth of a second; the body would take 14 s, and it may take 1."""
    request = post(body_of(event_line(1), event_line(2)))
    head = request.index(b"\r\n\r\n") + 4
    with connect(process) as wire:
        wire.sendall(request[:head])
        wire.settimeout(0.1)
        start, data = time.monotonic(), b""
        for byte in request[head:]:
            wire.send(bytes([byte]))
            try:
                data = wire.recv(65536)
                break
            except TimeoutError:
                pass
    (reply,) = replies(data)
    assert reply.status == 408
    assert b"body_within" in reply.content
    assert 0.9 < time.monotonic() - start < 10


def test_clients_that_leave_in_the_middle(process: Target) -> None:
    received = process.document()["ledger"]["received"]
    request = post(body_of(*(event_line(second) for second in range(50))))
    for place in range(10, len(request) - 1, 97):
        with connect(process) as wire:
            wire.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, struct.pack("ii", place % 2, 0))  # a reset, or an end
            wire.sendall(request[:place])
    process.until(lambda: process.document()["hops"]["ingest"]["waiting"] == 0, "a body is still waited for")
    assert process.document()["ledger"]["received"] == received


FRAMING = {
    "both lengths": (post(b"x\n", transfer_encoding="chunked") + chunked([b"x\n"]), {400}),
    "two lengths": (post(b"x\n").replace(b"content-length: 2", b"content-length: 2\r\ncontent-length: 3"), {400}),
    "a length with a sign": (post(b"x\n", content_length="+2"), {400}),
    "a negative length": (post(b"x\n", content_length="-2"), {400}),
    "a length of no number": (post(b"x\n", content_length="two"), {400}),
    "another transfer coding last": (post(b"x\n", transfer_encoding="chunked, gzip", content_length=""), {400}),
    "a chunk of no size": (post(b"", transfer_encoding="chunked", content_length="") + b"zz\r\nx\r\n", {400}),
    "a huge chunk": (post(b"", transfer_encoding="chunked", content_length="") + b"f" * 40 + b"\r\nx", {400}),
    "no host": (b"GET /v1/feeds HTTP/1.1\r\n\r\n", {200, 400}),
    "a header of 64 KiB": (post(b"x\n", x="a" * 65536), {400}),
    "a path of 64 KiB": (b"GET /" + b"a" * 65536 + b" HTTP/1.1\r\nhost: a\r\n\r\n", {400}),
    "2,000 headers": (post(b"x\n", **{f"x{number}": "a" * 100 for number in range(2000)}), {200, 400}),
    "a folded header": (post(b"x\n").replace(b"host: a", b"host:\r\n a"), {200, 400}),
    "a control character": (post(b"x\n", x="a\x01b"), {400}),
    "another protocol": (b"\x16\x03\x01\x02\x00\x01\x00\x01\xfc\x03\x03" + bytes(200), {400}),
    "no protocol": (b"hello\r\n\r\n", {400}),
    "HTTP/3": (b"GET /v1/feeds HTTP/3.0\r\nhost: a\r\n\r\n", {200, 400, 505}),
}


@pytest.mark.parametrize("name", FRAMING)
def test_framing_that_is_not_http(process: Target, name: str) -> None:
    """RFC 9112 sections 6.1 to 6.3: what might smuggle a second request is an error, and the connection ends."""
    request, statuses = FRAMING[name]
    with connect(process) as wire:
        wire.sendall(request)
        wire.settimeout(DEADLINE_S)
        data = wire.recv(65536)
    found = replies(data)
    assert found and {reply.status for reply in found} <= statuses, data[:300]
    for reply in found:
        if reply.status >= 400:
            assert reply.headers["content-type"] == "application/problem+json"
            assert reply.headers.get("connection") == "close"


def test_requests_one_behind_the_other_and_then_garbage(process: Target) -> None:
    with connect(process) as wire:
        wire.sendall(post(body_of(event_line(10**6))) * 20 + b"\x00garbage\r\n\r\n" + post(b"x\n"))
        found = replies(read_all(wire))
    assert [reply.status for reply in found] == [200] * 20 + [400]


def test_1_000_idle_connections_hold_nobody_up(process: Target) -> None:
    with ExitStack() as idle:
        for number in range(1_000):
            wire = idle.enter_context(connect(process))
            if number % 2:
                wire.sendall(post(b"x\n")[: number % 150])  # some have begun to say something
        start = time.monotonic()
        for second in range(50):
            assert process.post(event_line(10**6 + second)).status == 200
        assert time.monotonic() - start < 20
    process.is_well()


def test_connections_beyond_the_limit_are_refused_and_idle_ones_closed(tmp_path: Path) -> None:
    top = '[limits]\nconnections_at_most = 50\nidle_connection_within = "1s"'
    with Target(tmp_path, configuration(tmp_path, top=top)) as process:
        wires = [connect(process) for _ in range(60)]
        refused = []
        for wire in wires[55:]:  # those who came last, whatever is still on its way
            (reply,) = replies(read_all(wire))
            assert b"connections_at_most" in reply.content
            refused.append((reply.status, reply.headers["retry-after"]))
        assert refused == [(503, "5")] * 5
        for wire in wires[:40]:
            assert read_all(wire) == b"", "an idle connection is closed without a word"
        for wire in wires:
            wire.close()
        process.until(lambda: process.status("/health/ready") == 200, "nobody is taken any more")
        process.is_well()


class Poor(Target):
    """The process with few files: more connections come than it may open."""

    def begin(self) -> Popen[bytes]:
        command = f'ulimit -n 200 && exec "{sys.executable}" -m strandline.cli serve "{self.file}"'
        with self.log.open("ab") as log:
            self.process = Popen(["/bin/sh", "-c", command], stdin=DEVNULL, stdout=PIPE, stderr=log, cwd=self.folder)
        return self.process


def test_connections_never_take_the_files_that_journals_need(tmp_path: Path) -> None:
    with Poor(tmp_path, small_journal(tmp_path, "64MiB")) as process:
        with ExitStack() as idle:
            kept = connect(process)
            for _ in range(400):
                idle.enter_context(connect(process))
            for first in range(0, 12_000, 300):  # each request fills more than half a segment
                lines = (event_line(second, x="y" * 90) for second in range(first, first + 300))
                kept.sendall(post(body_of(*lines)))
                assert b"HTTP/1.1 200" in kept.recv(65536)
            kept.close()
        process.until(lambda: process.status("/health/ready") == 200, "it is not ready")
        process.is_well()
        assert "limit on open files is 200" in process.log.read_text()
        assert process.terminate() == 0

"""A real process under hostile connections: slow, idle, broken off, too many, no HTTP; afterwards all is as before."""

from __future__ import annotations

import socket
import struct
import sys
import time
from collections.abc import Iterator
from contextlib import ExitStack
from pathlib import Path
from subprocess import DEVNULL, PIPE, Popen

import pytest
from helpers_hostile import Target
from helpers_raw import chunked, post, replies
from helpers_service import DEADLINE_S, PROBLEM, body_of, configuration, event_line, small_journal


@pytest.fixture(scope="module")
def running(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Target]:
    folder = tmp_path_factory.mktemp("connections")
    limits = '[limits]\nbody_within = "1s"\nconnections_at_most = 1_200'
    with Target(folder, configuration(folder, top=limits)) as process:
        yield process
        assert process.terminate() == 0


@pytest.fixture
def process(running: Target) -> Iterator[Target]:
    yield running
    running.is_well()


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
    "a path of 64 KiB": (b"GET /" + b"a" * 65536 + b" HTTP/1.1\r\nhost: localhost\r\n\r\n", {400}),
    "2,000 headers": (post(b"x\n", **{f"x{number}": "a" * 100 for number in range(2000)}), {200, 400}),
    "a folded header": (post(b"x\n").replace(b"host: a", b"host:\r\n a"), {200, 400}),
    "a control character": (post(b"x\n", x="a\x01b"), {400}),
    "another protocol": (b"\x16\x03\x01\x02\x00\x01\x00\x01\xfc\x03\x03" + bytes(200), {400}),
    "no protocol": (b"hello\r\n\r\n", {400}),
    "HTTP/3": (b"GET /v1/feeds HTTP/3.0\r\nhost: localhost\r\n\r\n", {200, 400, 505}),
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
        if found[-1].status >= 400:
            assert found[-1].headers["content-type"] == PROBLEM
            assert read_all(wire) == b""


@pytest.mark.parametrize("pieces", [1, 2])
def test_requests_one_behind_the_other_and_then_garbage(process: Target, pieces: int) -> None:
    """What was answered with success was taken, nothing else was, and the garbage ends it."""
    received = process.document()["ledger"]["received"]
    good, garbage = post(body_of(event_line(10**6))) * 20, b"\x00garbage\r\n\r\n" + post(b"x\n")
    data = b""
    with connect(process) as wire:
        wire.sendall(good if pieces == 2 else good + garbage)
        while pieces == 2 and data.count(b"HTTP/1.1 200") < 20:
            data += wire.recv(65536)
        wire.sendall(garbage if pieces == 2 else b"")
        data += read_all(wire)
    statuses = [reply.status for reply in replies(data)]
    assert statuses == ([200] * 20 if pieces == 2 else []) + [400]
    assert process.document()["ledger"]["received"] == received + statuses.count(200)


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

"""P2 nothing invented: what comes out went in, byte for byte, and in a request that was taken whole.

The real process, among requests that break off, are damaged, refused or faulty in parts, and kills in between.
"""

from __future__ import annotations

import gzip
import json
import socket
import sqlite3
from collections.abc import Callable
from contextlib import closing
from pathlib import Path

import pytest
from helpers_load import Load, fixed_port, send_with_keys, verdict_of
from helpers_service import FEED, NDJSON, Process, body_of, configuration, event_line, events, store_in, stored

ODD = [
    b'{"observed_at":"2023-11-14T22:13:21Z","station":"gw-1"}',
    b'  { "station" : "gw-1" ,\t"observed_at":"2023-11-14t22:13:21.5z" , "x":1e0, "x":2 }  ',
    '{"observed_at":"2023-11-14T23:13:22+01:00","station":"gw-1","höhe":"2,31 m \u2028 \U0001f30a"}'.encode(),
    b'{"observed_at":"2023-11-14T22:13:23Z","station":"gw-\\u0031","deep":[[[{"a":[null,true]}]]],"big":1e400}',
    b'{"observed_at":"2023-11-14T22:13:24Z","station":"gw-1","digits":12345678901234567890.12345678901234567890}',
]


def raw(process: Process, head: str, body: bytes) -> None:
    """Send this and hang up."""
    host, port = process.url.removeprefix("http://").split(":")
    with socket.create_connection((host, int(port)), timeout=10) as connection:
        request = f"POST /v1/feeds/{FEED}/events HTTP/1.1\r\nHost: [::1]\r\nContent-Type: {NDJSON}\r\n{head}\r\n\r\n"
        connection.sendall(request.encode() + body)


def broken_off(process: Process) -> None:
    body = events([1, 2, 3])
    raw(process, f"Content-Length: {len(body) + 1}", body)


def broken_off_in_chunks(process: Process) -> None:
    body = events([1, 2, 3])
    raw(process, "Transfer-Encoding: chunked", f"{len(body):x}\r\n".encode() + body + b"\r\n")


def chunk_of_a_wrong_size(process: Process) -> None:
    raw(process, "Transfer-Encoding: chunked", b"3\r\n" + events([1, 2, 3]) + b"\r\n0\r\n\r\n")


def gzip_without_an_end(process: Process) -> None:
    body = gzip.compress(events([1, 2, 3]))[:-4]
    raw(process, f"Content-Encoding: gzip\r\nContent-Length: {len(body)}", body)


def refused_whole(process: Process) -> None:
    assert process.ask(f"/v1/feeds/{FEED}/events", events(range(101))).status == 413


@pytest.fixture(scope="module")
def process(tmp_path_factory: pytest.TempPathFactory) -> object:
    folder = tmp_path_factory.mktemp("p2")
    with Process(folder, configuration(folder, slack="0s", events_at_most=100)) as started:
        yield started


BREAKS: list[Callable[[Process], None]] = [
    broken_off,
    broken_off_in_chunks,
    chunk_of_a_wrong_size,
    gzip_without_an_end,
    refused_whole,
]


@pytest.mark.parametrize("break_it", BREAKS, ids=lambda each: each.__name__)
def test_of_a_request_that_is_not_whole_nothing_is_taken(process: Process, break_it: Callable[[Process], None]) -> None:
    before = process.document()["ledger"]["received"]
    break_it(process)
    process.until(lambda: process.document()["hops"]["ingest"]["waiting"] == 0, "the request is over")
    assert process.document()["ledger"]["received"] == before


def test_events_come_out_byte_for_byte(tmp_path: Path) -> None:
    """And what is no event comes out nowhere but in the quarantine, where it stands as it came."""
    bad = [b"{", b'{"station":"gw-1"}', b'{"observed_at":"2023-11-14T22:13:21Z"}', b"\xff\xfe\x00", b'"text"', b"17"]
    with Process(tmp_path, configuration(tmp_path)) as process:
        lines = [line for pair in zip(bad, [*ODD, event_line(30)], strict=True) for line in pair]
        found = process.ask(f"/v1/feeds/{FEED}/events", body_of(*lines)).json
        assert (found["accepted"], found["quarantined"]) == (len(ODD) + 1, len(bad))
        assert [fault["line"] for fault in found["faults"]] == [1, 3, 5, 7, 9, 11]
        process.drain()
        shown = process.ask(f"/v1/feeds/{FEED}/quarantine").json["quarantine"]
        assert [row["event"] for row in shown] == [line.decode(errors="replace") for line in bad]
        assert process.terminate() == 0
    with closing(sqlite3.connect(store_in(tmp_path))) as connection:
        texts = [text for (text,) in connection.execute("SELECT event FROM events ORDER BY batch, position")]
        (late,) = connection.execute("SELECT count(*) FROM late").fetchone()
    assert [text.encode() for text in texts] == [*ODD, event_line(30)] and late == 0
    assert all(json.loads(text) for text in texts)


async def test_after_kills_the_store_holds_nothing_that_was_not_sent(tmp_path: Path) -> None:
    """The judge compares id, time, source and a checksum of the bytes of each row."""
    load = Load.of("one_percent_late", 10_000, 100, seed=3)
    with Process(tmp_path, fixed_port(tmp_path, slack="20s")) as process:
        done = await send_with_keys(
            process, load, [(share, process.kill) for share in (0.3, 0.6)], ("identity", "gzip", "zstd")
        )
        process.drain()
        assert process.terminate() == 0
    verdict = verdict_of(load, done, tmp_path)
    assert verdict.ok and verdict.unexpected == 0 and verdict.ordered + verdict.late == 10_000, str(verdict)
    assert len(stored(tmp_path)) + len(stored(tmp_path, "late")) == 10_000

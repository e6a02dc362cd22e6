"""A real process under hostile bodies: each gets one named answer, and afterwards all is as before.

Each test ends with the same question (`is_well`): ready, books balanced, memory bounded, nothing unforeseen in the log.
Beside every body somebody else asks for the service's health: none may hold the loop up for seconds.
"""

from __future__ import annotations

import gzip
import sqlite3
import time
from collections.abc import Iterator
from pathlib import Path

import pytest
import zstandard
from helpers_hostile import MIB, Target
from helpers_service import FEED, NDJSON, body_of, configuration, event_line, problem_of, store_in

JSON, SEQUENCE, MSGPACK = "application/json", "application/json-seq", "application/vnd.msgpack"
SOURCE_BYTES_AT_MOST = 2_000  # with one event each that is held, and its line on the way
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
faults_at_most = 30_000
[[feed.sink]]
kind = "ndjson"

[[feed]]
name = "listed"
time = { at = "/readings/0/ts", unit = "ns" }
source = "/readings/0/station"
[[feed.sink]]
kind = "ndjson"
"""


@pytest.fixture(scope="module")
def running(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Target]:
    folder = tmp_path_factory.mktemp("hostile")
    with Target(folder, configuration(folder, sources_at_most=1000) + FEEDS) as process:
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
    "gzip": ("gzip", lambda: gzip.compress(zeros(300 * MIB), 1), 413),
    "gzip in gzip": ("gzip, gzip", lambda: gzip.compress(gzip.compress(zeros(300 * MIB), 1)), 413),
    "gzip in gzip, the inner one small": ("gzip, gzip", lambda: gzip.compress(gzip.compress(zeros(65 * MIB), 1)), 413),
    "zstd": ("zstd", lambda: zstandard.compress(zeros(300 * MIB)), 413),
    "zstd in zstd": ("zstd, zstd", lambda: zstandard.compress(zstandard.compress(zeros(300 * MIB))), 413),
    "zstd in gzip": ("zstd, gzip", lambda: gzip.compress(zstandard.compress(zeros(300 * MIB))), 413),
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


def filled(line: bytes, at_most: int = 100_000) -> bytes:
    return (line + b"\n") * min(at_most, 16 * MIB // (len(line) + 1))


LISTED = b'{"readings":[{"ts":1,"station":"a"}' + b",[]" * 45 + b"]}"
# Feed, media type, body, status
COSTLY = {
    "every line is garbage": ("counts", NDJSON, filled(b"{}", 30_000), 200),
    "every line has a bad time": ("counts", NDJSON, filled(b'{"ts":"0001-01-01","station":"a"}', 30_000), 200),
    "every line has half a pair": ("counts", NDJSON, filled(b'{"ts":1,"x":"\\ud800"}', 30_000), 200),
    "more garbage than may be": ("counts", NDJSON, filled(b"{}"), 422),
    "one line without an end": ("counts", NDJSON, b'{"ts":1,"x":"' + b"\\ud800" * 2_000_000, 200),
    "long lines": ("counts", NDJSON, filled(b'{"ts":1,"x":"\\ud800","y":[' + b"[]," * 300_000 + b"1]}", 6), 200),
    "every line is read by hand": ("listed", NDJSON, filled(LISTED), 200),
    "empty maps": ("counts", MSGPACK, b"\x91\xdd\x00\xf0\x00\x00" + b"\x80" * 0xF00000, 200),
    "maps of maps": ("counts", MSGPACK, b"\x95" + (b"\x81\xa1x\xdd\x00\x0e\x00\x00" + b"\x80" * 0xE0000) * 5, 200),
    "nothing but separators": ("counts", SEQUENCE, b"\x1e" * 10 * MIB, 413),
    "commas": ("counts", JSON, b"[" + b"1," * 5_000_000 + b"1]", 413),
}


@pytest.mark.parametrize("name", COSTLY)
def test_a_costly_body_holds_nobody_up(process: Target, name: str) -> None:
    """At the limits: such a body keeps a core busy for up to some seconds."""
    feed, media_type, body, status = COSTLY[name]
    found = process.post(body, media_type, feed)
    assert found.status == status, found.content[:300]
    if status == 200:
        answer = found.json
        assert answer["received"] == answer["accepted"] + answer["late"] + answer["quarantined"]
        assert answer["quarantined"] == len(answer["faults"]) == (0 if feed == "listed" else answer["received"])


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


def test_100_000_sources_in_a_minute_and_no_more(tmp_path: Path) -> None:
    with Target(tmp_path, configuration(tmp_path, sources_at_most=100_000)) as process:
        start = time.monotonic()
        for first in range(0, 100_000, 10_000):
            answer = process.post(body_of(*(event_line(1, f"gw-{number}") for number in range(first, first + 10_000))))
            assert (answer.status, answer.json["received"], answer.json["faults"]) == (200, 10_000, [])
        seconds = time.monotonic() - start
        grown = (process.memory("VmRSS") - process.rss_bytes) / 100_000
        print(f"100,000 sources in {seconds:.1f} s, {grown:.0f} bytes of memory each")
        assert seconds < 60
        assert grown < SOURCE_BYTES_AT_MOST
        refused = process.post(event_line(1, "gw-1") + b"\n" + event_line(1, "one-more"))
        assert "sources_at_most" in problem_of(refused, 429, "sources_full")
        document = process.document()
        assert document["refusals"]["sources_full"] == 1
        assert document["ledger"]["received"] == 100_000, "a request that is refused leaves nothing behind"
        assert process.ask(f"/v1/feeds/{FEED}/sources").json["known"] == 100_000
        assert process.post(event_line(2, "gw-5")).status == 200
        process.is_well()

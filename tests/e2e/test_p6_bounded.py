"""P6 bounded: every limit of the configuration, in the real process, one feed for each.

At its limit a feed refuses with the reason and a time to retry, or puts the one event aside and names it; it loses
nothing that it answered, its memory does not grow, and when what filled it goes, it takes events again.
"""

from __future__ import annotations

import contextlib
import gzip
import json
import socket
import sqlite3
from collections.abc import Callable, Iterator
from contextlib import closing
from pathlib import Path

import pytest
from helpers_service import NDJSON, Answer, Process, body_of, event_line, events, problem_of, retry_after
from strandline.config_model import Config, Feed, Journal, Limits

KIB = 1024
CONNECTIONS = 20
FEEDS: dict[str, dict[str, object]] = {
    "held": {"held_events_at_most": 100, "events_at_most": 100, "slack": "1h"},
    "undelivered": {"undelivered_events_at_most": 100, "batch_events_at_most": 100},
    "sources": {"sources_at_most": 3},
    "batch": {"batch_events_at_most": 7, "slack": "1h"},
    "body": {"body_bytes_at_most": "4KiB"},
    "decoded": {"decoded_bytes_at_most": "4KiB", "body_bytes_at_most": "4KiB", "event_bytes_at_most": "4KiB"},
    "event": {"event_bytes_at_most": "200B"},
    "events": {"events_at_most": 10},
    "nesting": {"nesting_at_most": 3},
    "lanes": {"lanes_at_most": "1MiB"},
    "keys": {"keys_at_most": 2},
    "ids": {"id": "/id", "id_window_events": 1000},
    "faults": {"faults_at_most": 2},
    "batch-bytes": {"batch_bytes_at_most": "1KiB", "slack": "1h"},
    "connections": {},
    "journal": {
        **dict.fromkeys(("decoded_bytes_at_most", "body_bytes_at_most", "event_bytes_at_most"), "64KiB"),
        "journal": {"segment_bytes": "64KiB", "at_most": "256KiB"},
    },
}


def toml(value: object) -> str:
    if isinstance(value, dict):
        return "{ " + ", ".join(f"{key} = {json.dumps(each)}" for key, each in value.items()) + " }"
    return json.dumps(value)


def text_of(folder: Path) -> str:
    """One feed for each limit, each with a store of its own."""
    lines = [
        'listen = "127.0.0.1:0"',
        f"data_dir = {toml(str(folder / 'data'))}",
        "[limits]",
        f"connections_at_most = {CONNECTIONS}",
    ]
    for name, keys in FEEDS.items():
        usual = {"slack": "0s", "idle_after": "1h", "hold_at_most": "1h", "source": "/station", "name": name}
        lines += ["[[feed]]", 'time = { at = "/observed_at", unit = "rfc3339" }']
        lines += [f"{key} = {toml(value)}" for key, value in {**usual, **keys}.items()]
        lines += ["[[feed.sink]]", 'kind = "sqlite"', f"path = {toml(str(store(folder, name)))}"]
    return "\n".join(lines)


def store(folder: Path, feed: str) -> Path:
    return folder / f"{feed}.db"


class One:
    """One of the feeds: sends to it, and knows what was answered."""

    def __init__(self, process: Process, name: str) -> None:
        self.process, self.name = process, name
        self.answered = 0

    def post(self, body: bytes, **headers: str) -> Answer:
        answer = self.process.ask(f"/v1/feeds/{self.name}/events", body, {**headers})
        if answer.status == 200:
            self.answered += answer.json["accepted"] + answer.json["late"]
        return answer

    def drain(self) -> None:
        assert self.process.ask(f"/v1/feeds/{self.name}/drain", b"").status == 204

    @property
    def document(self) -> dict[str, dict[str, int]]:
        found: dict[str, dict[str, int]] = self.process.ask(f"/v1/feeds/{self.name}").json
        return found

    def rows(self, query: str = "SELECT (SELECT count(*) FROM events) + (SELECT count(*) FROM late)") -> int:
        with closing(sqlite3.connect(store(self.process.folder, self.name))) as connection:
            (found,) = connection.execute(query).fetchone()
            return int(found)

    def all_comes_out(self) -> None:
        """What was answered with success is in the store, once it is let go; and the books balance."""
        self.drain()
        self.process.until(lambda: self.rows() == self.answered, f"{self.rows()} of {self.answered} came out")
        assert self.document["ledger"]["balanced"]

    def refuses(self, body: bytes, status: int, kind: str = "about:blank", **headers: str) -> str:
        """It refuses this, with the reason, and a time to retry where retrying helps; it takes nothing of it."""
        before = self.document["ledger"]["received"]
        answer = self.post(body, **headers)
        detail = problem_of(answer, status, kind)
        if status in (429, 503):
            assert retry_after(answer) > 0
            assert self.document["refusals"][kind] > 0
        assert self.document["ledger"]["received"] == before
        return detail


@pytest.fixture(scope="module")
def process(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Process]:
    folder = tmp_path_factory.mktemp("p6")
    with Process(folder, text_of(folder)) as started:
        yield started


def held_events_at_most(feed: One, process: Process) -> None:
    assert feed.post(events(range(100))).status == 200
    before = memory_bytes(process)
    for _ in range(50):
        assert "held_events_at_most" in feed.refuses(events([1]), 429, "held_full")
    feed.refuses(events(range(100)), 429, "held_full")
    assert memory_bytes(process) - before < 16 << 20
    feed.drain()
    assert feed.post(events(range(100, 200))).status == 200


def undelivered_events_at_most(feed: One, process: Process) -> None:
    """The store is locked: what is released stays; beyond the limit nothing more is, and what is held says why."""
    assert feed.post(events([0])).status == 200
    process.until(lambda: feed.rows() == 1, "the store is there")
    with closing(sqlite3.connect(store(process.folder, feed.name), isolation_level=None)) as locker:
        locker.execute("BEGIN IMMEDIATE")
        for start in range(1, 401, 50):
            assert feed.post(events(range(start, start + 50))).status == 200
        found = feed.document
        assert found["hold"]["why"] == "sink_full" and found["held"]["events"] > 0  # type: ignore[comparison-overlap]
        waiting = found["sinks"]["sqlite"]["lanes"]["ordered"]["waiting_events"]  # type: ignore[index]
        assert waiting <= 100 + 50, "at most one release beyond the limit"
        locker.execute("ROLLBACK")
    process.until(lambda: feed.document["held"]["events"] == 0, "it is released once the store takes it")


def sources_at_most(feed: One, process: Process) -> None:
    for name in ("gw-1", "gw-2", "gw-3"):
        assert feed.post(events([1], name)).status == 200
    assert "sources_at_most" in feed.refuses(events([1], "gw-4"), 429, "sources_full")
    feed.refuses(events([1], "gw-1") + events([1], "gw-4"), 429, "sources_full")
    assert feed.post(events([2], "gw-2")).status == 200


def batch_events_at_most(feed: One, process: Process) -> None:
    assert feed.post(events(range(30))).status == 200
    feed.drain()
    process.until(lambda: feed.rows() == 30, "all is released")
    assert feed.rows("SELECT max(n) FROM (SELECT count(*) AS n FROM events GROUP BY batch)") == 7
    assert feed.rows("SELECT count(DISTINCT batch) FROM events") == 5


def body_bytes_at_most(feed: One, process: Process) -> None:
    line = event_line(1, pad="")
    fits = event_line(1, pad="x" * (4 * KIB - 1 - len(line)))
    assert feed.post(body_of(fits)).status == 200
    assert "body_bytes_at_most" in feed.refuses(body_of(fits + b" "), 413)
    before = memory_bytes(process)
    for _ in range(20):
        feed.refuses(bytes(4 << 20), 413)
    assert memory_bytes(process) - before < 16 << 20


def decoded_bytes_at_most(feed: One, process: Process) -> None:
    assert feed.post(gzip.compress(events(range(60))), **{"Content-Encoding": "gzip"}).status == 200
    before = memory_bytes(process)
    bomb = gzip.compress(bytes(3 << 20))
    assert len(bomb) < 4 * KIB
    for _ in range(20):
        assert "4,096 bytes" in feed.refuses(bomb, 413, **{"Content-Encoding": "gzip"})
    assert memory_bytes(process) - before < 16 << 20


def event_bytes_at_most(feed: One, process: Process) -> None:
    line = event_line(1, pad="")
    fits, longer = (event_line(1, pad="x" * (200 - len(line) + more)) for more in (0, 1))
    found = feed.post(body_of(fits, longer, fits)).json
    assert (found["accepted"], [fault["reason"] for fault in found["faults"]]) == (2, ["too_large"])


def events_at_most(feed: One, process: Process) -> None:
    assert feed.post(events(range(10))).status == 200
    assert "10" in feed.refuses(events(range(11)), 413)


def nesting_at_most(feed: One, process: Process) -> None:
    found = feed.post(body_of(event_line(1, a=[[1]]), event_line(1, a=[[[1]]]), event_line(2))).json
    assert (found["accepted"], [(f["line"], f["reason"]) for f in found["faults"]]) == (2, [(2, "too_deep")])
    hostile = b'{"a":' + b"[" * 100_000 + b"]" * 100_000 + b"}"
    assert feed.post(body_of(hostile)).json["faults"][0]["reason"] == "too_deep"


def lanes_at_most(feed: One, process: Process) -> None:
    bad = body_of(*(b"x" * 1000 for _ in range(500)))
    process.until(lambda: feed.post(bad).status == 429, "the quarantine is not full")
    assert "quarantine forget" in feed.refuses(events([1]), 429, "lanes_full")
    number = 10**6
    assert process.run("quarantine", "forget", "--feed", feed.name, "--through", str(number)) == 0
    process.until(lambda: feed.post(events([1])).status == 200, "it takes events again once its lanes are cleared")


def journal_at_most(feed: One, process: Process) -> None:
    """The store is locked, so segments stay; once it takes what waits, they go, and events are taken again."""
    assert feed.post(events([0])).status == 200
    process.until(lambda: feed.rows() == 1, "the store is there")
    with closing(sqlite3.connect(store(process.folder, feed.name), isolation_level=None)) as locker:
        locker.execute("BEGIN IMMEDIATE")
        start = 1
        while feed.post(events(range(start, start + 100))).status == 200:
            start += 100
        more = events(range(start, start + 100))
        assert "journal.at_most" in feed.refuses(more, 429, "journal_full")
        used = sum(each.stat().st_size for each in (process.folder / "data" / "feeds" / feed.name).glob("*.seg"))
        assert used <= 256 * KIB
        locker.execute("ROLLBACK")
    process.until(lambda: feed.post(more).status == 200, "it takes events again")


def faults_at_most(feed: One, process: Process) -> None:
    assert feed.post(body_of(b"{", event_line(1), b"{")).json["quarantined"] == 2
    feed.refuses(body_of(b"{", event_line(1), b"{", b"{"), 422, "too_many_faults")


def batch_bytes_at_most(feed: One, process: Process) -> None:
    lines = [event_line(second, pad="x" * 300) for second in range(20)]
    assert feed.post(body_of(*lines, event_line(20, pad="x" * 5000))).status == 200
    feed.drain()
    process.until(lambda: feed.rows() == 21, "all is released")
    sizes = "SELECT sum(length(event)) AS size, count(*) AS n FROM events GROUP BY batch"
    assert feed.rows(f"SELECT max(size) FROM ({sizes}) WHERE n > 1") <= KIB
    assert feed.rows(f"SELECT max(size) FROM ({sizes}) WHERE n = 1") > 5000, "a longer event is a batch of its own"


def connections_at_most(feed: One, process: Process) -> None:
    """One connection too many is told so and closed; those that are there go on."""
    host, port = process.url.removeprefix("http://").split(":")
    with contextlib.ExitStack() as stack:

        def connect() -> socket.socket:
            return stack.enter_context(socket.create_connection((host, int(port)), timeout=30))

        first, told = connect(), b""
        for _ in range(CONNECTIONS + 5):
            told = refusal(connect())
            if told:
                break
        head, _, body = told.partition(b"\r\n\r\n")
        assert head.startswith(b"HTTP/1.1 503 ") and b"\r\nRetry-After: " in head
        assert "connections_at_most" in json.loads(body)["detail"]
        body = events([1])
        head = f"POST /v1/feeds/{feed.name}/events HTTP/1.1\r\nHost: localhost\r\nContent-Type: {NDJSON}\r\n".encode()
        first.sendall(head + f"Content-Length: {len(body)}\r\n\r\n".encode() + body)
        assert first.recv(100).startswith(b"HTTP/1.1 200 ")
        feed.answered += 1
    process.until(lambda: process.status("/health/ready") == 200, "there is room again")


def refusal(connection: socket.socket) -> bytes:
    """What a new connection is told unasked; nothing where it may stay, which shows by its being asked for."""
    connection.sendall(b"GET /health/live HTTP/1.1\r\nHost: localhost\r\n\r\n")
    told = connection.recv(4096)
    return b"" if told.startswith(b"HTTP/1.1 200 ") else told


def keys_at_most(feed: One, process: Process) -> None:
    """Of more keys than are kept the oldest is forgotten; a request under it then counts as new."""
    for number in (1, 2, 3):
        assert feed.post(events([number]), **{"Idempotency-Key": f'"{number}"'}).status == 200
    before = feed.document["ledger"]["received"]
    for number, more in ((3, 0), (2, 0), (1, 1)):
        counted = feed.answered
        assert feed.post(events([number]), **{"Idempotency-Key": f'"{number}"'}).status == 200
        feed.answered = counted + more
    assert feed.document["ledger"]["received"] == before + 1
    assert feed.document["repeats"]["keys_kept"] <= 2


def id_window_events(feed: One, process: Process) -> None:
    """Identities of so many events at least, and at most of twice as many."""
    for start in range(0, 5000, 500):
        lines = (event_line(second, id=second) for second in range(start, start + 500))
        assert feed.post(body_of(*lines)).json["duplicate"] == 0
        assert feed.document["repeats"]["identities_known"] <= 2000
    again = body_of(*(event_line(second, id=second) for second in range(4000, 5000)))
    assert feed.post(again).json["duplicate"] == 1000
    assert feed.post(body_of(event_line(5000, id=1))).json["duplicate"] == 0


ATTACKS: dict[str, tuple[str, Callable[[One, Process], None]]] = {
    "held_events_at_most": ("held", held_events_at_most),
    "undelivered_events_at_most": ("undelivered", undelivered_events_at_most),
    "sources_at_most": ("sources", sources_at_most),
    "batch_events_at_most": ("batch", batch_events_at_most),
    "body_bytes_at_most": ("body", body_bytes_at_most),
    "decoded_bytes_at_most": ("decoded", decoded_bytes_at_most),
    "event_bytes_at_most": ("event", event_bytes_at_most),
    "events_at_most": ("events", events_at_most),
    "nesting_at_most": ("nesting", nesting_at_most),
    "lanes_at_most_bytes": ("lanes", lanes_at_most),
    "at_most_bytes": ("journal", journal_at_most),
    "faults_at_most": ("faults", faults_at_most),
    "batch_bytes_at_most": ("batch-bytes", batch_bytes_at_most),
    "connections_at_most": ("connections", connections_at_most),
    "keys_at_most": ("keys", keys_at_most),
    "id_window_events": ("ids", id_window_events),
}
ELSEWHERE = {
    "bodies_at_most": "test_more_bodies_than_may_be_in_memory_wait_their_turn in unit/test_endpoint_limits.py",
    "hold_at_most_ns": "e2e/test_p7_no_silence.py",
    "drain_at_most_ns": "test_a_second_signal_stops_at_once in unit/test_runtime.py",
}


def memory_bytes(process: Process) -> int:
    """Resident memory of the process (Linux: /proc/PID/statm, second field, in pages of 4 KiB)."""
    assert process.process is not None
    return int(Path(f"/proc/{process.process.pid}/statm").read_text().split()[1]) * 4096


def test_every_limit_has_its_test() -> None:
    keys = {key for each in (Config, Feed, Journal, Limits) for key in each.__struct_fields__}
    assert {key for key in keys if "at_most" in key or "window" in key} == set(ATTACKS) | set(ELSEWHERE)


@pytest.mark.parametrize("limit", ATTACKS)
def test_a_limit_refuses_with_a_reason_and_loses_nothing(process: Process, limit: str) -> None:
    name, attack = ATTACKS[limit]
    feed = One(process, name)
    attack(feed, process)
    feed.all_comes_out()

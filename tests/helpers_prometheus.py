"""A real Prometheus as a receiver of remote writes: started on a free port, ready by polling, asked over HTTP.

Starting, writing and reading only; what must come of it is the tests' business. `Receiver.pipelined` writes many
requests on one connection without waiting between them: the server works them off in order, one after the other.
"""

from __future__ import annotations

import asyncio
import json
import math
import shutil
import subprocess
import time
import urllib.error
import urllib.parse
import urllib.request
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest
from strandline_loadgen.child import free_port

DEADLINE_S = 30.0
POLL_S = 0.02
STARTS_AT_MOST = 5  # another program may take the free port before the server does
HEADERS = {
    "Content-Encoding": "snappy",
    "Content-Type": "application/x-protobuf",
    "X-Prometheus-Remote-Write-Version": "0.1.0",
}
PROGRAM = shutil.which("prometheus")
Series = dict[tuple[tuple[str, str], ...], dict[int, float]]  # sorted labels -> value by time in ms


@dataclass(frozen=True, slots=True)
class Receiver:
    """One running server."""

    port: int

    @property
    def url(self) -> str:
        return f"http://127.0.0.1:{self.port}"

    @property
    def write_url(self) -> str:
        return f"{self.url}/api/v1/write"

    def ask(self, path: str, **query: str) -> Any:
        """What the server's API answers."""
        url = f"{self.url}{path}?{urllib.parse.urlencode(query)}"
        with urllib.request.urlopen(url, timeout=DEADLINE_S) as answer:
            return json.loads(answer.read())

    def write(self, body: bytes) -> tuple[int, str]:
        """One request; its status and text."""
        request = urllib.request.Request(self.write_url, data=body, headers=HEADERS)
        try:
            with urllib.request.urlopen(request, timeout=DEADLINE_S) as answer:
                return answer.status, answer.read().decode()
        except urllib.error.HTTPError as error:
            with error:
                return error.code, error.read().decode()

    async def pipelined(self, bodies: Sequence[bytes]) -> list[tuple[int, str]]:
        """Many requests in this order; status and text of each."""
        reader, writer = await asyncio.open_connection("127.0.0.1", self.port)
        head = "".join(f"{name}: {value}\r\n" for name, value in HEADERS.items())
        start = f"POST /api/v1/write HTTP/1.1\r\nHost: 127.0.0.1\r\n{head}Content-Length: "

        async def send() -> None:
            for body in bodies:
                writer.write(f"{start}{len(body)}\r\n\r\n".encode() + body)
                await writer.drain()

        sending = asyncio.create_task(send())
        try:
            answers = [await _answer(reader) for _ in bodies]
            await sending
        finally:
            writer.close()
            await writer.wait_closed()
        return answers

    def stored(self, match: str = '{__name__=~".+"}') -> Series:
        """Every raw sample that the server holds of the series that match, stored times and values exactly."""
        found: Series = {}
        # A range selector in an instant query gives the samples as they are stored; [24h] up to a time beyond them all.
        end = self.ask("/api/v1/status/tsdb")["data"]["headStats"]["maxTime"] / 1000 + 1
        if math.isclose(end, -(2**63) / 1000, rel_tol=1e-6):
            return found
        answer = self.ask("/api/v1/query", query=f"{match}[24h]", time=repr(end))
        assert answer["status"] == "success" and answer["data"]["resultType"] == "matrix"
        for series in answer["data"]["result"]:
            pairs = {round(at * 1000): float(value) for at, value in series["values"]}
            assert len(pairs) == len(series["values"])
            found[tuple(sorted(series["metric"].items()))] = pairs
        return found

    def count(self, match: str = '{__name__=~".+"}') -> int:
        """How many samples it holds."""
        return sum(len(samples) for samples in self.stored(match).values())

    def counter(self, name: str) -> float:
        """The sum of one of the server's own counters over its labels."""
        with urllib.request.urlopen(f"{self.url}/metrics", timeout=DEADLINE_S) as answer:
            lines = answer.read().decode().splitlines()
        return sum(float(line.rsplit(" ", 1)[1]) for line in lines if line.split("{")[0].split(" ")[0] == name)


async def _answer(reader: asyncio.StreamReader) -> tuple[int, str]:
    head = (await reader.readuntil(b"\r\n\r\n")).decode().split("\r\n")
    lengths = [int(line.split(":")[1]) for line in head if line.lower().startswith("content-length:")]
    text = await reader.readexactly(lengths[0]) if lengths else b""
    return int(head[0].split(" ")[1]), text.decode()


def _begin(folder: Path, port: int) -> subprocess.Popen[bytes]:
    if PROGRAM is None:
        pytest.skip("prometheus is not installed (Debian: apt-get install prometheus)")
    command = [
        PROGRAM,
        f"--config.file={folder / 'prometheus.yml'}",
        f"--storage.tsdb.path={folder / 'tsdb'}",
        f"--web.listen-address=127.0.0.1:{port}",
        "--web.enable-remote-write-receiver",
        "--log.level=error",
    ]
    with (folder / "prometheus.log").open("ab") as log:
        return subprocess.Popen(command, stdin=subprocess.DEVNULL, stdout=log, stderr=log)


def _ready(process: subprocess.Popen[bytes], port: int) -> bool:
    """Whether it got ready; False when it ended instead."""
    deadline = time.monotonic() + DEADLINE_S
    while process.poll() is None:
        try:
            with urllib.request.urlopen(f"http://127.0.0.1:{port}/-/ready", timeout=DEADLINE_S):
                return True
        except OSError:
            assert time.monotonic() < deadline, "prometheus does not get ready"
            time.sleep(POLL_S)
    return False


@contextmanager
def prometheus(
    folder: Path, window: str | None = None, port: int | None = None, scrape: str = "scrape_configs: []\n"
) -> Iterator[Receiver]:
    """A server over the store in `folder`; with its own `window` for samples out of order ("5s") if one is named.

    `scrape` is the rest of its configuration: what it scrapes, by which rules.
    """
    folder.mkdir(parents=True, exist_ok=True)
    tsdb = f"storage: {{ tsdb: {{ out_of_order_time_window: {window} }} }}\n" if window else ""
    (folder / "prometheus.yml").write_text(f"{scrape}{tsdb}")
    for _ in range(STARTS_AT_MOST):
        chosen = port or free_port()
        process = _begin(folder, chosen)
        try:
            if _ready(process, chosen):
                yield Receiver(chosen)
                return
        finally:
            process.terminate()
            process.wait(DEADLINE_S)
    raise AssertionError(f"prometheus does not start: {(folder / 'prometheus.log').read_text()[-2000:]}")

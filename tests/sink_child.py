"""A process that delivers batches into a sink until it is done or killed (run by tests/fault/test_sink_kill.py).

    python sink_child.py KIND PLACE POINT NTH

It prints a line for every position that the sink tells, and kills itself (SIGKILL: no cleaning up, no buffers written)
the NTH time that it comes to POINT: the beginning of an SQL statement, or of a system call that Python audits
(`open`, `os.rename`, `os.remove`), or `lines` (in the middle of a take, between two batches). POINT `none` never kills.
"""

from __future__ import annotations

import asyncio
import os
import signal
import sqlite3
import sys
from pathlib import Path
from typing import Any

from helpers_sinks import HeldLines, VirtualTime
from strandline.core.columns import Batch, Lane
from strandline.ports import Sink
from strandline.sinks.lanes import LaneStore
from strandline.sinks.ndjson import NdjsonSink
from strandline.sinks.parquet import ParquetSink
from strandline.sinks.sqlite import SqliteSink

BATCHES = 24
ROWS = 120
GROUP = 4


def everything(lines: HeldLines, lanes: tuple[Lane, ...]) -> dict[Lane, list[Batch]]:
    """The same batches in every process."""
    return {lane: lines.batches(lane, range(1, BATCHES + 1), ROWS) for lane in lanes}


def make(kind: str, place: Path) -> Sink:
    """The sink under test."""
    if kind == "sqlite":
        return SqliteSink(place / "river.db", "river")
    if kind == "ndjson":
        return NdjsonSink(place / "files", "river", VirtualTime(), roll_bytes=20_000)
    if kind == "parquet":
        return ParquetSink(place / "files", "river", VirtualTime(), roll_bytes=12_000, rows_per_group=200)
    return LaneStore(place / "lanes" / "lanes.db")


class Trap:
    """Counts how often a point is reached, and kills the process at the NTH time."""

    def __init__(self, point: str, nth: int) -> None:
        self.point, self.left = point, nth

    def reached(self, what: str) -> None:
        if what.startswith(self.point):
            self.left -= 1
            if self.left == 0:
                os.kill(os.getpid(), signal.SIGKILL)

    def audit(self, event: str, arguments: tuple[Any, ...]) -> None:
        """For sys.addaudithook: it sees every thread."""
        if event in {"open", "os.rename", "os.remove"} and "strandline-kill" in str(arguments[0]):
            self.reached(event)


def trace_statements(trap: Trap) -> None:
    """Every connection made from now on shows the trap its statements."""
    plain = sqlite3.connect

    def traced(*arguments: Any, **options: Any) -> sqlite3.Connection:
        connection = plain(*arguments, **options)
        connection.set_trace_callback(trap.reached)
        return connection

    sqlite3.connect = traced


class TrappedLines(HeldLines):
    trap: Trap

    def _stop(self, batch: Batch) -> None:
        self.trap.reached("lines")


async def deliver(kind: str, place: Path, trap: Trap) -> None:
    """Deliver what the store does not hold yet, lane by lane, in turns."""
    lines = TrappedLines()
    lines.trap = trap
    sink = make(kind, place)
    offered = everything(lines, sink.lanes)
    sys.addaudithook(trap.audit)
    trace_statements(trap)
    reached = await sink.open()
    tell("open", reached)
    left = {lane: [b for b in offered[lane] if b.number > reached.get(lane, 0)] for lane in sink.lanes}
    while any(left.values()):
        for lane in sink.lanes:
            if left[lane]:
                tell("take", await sink.take(left[lane][:GROUP], lines))
                left[lane] = left[lane][GROUP:]
    tell("flush", await sink.flush(lines))
    await sink.close()


def tell(what: str, reached: dict[Lane, int]) -> None:
    print(what, *(f"{lane}={number}" for lane, number in reached.items()), flush=True)


if __name__ == "__main__":
    asyncio.run(deliver(sys.argv[1], Path(sys.argv[2]), Trap(sys.argv[3], int(sys.argv[4]))))

"""The service as it is, with a clock beside three of its seams: the journal's syncs, the sink's commits, arrivals.

Run as `python -m strandline_loadgen.bench.latency_child CONFIGURATION RESULT`; at its end it writes what it timed. A
release's latency runs from the arrival that let the watermark pass an event to the commit that holds the event: the
time that the event waited for the watermark is not in it. Nothing of the service is replaced.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import msgspec
import numpy as np
import uvloop
from strandline.app import Service, serve
from strandline.config import load
from strandline.core.columns import Batch, Lane
from strandline.core.feed import Feed
from strandline.journal.disk import LocalDisk
from strandline.ports import Clock, Disk, File, Lines, Sink
from strandline.sinks import make_sink

from strandline_loadgen.trace import Int64s


class Timings:
    """What was timed, in ns of the monotonic clock."""

    def __init__(self) -> None:
        self.syncs: list[int] = []
        self.commits: list[int] = []
        self.arrived: list[int] = []
        self.watermarks: list[int] = []
        self.committed: list[tuple[int, Int64s]] = []  # when, and the event times

    def latencies(self) -> Int64s:
        """Per event in order of release; those that only the drain at the end let go are left out."""
        watermarks, arrived = np.array(self.watermarks, np.int64), np.array(self.arrived, np.int64)
        found = []
        for at_ns, times in self.committed:
            first = np.searchsorted(watermarks, times)  # the first arrival after which the watermark stood there
            first = first[first < len(arrived)]
            found.append(at_ns - arrived[first])
        return np.concatenate(found) if found else np.empty(0, np.int64)


class TimedFile:
    """A file whose syncs are timed."""

    def __init__(self, file: File, timings: Timings) -> None:
        self._file, self._timings = file, timings
        self.write, self.view, self.close = file.write, file.view, file.close
        self.data_end = file.data_end

    @property
    def size(self) -> int:
        """As the file's."""
        return self._file.size

    def sync(self) -> None:
        """As the file's."""
        begin = time.monotonic_ns()
        self._file.sync()
        self._timings.syncs.append(time.monotonic_ns() - begin)


class TimedDisk:
    """A disk of timed files."""

    def __init__(self, disk: Disk, timings: Timings) -> None:
        self._disk, self._timings = disk, timings
        self.names, self.rename, self.remove = disk.names, disk.rename, disk.remove
        self.sync_directory = disk.sync_directory

    def create(self, path: str, size: int) -> File:
        """As the disk's."""
        return TimedFile(self._disk.create(path, size), self._timings)

    def open(self, path: str) -> File:
        """As the disk's."""
        return TimedFile(self._disk.open(path), self._timings)


class TimedSink:
    """A sink whose commits are timed. What it takes is durable when `take` returns, as SQLite's is."""

    def __init__(self, sink: Sink, timings: Timings) -> None:
        self._sink, self._timings = sink, timings
        self.open, self.flush, self.close = sink.open, sink.flush, sink.close
        self.lanes, self.flush_after_s = sink.lanes, sink.flush_after_s

    async def take(self, batches: Sequence[Batch], lines: Lines) -> Mapping[Lane, int]:
        """As the sink's."""
        begin = time.monotonic_ns()
        positions = await self._sink.take(batches, lines)
        end = time.monotonic_ns()
        self._timings.commits.append(end - begin)
        self._timings.committed += [(end, batch.times) for batch in batches if batch.lane == "ordered"]
        return positions


def watch_arrivals(feed: Feed, timings: Timings) -> None:
    """Note when each request came, and where the watermark stood behind it."""
    arrive = feed.arrive

    def noted(*given: Any, **named: Any) -> Any:
        begin = time.monotonic_ns()
        effects = arrive(*given, **named)
        timings.arrived.append(begin)
        timings.watermarks.append(feed.state.watermark_ns)
        return effects

    feed.arrive = noted  # type: ignore[method-assign]


class TimedService(Service):
    """The service, timed."""

    def __init__(self, file: Path, timings: Timings) -> None:
        config = load(file, {})

        def make(kind: str, feed: str, clock: Clock, **options: object) -> Sink:
            timed: Any = TimedSink(make_sink(kind, feed, clock, **options), timings)
            sink: Sink = timed
            return sink

        disk: Any = TimedDisk(LocalDisk(config.data_dir), timings)
        super().__init__(config, disk=disk, make=make)
        self._timings = timings

    async def start(self) -> None:
        """As the service's."""
        await super().start()
        for runtime in self.feeds.values():
            watch_arrivals(runtime.feed, self._timings)


def result(timings: Timings) -> dict[str, float]:
    """Percentiles in seconds, and how many were timed."""
    found: dict[str, float] = {}
    kinds: dict[str, Sequence[int] | Int64s] = {
        "sync": timings.syncs,
        "commit": timings.commits,
        "release": timings.latencies(),
    }
    for name, values in kinds.items():
        found[f"{name}s"] = float(len(values))
        for share in (0.5, 0.99):
            seconds = np.quantile(np.asarray(values), share) / 1e9 if len(values) else 0
            found[f"{name} p{share * 100:g}"] = float(seconds)
    return found


def main(file: Path, result_file: Path) -> int:
    """Serve until SIGTERM."""
    timings = Timings()
    code: int = uvloop.run(serve(TimedService(file, timings)))
    result_file.write_bytes(msgspec.json.encode(result(timings)))
    return code


if __name__ == "__main__":
    sys.exit(main(Path(sys.argv[1]), Path(sys.argv[2])))

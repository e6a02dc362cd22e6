"""Feeds as columns, and captures of them, for tests of advice: Poisson events, exponential delays, sources. No judging.

The capture is written as a file's is: arrivals only, without lines.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from strandline.core.columns import Arrival
from strandline.core.records import VERSION, Kind, SourcesRecord, arrival_parts, encode_small, frame_bytes
from strandline.replay.basis import Requests
from strandline.replay.capture import CaptureWriter, Meta

SECOND = 10**9
BEGIN_NS = 1_700_000_000 * SECOND
Int64s = NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class Columns:
    """A feed in order of arrival, each event a request of its own."""

    times: Int64s
    arrivals: Int64s
    sources: NDArray[np.uint32]

    @property
    def span_ns(self) -> tuple[int, int]:
        return int(self.arrivals[0]), int(self.arrivals[-1])

    def blocks(self, rows: int = 50_000, per_request: int = 1) -> Iterator[Requests]:
        """The feed in blocks; with several events a request all of one come with its last."""
        for begin in range(0, len(self.times), rows):
            part = slice(begin, begin + rows)
            starts = np.arange(0, len(self.times[part]), per_request)
            lasts = np.append(starts[1:], len(self.times[part])) - 1
            yield Requests(self.times[part], starts, self.arrivals[part][lasts], self.sources[part])

    def without(self, source: int) -> Columns:
        others = self.sources != source
        return Columns(self.times[others], self.arrivals[others], self.sources[others])


def feed(rate: float, delays_s: NDArray[np.float64], seed: int, sources: NDArray[np.uint32] | None = None) -> Columns:
    """Poisson events of this rate a second, each with its delay; what arrives after the last one's time is left out."""
    generator = np.random.default_rng(seed)
    times = BEGIN_NS + (np.cumsum(generator.exponential(1 / rate, len(delays_s))) * SECOND).astype(np.int64)
    arrivals = times + (delays_s * SECOND).astype(np.int64)
    order = np.argsort(arrivals, kind="stable")
    order = order[arrivals[order] <= times[-1]]  # else the end would hold late events only
    named = np.zeros(len(times), dtype=np.uint32) if sources is None else sources
    return Columns(times[order], arrivals[order], named[order])


def exponential(rate: float, mean_s: float, events: int, seed: int) -> Columns:
    """Poisson events with exponential delays, of one source."""
    return feed(rate, np.random.default_rng(seed + 1).exponential(mean_s, events), seed)


def write_capture(path: Path, columns: Columns, names: Sequence[str], per_request: int = 50) -> None:
    """The feed as a capture file."""
    lsn = 0
    with path.open("wb") as file:
        writer = CaptureWriter(file.write, Meta("river-gauges", "file", BEGIN_NS, lines=False, decided=False))
        kind, body = encode_small(SourcesRecord(0, list(names)))
        writer.add(kind, VERSION, lsn, body)
        lsn += frame_bytes(len(body))
        for block in columns.blocks(per_request, per_request):
            count = len(block.times)
            assert block.sources is not None
            arrival = Arrival(
                payload=memoryview(b"x\n" * count),
                times=block.times,
                lengths=np.ones(count, dtype=np.uint32),
                sources=block.sources,
            )
            body = b"".join(bytes(part) for part in arrival_parts(arrival, int(block.instants[0])))
            writer.add(Kind.ARRIVAL, VERSION, lsn, body)
            lsn += frame_bytes(len(body))
        writer.close()

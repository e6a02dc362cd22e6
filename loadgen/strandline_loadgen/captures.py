"""`python -m strandline_loadgen.captures OUT`: an invented capture of any size, to measure advice and replay on.

Gateways send requests of some events each; 10,000 events a second by the arrival clock. A request is delayed as a
whole (exponential, mean 0.6 s) and each of its events besides (mean 0.2 s); its events stand in order of event time.
All lines are the same one, so only their number and length count. Memory is bounded: a million events at a time.
"""

from __future__ import annotations

import argparse
import sys
from collections.abc import Callable, Iterator, Sequence
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from strandline.core.columns import Arrival
from strandline.core.records import Kind, SourcesRecord, arrival_parts, encode_small, frame_bytes
from strandline.replay.capture import CaptureWriter, Meta

from .shapes import START_NS

EVENT_GAP_NS = 100_000
EVENTS_AT_MOST = 1_000_000_000
ROWS = 1 << 20
REQUEST_DELAY_NS, EVENT_DELAY_NS = 0.6e9, 0.2e9
LINE = b'{"station":"gw-001","observed_at":"2026-03-01T06:00:00.000000000Z","level":1.2345,"quality":"good"}\n'


def requests(events: int, per_request: int, sources: int, seed: int) -> Iterator[tuple[int, int, NDArray[np.int64]]]:
    """Arrival instant, source number and event times of each request."""
    chance, now_ns, left = np.random.default_rng(seed), START_NS, events // per_request
    while left > 0:
        count = min(left, max(1, ROWS // per_request))
        arrivals = now_ns + EVENT_GAP_NS * per_request * np.arange(count, dtype=np.int64)
        delays = chance.exponential(REQUEST_DELAY_NS, (count, 1)) + chance.exponential(
            EVENT_DELAY_NS, (count, per_request)
        )
        times = np.sort(arrivals[:, None] - delays.astype(np.int64), axis=1)
        yield from zip(arrivals.tolist(), chance.integers(0, sources, count).tolist(), times, strict=True)
        now_ns, left = int(arrivals[-1]) + EVENT_GAP_NS * per_request, left - count


def write_capture(
    write: Callable[[bytes], object], events: int, per_request: int, sources: int, *, lines: bool = True, seed: int = 1
) -> CaptureWriter:
    """Write a capture of whole requests, `events` rounded down to them. Raises ValueError for what cannot be."""
    if not 1 <= per_request <= events <= EVENTS_AT_MOST or not 1 <= sources <= 1_000_000:
        raise ValueError(f"1 <= --per-request <= --events <= {EVENTS_AT_MOST:,} and 1 to 1,000,000 sources")
    writer = CaptureWriter(write, Meta("river-gauges", "file", START_NS, lines=lines, decided=False))
    lsn = 0

    def put(kind: Kind, body: bytes) -> None:
        nonlocal lsn
        writer.add(kind, writer.meta.record_version, lsn, body)
        lsn += frame_bytes(len(body))

    put(*encode_small(SourcesRecord(0, [f"gw-{number:03d}" for number in range(sources)])))
    lengths, payload = np.full(per_request, len(LINE) - 1, dtype=np.uint32), LINE * per_request
    for arrived_ns, source, times in requests(events, per_request, sources, seed):
        arrival = Arrival(times, np.full(per_request, source, dtype=np.uint32), lengths, payload)
        put(Kind.ARRIVAL, b"".join(arrival_parts(arrival, arrived_ns)))
    writer.close()
    return writer


def main(arguments: Sequence[str] | None = None) -> int:
    """The command. Exit 0, or 2 for wrong use."""
    parser = argparse.ArgumentParser(prog="python -m strandline_loadgen.captures", description=__doc__)
    parser.add_argument("out", type=Path)
    parser.add_argument("--events", type=float, default=1e7)
    parser.add_argument("--per-request", type=int, default=50)
    parser.add_argument("--sources", type=int, default=64)
    parser.add_argument("--without-events", action="store_true", help="columns only, no lines")
    given = parser.parse_args(arguments)
    try:
        with given.out.open("wb") as file:
            lines = not given.without_events
            writer = write_capture(file.write, int(given.events), given.per_request, given.sources, lines=lines)
    except (ValueError, OSError) as error:
        print(error, file=sys.stderr)
        return 2
    print(f"{writer.events:,} events in {writer.requests:,} requests, {writer.bytes_written:,} bytes")
    return 0


if __name__ == "__main__":
    sys.exit(main())

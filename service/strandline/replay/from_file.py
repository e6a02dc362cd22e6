"""A capture out of a file of events that tell when they arrived: NDJSON, or Parquet with the extra `arrow`.

Lines of one arrival instant are one request. They are decoded as the service decodes them, so what could not be an
event is a fault of its request here too. The file must be in order of arrival. Memory is bounded: one piece at a time.
"""

from __future__ import annotations

import datetime
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, BinaryIO

import msgspec
import numpy as np
from numpy.typing import NDArray

from strandline.core.columns import Arrival, Fault
from strandline.core.records import Kind, SourcesRecord, arrival_parts, encode_small, frame_bytes
from strandline.errors import CaptureError
from strandline.ingest.decode import Decoder
from strandline.ingest.formats import NDJSON
from strandline.ingest.limits import BodyLimits
from strandline.ingest.timestamps import format_rfc3339
from strandline.ingest.values import Unit

from .capture import CaptureWriter, Meta

PIECE_BYTES = 4 << 20
LINE_BYTES_AT_MOST = 64 << 20
ROWS_AT_ONCE = 20_000  # of a Parquet file
LINE_FEED = 10
FAULTS_NAMED = 5
# What a piece may hold: everything that fits into it, so that no limit of a request is met here.
LIMITS = BodyLimits(
    body_bytes_at_most=2 * LINE_BYTES_AT_MOST,
    decoded_bytes_at_most=2 * LINE_BYTES_AT_MOST,
    event_bytes_at_most=LINE_BYTES_AT_MOST,
    events_at_most=2 * LINE_BYTES_AT_MOST,
    faults_at_most=2 * LINE_BYTES_AT_MOST,
)


@dataclass(frozen=True, slots=True)
class Fields:
    """Where in an event things stand (JSON Pointers) and in which units; `arrival` is when it came."""

    feed: str
    arrival: str
    arrival_unit: Unit
    time: str
    time_unit: Unit
    source: str | None = None
    id: str | None = None


@dataclass(slots=True)
class Skipped:
    """Lines that tell no arrival instant: they cannot be placed and are left out."""

    count: int = 0
    first: list[str] = field(default_factory=list)

    def note(self, faults: list[Fault], lines_before: int) -> None:
        """Faults of one piece."""
        self.count += len(faults)
        for fault in faults[: FAULTS_NAMED - len(self.first)]:
            self.first.append(f"line {lines_before + fault.line:,}: {fault.reason}: {fault.detail}")


def capture_file(
    path: Path,
    fields: Fields,
    made_ns: int,
    write: Callable[[bytes], object],
    *,
    lines: bool = True,
    progress: Callable[[int, int], object] = lambda done, of: None,
) -> tuple[CaptureWriter, Skipped]:
    """Write the capture of a file; what is in it, and what was left out. `progress` is told bytes done, of how many.

    Raises CaptureError where the file is not in order of arrival or no line of it has an instant; OSError.
    """
    taker = _Taker(path, fields, CaptureWriter(write, Meta(fields.feed, "file", made_ns, lines=lines, decided=False)))
    if path.suffix == ".parquet":
        for piece in parquet_pieces(path, progress):
            taker.take(piece)
    else:
        with path.open("rb") as file:
            for piece in ndjson_pieces(file, path, progress):
                taker.take(piece)
    taker.take(b"", last=True)
    if not taker.instants:
        raise CaptureError(f"{path}: no line tells when it arrived; " + "; ".join(taker.skipped.first))
    taker.writer.close()
    return taker.writer, taker.skipped


class _Taker:
    """Decodes pieces and gives the writer their requests."""

    def __init__(self, path: Path, fields: Fields, writer: CaptureWriter) -> None:
        self.writer, self.skipped, self.instants = writer, Skipped(), 0
        self._path = path
        self._arrivals = Decoder(fields.feed, fields.arrival, fields.arrival_unit, limits=LIMITS)
        self._events = Decoder(fields.feed, fields.time, fields.time_unit, fields.source, fields.id, limits=LIMITS)
        self._numbers: dict[str, int] = {}
        self._lines = self._lsn = 0
        self._newest_ns: int | None = None
        self._rest = b""  # lines of the last instant: the next piece may go on with it

    def take(self, piece: bytes, *, last: bool = False) -> None:
        """Whole lines, each with its line feed. Those of the last instant wait for the next piece."""
        piece = self._rest + piece
        if not last and len(piece) <= LINE_BYTES_AT_MOST:
            kept = self._last_instant(piece)
            piece, self._rest = piece[:kept], piece[kept:]
        else:
            self._rest = b""
        came = self._arrivals.decode(piece, NDJSON, {})
        self.skipped.note(list(came.faults), self._lines)
        if len(came.times):
            self._require_order(came)
            self.instants += len(came.times)
            self._take_requests(came)
        self._lines += piece.count(b"\n")

    def _last_instant(self, piece: bytes) -> int:
        """Where the first line of the last instant begins."""
        came = self._arrivals.decode(piece, NDJSON, {})
        changes = np.flatnonzero(np.diff(came.times))
        row = int(changes[-1]) + 1 if len(changes) else 0
        before = row if came.line_numbers is None else int(came.line_numbers[row]) - 1 if len(came.times) else 0
        feeds = np.flatnonzero(np.frombuffer(piece, np.uint8) == LINE_FEED)
        return int(feeds[before - 1]) + 1 if before else 0

    def _require_order(self, came: Arrival) -> None:
        before = came.times[0] if self._newest_ns is None else self._newest_ns
        back = np.flatnonzero(np.diff(came.times, prepend=before) < 0)
        if len(back):
            row = int(back[0])
            line = self._lines + (row + 1 if came.line_numbers is None else int(came.line_numbers[row]))
            raise CaptureError(
                f"{self._path}: line {line:,} arrived at {format_rfc3339(int(came.times[row]))}, before the line in "
                "front of it: sort the file by the arrival time first (keep the order of equal times)"
            )
        self._newest_ns = int(came.times[-1])

    def _take_requests(self, came: Arrival) -> None:
        """Cut the lines where the instant changes."""
        edges = np.flatnonzero(np.diff(came.times)) + 1
        firsts = np.concatenate(([0], edges, [len(came.times)]))
        ends = np.concatenate(([0], np.cumsum(came.lengths.astype(np.int64) + 1)))
        decoded = self._events.decode(bytes(came.payload), NDJSON, self._numbers)
        if decoded.faults or len(decoded.times) != len(came.times):
            for start, stop in zip(firsts[:-1].tolist(), firsts[1:].tolist(), strict=True):
                payload = bytes(came.payload[int(ends[start]) : int(ends[stop])])
                self._add(self._events.decode(payload, NDJSON, self._numbers), int(came.times[start]))
            return
        self._name(decoded)
        for start, stop in zip(firsts[:-1].tolist(), firsts[1:].tolist(), strict=True):
            self._add(_part(decoded, start, stop, ends), int(came.times[start]))

    def _name(self, arrival: Arrival) -> None:
        if arrival.new_sources:
            first = len(self._numbers)
            record = SourcesRecord(first, list(arrival.new_sources))
            self._numbers.update((name, first + number) for number, name in enumerate(arrival.new_sources))
            kind, body = encode_small(record)
            self._put(kind, body)

    def _add(self, arrival: Arrival, arrived_ns: int) -> None:
        self._name(arrival)
        self._put(Kind.ARRIVAL, b"".join(arrival_parts(arrival, arrived_ns)))

    def _put(self, kind: Kind, body: bytes) -> None:
        self.writer.add(kind, self.writer.meta.record_version, self._lsn, body)
        self._lsn += frame_bytes(len(body))


def _part(whole: Arrival, start: int, stop: int, ends: NDArray[np.int64]) -> Arrival:
    """Some rows of an arrival without faults whose sources are all known; ends[i] is where row i's line begins."""
    return Arrival(
        times=whole.times[start:stop],
        sources=whole.sources[start:stop],
        lengths=whole.lengths[start:stop],
        payload=whole.payload[int(ends[start]) : int(ends[stop])],
        identities=None if whole.identities is None else whole.identities[start:stop],
    )


def ndjson_pieces(file: BinaryIO, path: Path, progress: Callable[[int, int], object]) -> Iterator[bytes]:
    """A file in pieces of whole lines. Raises CaptureError for a line that is too long."""
    size, rest = path.stat().st_size, b""
    while block := file.read(PIECE_BYTES):
        cut = block.rfind(b"\n") + 1
        if cut:
            yield rest + block[:cut]
            rest = block[cut:]
        else:
            rest += block
        if len(rest) > LINE_BYTES_AT_MOST:
            raise CaptureError(f"{path}: a line at byte {file.tell():,} is longer than {LINE_BYTES_AT_MOST:,} bytes")
        progress(file.tell(), size)
    if rest.strip():
        yield rest + b"\n"


def parquet_pieces(path: Path, progress: Callable[[int, int], object]) -> Iterator[bytes]:
    """The rows of a Parquet file as lines of JSON. Raises CaptureError where pyarrow is absent or cannot read it."""
    try:
        import pyarrow  # noqa: PLC0415 - 45 MB, only for who has such files
        import pyarrow.parquet  # noqa: PLC0415
    except ModuleNotFoundError as error:
        raise CaptureError("reading Parquet needs pyarrow: pip install 'strandline[arrow]'") from error
    try:
        with pyarrow.parquet.ParquetFile(path) as file:
            done, rows = 0, file.metadata.num_rows
            for batch in file.iter_batches(ROWS_AT_ONCE):
                columns = [_plain_column(batch.column(index)) for index in range(batch.num_columns)]
                names = batch.schema.names
                encode = msgspec.json.Encoder(enc_hook=_as_json).encode
                yield b"".join(encode(dict(zip(names, row, strict=True))) + b"\n" for row in zip(*columns, strict=True))
                done += batch.num_rows
                progress(done, rows)
    except pyarrow.ArrowException as error:
        raise CaptureError(f"{path}: cannot be read as Parquet: {error}") from error


def _plain_column(column: Any) -> list[Any]:
    """Values for JSON; instants as RFC 3339 in UTC to the nanosecond (a Python datetime would round them)."""
    import pyarrow  # noqa: PLC0415

    if not pyarrow.types.is_timestamp(column.type):
        return list(column.to_pylist())
    whole = column.cast(pyarrow.timestamp("ns", column.type.tz)).cast(pyarrow.int64()).to_pylist()
    return [None if value is None else format_rfc3339(value) for value in whole]


def _as_json(value: object) -> object:
    if isinstance(value, datetime.timedelta):
        return value.total_seconds()
    raise CaptureError(f"a value of type {type(value).__name__} in the Parquet file cannot be written as JSON")

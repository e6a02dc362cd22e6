"""The bodies of the journal's records: what they mean and how they stand in bytes. Framing and CRC are `journal`'s.

ARRIVAL and MARK are fixed little-endian layouts, read without copying; the rare kinds are MessagePack arrays. The
grammar for readers is in `journal/format.md`; a change here is a new version there.
"""

from __future__ import annotations

import struct
from collections.abc import Sequence
from dataclasses import dataclass
from enum import IntEnum
from typing import Any, Literal

import msgspec
import numpy as np
from numpy.typing import NDArray

from .columns import Arrival, Lane, Times
from .effects import Buffer
from .settings import Settings

FRAME_HEADER_BYTES = 16
VERSION = 1
# arrived_ns, events, faults, flags, bytes of the faults' table, bytes of the payload
_ARRIVAL = struct.Struct("<qIIIIQ")
ARRIVAL_FIXED_BYTES = _ARRIVAL.size
# decided_ns, watermark_ns, first batch, events a batch, source, cause, bytes a batch
_MARK = struct.Struct("<qqQIIBxxxI")
SMALL_EVENTS = 64  # columns up to this length are copied together: a memoryview costs as much as copying 3 kB
_HAS_IDENTITIES = 1
_HAS_LINE_NUMBERS = 2


def require_readable(version: int, lsn: int) -> None:
    """Raise ValueError for a record that a newer program wrote."""
    if version != VERSION:
        raise ValueError(f"record version {version} at {lsn} is newer than this program (it reads {VERSION})")


def frame_bytes(body_bytes: int) -> int:
    """Journal bytes that a record with a body of this size takes: header, body, zeros up to a multiple of 8."""
    return FRAME_HEADER_BYTES + ((body_bytes + 7) & ~7)


class Kind(IntEnum):
    """Kinds of records. Numbers are part of the format and are never used again for something else."""

    SETTINGS = 1
    SOURCES = 2
    ARRIVAL = 3
    MARK = 4
    TAKEN = 5
    PROMISE = 6
    EXCUSE = 7
    NUMBERS = 8
    IDLE = 9
    KEY = 10
    ACT = 11


ActName = Literal["excuse", "drain", "slack", "pause", "resume"]


class Cause(IntEnum):
    """Why a mark was set."""

    SOURCES = 0  # the least newest event time over the active sources moved
    CLOCK = 1  # the arrival clock moved (clock = "arrival")
    SILENCE = 2  # every source is idle or excused: nobody is waited for
    HOLD_AT_MOST = 3
    DRAIN = 4  # an operator's act


class SettingsRecord(msgspec.Struct, frozen=True, array_like=True):
    """The feed was started, or set anew: from here on it works with these settings and serves these sinks' lanes.

    `positions` is what sinks then said of themselves: the last batch of a lane that each durably holds.
    """

    now_ns: int
    settings: Settings
    sinks: dict[str, list[Lane]]
    resumed: bool  # the process has just started (else: other settings while it runs)
    positions: dict[str, dict[Lane, int]] = {}


class SourcesRecord(msgspec.Struct, frozen=True, array_like=True):
    """Names of the sources numbered from `first` on."""

    first: int
    names: list[str]


class TakenRecord(msgspec.Struct, frozen=True, array_like=True):
    """A sink said that it durably holds every batch of a lane up to `number`."""

    now_ns: int
    sink: str
    lane: Lane
    number: int


class PromiseRecord(msgspec.Struct, frozen=True, array_like=True):
    """A source promised that nothing older than `time_ns` will come from it."""

    now_ns: int
    source: int
    time_ns: int


class ExcuseRecord(msgspec.Struct, frozen=True, array_like=True):
    """An operator told the feed not to wait for a source until it speaks again.

    `who` is left out where it is empty, as it was before it was kept, so that an old journal is decided as it stands.
    """

    now_ns: int
    source: int
    reason: str
    who: str = ""


class NumbersRecord(msgspec.Struct, frozen=True, array_like=True):
    """The next batch of a lane gets at least this number (a store was found ahead of this journal)."""

    now_ns: int
    lane: Lane
    next_number: int


class IdleRecord(msgspec.Struct, frozen=True, array_like=True):
    """At this instant sources fell idle (silent for `idle_after` by then), or a slack set for a time ended."""

    now_ns: int


class KeyRecord(msgspec.Struct, frozen=True, array_like=True):
    """The arrival record that follows came under this idempotency key, with a body of this fingerprint."""

    now_ns: int
    key: str
    fingerprint: bytes


class ActRecord(msgspec.Struct, frozen=True, array_like=True):
    """An operator's act that no other record tells: what, on what, by whom and why.

    `subject` is a sink for pause and resume, else empty. `slack_ns` with `until_ns`: this slack holds until that
    instant; an act "slack" without them ends it.
    """

    now_ns: int
    act: ActName
    subject: str
    who: str
    reason: str
    until_ns: int | None = None
    slack_ns: int | None = None


@dataclass(frozen=True, slots=True)
class Mark:
    """A step of the watermark. Its release is numbered from `first_batch`, in batches within the two limits."""

    decided_ns: int
    watermark_ns: int
    first_batch: int
    batch_events_at_most: int
    source: int  # the source whose newest event the step follows; NO_SOURCE if none
    cause: Cause
    batch_bytes_at_most: int = 2**32 - 1  # of lines; a batch holds one event at least


class FaultRow(msgspec.Struct, frozen=True, array_like=True):
    """A faulty line's entry in an arrival record; its bytes stand in the order of these rows behind the payload."""

    line: int
    reason: str
    detail: str
    length: int


@dataclass(frozen=True, slots=True)
class ArrivalBody:
    """An arrival record, read back: columns as views of the record, and where in the journal its lines stand."""

    arrived_ns: int
    times: Times
    lengths: NDArray[np.uint32]
    sources: NDArray[np.uint32]
    line_numbers: NDArray[np.int64] | None
    identities: NDArray[np.uint64] | None
    faults: Sequence[FaultRow]
    payload_place: int
    faults_place: int

    def line_of(self, row: int) -> int:
        """The number from 1 of the request's line that an event came on."""
        return row + 1 if self.line_numbers is None else int(self.line_numbers[row])

    def place_of(self, row: int) -> int:
        """Where in the journal an event's line starts."""
        return self.payload_place + int(self.lengths[:row].sum(dtype=np.int64)) + row


SMALL_KINDS = {
    Kind.SETTINGS: SettingsRecord,
    Kind.SOURCES: SourcesRecord,
    Kind.TAKEN: TakenRecord,
    Kind.PROMISE: PromiseRecord,
    Kind.EXCUSE: ExcuseRecord,
    Kind.NUMBERS: NumbersRecord,
    Kind.IDLE: IdleRecord,
    Kind.KEY: KeyRecord,
    Kind.ACT: ActRecord,
}
SmallRecord = (
    SettingsRecord
    | SourcesRecord
    | TakenRecord
    | PromiseRecord
    | ExcuseRecord
    | NumbersRecord
    | IdleRecord
    | KeyRecord
    | ActRecord
)
_KIND_OF = {struct_type: kind for kind, struct_type in SMALL_KINDS.items()}
_pack = msgspec.msgpack.Encoder().encode
_unpack_faults = msgspec.msgpack.Decoder(list[FaultRow]).decode
_unpack_small = {kind: msgspec.msgpack.Decoder(struct_type).decode for kind, struct_type in SMALL_KINDS.items()}


def decode_faults(table: Buffer) -> list[FaultRow]:
    """The table of an arrival's faulty lines. Raises msgspec.DecodeError or ValidationError."""
    return _unpack_faults(table)


def encode_small(record: SmallRecord) -> tuple[Kind, bytes]:
    """Kind and body of one of the rare records."""
    if isinstance(record, ExcuseRecord) and not record.who:
        return Kind.EXCUSE, _pack((record.now_ns, record.source, record.reason))
    return _KIND_OF[type(record)], _pack(record)


def decode_small(kind: Kind, body: Buffer) -> SmallRecord:
    """The rare record behind a body. Raises msgspec.DecodeError or ValidationError."""
    record: SmallRecord = _unpack_small[kind](body)
    return record


def instant_of(kind: int, body: Buffer) -> int | None:
    """The arrival clock of a record; None for names of sources, which have none. Raises as the decoders do."""
    if kind in (Kind.ARRIVAL, Kind.MARK):
        return int.from_bytes(memoryview(body)[:8], "little", signed=True)
    return getattr(decode_small(Kind(kind), body), "now_ns", None)


def encode_mark(mark: Mark) -> bytes:
    """A mark's body, 40 bytes."""
    return _MARK.pack(
        mark.decided_ns,
        mark.watermark_ns,
        mark.first_batch,
        mark.batch_events_at_most,
        mark.source,
        mark.cause,
        mark.batch_bytes_at_most,
    )


def decode_mark(body: Buffer) -> Mark:
    """The mark behind a body. Raises struct.error or ValueError."""
    decided, watermark, first, events, source, cause, octets = _MARK.unpack(body)
    return Mark(decided, watermark, first, events, source, Cause(cause), octets)


def arrival_parts(arrival: Arrival, arrived_ns: int) -> list[Buffer]:
    """The body of an arrival record in parts that share memory with the arrival (the payload is not copied)."""
    flags = (arrival.identities is not None) * _HAS_IDENTITIES + (arrival.line_numbers is not None) * _HAS_LINE_NUMBERS
    rows = [FaultRow(f.line, f.reason, f.detail, len(f.raw)) for f in arrival.faults]
    table = _pack(rows) if rows else b""
    head = _ARRIVAL.pack(arrived_ns, len(arrival.times), len(rows), flags, len(table), len(arrival.payload))
    columns: list[NDArray[np.generic] | None] = [
        arrival.times, arrival.identities, arrival.line_numbers, arrival.lengths, arrival.sources
    ]  # fmt: skip
    parts: list[Buffer] = [head]
    if len(arrival.times) <= SMALL_EVENTS:
        parts.append(b"".join(column.tobytes() for column in columns if column is not None))
    else:
        parts += [np.ascontiguousarray(column).data.cast("B") for column in columns if column is not None]
    parts += [arrival.payload, *(f.raw for f in arrival.faults), table]
    return parts


def arrival_body_bytes(arrival: Arrival) -> int:
    """Bytes that the body of this arrival's record takes; an upper bound within 64 bytes a fault."""
    row = 8 + 4 + 4 + 8 * (arrival.identities is not None) + 8 * (arrival.line_numbers is not None)
    faults = sum(len(f.raw) + len(f.detail.encode()) + len(f.reason) + 64 for f in arrival.faults)
    return _ARRIVAL.size + row * len(arrival.times) + len(arrival.payload) + faults


def arrival_body(arrival: Arrival, arrived_ns: int, lsn: int) -> ArrivalBody:
    """What `decode_arrival` would read back of this arrival's record at `lsn`, without going through bytes."""
    row = 16 + 8 * (arrival.identities is not None) + 8 * (arrival.line_numbers is not None)
    place = lsn + FRAME_HEADER_BYTES + _ARRIVAL.size + row * len(arrival.times)
    return ArrivalBody(
        arrived_ns=arrived_ns,
        times=arrival.times,
        lengths=arrival.lengths,
        sources=arrival.sources,
        line_numbers=arrival.line_numbers,
        identities=arrival.identities,
        faults=[FaultRow(f.line, f.reason, f.detail, len(f.raw)) for f in arrival.faults],
        payload_place=place,
        faults_place=place + len(arrival.payload),
    )


def arrival_column(body: Buffer, name: Literal["times", "identities"]) -> tuple[memoryview | None, int]:
    """One column of an arrival record as its bytes, 8 an event, and how many faulty lines there are; None: no such one.

    For a search: nothing else is looked at. Raises struct.error.
    """
    _, events, faults, flags, _, _ = _ARRIVAL.unpack_from(body)
    if name == "identities" and events and not flags & _HAS_IDENTITIES:
        return None, faults
    begin = _ARRIVAL.size + (8 * events if name == "identities" else 0)
    return memoryview(body)[begin : begin + 8 * events], faults


def decode_arrival(body: Buffer, lsn: int) -> ArrivalBody:
    """An arrival record's body as columns. `lsn` is the frame's. Raises struct.error, ValueError or msgspec errors."""
    arrived_ns, events, faults, flags, table_bytes, payload_bytes = _ARRIVAL.unpack_from(body)
    offset = _ARRIVAL.size

    def column(present: bool, dtype: str) -> NDArray[Any] | None:
        nonlocal offset
        if not present:
            return None
        values = np.frombuffer(body, dtype=dtype, count=events, offset=offset)
        offset += values.nbytes
        return values

    times = column(True, "<i8")
    identities = column(bool(flags & _HAS_IDENTITIES), "<u8")
    line_numbers = column(bool(flags & _HAS_LINE_NUMBERS), "<i8")
    lengths, sources = column(True, "<u4"), column(True, "<u4")
    rows = _unpack_faults(memoryview(body)[len(body) - table_bytes :]) if faults else []
    if len(rows) != faults:
        raise ValueError(f"an arrival record names {faults} faults but holds {len(rows)}")
    if len(body) != offset + payload_bytes + sum(row.length for row in rows) + table_bytes:
        raise ValueError(f"an arrival record of {len(body)} bytes does not hold what it says")
    place = lsn + FRAME_HEADER_BYTES + offset
    assert times is not None and lengths is not None and sources is not None
    faults_place = place + payload_bytes
    return ArrivalBody(arrived_ns, times, lengths, sources, line_numbers, identities, rows, place, faults_place)

"""A block of a capture: some tens of thousands of records as columns, so that a pass over them decodes no record.

Here lives how records become columns and back. No file, no lines (only where they stand), no order. What ascends
(clocks and positions) is written as differences, and every column byte by byte of its items (all lowest bytes first,
then the next ones): like bytes beside each other are what compression is for. River gauges with exponential delays,
bytes an event in the file: columns as they are 5.7, byte by byte 4.7, with differences of event times as well 5.2.
"""

from __future__ import annotations

import functools
import struct
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from strandline.core.columns import Arrival, Fault
from strandline.core.effects import Buffer
from strandline.core.records import (
    ARRIVAL_FIXED_BYTES,
    FRAME_HEADER_BYTES,
    ArrivalBody,
    FaultRow,
    Kind,
    decode_arrival,
    decode_faults,
)

Int64s = NDArray[np.int64]

_HEAD = struct.Struct("<IIIIIIQ")  # records, requests, events, identities, line numbers, small records, table bytes
# name, dtype, whether differences are written; in the order of the file. What counts their items is `_counts`.
_RECORD_COLUMNS = (("kinds", "<u1", False), ("lsns", "<i8", True))
_REQUEST_COLUMNS = (
    ("arrived", "<i8", True),
    ("counts", "<u4", False),
    ("fault_counts", "<u4", False),
    ("flags", "<u1", False),
    ("payload_bytes", "<u8", False),
    ("raw_bytes", "<u8", False),
    ("table_bytes", "<u4", False),
)
_EVENT_COLUMNS = (("times", "<i8"), ("lengths", "<u4"), ("sources", "<u4"))
HAS_IDENTITIES, HAS_LINE_NUMBERS = 1, 2


class Record(NamedTuple):
    """One record: `request` is the number of its request in the block for an arrival, `body` what any other holds."""

    kind: int
    lsn: int
    request: int
    body: memoryview


@dataclass(slots=True)
class Gathered:
    """Records that wait to become a block. Columns are kept as they come and joined at the end."""

    kinds: list[int] = field(default_factory=list)
    lsns: list[int] = field(default_factory=list)
    requests: list[tuple[int, int, int, int, int, int, int]] = field(default_factory=list)
    columns: dict[str, list[NDArray[Any]]] = field(default_factory=dict)
    smalls: list[bytes] = field(default_factory=list)
    tables: list[bytes] = field(default_factory=list)
    lines: list[Buffer] = field(default_factory=list)
    events: int = 0
    line_bytes: int = 0

    def add_small(self, kind: int, lsn: int, body: Buffer) -> None:
        """A record that is no arrival's."""
        self.kinds.append(kind)
        self.lsns.append(lsn)
        self.smalls.append(bytes(body))

    def add_arrival(self, lsn: int, body: Buffer) -> int:
        """An arrival's record; its arrival clock. Raises as `decode_arrival`."""
        view = memoryview(body)
        found = decode_arrival(view, lsn)
        begin = lsn + FRAME_HEADER_BYTES
        lines, raws = found.payload_place - begin, found.faults_place - begin
        table = raws + sum(row.length for row in found.faults)
        flags = (found.identities is not None) * HAS_IDENTITIES + (found.line_numbers is not None) * HAS_LINE_NUMBERS
        self.kinds.append(Kind.ARRIVAL)
        self.lsns.append(lsn)
        self.requests.append(
            (
                found.arrived_ns,
                len(found.times),
                len(found.faults),
                flags,
                raws - lines,
                table - raws,
                len(view) - table,
            )
        )
        self._keep("times", found.times)
        self._keep("lengths", found.lengths)
        self._keep("sources", found.sources)
        self._keep("identities", found.identities)
        self._keep("line_numbers", found.line_numbers)
        if table > lines:
            self.lines.append(view[lines:table])
        if len(view) > table:
            self.tables.append(bytes(view[table:]))
        self.events += len(found.times)
        self.line_bytes += table - lines
        return found.arrived_ns

    def _keep(self, name: str, column: NDArray[Any] | None) -> None:
        if column is not None and len(column):
            self.columns.setdefault(name, []).append(column)

    def encoded(self) -> bytes:
        """The block's content."""
        requests = np.array(self.requests, dtype=np.int64).reshape(-1, len(_REQUEST_COLUMNS))
        identities, numbers = self._joined("identities", "<u8"), self._joined("line_numbers", "<i8")
        tables = b"".join(self.tables)
        sizes = len(self.kinds), len(requests), self.events, len(identities), len(numbers), len(self.smalls)
        parts = [
            _HEAD.pack(*sizes, len(tables)),
            _packed(np.array(self.kinds, dtype="<u1"), False),
            _packed(np.array(self.lsns, dtype="<i8"), True),
        ]
        for place, (_, dtype, differences) in enumerate(_REQUEST_COLUMNS):
            parts.append(_packed(requests[:, place].astype(dtype), differences))
        for name, dtype in _EVENT_COLUMNS:
            parts.append(_packed(self._joined(name, dtype), False))
        parts += [_packed(identities, False), _packed(numbers, True)]
        parts.append(_packed(np.array([len(small) for small in self.smalls], dtype="<u4"), False))
        return b"".join([*parts, tables, *self.smalls])

    def _joined(self, name: str, dtype: str) -> NDArray[Any]:
        return np.concatenate(self.columns[name]) if name in self.columns else np.empty(0, dtype)


def _packed(column: NDArray[Any], differences: bool) -> bytes:
    if differences:
        column = np.diff(column, prepend=column.dtype.type(0))
    return np.ascontiguousarray(column).view(np.uint8).reshape(len(column), -1).T.tobytes() if len(column) else b""


class _Cursor:
    """Takes columns out of a block's content one after the other. Raises ValueError where it is cut short."""

    def __init__(self, content: memoryview) -> None:
        self._flat = np.frombuffer(content, np.uint8)
        self.offset = 0

    def take(self, size: int) -> NDArray[np.uint8]:
        if size > len(self._flat) - self.offset:
            raise ValueError("the block is shorter than it says")
        found = self._flat[self.offset : self.offset + size]
        self.offset += size
        return found

    def column(self, dtype: str, count: int, differences: bool) -> NDArray[Any]:
        values = _unpacked(self.octets(dtype, count), dtype)
        return np.cumsum(values, dtype=values.dtype) if differences else values

    def octets(self, dtype: str, count: int) -> NDArray[np.uint8]:
        """A column as it was packed, for `_unpacked`."""
        size = np.dtype(dtype).itemsize
        return self.take(count * size).reshape(size, count)


def _unpacked(octets: NDArray[np.uint8], dtype: str) -> NDArray[Any]:
    """Items from their bytes. Octet by octet takes 2.0 ns for eight of them, numpy's own transposed copy 3.2."""
    size, count = octets.shape
    items = np.empty((count, size), dtype=np.uint8)
    for place in range(size):
        items[:, place] = octets[place]
    return items.view(dtype).reshape(count)


class Block:
    """Records in columns. `first_line` is where its lines stand in the capture. Raises ValueError where it is none.

    By record: `kinds`, `lsns`. By request: `arrived` (ns), `counts` of events, `payload_bytes`, `first_event` and more.
    By event: `times`, `lengths`, `sources`; `identities` and `line_numbers` of the requests that have them.
    """

    def __init__(self, content: memoryview, first_line: int) -> None:
        if len(content) < _HEAD.size:
            raise ValueError("the block is shorter than it says")
        records, requests, events, identities, numbers, smalls, table_bytes = _HEAD.unpack_from(content)
        cursor = _Cursor(content)
        cursor.take(_HEAD.size)
        found: dict[str, NDArray[Any]] = {}
        for columns, count in ((_RECORD_COLUMNS, records), (_REQUEST_COLUMNS, requests)):
            for name, dtype, differences in columns:
                found[name] = cursor.column(dtype, count, differences)
        # By event: unpacked when they are asked for, since a pass for advice asks for two of these five.
        self._packed = {name: cursor.octets(dtype, events) for name, dtype in _EVENT_COLUMNS}
        self.events = events
        self.kinds, self.lsns = found["kinds"], found["lsns"]
        self.arrived, self.counts, self.flags = found["arrived"], found["counts"].astype(np.int64), found["flags"]
        self.fault_counts, self.table_bytes = found["fault_counts"], found["table_bytes"].astype(np.int64)
        self.payload_bytes = found["payload_bytes"].astype(np.int64)
        self.raw_bytes = found["raw_bytes"].astype(np.int64)
        self._packed["identities"] = cursor.octets("<u8", identities)
        self._numbers = cursor.column("<i8", numbers, True)
        small_bytes = cursor.column("<u4", smalls, False).astype(np.int64)
        self._tables = cursor.take(table_bytes).data
        self._smalls = cursor.take(int(small_bytes.sum())).data
        if cursor.offset != len(content):
            raise ValueError("the block is longer than it says")
        self._small_ends = np.cumsum(small_bytes).tolist()
        self._require_sound(small_bytes, table_bytes)
        self._place(first_line)

    @functools.cached_property
    def times(self) -> NDArray[np.int64]:
        """Event times, ns."""
        return _unpacked(self._packed["times"], "<i8")

    @functools.cached_property
    def lengths(self) -> NDArray[np.uint32]:
        """Bytes of each event's line."""
        return _unpacked(self._packed["lengths"], "<u4")

    @functools.cached_property
    def sources(self) -> NDArray[np.uint32]:
        """Source numbers."""
        return _unpacked(self._packed["sources"], "<u4")

    @functools.cached_property
    def _identities(self) -> NDArray[np.uint64]:
        return _unpacked(self._packed["identities"], "<u8")

    def _require_sound(self, small_bytes: Int64s, table_bytes: int) -> None:
        arrivals = int(np.count_nonzero(self.kinds == Kind.ARRIVAL))
        sound = (
            arrivals == len(self.counts)
            and arrivals + len(small_bytes) == len(self.kinds)
            and int(self.counts.sum()) == self.events
            and int(self.counts[(self.flags & HAS_IDENTITIES) > 0].sum()) == self._packed["identities"].shape[1]
            and int(self.counts[(self.flags & HAS_LINE_NUMBERS) > 0].sum()) == len(self._numbers)
            and int(self.table_bytes.sum()) == table_bytes
        )
        if not sound:
            raise ValueError("the columns of the block contradict each other")

    def _place(self, first_line: int) -> None:
        """Where each request's events, lines, identities, line numbers and tables begin."""
        self.first_event = _starts(self.counts)
        self.first_line = _starts(self.payload_bytes + self.raw_bytes) + first_line
        self._first_identity = _starts(self.counts * ((self.flags & HAS_IDENTITIES) > 0)).tolist()
        self._first_number = _starts(self.counts * ((self.flags & HAS_LINE_NUMBERS) > 0)).tolist()
        self._first_table = _starts(self.table_bytes).tolist()

    def records(self) -> Iterator[Record]:
        """The records in their order."""
        request = small = begin = 0
        empty = memoryview(b"")
        for kind, lsn in zip(self.kinds.tolist(), self.lsns.tolist(), strict=True):
            if kind == Kind.ARRIVAL:
                yield Record(kind, lsn, request, empty)
                request += 1
            else:
                end = self._small_ends[small]
                yield Record(kind, lsn, -1, self._smalls[begin:end])
                small, begin = small + 1, end

    def smalls(self, *kinds: Kind) -> Iterator[tuple[Kind, memoryview]]:
        """The records of these kinds, which are no arrivals' and no mark's, without a look at the others."""
        small = self.kinds[self.kinds != Kind.ARRIVAL]
        for place in np.flatnonzero(np.isin(small, kinds)).tolist():
            begin = self._small_ends[place - 1] if place else 0
            yield Kind(int(small[place])), self._smalls[begin : self._small_ends[place]]

    def event_arrivals(self) -> Int64s:
        """The arrival clock of each event's request."""
        return np.repeat(self.arrived, self.counts)

    def faults(self, request: int) -> Sequence[FaultRow]:
        """The faulty lines of a request. Raises msgspec errors."""
        if not self.fault_counts[request]:
            return []
        begin = self._first_table[request]
        return decode_faults(self._tables[begin : begin + int(self.table_bytes[request])])

    def _columns(self, request: int) -> dict[str, Any]:
        begin, count, flags = int(self.first_event[request]), int(self.counts[request]), int(self.flags[request])
        identity, number = self._first_identity[request], self._first_number[request]
        return {
            "times": self.times[begin : begin + count],
            "lengths": self.lengths[begin : begin + count],
            "sources": self.sources[begin : begin + count],
            "identities": self._identities[identity : identity + count] if flags & HAS_IDENTITIES else None,
            "line_numbers": self._numbers[number : number + count] if flags & HAS_LINE_NUMBERS else None,
        }

    def payload_place(self, request: int, lsn: int) -> int:
        """Where in the journal the lines of the request stood, whose record stood at `lsn`."""
        flags = int(self.flags[request])
        row = 16 + 8 * (flags & HAS_IDENTITIES) + 4 * (flags & HAS_LINE_NUMBERS)
        return lsn + FRAME_HEADER_BYTES + ARRIVAL_FIXED_BYTES + row * int(self.counts[request])

    def arrival_body(self, request: int, lsn: int) -> ArrivalBody:
        """The arrival's record at `lsn`, as `decode_arrival` read it when it was captured."""
        place = self.payload_place(request, lsn)
        return ArrivalBody(
            arrived_ns=int(self.arrived[request]),
            faults=self.faults(request),
            payload_place=place,
            faults_place=place + int(self.payload_bytes[request]),
            **self._columns(request),
        )

    def arrival(self, request: int, payload: memoryview, new_sources: Sequence[str] = ()) -> Arrival:
        """The request as it was decoded. `payload`: its lines, or anything of that length where nobody reads them.

        The raw bytes of its faulty lines are zeros: no decision looks at them.
        """
        faults = [Fault(row.line, row.reason, row.detail, bytes(row.length)) for row in self.faults(request)]
        return Arrival(payload=payload, new_sources=new_sources, faults=faults, **self._columns(request))

    def record_bytes(self, request: int) -> int:
        """Bytes of the body of the arrival's record."""
        columns = self.payload_place(request, 0) - FRAME_HEADER_BYTES
        return columns + int(self.payload_bytes[request] + self.raw_bytes[request] + self.table_bytes[request])


def _starts(sizes: Int64s) -> Int64s:
    return np.cumsum(sizes) - sizes

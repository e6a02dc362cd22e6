"""Renders rows of a trace as NDJSON lines of the invented river gauges, and cuts them into request bodies.

Every line of one trace has the same width (names are padded behind their closing quote, numbers in front, both with
white space that JSON ignores), so that rendering is a handful of numpy passes over a table of bytes.
No sending and no generating lives here.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from itertools import pairwise
from typing import Literal, NamedTuple

import msgspec
import numpy as np
from numpy.typing import NDArray

from .trace import Int64s, Trace

Bytes = NDArray[np.uint8]
Unit = Literal["rfc3339", "ns"]

DAY_NS = 86_400 * 1_000_000_000
BLOCK_ROWS = 10_000  # rows rendered at a time: 7 MB of lines
EVENT_BYTES_AT_MOST = 1_000_000
_FILLER = b"reading taken by the gauge's float and checked against the pressure cell; weed cleared from the screen. "
_FOUR_DIGITS = np.frombuffer(b"".join(b"%04d" % number for number in range(10_000)), np.uint8).reshape(-1, 4)


class Reading(NamedTuple):
    """A member whose value hangs on the event's id alone: scattered, and the same for every copy.

    Values run from `least` on, `values` of them, in units of the last decimal; all have the same number of digits.
    """

    name: bytes
    factor: int  # scatters
    decimals: int
    least: int
    values: int

    @property
    def key(self) -> bytes:
        """What stands before the value."""
        return b',"%b":' % self.name

    @property
    def width(self) -> int:
        """Bytes with the key."""
        return len(self.key) + len(str(self.least)) + 1

    def rendered(self, ids: Int64s) -> list[bytes | Bytes]:
        """Key and decimal number, in pieces."""
        whole = len(str(self.least)) - self.decimals
        table = _digits(self.least + (ids * self.factor >> 7) % self.values, whole + self.decimals)
        return [self.key, table[:, :whole], b".", table[:, whole:]]


READINGS = (
    Reading(b"level", 2_654_435_761, 2, 100, 600),  # m
    Reading(b"flow", 2_246_822_519, 1, 100, 900),  # m3/s
    Reading(b"water", 3_266_489_917, 1, 20, 80),  # degrees Celsius
    Reading(b"air", 668_265_263, 1, 100, 150),  # degrees Celsius
    Reading(b"rain", 374_761_393, 1, 10, 90),  # mm
    Reading(b"battery", 2_869_860_233, 1, 118, 20),  # V
)


@dataclass(frozen=True, slots=True)
class Style:
    """How events look: nine members, some 150 bytes.

    `time_unit`: how `observed_at` is written: rfc3339 (nine decimals, Z) or ns (an integer). `event_bytes`: a line's
    length with its line feed (0: as it comes). A shorter line has fewer readings, down to time, station and id; a
    longer one has a note.
    """

    time_unit: Unit = "rfc3339"
    event_bytes: int = 0

    def __post_init__(self) -> None:
        if self.time_unit not in ("rfc3339", "ns"):
            raise ValueError(f"time_unit is {self.time_unit!r}; it must be rfc3339 or ns")
        if not 0 <= self.event_bytes <= EVENT_BYTES_AT_MOST:
            raise ValueError(f"event_bytes is {self.event_bytes}; it must be 0 to {EVENT_BYTES_AT_MOST:,}")


@dataclass(frozen=True, slots=True)
class Body:
    """One request: rows start to stop (exclusive) of the trace. It can leave when its last event has arrived."""

    number: int
    start: int
    stop: int
    due_ns: int
    payload: bytes

    def __len__(self) -> int:
        return self.stop - self.start


def cut_by_count(trace: Trace, events: int) -> Int64s:
    """Bounds of bodies of `events` rows each (the last may be shorter): body i is rows bounds[i] to bounds[i + 1]."""
    if events < 1:
        raise ValueError(f"a body of {events} events: it must be at least 1")
    return np.unique(np.append(np.arange(0, len(trace), events, dtype=np.int64), len(trace)))


def cut_by_window(trace: Trace, window_ns: int, events_at_most: int = BLOCK_ROWS) -> Int64s:
    """Bounds of bodies that hold what arrived in one window of `window_ns`, cut again at events_at_most rows."""
    if window_ns < 1 or events_at_most < 1:
        raise ValueError(f"windows of {window_ns} ns and {events_at_most} events: both must be at least 1")
    windows = trace.arrivals // window_ns
    edges = np.append(0, np.flatnonzero(windows[1:] != windows[:-1]) + 1)
    edges = np.unique(np.append(edges, len(trace))).astype(np.int64)
    pieces = [np.arange(a, b, events_at_most) for a, b in pairwise(edges.tolist())]
    return np.unique(np.concatenate([*pieces, edges[-1:]])).astype(np.int64)


def bodies(trace: Trace, bounds: Int64s, style: Style | None = None) -> Iterator[Body]:
    """The bodies between the bounds, rendered as they are asked for, a block of rows at a time."""
    renderer = Renderer(trace, style or Style())
    block, first, last = b"", 0, 0
    for number, (start, stop) in enumerate(pairwise(bounds.tolist())):
        if stop > last:
            first = start
            reach = int(np.searchsorted(bounds, start + BLOCK_ROWS, side="right")) - 1
            last = max(stop, int(bounds[reach]))
            block = renderer.lines(first, last)
        width = renderer.width
        payload = block[(start - first) * width : (stop - first) * width]
        yield Body(number, start, stop, int(trace.arrivals[stop - 1]), payload)


class Renderer:
    """Turns rows of one trace into lines. `width`: bytes of every line, its line feed included."""

    def __init__(self, trace: Trace, style: Style) -> None:
        self._trace, self._unit = trace, style.time_unit
        self._names = _padded([msgspec.json.encode(name) for name in trace.source_names])
        self._id_width, self._time_width = _width(trace.ids), _width(trace.times)
        self._readings: list[Reading] = []
        self._end = b"}\n"
        self.width = len(self.lines(0, 1)) if len(trace) else 0
        self._fit(style.event_bytes)

    def _fit(self, event_bytes: int) -> None:
        """As many readings as fit (0: all), and then a note, or where not even that fits, spaces."""
        for reading in READINGS:
            if 0 < event_bytes < self.width + reading.width:
                break
            self._readings.append(reading)
            self.width += reading.width
        spare = max(0, event_bytes - self.width)
        begin, end = b',"note":"', b'"}\n'
        note = spare + len(self._end) - len(begin + end)
        self._end = begin + _text(note) + end if note >= 0 else b" " * spare + self._end
        self.width += spare

    def lines(self, start: int, stop: int) -> bytes:
        """Rows start to stop (exclusive), a line each."""
        trace = self._trace
        times, ids = trace.times[start:stop], trace.ids[start:stop]
        columns: list[bytes | Bytes] = [
            b'{"observed_at":',
            *([_spaced(times, self._time_width)] if self._unit == "ns" else [b'"', *_rfc3339(times), b'"']),
            b',"station":',
            self._names.take(trace.sources[start:stop], axis=0),
            b',"id":',
            _spaced(ids, self._id_width),
        ]
        for reading in self._readings:
            columns += reading.rendered(ids)
        columns.append(self._end)
        return _joined(columns, stop - start)


def _joined(columns: list[bytes | Bytes], rows: int) -> bytes:
    """Rows of bytes: what is the same in every row is laid down once for all, then the columns are filled in."""
    fixed = b"".join(c if isinstance(c, bytes) else bytes(c.shape[1]) for c in columns)
    table = np.empty((rows, len(fixed)), dtype=np.uint8)
    table[:] = np.frombuffer(fixed, np.uint8)
    at = 0
    for column in columns:
        width = len(column) if isinstance(column, bytes) else column.shape[1]
        if not isinstance(column, bytes):
            table[:, at : at + width] = column
        at += width
    return table.tobytes()


def _padded(texts: list[bytes]) -> Bytes:
    """A row of bytes for each text, filled with spaces behind it."""
    width = max(map(len, texts), default=0)
    return np.frombuffer(b"".join(text.ljust(width) for text in texts), np.uint8).reshape(-1, width)


def _width(values: Int64s) -> int:
    """Characters that the longest of the integers takes."""
    return max(len(str(int(values.min()))), len(str(int(values.max())))) if len(values) else 1


def _digits(values: Int64s, width: int) -> Bytes:
    """The last `width` decimal digits of values that are not negative, four at a time out of a table."""
    table = np.empty((len(values), -(-width // 4) * 4), dtype=np.uint8)
    rest = values
    for end in range(table.shape[1], 0, -4):
        above = rest // 10_000
        table[:, end - 4 : end] = _FOUR_DIGITS.take(rest - above * 10_000, axis=0)
        rest = above
    return table[:, table.shape[1] - width :]


def _spaced(values: Int64s, width: int) -> Bytes:
    """Integers, right-aligned in `width` places, with spaces in front and a minus sign where one is needed."""
    size = np.abs(values)
    table = _digits(size, width)
    if len(values) and int(values.min()) >= 10 ** (width - 1):
        return table  # the common case: nothing to fill
    filled = np.ones(len(values), dtype=np.int64)
    power = 10
    while width > 1 and power <= 10**18 and np.any(size >= power):
        filled += size >= power
        power *= 10
    places = np.arange(width)
    table[places < (width - filled)[:, None]] = ord(" ")
    negative = np.flatnonzero(values < 0)
    table[negative, width - filled[negative] - 1] = ord("-")
    return table


def _rfc3339(times: Int64s) -> list[bytes | Bytes]:
    """`YYYY-MM-DDThh:mm:ss.nnnnnnnnnZ` in pieces. The calendar is asked once for each day that occurs."""
    days = times // DAY_NS
    rest = times - days * DAY_NS
    second = rest // 1_000_000_000
    minute = second // 60
    known, of = np.unique(days, return_inverse=True)
    dates = _padded([str(np.datetime64(int(day), "D")).encode() + b"T" for day in known])
    clock = _digits(minute // 60 * 10_000 + minute % 60 * 100 + second % 60, 6)
    fraction = _digits(rest - second * 1_000_000_000, 9)
    return [dates.take(of, axis=0), clock[:, :2], b":", clock[:, 2:4], b":", clock[:, 4:], b".", fraction, b"Z"]


def _text(length: int) -> bytes:
    """Plain text of that length."""
    return (_FILLER * (length // len(_FILLER) + 1))[:length]

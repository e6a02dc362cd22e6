"""The columns that events travel in: what an arrival brings, what a batch takes away.

Here live the layout of a held event, the arrival (one request, decoded) and the batch (a piece of output). No decoding,
no ordering and no decisions live here. An event is never a Python object on this path: it is a row of

    times  int64    event time, ns since 1970 UTC
    refs   REF      place int64 (where its line starts in the journal), length uint32 (bytes of the line, without the
                    line feed that follows it there), source uint32 (number of its source)

that is 24 bytes an event, whatever its line weighs. `refs` is one structured column, not three: numpy moves
a 16-byte item nearly as fast as an 8-byte one (0.85 against 0.58 ns, measured), so a merge moves two columns, not four.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

Times = NDArray[np.int64]
Refs = NDArray[np.void]
Lane = Literal["ordered", "late", "quarantine"]

REF = np.dtype([("place", "<i8"), ("length", "<u4"), ("source", "<u4")])
# The same 16 bytes without their fields: numpy copies and joins these whole, structured ones field by field (0.3 and
# 0.5 against 3.4 and 3.6 ns an item), so runs and merges move ROWs and a batch shows them as REFs.
ROW = np.dtype("V16")
NO_SOURCE = 2**32 - 1
TIME_MIN = -(2**63)
TIME_MAX = 2**63 - 1


@dataclass(frozen=True, slots=True)
class Fault:
    """One line of a request that cannot be an event of its feed. `line` counts from 1 (array items do too)."""

    line: int
    reason: str  # one of strandline.errors.FAULT_REASONS
    detail: str  # a sentence that a person can act on
    raw: bytes  # the line as it came, at most event_bytes_at_most bytes of it


@dataclass(frozen=True, slots=True)
class Arrival:
    """One request, decoded: n events that arrive at the same instant, and the lines that are none.

    `payload` holds the n lines one after the other, each followed by one line feed and free of any other, so that
    len(payload) == lengths.sum() + n. `sources` are numbers from the feed's own table; a number at or above the table's
    length L means new_sources[number - L]. `line_numbers` is None where event i came on line i + 1. `identities` (for
    feeds with an `id`) are 64-bit digests of source and id, None otherwise.
    """

    times: Times  # int64[n]
    sources: NDArray[np.uint32]  # uint32[n]
    lengths: NDArray[np.uint32]  # uint32[n]
    payload: bytes | memoryview
    new_sources: Sequence[str] = ()
    line_numbers: NDArray[np.int64] | None = None
    faults: Sequence[Fault] = ()
    identities: NDArray[np.uint64] | None = None

    @property
    def received(self) -> int:
        """Events of the request, good and faulty."""
        return len(self.times) + len(self.faults)


@dataclass(frozen=True, slots=True)
class RequestKey:
    """A request's idempotency key, and a fingerprint of what it brought."""

    text: str
    fingerprint: bytes


@dataclass(frozen=True, slots=True)
class QuarantineEntry:
    """Why one line is in quarantine, and where in the journal it lies."""

    line: int
    reason: str
    detail: str
    place: int
    length: int


@dataclass(frozen=True, slots=True)
class Batch:
    """A piece of output with a number; numbers count from 1 within a lane and never repeat.

    lane "ordered": a release or a part of one, times ascending. lane "late": the late events of one arrival, in order
    of arrival, `behind_ns` is the watermark that they came behind (where each source has its own: the greatest of
    them, and `own_behind` has each row's). lane "quarantine": `entries` instead of rows.
    `ready_lsn` is the end of the record that justifies the batch: it may leave when the journal is synced up to there.
    `instant_ns` is the arrival clock of that record.
    """

    lane: Lane
    number: int
    times: Times  # int64[n]
    refs: Refs  # REF[n]
    instant_ns: int
    ready_lsn: int
    behind_ns: int = TIME_MIN
    entries: Sequence[QuarantineEntry] = field(default=())
    own_behind: Times | None = None

    @property
    def behind(self) -> Times:
        """The watermark that each row came behind."""
        return np.full(len(self.times), self.behind_ns) if self.own_behind is None else self.own_behind

    def __len__(self) -> int:
        return len(self.entries) if self.lane == "quarantine" else len(self.times)


def least_of(times: Times) -> int:
    """Least time of a column with at least one row: by its place, at a third of what a reduction costs (0.2 us)."""
    return int(times.item() if len(times) == 1 else times.item(times.argmin()))


def greatest_of(times: Times) -> int:
    """Greatest time of a column with at least one row."""
    return int(times.item() if len(times) == 1 else times.item(times.argmax()))


def empty_times() -> Times:
    """A time column without rows."""
    return np.empty(0, dtype=np.int64)


def empty_refs() -> Refs:
    """A ref column without rows."""
    return np.empty(0, dtype=REF)


def grown(column: NDArray[Any], size: int, fill: int | bool) -> NDArray[Any]:
    """A longer column that begins with these rows; `fill` in those behind them."""
    result = np.full((size, *column.shape[1:]), fill, dtype=column.dtype)
    result[: len(column)] = column
    return result


def distances(newest: int | Times, times: Times) -> Times:
    """newest minus each time, at least 0 and at most TIME_MAX: int64 times can lie further apart than int64 holds."""
    above = np.asarray(newest, dtype=np.int64)
    result = (above.view(np.uint64) - np.minimum(times, above).view(np.uint64)).view(np.int64)
    return np.where(result < 0, TIME_MAX, result)


def as_rows(refs: Refs) -> Refs:
    """The same column without its fields (no copy)."""
    return refs.view(ROW)


def as_refs(rows: Refs) -> Refs:
    """The same column with its fields (no copy)."""
    return rows.view(REF)


def require_consistent(arrival: Arrival, known: Mapping[str, int]) -> None:
    """Raise ValueError for what could not be folded: a record that is written stands for ever."""
    rows, names, sources, lengths = len(arrival.times), arrival.new_sources, arrival.sources, arrival.lengths
    if not len(sources) == len(lengths) == rows or not _fits(arrival.identities, arrival.line_numbers, rows):
        raise ValueError("an arrival's columns must have equal lengths")
    if rows == 1:
        greatest, length = sources.item(), lengths.item()
    else:
        greatest, length = sources.item(sources.argmax()) if rows else 0, int(np.add.reduce(lengths, dtype=np.int64))
    if rows and greatest >= len(known) + len(names):
        raise ValueError(f"an arrival names source {greatest}, {len(known) + len(names)} are known")
    if len(arrival.payload) != length + rows:
        raise ValueError(f"an arrival's payload of {len(arrival.payload)} bytes is not the sum of its lines")
    if names and (len(set(names)) < len(names) or any(name in known for name in names)):
        raise ValueError("an arrival's new sources have numbers already: decode it against the present table")


def _fits(identities: NDArray[np.uint64] | None, line_numbers: NDArray[np.int64] | None, rows: int) -> bool:
    """Whether the columns that an arrival may lack have so many rows where it has them."""
    return (identities is None or len(identities) == rows) and (line_numbers is None or len(line_numbers) == rows)

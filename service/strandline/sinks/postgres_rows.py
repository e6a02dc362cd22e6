"""Batches as the rows of PostgreSQL tables: the tables' shapes, and blocks of rows ready for COPY.

Runs in the sink's own thread, since the journal's lines are read here. No server and no connection lives here.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from ..core.columns import NO_SOURCE, Batch
from ..errors import StrandlineError
from ..ports import Lines
from .postgres_columns import ASIDE_TABLE, DEFAULT, Column, holds_events
from .postgres_copy import HEAD, NULL, OF_TYPE, TAIL, chosen, constant, numbers, raw, rows_of, with_length
from .postgres_copy import Column as Encoded
from .postgres_fields import Fields, Values, microseconds, storable
from .rows import late_by_ns

# The late table always has this shape: what is mapped for the ordered one can be had from `event` by a query.
LATE = (
    *(column for column in DEFAULT if column.value != "event"),
    Column("arrived_ns", "arrived_ns", type="bigint"),
    Column("late_by_ns", "late_by_ns", type="bigint"),
    DEFAULT[-1],
)
# Ordered rows that their table cannot hold, whole, with the reason: only for a table without the events' own bytes.
ASIDE = (Column("table_name", "table_name", type="text"), *DEFAULT, Column("detail", "detail", type="text"))
POSITIONS = (
    Column("feed", "feed", type="text"),
    Column("lane", "lane", type="text"),
    Column("table_name", "table_name", type="text"),
    Column("batch", "batch", type="bigint"),
)
ASIDE_KEY = ("table_name", "feed", "batch", "position")
POSITION_KEY = ("feed", "lane", "table_name")


@dataclass(frozen=True, slots=True)
class Rows:
    """Rows for one table in the binary COPY format, without its head and tail; columns in the order of `names`."""

    table: str
    names: tuple[str, ...]
    block: bytes


@dataclass(frozen=True, slots=True)
class Piece:
    """Some rows of one lane. All blocks of a lane's `rows` together are the data of one COPY, with head and tail.

    `aside`: the rows that do not fit, as the data of a COPY of their own.
    """

    rows: Rows
    aside: Rows | None
    last: bool


class RowMaker:
    """Makes rows of one feed's batches. Columns must be settled (`postgres_columns.settled`)."""

    def __init__(self, feed: str, table: str, late_table: str, columns: Sequence[Column]) -> None:
        self._feed, self._table, self._late_table = storable(feed), table, late_table
        self._columns = columns
        # The event as jsonb is looked into like a field; everything else with a value is known without that.
        looked_at = [index for index, column in enumerate(columns) if column.at or column.type == "jsonb"]
        self._looked_at = [columns[index] for index in looked_at]
        self._places = {index: place for place, index in enumerate(looked_at)}
        self._fields = Fields(self._looked_at)
        self.sets_aside = bool(self._looked_at) and not holds_events(columns)

    def pieces(self, batches: Sequence[Batch], lines: Lines, rows_at_most: int) -> Iterator[Piece]:
        """Rows of batches of one lane (at least one batch), some `rows_at_most` at a time.

        So memory is bounded by a piece, whatever a batch weighs, and the next one can be made while one is sent.
        """
        gathered: list[Rows] = []
        rows, head = 0, HEAD
        for batch in batches:
            for part in _parts(batch, lines, rows_at_most):
                if gathered and rows + len(part.batch) > rows_at_most:
                    yield _piece(gathered, head, b"")
                    gathered, rows, head = [], 0, b""
                gathered += self._late(part) if batch.lane == "late" else self._ordered(part)
                rows += len(part.batch)
        yield _piece(gathered, head, TAIL)

    def _ordered(self, part: _Part) -> list[Rows]:
        """Rows of the table and, where some do not fit, those of the table beside it."""
        found, unfit = self._fields.read(part.block, len(part.batch))
        aside = sorted(unfit) if self.sets_aside else []
        if not aside:
            return [self._fitting(part, found)]
        kept = [row for row in range(len(part.batch)) if row not in unfit]
        found = [[values[row] for row in kept] for values in found]
        return [self._fitting(part.picked(kept), found), self._aside(part.picked(aside), [unfit[row] for row in aside])]

    def _fitting(self, part: _Part, found: Sequence[Values]) -> Rows:
        known = _Known(self._feed, part)
        columns = []
        for index, column in enumerate(self._columns):
            place = self._places.get(index)
            columns.append(known[column.value] if place is None else OF_TYPE[column.type](found[place]))
        names = tuple(column.name for column in self._columns)
        return Rows(self._table, names, rows_of(columns, len(part.batch)))

    def _aside(self, part: _Part, unfit: Sequence[Sequence[int]]) -> Rows:
        known = _Known(self._feed, part)
        columns = []
        for column in ASIDE:
            if column.value == "table_name":
                columns.append(constant(self._table, len(unfit)))
            elif column.value == "detail":
                columns.append(raw([self._detail(indices).encode() for indices in unfit]))
            else:
                columns.append(known[column.value])
        return Rows(ASIDE_TABLE, tuple(column.name for column in ASIDE), rows_of(columns, len(unfit)))

    def _detail(self, indices: Sequence[int]) -> str:
        names = (f"{column.name} ({column.type})" for column in map(self._looked_at.__getitem__, indices))
        return f"does not fit: {', '.join(names)}"

    def _late(self, part: _Part) -> list[Rows]:
        known = _Known(self._feed, part)
        block = rows_of([known[column.value] for column in LATE], len(part.batch))
        return [Rows(self._late_table, tuple(column.name for column in LATE), block)]


def _piece(gathered: Sequence[Rows], head: bytes, tail: bytes) -> Piece:
    """What was gathered, as one block a table."""
    first, *others = gathered
    aside = [rows for rows in others if rows.table == ASIDE_TABLE]
    main = [first.block, *(rows.block for rows in others if rows.table != ASIDE_TABLE)]
    return Piece(
        replace(first, block=b"".join([head, *main, tail])),
        replace(aside[0], block=b"".join([HEAD, *(rows.block for rows in aside), TAIL])) if aside else None,
        last=bool(tail),
    )


# ---- batches in parts -----------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class _Part:
    """Some rows of a batch as a batch of its own, with their lines, and their positions in the whole batch."""

    batch: Batch
    positions: NDArray[np.int64]
    block: bytes
    lines: Lines

    def picked(self, rows: Sequence[int]) -> _Part:
        """These rows of it."""
        batch = replace(self.batch, times=self.batch.times[rows], refs=self.batch.refs[rows])
        events = self.events()
        block = b"".join(events[row] + b"\n" for row in rows)
        return _Part(batch, self.positions[rows], block, self.lines)

    def lengths(self) -> NDArray[np.uint32] | None:
        """How long each line is; None where that must be counted, since the block is not as long as the refs say."""
        lengths: NDArray[np.uint32] = self.batch.refs["length"]
        return lengths if int(lengths.sum(dtype=np.int64)) + len(lengths) == len(self.block) else None

    def events(self) -> list[bytes]:
        """The lines, one each row. Raises StrandlineError where the journal gave another number of them."""
        events = self.block.split(b"\n")
        if events.pop() or len(events) != len(self.batch):
            number, lane = self.batch.number, self.batch.lane
            raise StrandlineError(
                f"batch {number} of lane {lane} has {len(self.batch)} events, but the journal gave {len(events)} lines"
            )
        return events


def _parts(batch: Batch, lines: Lines, rows_at_most: int) -> Iterator[_Part]:
    """A batch in parts of so many rows; one whose block is not as long as its refs say is left whole, to be judged."""
    rows, block = len(batch), lines.ndjson(batch)
    positions = np.arange(rows, dtype=np.int64)
    ends = np.cumsum(batch.refs["length"].astype(np.int64) + 1)
    if rows <= rows_at_most or int(ends[-1]) != len(block):
        yield _Part(batch, positions, block, lines)
        return
    place = 0
    for start in range(0, rows, rows_at_most):
        stop = min(start + rows_at_most, rows)
        part = replace(batch, times=batch.times[start:stop], refs=batch.refs[start:stop])
        end = int(ends[stop - 1])
        yield _Part(part, positions[start:stop], block[place:end], lines)
        place = end


class _Known:
    """What is known of a part's events without looking into them, as columns made when they are asked for."""

    def __init__(self, feed: str, part: _Part) -> None:
        batch, rows = part.batch, len(part.batch)
        self._makers: dict[str, Callable[[], Encoded]] = {
            "feed": lambda: constant(feed, rows),
            "batch": lambda: _repeated(batch.number, rows),
            "position": lambda: numbers(part.positions, ">i8"),
            "time_ns": lambda: numbers(batch.times, ">i8"),
            "time": lambda: numbers(microseconds(batch.times), ">i8"),
            "source": lambda: _sources(batch, part.lines),
            "event": lambda: raw(part.events(), part.lengths()),
            "arrived_ns": lambda: _repeated(batch.instant_ns, rows),
            "late_by_ns": lambda: numbers(np.array(late_by_ns(batch), dtype=np.int64), ">i8"),
        }

    def __getitem__(self, value: str) -> Encoded:
        return self._makers[value]()


def _repeated(number: int, rows: int) -> Encoded:
    return numbers(np.full(rows, number, dtype=np.int64), ">i8")


def _sources(batch: Batch, lines: Lines) -> Encoded:
    """The name of each event's source; NULL where it has none. Each name is encoded once."""
    distinct, places = np.unique(batch.refs["source"], return_inverse=True)
    names = lines.source_names()
    encoded = [NULL if number == NO_SOURCE else with_length(storable(names[number]).encode()) for number in distinct]
    return chosen(encoded, places)

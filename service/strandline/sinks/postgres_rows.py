"""Batches as the rows of PostgreSQL tables: the four tables' shapes, and columns of plain values ready for COPY.

Runs in the sink's own thread, since the journal's lines are read here. No server and no connection lives here.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass
from typing import Any

from ..core.columns import Batch
from ..ports import Lines
from .postgres_columns import ASIDE_TABLE, DEFAULT, VALUES, Column, holds_events
from .postgres_fields import Fields, Values, microseconds, storable, storable_column
from .rows import event_texts, late_by_ns, source_column

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
    """Rows for one table, as columns of equal length in the order of `names`."""

    table: str
    names: tuple[str, ...]
    columns: list[Values]

    def __len__(self) -> int:
        return len(self.columns[0])

    def pieces(self, rows_at_most: int) -> Iterator[Iterator[tuple[Any, ...]]]:
        """The rows as tuples, in pieces of at most so many; nothing is copied whole."""
        for start in range(0, len(self), rows_at_most):
            yield zip(*(column[start : start + rows_at_most] for column in self.columns), strict=True)


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

    def ordered(self, batches: Sequence[Batch], lines: Lines) -> list[Rows]:
        """Rows of the table and, where some do not fit, those of the table beside it."""
        made = _columns(len(self._columns))
        aside = _columns(len(ASIDE))
        for batch in batches:
            self._add(batch, lines, made, aside)
        rows = [Rows(self._table, tuple(column.name for column in self._columns), made)]
        if aside[0]:
            rows.append(Rows(ASIDE_TABLE, tuple(column.name for column in ASIDE), aside))
        return rows

    def _add(self, batch: Batch, lines: Lines, made: list[Values], aside: list[Values]) -> None:
        known = _Known(self._feed, batch, lines)
        block = lines.ndjson(batch) if self._looked_at else b""
        found, unfit = self._fields.read(block, len(batch))
        kept = [row for row in range(len(batch)) if row not in unfit] if unfit and self.sets_aside else None
        for index, target in enumerate(made):
            place = self._places.get(index)
            whole = known[self._columns[index].value] if place is None else found[place]
            target.extend(whole if kept is None else [whole[row] for row in kept])
        if kept is not None:
            self._put_aside(known, unfit, aside)

    def _put_aside(self, known: _Known, unfit: dict[int, list[int]], aside: list[Values]) -> None:
        rows = sorted(unfit)
        for target, column in zip(aside, ASIDE, strict=True):
            if column.value == "table_name":
                target.extend([self._table] * len(rows))
            elif column.value == "detail":
                target.extend(self._detail(unfit[row]) for row in rows)
            else:
                whole = known[column.value]
                target.extend(whole[row] for row in rows)

    def _detail(self, indices: Sequence[int]) -> str:
        names = (f"{column.name} ({column.type})" for column in map(self._looked_at.__getitem__, indices))
        return f"does not fit: {', '.join(names)}"

    def late(self, batches: Sequence[Batch], lines: Lines) -> list[Rows]:
        """Rows of the late table."""
        made = _columns(len(LATE))
        for batch in batches:
            known = _Known(self._feed, batch, lines)
            for target, column in zip(made, LATE, strict=True):
                target.extend(known[column.value])
        return [Rows(self._late_table, tuple(column.name for column in LATE), made)]


def _columns(count: int) -> list[Values]:
    return [[] for _ in range(count)]


class _Known:
    """What is known of a batch's events without looking into them, each column made when it is first asked for."""

    def __init__(self, feed: str, batch: Batch, lines: Lines) -> None:
        rows = len(batch)
        self._made: dict[str, Values] = {}
        self._makers: dict[str, Callable[[], Iterable[Any]]] = {
            "feed": lambda: [feed] * rows,
            "batch": lambda: [batch.number] * rows,
            "position": lambda: range(rows),
            "time_ns": batch.times.tolist,
            "time": lambda: microseconds(batch.times),
            "source": lambda: storable_column(source_column(batch, lines)),
            "event": lambda: event_texts(batch, lines),
            "arrived_ns": lambda: [batch.instant_ns] * rows,
            "late_by_ns": lambda: late_by_ns(batch),
        }
        assert self._makers.keys() >= VALUES.keys()

    def __getitem__(self, value: str) -> Values:
        if value not in self._made:
            self._made[value] = list(self._makers[value]())
        return self._made[value]

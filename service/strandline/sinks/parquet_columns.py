"""The columns of a Parquet file as a user asks for them, by the words and rules of the PostgreSQL sink's columns.

Data and rules only, light enough for the configuration to import: no pyarrow and no values live here.
"""

from __future__ import annotations

from collections.abc import Sequence

from .postgres_columns import Column, holds_events, settled

# What the files of a lane have without any mapping, in this order.
ORDERED = tuple(Column(name, name) for name in ("time_ns", "source", "batch", "position", "event"))
ASIDE = "event_aside"
LATE_ONLY = ("arrived_ns", "late_by_ns")
OWN = (*LATE_ONLY, ASIDE)


def columns_of(columns: Sequence[Column]) -> tuple[Column, ...]:
    """The columns with nothing left open; those of ORDERED where there are none. Raises ValueError."""
    return tuple(settled(column) for column in (columns or ORDERED))


def fault_of(columns: Sequence[Column]) -> str | None:
    """Why these columns, each of which is sound, cannot make a file: the end of a sentence; None: they can."""
    held = {column.value or column.name for column in columns if not column.at}
    if columns and not held & {"time_ns", "time"}:
        return 'has no column for the time, by which readers find their rows: add { name = "time" }'
    return None


def needs_aside(columns: Sequence[Column]) -> bool:
    """Whether an event whose value does not fit its column must be kept beside it, because no column has it whole."""
    return not holds_events(columns)

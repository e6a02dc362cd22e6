"""The columns of a PostgreSQL table as a user asks for them: what each holds, of which type; names and their quoting.

Data and rules only, light enough for the configuration to import: no driver, no numpy and no values live here.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

ASIDE_TABLE, POSITION_TABLE = OWN_TABLES = ("strandline_aside", "strandline_position")

# Types by the name that the configuration uses -> the name that the server's catalogue shows.
TYPES: dict[str, str] = {
    "text": "text",
    "bigint": "bigint",
    "integer": "integer",
    "double precision": "double precision",
    "boolean": "boolean",
    "timestamptz": "timestamp with time zone",
    "jsonb": "jsonb",
}

# What is known of an event without looking into it -> its type.
VALUES: dict[str, str] = {
    "feed": "text",
    "batch": "bigint",  # number of the batch within its lane
    "position": "bigint",  # place within the batch, from 0
    "time_ns": "bigint",  # event time, ns since 1970 UTC
    "time": "timestamptz",  # the same to the microsecond, which is all that the type holds; rounded down
    "source": "text",
    "event": "text",  # the event's own bytes
}


@dataclass(frozen=True, slots=True)
class Column:
    """One column: its name, and either a name of VALUES or a JSON Pointer into the event; a type of TYPES.

    "" for `value` and `at` means the value that the column is named after, "" for `type` its natural type.
    """

    name: str
    value: str = ""
    at: str = ""
    type: str = ""


DEFAULT = tuple(Column(name, name, "", kind) for name, kind in VALUES.items())
KEY = ("feed", "batch", "position")


def settled(column: Column) -> Column:
    """The column with nothing left open. Raises ValueError with the end of a sentence that began with its name."""
    value, kind = column.value, column.type
    if value and column.at:
        raise ValueError("has both `value` and `at`: name one of them")
    if not value and not column.at:
        value = column.name
        if value not in VALUES:
            raise ValueError(f"needs `at`, a JSON Pointer into the event: by itself a name may be {', '.join(VALUES)}")
    if value and value not in VALUES:
        raise ValueError(f"has the unknown value {value!r}: there is {', '.join(VALUES)}")
    kind = kind or VALUES.get(value, "text")
    if kind not in TYPES:
        raise ValueError(f"has the unknown type {kind!r}: there is {', '.join(TYPES)}")
    if value and kind != VALUES[value] and (value, kind) != ("event", "jsonb"):
        also = " or jsonb" if value == "event" else ""
        raise ValueError(f"holds {value}, which is {VALUES[value]}{also} and never {kind}")
    return replace(column, value=value, type=kind)


def holds_events(columns: Sequence[Column]) -> bool:
    """Whether every row carries its whole event, byte for byte."""
    return any(column.value == "event" and column.type == "text" for column in columns)


def quoted(*names: str) -> str:
    """An identifier, qualified if there are several names, safe whatever it holds but U+0000."""
    return ".".join('"' + name.replace('"', '""') + '"' for name in names)


def key_of(columns: Sequence[Column]) -> tuple[str, ...]:
    """The names of the columns that tell a row's place, in the order of the output; empty where one is lacking."""
    named = {column.value: column.name for column in reversed(columns) if column.value}
    return tuple(named[value] for value in KEY) if named.keys() >= {*KEY} else ()


def definition(schema: str, table: str, columns: Sequence[Column], key: Sequence[str]) -> list[str]:
    """The statements that make a table of these columns, with its key and, where it has the time, an index on that.

    Rows come in the order of time, for which a BRIN index is enough: it costs nothing to write (no difference
    measured) and takes a few pages.
    """
    parts = [f"{quoted(column.name)} {column.type}{_not_null(column)}" for column in columns]
    if key:
        parts.append(f"PRIMARY KEY ({', '.join(map(quoted, key))})")
    statements = [f"CREATE TABLE {quoted(schema, table)} ({', '.join(parts)})"]
    time = next((column.name for column in columns if column.value == "time"), None)
    if time is not None:
        index = f"CREATE INDEX ON {quoted(schema, table)} USING brin ({quoted(time)}) WITH (autosummarize = on)"
        statements.append(index)
    return statements


def _not_null(column: Column) -> str:
    """What is always known is never null: all but a source, what is looked for in the event, and what may not fit."""
    return "" if column.at or column.value in ("source", "detail") or column.type == "jsonb" else " NOT NULL"

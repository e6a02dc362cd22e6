"""PostgreSQL's binary COPY format, column by column: values of a piece of rows in, one block of bytes out.

https://www.postgresql.org/docs/current/sql-copy.html, "Binary Format": a row is the number of its columns, and each
column its length and its bytes, big-endian; -1 is NULL. Columns of one width are put side by side by numpy; an event's
bytes go in as they came. A row of 160 bytes takes some 400 ns of processor time, 650 with its sending; as a record of
Python values that the driver encodes it took 1,000 (measured). And it happens in the sink's thread, not on the loop.
"""

from __future__ import annotations

import struct
from collections.abc import Callable, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

HEAD = b"PGCOPY\n\xff\r\n\x00" + struct.pack(">ii", 0, 0)
TAIL = struct.pack(">h", -1)
NULL = struct.pack(">i", -1)

Matrix = NDArray[np.uint8]  # rows x bytes
Pieces = list[bytes]  # one each row
Column = list[Matrix | Pieces]  # side by side
_LENGTH, _COUNT = struct.Struct(">i"), struct.Struct(">h")


def rows_of(columns: Sequence[Column], count: int) -> bytes:
    """The block of `count` rows."""
    start = np.frombuffer(_COUNT.pack(len(columns)), np.uint8)
    parts: list[Matrix | Pieces] = [np.broadcast_to(start, (count, 2))]
    for part in (part for column in columns for part in column):
        if isinstance(part, np.ndarray) and isinstance(parts[-1], np.ndarray):
            parts[-1] = np.concatenate([parts[-1], part], axis=1)
        else:
            parts.append(part)
    pieces: list[bytes] = [b""] * (count * len(parts))
    for index, part in enumerate(parts):
        pieces[index :: len(parts)] = _cut(part) if isinstance(part, np.ndarray) else part
    return b"".join(pieces)


def _cut(matrix: Matrix) -> Pieces:
    width, whole = matrix.shape[1], matrix.tobytes()
    return [whole[place : place + width] for place in range(0, len(whole), width)]


# ---- columns --------------------------------------------------------------------------------------------------------


def constant(text: str, count: int) -> Column:
    """The same text in every row."""
    return [np.broadcast_to(np.frombuffer(with_length(text.encode()), np.uint8), (count, 4 + len(text.encode())))]


def with_length(value: bytes | None) -> bytes:
    """One value of a column of any type."""
    return NULL if value is None else _LENGTH.pack(len(value)) + value


def raw(values: Pieces, lengths: NDArray[Any] | None = None) -> Column:
    """Values that are bytes already, never NULL."""
    sizes = np.fromiter(map(len, values), ">i4", len(values)) if lengths is None else lengths.astype(">i4")
    return [_bytes_of(sizes), values]


def chosen(encoded: Pieces, places: NDArray[np.int64]) -> Column:
    """Of a few values, encoded with their lengths, the one that each row's place names."""
    if len({*map(len, encoded)}) == 1:  # then all are of one width, and numpy sets them beside their neighbours
        return [np.frombuffer(b"".join(encoded), np.uint8).reshape(len(encoded), -1)[places]]
    return [list(map(encoded.__getitem__, places.tolist()))]


def numbers(values: NDArray[Any], kind: str) -> Column:
    """Numbers of one width, never NULL; `kind` is numpy's big-endian name of their type."""
    fixed = values.astype(kind)
    length = np.broadcast_to(np.frombuffer(_LENGTH.pack(fixed.itemsize), np.uint8), (len(fixed), 4))
    return [length, _bytes_of(fixed)]


def _bytes_of(values: NDArray[Any]) -> Matrix:
    return np.ascontiguousarray(values).view(np.uint8).reshape(len(values), values.itemsize)


def _numbers_or_null(kind: str) -> Callable[[Sequence[Any]], Column]:
    def column(values: Sequence[Any]) -> Column:
        nulls = [row for row, value in enumerate(values) if value is None]
        if not nulls:
            return numbers(np.array(values, dtype=kind), kind)
        filled = list(values)
        for row in nulls:
            filled[row] = 0
        pieces = _cut(np.concatenate(numbers(np.array(filled, dtype=kind), kind), axis=1))
        for row in nulls:
            pieces[row] = NULL
        return [pieces]

    return column


def _texts(values: Sequence[str | None]) -> Column:
    return [[with_length(None if value is None else value.encode()) for value in values]]


def _documents(values: Sequence[str | None]) -> Column:
    """jsonb: its text behind a byte that tells the version of the format."""
    return [[with_length(None if value is None else b"\x01" + value.encode()) for value in values]]


# A column of values, some of them None, by its type (`postgres_columns.TYPES`); timestamptz: us since 2000.
OF_TYPE: dict[str, Callable[[Sequence[Any]], Column]] = {
    "text": _texts,
    "bigint": _numbers_or_null(">i8"),
    "integer": _numbers_or_null(">i4"),
    "double precision": _numbers_or_null(">f8"),
    "boolean": _numbers_or_null("u1"),
    "timestamptz": _numbers_or_null(">i8"),
    "jsonb": _documents,
}

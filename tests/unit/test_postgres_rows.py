"""Rows for PostgreSQL's COPY: however batches are cut into pieces, the data is the same, byte by byte."""

from __future__ import annotations

import struct
from collections.abc import Sequence

import numpy as np
import pytest
from helpers_sinks import HeldLines
from hypothesis import given
from hypothesis import strategies as st
from strandline.core.columns import Batch, Lane
from strandline.errors import StrandlineError
from strandline.sinks.postgres_columns import DEFAULT, Column, settled
from strandline.sinks.postgres_copy import HEAD, OF_TYPE, TAIL, chosen, constant, numbers, raw, rows_of, with_length
from strandline.sinks.postgres_rows import RowMaker, Rows

MAPPED = [settled(Column("row", at="/row", type="integer")), settled(Column("feed")), settled(Column("x", at="/x"))]
ODD = [settled(Column("position")), settled(Column("odd", at="/odd", type="boolean"))]  # every other one does not fit


def data_of(maker: RowMaker, batches: Sequence[Batch], lines: HeldLines, rows_at_most: int) -> tuple[bytes, list[Rows]]:
    """All blocks of the COPY, and what goes aside."""
    pieces = list(maker.pieces(batches, lines, rows_at_most))
    assert [piece.last for piece in pieces] == [False] * (len(pieces) - 1) + [True]
    return b"".join(piece.rows.block for piece in pieces), [piece.aside for piece in pieces if piece.aside]


def rows_in(data: bytes) -> list[list[bytes | None]]:
    """The format read back by its description, without any code of the sink."""
    assert data.startswith(HEAD) and data.endswith(b"\xff\xff")
    place, rows = len(HEAD), []
    while (count := struct.unpack_from(">h", data, place)[0]) != -1:
        place += 2
        row: list[bytes | None] = []
        for _ in range(count):
            length = struct.unpack_from(">i", data, place)[0]
            place += 4
            row.append(None if length == -1 else data[place : place + length])
            place += max(length, 0)
        rows.append(row)
    assert place + 2 == len(data)
    return rows


@given(
    st.lists(st.integers(0, 25), min_size=1, max_size=5),
    st.integers(1, 40),
    st.sampled_from([DEFAULT, MAPPED, ODD]),
    st.sampled_from(["ordered", "late"]),
)
def test_however_batches_are_cut_the_data_is_the_same(
    sizes: list[int], rows_at_most: int, columns: Sequence[Column], lane: Lane
) -> None:
    lines = HeldLines(["gauge-1", "g", ""])  # of different lengths
    batches = [lines.batch(lane, number, size) for number, size in enumerate(sizes, 1)]
    for batch in batches:
        for row, place in enumerate(batch.refs["place"].tolist()):
            lines.held[place] = b'{"row":%d,"odd":%b}' % (row, b"1" if row % 2 else b"true")
            batch.refs["length"][row] = len(lines.held[place])
    maker = RowMaker("river", "events", "late", columns)
    whole, whole_aside = data_of(maker, batches, lines, 10**9)
    cut, cut_aside = data_of(maker, batches, lines, rows_at_most)
    assert cut == whole
    found = rows_in(whole)
    aside = [row for rows in cut_aside for row in rows_in(rows.block)]
    assert aside == [row for rows in whole_aside for row in rows_in(rows.block)]
    assert len(found) + len(aside) == sum(sizes)
    if columns is ODD and lane == "ordered":
        position = [struct.pack(">q", row) for size in sizes for row in range(size)]
        assert [row[0] for row in found] == [each for each in position if each[-1] % 2 == 0]
        assert [row[3] for row in aside] == [each for each in position if each[-1] % 2 == 1]
        assert [row[-2] for row in aside] == [line for line in lines.held if line.endswith(b"1}")]
    else:
        assert not aside
    if columns is DEFAULT or lane == "late":
        assert [row[-1] for row in found] == lines.held


def test_the_parts_of_a_row_side_by_side() -> None:
    values = np.array([1, -1], dtype=np.int64)
    columns = [
        constant("ü", 2),
        numbers(values, ">i8"),
        raw([b"a", b""]),
        chosen([with_length(b"x"), with_length(b"yz"), with_length(None)], np.array([2, 1])),
        chosen([with_length(b"x"), with_length(b"y")], np.array([1, 0])),
    ]
    assert rows_in(HEAD + rows_of(columns, 2) + TAIL) == [
        ["ü".encode(), struct.pack(">q", 1), b"a", None, b"y"],
        ["ü".encode(), struct.pack(">q", -1), b"", b"yz", b"x"],
    ]


@pytest.mark.parametrize(
    ("kind", "values", "stored"),
    [
        ("bigint", [1, None, -(2**63)], [struct.pack(">q", 1), None, struct.pack(">q", -(2**63))]),
        ("integer", [-(2**31), 2**31 - 1], [struct.pack(">i", -(2**31)), struct.pack(">i", 2**31 - 1)]),
        ("double precision", [None, 0.1], [None, struct.pack(">d", 0.1)]),
        ("boolean", [True, False, None], [b"\x01", b"\x00", None]),
        ("timestamptz", [None, None], [None, None]),
        ("text", ["ü", None, ""], ["ü".encode(), None, b""]),
        ("jsonb", ["{}", None], [b"\x01{}", None]),
        *((kind, [], []) for kind in OF_TYPE),
    ],
)
def test_each_type_in_its_binary_form(kind: str, values: list[object], stored: list[bytes | None]) -> None:
    data = HEAD + rows_of([OF_TYPE[kind](values)], len(values)) + TAIL
    assert rows_in(data) == [[value] for value in stored]


def test_a_journal_that_gives_other_lines_than_events_is_an_error() -> None:
    lines = HeldLines()
    batch = lines.batch("ordered", 3, 2)
    lines.held[int(batch.refs["place"][0])] = b'{"a":1}\n{"b":2}'
    maker = RowMaker("river", "events", "late", DEFAULT)
    with pytest.raises(StrandlineError, match="batch 3 of lane ordered has 2 events, but the journal gave 3 lines"):
        list(maker.pieces([batch], lines, 1))

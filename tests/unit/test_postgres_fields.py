"""Values out of events for PostgreSQL's columns, and their binary form: what fits, and that the server agrees."""

from __future__ import annotations

import io
import math
from typing import Any

import msgspec
import numpy as np
import pytest
from helpers_postgres import shared, wait_for
from hypothesis import example, given, settings
from hypothesis import strategies as st
from strandline.sinks.postgres_columns import TYPES, Column
from strandline.sinks.postgres_copy import HEAD, OF_TYPE, TAIL, rows_of
from strandline.sinks.postgres_fields import EPOCH_US, Fields, microseconds, storable, storable_column
from strandline.sinks.postgres_server import connect

COLUMNS = [Column(kind, at="/v", type=kind) for kind in TYPES]
INT64, INT32 = 2**63, 2**31


def read_one(raw: bytes, kind: str) -> tuple[Any, bool]:
    """The value that a column of this type gets from an event with this JSON at /v, and whether it fits."""
    values, unfit = Fields([Column("c", at="/v", type=kind)]).read(b'{"v":%b}\n' % raw, 1)
    assert unfit in ({}, {0: [0]})
    return values[0][0], not unfit


# ---- cases ----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("kind", "raw", "value"),
    [
        ("text", b'"weir 3"', "weir 3"),
        ("text", b"7", "7"),
        ("text", b"1.50", "1.50"),
        ("text", b"true", "true"),
        ("text", b'{"a" : [1]}', '{"a" : [1]}'),
        ("text", b'"a\\u0000b"', '"a\\u0000b"'),
        ("text", b'"\\u00fc\\ud83c\\udf0a"', "ü🌊"),
        ("bigint", b"9223372036854775807", INT64 - 1),
        ("bigint", b"-9223372036854775808", -INT64),
        ("integer", b"-2147483648", -INT32),
        ("double precision", b"7", 7.0),
        ("double precision", b"-1.5e-3", -0.0015),
        ("double precision", b"1e-400", 0.0),
        ("boolean", b"false", False),
        ("timestamptz", b'"2000-01-01T00:00:00.0000019Z"', 1),
        ("timestamptz", b'"1999-12-31T23:59:59.9999999Z"', -1),
        ("timestamptz", b'"2000-01-01t01:00:00+01:00"', 0),
        ("jsonb", b'{"a" : 1}', '{"a" : 1}'),
        ("jsonb", b'"a \\\\u0000 b"', '"a \\\\u0000 b"'),
        ("jsonb", b'"12e99999"', '"12e99999"'),
        *((kind, b"null", None) for kind in TYPES),
    ],
)
def test_what_fits(kind: str, raw: bytes, value: object) -> None:
    found, fits = read_one(raw, kind)
    assert fits
    assert found == value and type(found) is type(value)


@pytest.mark.parametrize(
    ("kind", "raw"),
    [
        *((kind, raw) for kind in ("bigint", "integer") for raw in (b"1.0", b'"7"', b"true", b"[1]", b"1e2")),
        ("bigint", b"9223372036854775808"),
        ("bigint", b"9" * 5000),
        ("integer", b"2147483648"),
        ("double precision", b'"7"'),
        ("double precision", b"1e400"),
        ("double precision", b"true"),
        ("boolean", b"1"),
        ("boolean", b'"true"'),
        ("timestamptz", b'"2000-01-01"'),
        ("timestamptz", b'"2000-01-01T00:00:00"'),
        ("timestamptz", b'"3000-01-01T00:00:00Z"'),
        ("timestamptz", b"946684800"),
        ("jsonb", b'{"a":"x\\u0000y"}'),
        ("jsonb", b'"\\\\\\u0000"'),
        ("jsonb", b"[1e99999]"),
        ("jsonb", b"1." + b"1" * 2000),
    ],
)
def test_what_does_not_fit_is_null_and_named(kind: str, raw: bytes) -> None:
    assert read_one(raw, kind) == (None, False)


@pytest.mark.parametrize(
    ("at", "value"),
    [
        ("/a/b", 1),
        ("/a/c/d", 2),
        ("/list/1", 4),
        ("/list/01", None),
        ("/list/-", None),
        ("/list/2", None),
        ("/list/" + "9" * 30, None),
        ("/0", 5),
        ("/x~1y", 6),
        ("/x~0y", 7),
        ("/", 8),
        ('/q"', 9),
        ("/twice", 11),
        ("/absent", None),
        ("/a/b/c", None),
        ("/absent/b", None),
    ],
)
def test_where_a_pointer_leads(at: str, value: int | None) -> None:
    line = b'{"a":{"b":1,"c":{"d":2}},"list":[3,4],"0":5,"x/y":6,"x~y":7,"":8,"q\\"":9,"twice":10,"twice":11}\n'
    values, unfit = Fields([Column("c", at=at, type="bigint")]).read(line * 2, 2)
    assert (values, unfit) == ([[value, value]], {})


def test_one_field_may_lie_in_another_and_be_wanted_twice() -> None:
    columns = [
        Column("whole", at="", type="jsonb"),
        Column("a", at="/a", type="jsonb"),
        Column("b", at="/a/b", type="bigint"),
        Column("b_text", at="/a/b", type="text"),
    ]
    values, unfit = Fields(columns).read(b'{"a":{"b":1}}\n', 1)
    assert (values, unfit) == ([['{"a":{"b":1}}'], ['{"b":1}'], [1], ["1"]], {})


def test_one_wrong_line_spoils_no_other() -> None:
    fields = Fields([Column("level", at="/level", type="double precision"), Column("at", at="/at", type="timestamptz")])
    lines = [b'{"level":1.5,"at":"2000-01-01T00:00:01Z"}', b'{"level":"high","at":"yesterday"}', b'{"level":2}']
    values, unfit = fields.read(b"".join(line + b"\n" for line in lines), 3)
    assert values == [[1.5, None, 2.0], [1_000_000, None, None]]
    assert unfit == {1: [0, 1]}


def test_an_object_in_the_way_may_be_anything() -> None:
    fields = Fields([Column("c", at="/a/b", type="bigint")])
    values, unfit = fields.read(b'{"a":5}\n{"a":null}\n{"a":{"b":1}}\n{"a":"b"}\n{"a":[1]}\n', 5)
    assert (values, unfit) == ([[None, None, 1, None, None]], {})


def test_microseconds_are_rounded_down_over_all_of_int64() -> None:
    times = [-(2**63), -1, 0, 999, 1000, 2**63 - 1]
    assert microseconds(np.array(times, dtype=np.int64)).tolist() == [time // 1000 - EPOCH_US for time in times]


# ---- laws -----------------------------------------------------------------------------------------------------------


@given(st.lists(st.text() | st.just("a\0b") | st.just('"a\\u0000b"') | st.just('"a\\\\u0000b"'), unique=True))
def test_texts_stay_apart_and_hold_no_nul(texts: list[str]) -> None:
    made = storable_column([*texts, None])
    assert made == [*map(storable, texts), None]
    assert len(set(made)) == len(texts) + 1
    assert not any("\0" in text for text in made if text is not None)
    for text, stored in zip(texts, made, strict=False):
        assert stored == text or msgspec.json.decode(stored or "") == text


NUMBERS = st.one_of(
    st.integers(-(2**70), 2**70),
    st.floats(allow_nan=False, allow_infinity=False),
    st.sampled_from([INT64, INT64 - 1, -INT64, -INT64 - 1, INT32, INT32 - 1, -INT32, -INT32 - 1, 10**300, 10**400]),
)
STRINGS = st.one_of(
    st.text(st.characters(exclude_categories=["Cs"])),
    st.just("a\0b"),
    st.sampled_from(["2026-05-01T10:00:00Z", "2026-05-01T10:00:00.123456789-07:00", "1900-02-29T00:00:00Z"]),
)
JSON = st.recursive(
    st.one_of(st.none(), st.booleans(), NUMBERS, STRINGS),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(STRINGS, inner, max_size=3),
    max_leaves=8,
)
WRITTEN = st.sampled_from(
    [
        *(b"1e400", b"-1e-400", b"1E+9", b"1.0", b"-0", b"0.10", b"1e1001", b"1e-1001", b"1e1000", b"1e-1000"),
        *(b"1" * 1000, b"1" * 5000, b"1." + b"0" * 998, b"1." + b"0" * 999, b"1e140000", b"1e-20000"),
        *(b'"\\u0000"', b'{"\\u0000":1}', b'"\\ud83c\\udf0a"', b'"\\\\u0000"'),
    ]
)
RAWS = st.lists(st.one_of(JSON.map(msgspec.json.encode), WRITTEN), min_size=1, max_size=12)


@settings(max_examples=60)
@example([b"1" * 1000, b"1e1000", b"1e-1000", b"[[[[[[[[[[1]]]]]]]]]]"])
@given(RAWS)
def test_the_server_takes_whatever_is_said_to_fit(raws: list[bytes]) -> None:
    """All columns of all types, by COPY; what comes back is what was found, and only what cannot be held is NULL."""
    block = b"".join(b'{"v":%b}\n' % raw for raw in raws)
    values, unfit = Fields(COLUMNS).read(block, len(raws))
    back = wait_for(through_the_server(values, len(raws)))
    for row, (raw, stored) in enumerate(zip(raws, back, strict=True)):
        alone = [read_one(raw, kind) for kind in TYPES]
        assert [column[row] for column in values] == [value for value, _ in alone], "a line alone and among others"
        assert unfit.get(row, []) == [index for index, (_, fits) in enumerate(alone) if not fits]
        for kind, (value, fits), found in zip(TYPES, alone, stored, strict=True):
            assert (found is None) == (value is None)
            assert fits or value is None
            if value is not None:
                agree(kind, raw, value, found)


def agree(kind: str, raw: bytes, value: Any, found: Any) -> None:
    """The stored value means what the event says."""
    if kind == "jsonb":
        if len(raw) < 900 and b"e" not in raw.lower():
            assert msgspec.json.decode(found) == msgspec.json.decode(raw)
        return
    assert found == value
    if kind in ("bigint", "integer", "boolean"):
        assert msgspec.json.decode(raw) == value
    if kind == "double precision":
        assert math.isfinite(found) and float(raw) == found


async def through_the_server(values: list[list[Any]], count: int) -> list[tuple[Any, ...]]:
    """What a temporary table of all types gives back; times as us since 2000."""
    connection = await connect(shared(), 30.0)
    try:
        columns = ", ".join(f'"{kind}" {kind}' for kind in TYPES)
        await connection.execute(f"CREATE TEMP TABLE held (number serial, {columns})")
        block = rows_of([OF_TYPE[kind](column) for kind, column in zip(TYPES, values, strict=True)], count)
        await connection.copy_to_table(
            "held", source=io.BytesIO(HEAD + block + TAIL), columns=list(TYPES), format="binary"
        )
        since_2000 = f"""(extract(epoch FROM timestamptz) * 1000000)::bigint - {EPOCH_US} AS timestamptz"""
        names = ", ".join(since_2000 if kind == "timestamptz" else f'"{kind}"' for kind in TYPES)
        return [tuple(row) for row in await connection.fetch(f"SELECT {names} FROM held ORDER BY number")]
    finally:
        await connection.close()

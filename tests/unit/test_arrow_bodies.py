"""Bodies of Arrow: what is refused as a whole, and by which column; limits; bombs; a service without pyarrow."""

from __future__ import annotations

import subprocess
import sys
from typing import Any

import pyarrow as pa
import pytest
from helpers_arrival import check_arrival, plain
from helpers_arrow import ARROW, stream
from strandline.errors import BodyError
from strandline.ingest.arrow_frames import walk
from strandline.ingest.decode import Decoder
from strandline.ingest.limits import BodyLimits

FEED = Decoder("river", "/ts", "ns", "/station")
SMALL = BodyLimits(decoded_bytes_at_most=100_000, event_bytes_at_most=1000, events_at_most=2000)
TIGHT = Decoder("river", "/ts", "ns", "/station", limits=SMALL)
TS = pa.array([1, 2], pa.int64())
GW = pa.array(["gw-1", "gw-2"])
GOOD = pa.table({"ts": TS, "station": GW})


def refused(body: bytes, decoder: Decoder = FEED) -> BodyError:
    with pytest.raises(BodyError) as caught:
        decoder.decode(body, ARROW, {})
    assert caught.value.detail.isprintable() and len(caught.value.detail) < 500
    return caught.value


def with_column(column: Any) -> bytes:
    return stream(GOOD.append_column("x", column))


def test_nothing_is_an_arrival_of_nothing() -> None:
    for body in (b"", stream(GOOD.slice(0, 0)), stream(GOOD.slice(0, 0), [0, 0])):
        arrival = FEED.decode(body, ARROW, {})
        check_arrival(arrival, {})
        assert arrival.received == 0


def test_the_stream_may_end_without_its_mark() -> None:
    """As the format allows: it ends with the body then."""
    body = stream(GOOD)
    assert body.endswith(b"\xff\xff\xff\xff\0\0\0\0")
    assert plain(FEED.decode(body[:-8], ARROW, {})) == plain(FEED.decode(body, ARROW, {}))


@pytest.mark.parametrize(
    ("column", "words"),
    [
        (pa.array([[1], [2]]), "the column /x is list"),
        (pa.array([[(1, 2)], None], pa.map_(pa.int8(), pa.int8())), "/x is map"),
        (pa.array([1, 2], pa.duration("s")), "/x is duration"),
        (pa.array([100, None], pa.decimal128(10, -2)), "/x is decimal128"),
        (pa.array([1, 2]).dictionary_encode(), "/x is dictionary"),
        (pa.RunEndEncodedArray.from_arrays(pa.array([2], pa.int32()), pa.array(["a"])), "/x is run_end_encoded"),
        (pa.UnionArray.from_sparse(pa.array([0, 0], pa.int8()), [pa.array([1, 2])]), "/x is sparse_union"),
        (pa.StructArray.from_arrays([pa.array([[1], [2]])], ["y"]), "/x/y is list"),
        (pa.StructArray.from_arrays([TS, TS], ["y", "y"]), "/x/y stands there twice"),
        (pa.ExtensionArray.from_storage(pa.uuid(), pa.array([b"x" * 16] * 2, pa.binary(16))), "/x is extension"),
    ],
)
def test_types_that_are_not_taken_are_refused_by_name(column: Any, words: str) -> None:
    error = refused(with_column(column))
    assert (error.status, words in error.detail) == (422, True), error.detail


@pytest.mark.parametrize(
    ("table", "unit", "words"),
    [
        (pa.table({"station": GW}), "ns", "/ts is where this feed has its time"),
        (pa.table({"ts": TS}), "ns", "/station is where this feed has its source"),
        (pa.table({"ts": GW, "station": GW}), "ns", "/ts is string, and the time of this feed is a timestamp or"),
        (pa.table({"ts": TS, "station": GW}), "rfc3339", "/ts is int64, and the time of this feed is a timestamp or"),
        (pa.table({"ts": TS.cast(pa.float64()), "station": GW}), "ns", "/ts is double"),
        (pa.table({"ts": TS, "station": [1.5, 2.5]}), "ns", "/station is double, and the source of this feed is a"),
        (pa.table({"ts": TS, "station": [b"a", b"b"]}), "ns", "/station is binary"),
        (pa.Table.from_arrays([TS, GW, TS], ["ts", "station", "ts"]), "ns", "/ts stands there twice"),
    ],
)
def test_columns_that_the_feed_cannot_read_are_refused_by_name(table: Any, unit: Any, words: str) -> None:
    error = refused(stream(table), Decoder("river", "/ts", unit, "/station"))
    assert (error.status, words in error.detail) == (422, True), error.detail


@pytest.mark.parametrize(
    ("body", "words"),
    [
        (b"{}", "is cut off"),
        (b"x" * 100, "no message begins at byte 0"),
        (b"\xff\xff\xff\xff\0\0\0\0", "no schema"),
        (b"\xff\xff\xff\xff\xff\xff\xff\x7f", "cut off"),
        (b"\xff\xff\xff\xff\xff\xff\xff\xff", "cut off"),
        (stream(GOOD)[:-9], "cut off"),
        (stream(GOOD)[:-20], "cut off"),
        (stream(GOOD) + stream(GOOD), "bytes follow its end"),  # else the second stream would be lost
        (stream(GOOD) + b"\0", "1 bytes follow its end"),
        (stream(GOOD)[:-8] + stream(GOOD), "a schema is expected first and only there"),
        (b"ARROW1\0\0" + stream(GOOD), "no message begins"),  # the file format
    ],
)
def test_what_is_no_stream_is_refused_as_a_whole(body: bytes, words: str) -> None:
    error = refused(body)
    assert (error.status, words in error.detail) == (422, True), error.detail


def test_texts_that_are_not_utf8_break_the_stream() -> None:
    body = stream(pa.table({"ts": TS, "station": pa.array(["gw-1", "gwX2"])}))
    assert body.count(b"gwX2") == 1
    error = refused(body.replace(b"gwX2", b"gw\xff2"))
    assert (error.status, "UTF8" in error.detail.replace("-", "").upper()) == (422, True)


@pytest.mark.parametrize("role", ["ts", "station", "id"])
def test_a_column_of_nothing_but_nulls(role: str) -> None:
    """Of the type null, as a writer makes one that has seen no value: each row lacks it."""
    table = pa.table({"ts": TS, "station": GW, "id": ["a", "b"]})
    place = table.column_names.index(role)
    body = stream(table.set_column(place, role, pa.nulls(2)))
    decoder = Decoder("river", "/ts", "ns", "/station", "/id")
    arrival = decoder.decode(body, ARROW, {})
    reason = {"ts": "time", "station": "source", "id": "id"}[role] + "_missing"
    assert [(fault.line, fault.reason) for fault in arrival.faults] == [(1, reason), (2, reason)]
    assert plain(arrival) == plain(decoder.decode_line_by_line(body, ARROW, {}))


def test_a_dictionary_without_a_word() -> None:
    for words in (pa.array([], pa.string()), pa.array([], pa.string_view()), pa.array([None], pa.string())):
        codes = pa.array([None, None] if not len(words) else [0, None], pa.int8())
        empty = pa.DictionaryArray.from_arrays(codes, words)
        arrival = FEED.decode(with_column(empty), ARROW, {})
        assert bytes(arrival.payload).count(b'"x":null') == 2
        faulty = FEED.decode(stream(pa.table({"ts": TS, "station": empty})), ARROW, {})
        assert [fault.reason for fault in faulty.faults] == ["source_missing"] * 2


def test_limits_on_rows_columns_and_nesting() -> None:
    many = pa.table({"ts": range(2001), "station": ["a"] * 2001})
    assert refused(stream(many), TIGHT).status == 413
    assert len(TIGHT.decode(stream(many.slice(1), [7, 700]), ARROW, {}).times) == 2000
    wide = pa.table({"ts": TS, "station": GW, **{f"x{number}": TS for number in range(998)}})
    assert len(FEED.decode(stream(wide), ARROW, {}).times) == 2
    assert "more than 1,000 columns" in refused(stream(wide.append_column("more", TS))).detail
    flat = Decoder("river", "/ts", "ns", "/station", limits=BodyLimits(nesting_at_most=8))
    for depth, good in ((7, True), (8, False)):
        column = TS
        for _ in range(depth):
            column = pa.StructArray.from_arrays([column], ["x"])
        if good:
            assert len(flat.decode(with_column(column), ARROW, {}).times) == 2
        else:
            assert "nested deeper than 8 levels" in refused(with_column(column), flat).detail
    long = pa.table({"ts": TS, "station": GW, "note": ["x" * 990, "x"]})
    (fault,) = TIGHT.decode(stream(long), ARROW, {}).faults
    assert (fault.line, fault.reason, len(fault.raw)) == (1, "too_large", 1000)


def peak(body: bytes, decoder: Decoder) -> tuple[BodyError | None, int]:
    """What became of a body, and how many bytes the library took at most."""
    before = pa.default_memory_pool()
    pool = pa.proxy_memory_pool(before)
    pa.set_memory_pool(pool)
    try:
        decoder.decode(body, ARROW, {})
    except BodyError as error:
        return error, pool.max_memory()
    finally:
        pa.set_memory_pool(before)
    return None, pool.max_memory()


def columns(count: int, **more: Any) -> Any:
    return pa.table({"ts": pa.array(range(count), pa.int64()), "station": ["a"] * count, **more})


BOMBS = {
    "zstd": (stream(columns(2, note=["x" * 50_000_000, ""]), compression="zstd"), 413),
    "lz4": (stream(columns(2, note=["x" * 10_000_000, ""]), compression="lz4"), 413),
    "a dictionary": (
        stream(columns(2000, note=pa.DictionaryArray.from_arrays(pa.array([0] * 2000), pa.array(["x" * 50_000])))),
        413,
    ),
    "escapes": (stream(columns(40, note=["\0" * 900] * 40)), 413),
    "flags": (stream(columns(2000, **{f"x{number}": [False] * 2000 for number in range(300)})), 413),
    "names": (stream(columns(2000, **{"y" * 80: pa.nulls(2000)})), 413),
}


@pytest.mark.parametrize("name", BOMBS)
def test_bombs_are_sized_before_they_are_made(name: str) -> None:
    body, status = BOMBS[name]
    error, most = peak(body, TIGHT)
    assert error is not None and error.status == status, error
    assert most < 4 * SMALL.decoded_bytes_at_most
    assert "less at once" in error.detail


def test_a_view_may_stand_for_the_same_bytes_many_times() -> None:
    word = pa.array(["x" * 3000], pa.string_view())
    views, data = word.buffers()[1], word.buffers()[2]
    many = pa.Array.from_buffers(pa.string_view(), 1000, [None, pa.py_buffer(views.to_pybytes() * 1000), data])
    many.validate(full=True)
    error, most = peak(stream(columns(1000, note=many)), TIGHT)
    assert error is not None and error.status == 413
    assert most < 4 * SMALL.decoded_bytes_at_most


def test_a_dictionary_that_is_checked_again_for_each_of_many_batches() -> None:
    words = pa.array([f"{number:020}" for number in range(1500)])
    coded = pa.DictionaryArray.from_arrays(pa.array([number % 7 for number in range(2000)]), words)
    table = pa.table({"ts": range(2000), "station": coded})
    assert len(TIGHT.decode(stream(table, [500, 1000]), ARROW, {}).times) == 2000
    error = refused(stream(table, list(range(30, 2000, 30))), TIGHT)
    assert (error.status, "dictionaries" in error.detail) == (413, True)


def test_many_batches() -> None:
    body = stream(columns(2000), list(range(1, 2000)))
    sums = walk(body, BodyLimits())
    assert (sums.rows, sums.batches) == (2000, 2000)
    expected = plain(FEED.decode(stream(columns(2000)), ARROW, {}))
    assert plain(FEED.decode(body, ARROW, {})) == expected
    empty = stream(columns(0), [0] * 70_000)
    assert (refused(empty).status, "columns" in refused(empty).detail) == (413, True)


def test_dictionaries_that_change_between_batches() -> None:
    out = pa.BufferOutputStream()
    parts = [pa.table({"ts": TS, "station": pa.array(names).dictionary_encode()}) for names in (["a", "b"], ["c", "a"])]
    with pa.ipc.new_stream(out, parts[0].schema) as writer:
        for part in parts:
            writer.write_table(part)
    arrival = FEED.decode(out.getvalue().to_pybytes(), ARROW, {})
    check_arrival(arrival, {})
    assert (arrival.sources.tolist(), list(arrival.new_sources)) == ([0, 1, 2, 0], ["a", "b", "c"])


@pytest.mark.parametrize("delta", [False, True])
def test_dictionaries_that_grow(delta: bool) -> None:
    out = pa.BufferOutputStream()
    parts = [
        pa.table({"ts": TS, "station": pa.DictionaryArray.from_arrays(pa.array(codes, pa.int8()), pa.array(words))})
        for codes, words in (([0, 1], ["a", "b"]), ([2, 0], ["a", "b", "c"]))
    ]
    options = pa.ipc.IpcWriteOptions(emit_dictionary_deltas=delta)
    with pa.ipc.new_stream(out, parts[0].schema, options=options) as writer:
        for part in parts:
            writer.write_table(part)
    arrival = FEED.decode(out.getvalue().to_pybytes(), ARROW, {})
    assert (arrival.sources.tolist(), list(arrival.new_sources)) == ([0, 1, 2, 0], ["a", "b", "c"])


def test_without_pyarrow_the_answer_says_what_to_install() -> None:
    """In a process of its own, where the import fails as it does where nothing is installed."""
    program = (
        "import sys; sys.modules['pyarrow'] = None\n"
        "from strandline.ingest.decode import Decoder\n"
        "from strandline.errors import BodyError\n"
        "feed = Decoder('river', '/ts', 'ns')\n"
        "assert len(feed.decode(b'{\"ts\":1}', 'application/x-ndjson', {}).times) == 1\n"
        f"try: feed.decode(b'x', '{ARROW}', {{}})\n"
        "except BodyError as error: print(error.status, error.detail)\n"
    )
    said = subprocess.run(
        [sys.executable, "-c", program], capture_output=True, text=True, check=True, timeout=60
    ).stdout
    assert said.startswith("415 ") and "pip install 'strandline[arrow]'" in said


def test_pyarrow_is_imported_only_with_the_first_body() -> None:
    program = "import sys, strandline.app; assert 'pyarrow' not in sys.modules"
    subprocess.run([sys.executable, "-c", program], check=True, timeout=60)

"""Each type of Arrow column as JSON, held row by row against the standard library's json and datetime."""

from __future__ import annotations

import json
import math
from base64 import b64encode
from collections.abc import Callable
from datetime import date, datetime, time, timedelta
from decimal import Decimal
from typing import Any, NamedTuple

import numpy as np
import pyarrow as pa
import pytest
from helpers_arrival import check_arrival, plain
from helpers_arrow import ARROW, stream
from hypothesis import given, settings
from hypothesis import strategies as st
from strandline.ingest.decode import Decoder

FEED = Decoder("river", "/ts", "ns")
EPOCH = datetime(1970, 1, 1)
PARTS = {"s": 1, "ms": 10**3, "us": 10**6, "ns": 10**9}
texts = st.text(st.characters(codec="utf-8"), max_size=8) | st.text(st.sampled_from('"\\\b\t\n\f\r\0\x1f\x7f/ü\u2028'))
blobs = st.binary(max_size=7)


class Kind(NamedTuple):
    """A type, the values that its columns are made of, and what JSON has for each."""

    type: Any
    values: st.SearchStrategy[Any]
    json: Callable[[Any], Any] = lambda value: value
    integers: bool = False  # made of integers and viewed as the type


def instant(unit: str) -> Callable[[int], str]:
    def text(value: int) -> str:
        seconds, part = divmod(value, PARTS[unit])
        digits = len(str(PARTS[unit])) - 1
        return f"{(EPOCH + timedelta(seconds=seconds)).isoformat()}{f'.{part:0{digits}}' if digits else ''}Z"

    return text


def clock(unit: str) -> Callable[[int], str]:
    def text(value: int) -> str:
        return instant(unit)(value)[11:-1]

    return text


def timestamps(unit: str, zone: str | None) -> Kind:
    least, greatest = -62_135_596_800 * PARTS[unit], 253_402_300_800 * PARTS[unit] - 1  # years 1 to 9999
    values = st.integers(max(least, -(2**63)), min(greatest, 2**63 - 1)) | st.integers(-2000, 2000)
    return Kind(pa.timestamp(unit, zone), values, instant(unit), True)


def times(kind: Any, unit: str) -> Kind:
    return Kind(kind, st.integers(0, 86_400 * PARTS[unit] - 1), clock(unit), True)


def base64(value: bytes) -> str:
    return b64encode(value).decode()


class Single(float):
    """A 32-bit float, equal to every number that reads as the same one."""

    def __eq__(self, other: object) -> bool:
        return isinstance(other, int | float) and np.float32(other) == np.float32(self)

    __hash__ = float.__hash__


def floats(width: int) -> st.SearchStrategy[float]:
    some = st.floats(width=width, allow_nan=False, allow_infinity=False)
    return some | st.sampled_from([0.0, -0.0, 0.5, 1.0, 1e4, 5e-8 if width == 16 else 2.0**-126])


KINDS = {
    "null": Kind(pa.null(), st.none()),
    "bool": Kind(pa.bool_(), st.booleans()),
    **{
        str(kind): Kind(kind, st.integers(*bounds))
        for kind, bounds in (
            (pa.int8(), (-128, 127)), (pa.int16(), (-(2**15), 2**15 - 1)), (pa.int32(), (-(2**31), 2**31 - 1)),
            (pa.int64(), (-(2**63), 2**63 - 1)), (pa.uint8(), (0, 255)), (pa.uint16(), (0, 2**16 - 1)),
            (pa.uint32(), (0, 2**32 - 1)), (pa.uint64(), (0, 2**64 - 1)),
        )
    },
    "double": Kind(pa.float64(), floats(64)),
    "float": Kind(pa.float32(), floats(32), Single),
    "string": Kind(pa.string(), texts),
    "large_string": Kind(pa.large_string(), texts),
    "string_view": Kind(pa.string_view(), texts | st.just("a string that does not fit into the view itself")),
    "dictionary": Kind(pa.dictionary(pa.int8(), pa.string()), texts),
    "wide dictionary": Kind(pa.dictionary(pa.uint32(), pa.large_string()), texts),
    "binary": Kind(pa.binary(), blobs, base64),
    "large_binary": Kind(pa.large_binary(), blobs, base64),
    "binary_view": Kind(pa.binary_view(), blobs | st.just(b"more bytes than a view holds"), base64),
    "fixed binary": Kind(pa.binary(4), st.binary(min_size=4, max_size=4), base64),
    **{f"timestamp {unit} {zone}": timestamps(unit, zone) for unit in PARTS for zone in (None, "UTC", "+02:00")},
    "date32": Kind(pa.date32(), st.dates(), date.isoformat),
    "date64": Kind(pa.date64(), st.dates(), date.isoformat),
    "time s": times(pa.time32("s"), "s"), "time ms": times(pa.time32("ms"), "ms"),
    "time us": times(pa.time64("us"), "us"), "time ns": times(pa.time64("ns"), "ns"),
    "decimal": Kind(pa.decimal128(12, 3), st.decimals(-10**8, 10**8, places=3), float),
    "decimal256": Kind(pa.decimal256(40, 2), st.decimals(-10**9, 10**9, places=2), float),
    "struct": Kind(
        pa.struct([("a", pa.int64()), ("b", pa.string())]),
        st.tuples(st.none() | st.integers(0, 9), st.none() | texts).map(lambda pair: {"a": pair[0], "b": pair[1]}),
    ),
    "empty struct": Kind(pa.struct([]), st.just({})),
    "deep": Kind(
        pa.struct([("a", pa.struct([("b", pa.bool_())]))]),
        st.fixed_dictionaries({"a": st.none() | st.fixed_dictionaries({"b": st.none() | st.booleans()})}),
    ),
}  # fmt: skip


def column(kind: Kind, values: list[Any]) -> Any:
    if kind.integers:
        raw = pa.array(values, pa.int32() if pa.types.is_time32(kind.type) else pa.int64())
        return raw.view(kind.type)
    return pa.array(values, kind.type)


def lines(table: Any, cuts: list[int], compression: str | None) -> list[bytes]:
    arrival = FEED.decode(stream(table, cuts, compression), ARROW, {})
    check_arrival(arrival, {})
    assert not arrival.faults
    found = bytes(arrival.payload).split(b"\n")[:-1]
    assert len(found) == len(table), "a line for each row"
    return found


@st.composite
def columns(draw: Any, names: Any) -> tuple[int, dict[str, tuple[Kind, list[Any]]]]:
    count = draw(st.integers(1, 6))
    chosen = draw(st.lists(st.sampled_from(sorted(names)), min_size=1, max_size=3))
    nullable = draw(st.booleans())
    found = {}
    for number, name in enumerate(chosen):
        values = st.none() | KINDS[name].values if nullable else KINDS[name].values
        member = draw(texts) + str(number)
        found[member] = (KINDS[name], draw(st.lists(values, min_size=count, max_size=count)))
    return count, found


def expected(kind: Kind, value: Any) -> Any:
    return None if value is None else kind.json(value)


def table_of(count: int, found: dict[str, tuple[Kind, list[Any]]]) -> Any:
    made = {"ts": pa.array(range(count), pa.int64())} | {name: column(*each) for name, each in found.items()}
    return pa.table(list(made.values()), names=list(made))


cuts = st.lists(st.integers(0, 6), max_size=3)
packings = st.sampled_from([None, "lz4", "zstd"])


@settings(max_examples=400)
@given(columns(KINDS), cuts, packings)
def test_every_row_reads_back_as_it_was(drawn: Any, cuts: list[int], compression: str | None) -> None:
    count, found = drawn
    read = lines(table_of(count, found), [min(cut, count) for cut in cuts], compression)
    for row, line in enumerate(read):
        event = {"ts": row} | {name: expected(kind, values[row]) for name, (kind, values) in found.items()}
        assert json.loads(line) == event
        assert list(json.loads(line)) == list(event)


EXACT = [name for name in KINDS if name not in ("double", "float", "decimal", "decimal256")]


@settings(max_examples=400)
@given(columns(EXACT))
def test_and_is_the_very_line_that_json_dumps_would_write(drawn: Any) -> None:
    count, found = drawn
    for row, line in enumerate(lines(table_of(count, found), [], None)):
        event = {"ts": row} | {name: expected(kind, values[row]) for name, (kind, values) in found.items()}
        assert line.decode() == json.dumps(event, ensure_ascii=False, separators=(",", ":"))


@given(
    st.lists(st.none() | floats(64) | st.sampled_from([1.5, 2.25, 0.1]), min_size=1, max_size=40), st.integers(1, 30)
)
def test_floats_are_the_shortest_that_read_back_whether_they_repeat_or_not(values: list[Any], times: int) -> None:
    many = values * times
    table = pa.table({"ts": pa.array(range(len(many)), pa.int64()), "x": pa.array(many, pa.float64())})
    for value, line in zip(many, lines(table, [], None), strict=True):
        text = line.decode().partition('"x":')[2][:-1]
        if value is None:
            assert text == "null"
            continue
        assert float(text) == value and math.copysign(1, float(text)) == math.copysign(1, value)
        digits = text.partition("e")[0].replace(".", "").lstrip("-").strip("0")
        assert len(digits) <= len(repr(value).partition("e")[0].replace(".", "").lstrip("-").strip("0"))


@given(st.lists(st.integers(0, 2**15 - 1), min_size=1, max_size=5))
def test_half_floats_read_back(bits: list[int]) -> None:
    values = np.array(bits, np.uint16).view(np.float16)
    values = values[np.isfinite(values)]
    if not len(values):
        return
    table = pa.table({"ts": pa.array(range(len(values)), pa.int64()), "x": pa.array(values)})
    assert [np.float16(json.loads(line)["x"]) for line in lines(table, [], None)] == values.tolist()


@pytest.mark.parametrize(
    ("kind", "value", "text"),
    [
        (pa.timestamp("s"), -62_167_219_200, "0000-01-01T00:00:00Z"),
        (pa.timestamp("us"), 253_402_300_799_999_999, "9999-12-31T23:59:59.999999Z"),
        (pa.timestamp("ns"), -1, "1969-12-31T23:59:59.999999999Z"),
        (pa.date32(), -719_528, "0000-01-01"),
    ],
)
def test_the_edges_of_the_calendar(kind: Any, value: int, text: str) -> None:
    raw = pa.array([value, None], pa.int32() if kind == pa.date32() else pa.int64()).view(kind)
    first, second = lines(pa.table({"ts": pa.array([1, 2], pa.int64()), "x": raw}), [], None)
    assert (json.loads(first)["x"], json.loads(second)["x"]) == (text, None)


@pytest.mark.parametrize(
    ("values", "kind", "text"),
    [
        ([1.0, float("nan")], pa.float64(), '"nan"'),
        ([1.0, float("-inf")], pa.float32(), '"-inf"'),
        ([1, 253_402_300_800], pa.timestamp("s"), '"253402300800 s"'),
        ([1, -62_167_219_201], pa.timestamp("s", "UTC"), '"-62167219201 s"'),
        ([1, 2_932_897], pa.date32(), '"2932897"'),
    ],
)
def test_what_json_cannot_hold_is_a_fault_of_its_row(values: list[Any], kind: Any, text: str) -> None:
    raw = pa.array(values, None if kind != pa.date32() else pa.int32())
    raw = raw.cast(kind) if pa.types.is_floating(kind) else raw.view(kind)
    body = stream(pa.table({"ts": pa.array([1, 2], pa.int64()), "x": raw}))
    arrival = FEED.decode(body, ARROW, {})
    check_arrival(arrival, {})
    assert plain(arrival) == plain(FEED.decode_line_by_line(body, ARROW, {}))
    (fault,) = arrival.faults
    assert (fault.line, fault.reason, fault.raw) == (2, "malformed", b'{"ts":2,"x":' + text.encode() + b"}")
    assert '"/x"' in fault.detail


def test_decimals_keep_their_digits() -> None:
    table = pa.table({"ts": pa.array([1], pa.int64()), "x": pa.array([Decimal("1.500")], pa.decimal128(8, 3))})
    assert lines(table, [], None) == [b'{"ts":1,"x":1.500}']


def test_times_of_day() -> None:
    table = pa.table({"ts": pa.array([1], pa.int64()), "x": pa.array([time(1, 2, 3, 40)], pa.time64("us"))})
    assert lines(table, [], None) == [b'{"ts":1,"x":"01:02:03.000040"}']

"""The same events give the same arrival as Arrow columns and as NDJSON; and how a stream is cut changes nothing.

tests/property/test_arrow_json.py holds the text of every type of column against an opinion from outside.
"""

from __future__ import annotations

import json
from typing import Any

import pyarrow as pa
import pytest
from helpers_arrival import check_arrival, plain
from helpers_arrow import ARROW, stream
from hypothesis import given, settings
from hypothesis import strategies as st
from strandline.errors import TooManyFaults
from strandline.ingest.decode import Decoder
from strandline.ingest.limits import BodyLimits
from strandline.ingest.timestamps import format_rfc3339

NDJSON = "application/x-ndjson"
TABLE = {"gw-1": 0, "gw-2": 1}
LIMITS = BodyLimits(event_bytes_at_most=600)
UNITS = {"s": 10**9, "ms": 10**6, "us": 10**3, "ns": 1}

instants = st.integers(-(10**18), 9 * 10**18) | st.integers(1_700_000_000_000_000_000, 1_700_000_000_000_000_100)
good_texts = instants.map(format_rfc3339)
odd_texts = st.sampled_from(
    ["2026-01-31t12:34:56z", "1998-12-31T23:59:60Z", "2026-01-31T12:34:56.5+01:00", "0001-01-01T00:00:00Z", "yesterday",
     "2026-02-30T00:00:00Z", "", "2026-01-31T12:34:56.1234567890Z", "9999-12-31T23:59:59Z", "ö" * 12, None]
)  # fmt: skip
names = st.sampled_from(["gw-1", "gw-2", "gw-3", "gw-4", "ö"])
odd_names = st.sampled_from(["", "x" * 257, "a\0b", None, 'q"\\', "x" * 256])
notes = st.none() | st.text(st.characters(codec="utf-8"), max_size=5) | st.just("x" * 600)


@st.composite
def events(draw: Any, times: Any, odd_times: Any, sources: Any, odd_sources: Any) -> list[dict[str, Any]]:
    count = draw(st.integers(0, 14))
    often = draw(st.integers(1, 8))

    def rarely(usual: Any, odd: Any) -> Any:
        return draw(odd if draw(st.integers(0, often)) == 1 else usual)

    return [
        {
            "time": rarely(times, odd_times),
            "from": {"station": rarely(sources, odd_sources)},
            "id": rarely(st.sampled_from(["1", "2", "ö"]), st.sampled_from(["", "x" * 1025, None])),
            "note": rarely(st.just("x"), notes),
        }
        for _ in range(count)
    ]


def table_of(events: list[dict[str, Any]], time_type: Any, name_type: Any) -> Any:
    times = [event["time"] for event in events]
    inner = pa.array([event["from"]["station"] for event in events], name_type)
    return pa.table(
        {
            "time": times if isinstance(times, pa.Array) else pa.array(times, time_type),
            "from": pa.StructArray.from_arrays([inner], ["station"]),
            "id": pa.array([event["id"] for event in events], pa.string()),
            "note": pa.array([event["note"] for event in events], pa.string()),
        }
    )


def ndjson(events: list[dict[str, Any]]) -> bytes:
    return b"".join(json.dumps(each, ensure_ascii=False, separators=(",", ":")).encode() + b"\n" for each in events)


def decoded(feed: Decoder, body: bytes, media_type: str) -> dict[str, Any]:
    """Both ways of the decoder, held together."""
    arrival = feed.decode(body, media_type, TABLE)
    check_arrival(arrival, TABLE)
    assert plain(arrival) == plain(feed.decode_line_by_line(body, media_type, TABLE))
    return plain(arrival)


def feed(unit: Any, has_source: bool, has_id: bool) -> Decoder:
    return Decoder("river", "/time", unit, "/from/station" if has_source else None, "/id" if has_id else None, LIMITS)


name_types = st.sampled_from(
    [pa.string(), pa.large_string(), pa.string_view(), pa.dictionary(pa.int16(), pa.string()),
     pa.dictionary(pa.uint8(), pa.large_string())]
)  # fmt: skip
cuts = st.lists(st.integers(0, 14), max_size=4)
packings = st.sampled_from([None, "lz4", "zstd"])
flags = st.booleans()


@settings(max_examples=300)
@given(events(good_texts, odd_texts, names, odd_names), name_types, cuts, packings, flags, flags)
def test_texts_as_times(events: Any, name_type: Any, cuts: Any, packing: Any, has_source: bool, has_id: bool) -> None:
    """Times as RFC 3339 texts, of several lengths in one column."""
    decoder = feed("rfc3339", has_source, has_id)
    body = stream(table_of(events, pa.string(), name_type), [min(cut, len(events)) for cut in cuts], packing)
    assert decoded(decoder, body, ARROW) == decoded(decoder, ndjson(events), NDJSON)


integers = st.integers(-(2**63), 2**63 - 1) | st.integers(1_700_000_000, 1_700_000_100)


@settings(max_examples=300)
@given(
    events(integers, st.none(), st.integers(0, 3), st.none() | st.integers(-(2**63), 2**63 - 1)),
    st.sampled_from(list(UNITS)), cuts, flags,
)  # fmt: skip
def test_integers_as_times_and_sources(events: Any, unit: Any, cuts: Any, has_id: bool) -> None:
    decoder = feed(unit, True, has_id)
    body = stream(table_of(events, pa.int64(), pa.int64()), [min(cut, len(events)) for cut in cuts])
    assert decoded(decoder, body, ARROW) == decoded(decoder, ndjson(events), NDJSON)


unsigned = st.integers(0, 2**64 - 1) | st.integers(0, 2**33)


@given(events(unsigned, st.none(), st.integers(0, 2**64 - 1), st.none()), st.sampled_from(list(UNITS)))
def test_unsigned_integers(events: Any, unit: Any) -> None:
    decoder = feed(unit, True, False)
    body = stream(table_of(events, pa.uint64(), pa.uint64()))
    assert decoded(decoder, body, ARROW) == decoded(decoder, ndjson(events), NDJSON)


zones = st.sampled_from([None, "UTC", "+05:30"])


@settings(max_examples=300)
@given(
    events(st.integers(-(2**33), 2**33), st.none(), names, odd_names), st.sampled_from(list(UNITS)), zones, name_types
)
def test_timestamps_in_a_feed_of_texts(events: Any, unit: str, zone: Any, name_type: Any) -> None:
    """They are texts with the decimals of their unit."""
    digits = {"s": 0, "ms": 3, "us": 6, "ns": 9}[unit]
    spelled = [event | {"time": spell(event["time"], unit, digits)} for event in events]
    decoder = feed("rfc3339", True, False)
    body = stream(table_of(events, pa.timestamp(unit, zone), name_type))
    assert decoded(decoder, body, ARROW) == decoded(decoder, ndjson(spelled), NDJSON)


def spell(value: int | None, unit: str, digits: int) -> str | None:
    if value is None:
        return None
    whole, _, fraction = format_rfc3339(value * UNITS[unit])[:-1].partition(".")
    return f"{whole}{'.' + fraction.ljust(digits, '0') if digits else ''}Z"


@settings(max_examples=300)
@given(
    events(st.integers(-(2**33), 2**33) | integers, st.none(), names, odd_names),
    st.sampled_from(list(UNITS)), st.sampled_from(list(UNITS)), zones,
)  # fmt: skip
def test_timestamps_in_a_feed_of_integers(events: Any, unit: str, of_feed: Any, zone: Any) -> None:
    """They are integers in the feed's unit; where it cannot hold them exactly, or int64 ns cannot, that is a fault."""
    decoder = feed(of_feed, True, False)
    found = decoded(decoder, stream(table_of(events, pa.timestamp(unit, zone), pa.string())), ARROW)
    ours: dict[int, str] = {}
    kept = []
    for line, event in enumerate(events, 1):
        time = event["time"]
        if time is not None and not -(2**63) <= time * UNITS[unit] < 2**63:
            ours[line] = "time_out_of_range"
        elif time is not None and time * UNITS[unit] % UNITS[of_feed]:
            ours[line] = "time_invalid"
        kept.append(event | {"time": None if time is None or line in ours else time * UNITS[unit] // UNITS[of_feed]})
    plainly = decoded(decoder, ndjson(kept), NDJSON)
    for key in ("times", "sources", "payload", "new_sources"):
        assert found[key] == plainly[key], key
    reasons = {fault.line: fault.reason for fault in plainly["faults"]} | ours
    assert {fault.line: fault.reason for fault in found["faults"]} == reasons


@given(events(integers, st.none(), names, odd_names), st.integers(0, 5))
def test_more_faults_than_allowed_refuse_the_body(events: Any, at_most: int) -> None:
    body = stream(table_of(events, pa.int64(), pa.string()))
    faults = feed("ns", True, True).decode(body, ARROW, TABLE).faults
    few = Decoder("river", "/time", "ns", "/from/station", "/id", BodyLimits(600, 2**20, 600, 100, at_most))
    if len(faults) <= at_most:
        assert few.decode(body, ARROW, TABLE).faults == faults
        return
    for way in (few.decode, few.decode_line_by_line):
        with pytest.raises(TooManyFaults, match=f"more than {at_most} lines"):
            way(body, ARROW, TABLE)


def test_thousands_of_names_keep_the_order_of_first_appearance() -> None:
    count = 5000
    stations = [f"gw-{number * 7919 % 1013}" for number in range(count)]
    table = pa.table({"time": pa.array(range(count), pa.int64()), "station": stations})
    shuffled = pa.array(sorted(set(stations), reverse=True))
    indices = pa.array([shuffled.index(station).as_py() for station in stations], pa.int32())
    coded = table.set_column(1, "station", pa.DictionaryArray.from_arrays(indices, shuffled))
    decoder = Decoder("river", "/time", "ns", "/station")
    expected = decoder.decode(ndjson(table.to_pylist()), NDJSON, TABLE)
    for each in (table, coded):
        for edges in ([], [10, 2000, 2000, 4999]):
            assert plain(decoder.decode(stream(each, edges), ARROW, TABLE)) == plain(expected)

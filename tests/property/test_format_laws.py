"""The same events give the same arrival in whatever format they come (DESIGN section 6); and two laws of CloudEvents.

NDJSON is the measure: tests/property/test_decode_laws.py holds it against an opinion from outside.
"""

from __future__ import annotations

import json
import re
from binascii import Error as Base64Error
from binascii import a2b_base64

import msgspec
import pytest
from helpers_arrival import check_arrival, line_numbers, plain, source_names
from helpers_arrow import ARROW
from hypothesis import example, given, settings
from hypothesis import strategies as st
from strandline.errors import BodyError, TooManyFaults
from strandline.ingest import cloudevents
from strandline.ingest.decode import Decoder
from strandline.ingest.formats import MEDIA_TYPES
from strandline.ingest.limits import BodyLimits
from strandline.ingest.offload import numbered
from strandline.ingest.timestamps import TimestampError, parse_rfc3339

NDJSON, JSON, SEQUENCE = "application/x-ndjson", "application/json", "application/json-seq"
ONE, BATCH, MSGPACK = (
    "application/cloudevents+json",
    "application/cloudevents-batch+json",
    "application/vnd.msgpack",
)
LIMITS = BodyLimits(event_bytes_at_most=600, nesting_at_most=6)
FEEDS = [
    Decoder("river", "/time", "rfc3339", "/source", "/id", LIMITS),
    Decoder("river", "/data/ts", "ns", "/data/from", None, LIMITS),
    Decoder("river", "/data/ts", "ms", None, "/id", LIMITS),
    Decoder("river", "/list/0", "s", "/list/1", None, LIMITS),
]
TABLE = {"/gauge/1": 0, "gauge-2": 1}

# --- events ------------------------------------------------------------------------------------------------------

times = st.sampled_from(
    ["2026-01-31T12:34:56Z", "2026-01-31t12:34:56.5+01:00", "1998-12-31T23:59:60Z", "0001-01-01T00:00:00Z"]
) | st.sampled_from(["yesterday", "2026-02-30T00:00:00Z", 5, None])
names = st.sampled_from(["/gauge/1", "gauge-2", "urn:new:1", "ö", "", "a b", "a\0b", 7, None])
texts = st.sampled_from(["x", "", "\x7f", "ö", "\ufdd0", "\U0001fffe", "10", True, 5, 2**31, 1.5, None, [], {}])
floats = st.floats(allow_nan=False, allow_infinity=False)
scalars = st.none() | st.booleans() | st.integers(-(2**63), 2**64 - 1) | floats | st.text(max_size=6)
values = st.recursive(
    scalars,
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=3), inner, max_size=3),
    max_leaves=6,
)


@st.composite
def events(draw, usual=6):
    """CloudEvents, most of them sound; each rule is broken now and then."""

    def seldom():
        return draw(st.integers(0, usual)) == usual // 2  # hypothesis tries the ends more often than the rest

    def rarely(strategy, otherwise):
        return draw(strategy) if seldom() else otherwise

    event = {
        "specversion": rarely(texts, "1.0"),
        "id": rarely(texts, draw(st.sampled_from(["1", "2", "ö"]))),
        "source": rarely(names, draw(st.sampled_from(["/gauge/1", "gauge-2", "urn:new:1"]))),
        "type": rarely(texts, "level"),
        "time": rarely(times, draw(st.sampled_from(["2026-01-31T12:34:56Z", "2026-01-31T12:34:57.25Z"]))),
        "data": draw(values),
        "list": draw(st.lists(st.integers(0, 10**10) | st.text(max_size=3), max_size=3)),
    }
    if draw(st.booleans()):
        event["data"] = {"ts": draw(st.integers(-(2**63), 2**64 - 1)), "from": draw(names)}
    if not seldom():
        del event["list"]
    for name in ("subject", "dataschema", "datacontenttype", "data_base64", "ext", "ext2"):
        good = {"dataschema": "urn:a:b", "datacontenttype": "a/b", "data_base64": "eA=="}.get(name, "x")
        if draw(st.integers(0, 5)) == 0:
            event[name] = rarely(texts, good)
    if "data_base64" in event and not seldom():
        del event["data"]
    event |= rarely(st.sampled_from([{"Ext": 1}, {"": 1}, {"e-x": None}, {"ö": "x"}]), {})
    for name in rarely(st.sets(st.sampled_from(list(event))), ()):
        del event[name]
    return event


spaces = st.sampled_from(["", "", " ", "\n", "\r\n\t"])


@st.composite
def spaced(draw, value):
    """A value as JSON with white space between its tokens."""
    if isinstance(value, dict):
        inner = [f"{json.dumps(key)}{draw(spaces)}:{draw(spaced(item))}" for key, item in value.items()]
        return "{" + draw(spaces) + ",".join(inner) + draw(spaces) + "}"
    if isinstance(value, list):
        return "[" + ",".join([draw(spaced(item)) for item in value]) + draw(spaces) + "]"
    return json.dumps(value, ensure_ascii=draw(st.booleans()))


def decoded(feed, body, media_type):
    arrival = feed.decode(body, media_type, TABLE)
    check_arrival(arrival, TABLE)
    assert plain(arrival) == plain(feed.decode_line_by_line(body, media_type, TABLE))
    return arrival


feeds = st.sampled_from(FEEDS)


@given(st.data(), st.lists(events(), max_size=5), feeds)
def test_json_formats_give_the_same_arrival(data, events, feed):
    """Line breaks between tokens become spaces; all other bytes are the sender's."""
    texts = [data.draw(spaced(event)) for event in events]
    lines = "".join(re.sub("[\r\n]", " ", text) + "\n" for text in texts).encode()
    expected = plain(decoded(feed, lines, NDJSON))
    array = "[" + ",".join(texts) + "]"
    end = st.sampled_from(["\n", "", " \n\n", "\n\x1e"])
    sequence = "".join("\x1e" + text + data.draw(end) for text in texts)
    assert plain(decoded(feed, array.encode(), JSON)) == expected
    assert plain(decoded(feed, sequence.encode(), SEQUENCE)) == expected
    if len(texts) == 1:
        assert plain(decoded(feed, texts[0].encode(), JSON)) == expected


@given(st.lists(events(), max_size=5) | st.lists(values, max_size=5), feeds)
def test_messagepack_gives_the_arrival_of_its_compact_json(items, feed):
    lines = b"".join(msgspec.json.encode(item) + b"\n" for item in items)
    expected, found = decoded(feed, lines, NDJSON), decoded(feed, msgspec.msgpack.encode(items), MSGPACK)
    assert columns(found) == columns(expected)
    assert bytes(found.payload) == bytes(expected.payload)
    if len(items) == 1 and isinstance(items[0], dict):
        assert plain(decoded(feed, msgspec.msgpack.encode(items[0]), MSGPACK)) == plain(found)


def columns(arrival):
    """What the core decides by."""
    identities = None if arrival.identities is None else arrival.identities.tolist()
    return (
        arrival.times.tolist(),
        source_names(arrival, TABLE),
        identities,
        line_numbers(arrival),
        [(fault.line, fault.reason) for fault in arrival.faults],
    )


@given(st.lists(events(usual=20), max_size=5), feeds)
def test_cloudevents_give_the_arrival_of_any_json(events, feed):
    """But for those that are faulty as CloudEvents only, and these by an opinion of its own."""
    array = json.dumps(events).encode()
    plainly, batch = decoded(feed, array, JSON), decoded(feed, array, BATCH)
    rules = {line for line, event in enumerate(events, 1) if not is_cloudevent(event)}
    good = [line for line in line_numbers(plainly) if line not in rules]
    assert line_numbers(batch) == good
    rows = {line: row for row, line in enumerate(line_numbers(plainly))}
    assert batch.times.tolist() == [plainly.times[rows[line]] for line in good]
    assert source_names(batch, TABLE) == [source_names(plainly, TABLE)[rows[line]] for line in good]
    by_line = {fault.line: fault.reason for fault in plainly.faults}
    by_line |= dict.fromkeys(rules - by_line.keys(), "cloudevent_invalid")
    assert {fault.line: fault.reason for fault in batch.faults} == by_line
    if len(events) == 1:
        assert plain(decoded(feed, array[1:-1], ONE)) == plain(batch)


def is_cloudevent(event):
    """The rules by the standard library, sharing only the time parser; URIs by the few that are drawn here."""
    if any(re.fullmatch("[a-z0-9]+", name) is None for name in event.keys() - {"data_base64"}):
        return False
    attributes = {k: v for k, v in event.items() if k not in ("data", "data_base64") and v is not None}
    for value in attributes.values():
        if not isinstance(value, str | int):
            return False
        if type(value) is int and not -(2**31) <= value < 2**31:
            return False
        if isinstance(value, str) and any(is_forbidden(ord(character)) for character in value):
            return False
    required = [attributes.get(name) for name in ("id", "source", "type", "specversion")]
    if not all(isinstance(value, str) and value for value in required) or attributes["specversion"] != "1.0":
        return False
    optional = [attributes.get(name, "x") for name in ("subject", "datacontenttype", "dataschema", "time")]
    if not all(isinstance(value, str) and value for value in optional):
        return False
    if attributes["source"] in ("ö", "a b", "\x7f") or attributes.get("dataschema", "urn:a:b") != "urn:a:b":
        return False
    if attributes.get("datacontenttype", "a/b") != "a/b":
        return False
    return is_time(attributes.get("time")) and is_data(event)


def is_forbidden(code):
    return code < 0x20 or 0x7F <= code < 0xA0 or 0xFDD0 <= code < 0xFDF0 or code & 0xFFFE == 0xFFFE


def is_time(text):
    try:
        return text is None or bool(parse_rfc3339(text)) or True
    except TimestampError as error:
        return error.reason == "time_out_of_range"


def is_data(event):
    encoded = event.get("data_base64")
    if encoded is None:
        return True
    try:
        return "data" not in event and isinstance(encoded, str) and a2b_base64(encoded, strict_mode=True) is not None
    except (Base64Error, ValueError):
        return False


@settings(max_examples=300)
@given(st.lists(events(usual=12), min_size=1, max_size=2))
@example([{"specversion": "1.0", "id": "1", "source": "/a", "type": "t", "data": None, "data_base64": "eA=="}])
def test_the_two_laws_of_cloudevents_agree(events):
    lines = [json.dumps(event, ensure_ascii=False).encode() for event in events]
    faults = [cloudevents.fault_of(line) for line in lines]
    assert cloudevents.all_sound(b"".join(line + b"\n" for line in lines), len(lines)) == (not any(faults))
    for fault, event in zip(faults, events, strict=True):
        assert (fault is None) == is_cloudevent(event)


# --- any bytes ---------------------------------------------------------------------------------------------------

formats = st.sampled_from(MEDIA_TYPES)
shreds = st.sampled_from(
    [b"\x1e", b"\n", b"[", b"]", b"{", b"}", b",", b'"', b"\\", b'{"time":', b"\x81\xa1a", b"\x92", b"\xdd\0\0\0\2",
     b"\xff", b"\xc4\1", b"null", b'{"specversion":"1.0","id":"1","source":"/a","type":"t"}', b" ", b"\r\n", b"\0"]
)  # fmt: skip


@given(st.binary(max_size=60) | st.lists(shreds, max_size=20).map(b"".join), formats, feeds)
def test_no_body_of_any_format_makes_it_fall_over(body, media_type, feed):
    try:
        decoded(feed, body, media_type)
    except BodyError as error:
        assert error.status in (413, 422)


@given(st.lists(events(), max_size=6), feeds, st.sampled_from([NDJSON, JSON]))
def test_what_was_decoded_aside_gets_the_numbers_of_the_table(events, feed, media_type):
    lines = b"".join(json.dumps(event).encode() + b"\n" for event in events)
    body = json.dumps(events).encode() if media_type == JSON else lines
    assert plain(numbered(feed.decode(body, media_type, {}), TABLE)) == plain(feed.decode(body, media_type, TABLE))


@given(st.lists(events(usual=2), max_size=8), st.integers(0, 4), formats.filter(lambda name: name not in (ONE, ARROW)))
def test_more_faults_than_allowed_refuse_the_body(events, at_most, media_type):
    def feed(limit):
        return Decoder("river", "/time", "rfc3339", "/source", "/id", BodyLimits(faults_at_most=limit))

    texts = [json.dumps(event).encode() for event in events]
    bodies = {MSGPACK: msgspec.msgpack.encode(events), SEQUENCE: b"".join(b"\x1e" + text for text in texts)}
    array = b"[" + b",".join(texts) + b"]"
    body = bodies.get(media_type, array if media_type in (JSON, BATCH) else b"\n".join(texts))
    faults = feed(100).decode(body, media_type, TABLE).faults
    if len(faults) <= at_most:
        assert decoded(feed(at_most), body, media_type).faults == faults
        return
    for way in (Decoder.decode, Decoder.decode_line_by_line):
        with pytest.raises(TooManyFaults, match=f"more than {at_most} lines") as caught:
            way(feed(at_most), body, media_type, TABLE)
        assert 1 <= len(caught.value.faults) <= 10
        assert set(caught.value.faults) <= {(fault.line, fault.reason, fault.detail) for fault in faults}

"""Bodies of MessagePack: cases, written as bytes by the format's own table (MessagePack specification, from memory)."""

from __future__ import annotations

import base64
import json
import struct

import pytest
from helpers_arrival import check_arrival, line_numbers, plain
from strandline.errors import BodyError, TooManyFaults
from strandline.ingest.decode import Decoder
from strandline.ingest.limits import BodyLimits

MSGPACK, NDJSON = "application/vnd.msgpack", "application/x-ndjson"
FEED = Decoder("river", "/ts", "ns")
TS = b"\xa2ts\x01"  # "ts": 1


def decoded(body, decoder=FEED):
    arrival = decoder.decode(body, MSGPACK, {})
    check_arrival(arrival, {})
    assert plain(arrival) == plain(decoder.decode_line_by_line(body, MSGPACK, {}))
    return arrival


def with_value(value):
    """A map of a time and `x`."""
    return b"\x82" + TS + b"\xa1x" + value


def refused(body, decoder=FEED):
    with pytest.raises(BodyError) as caught:
        decoder.decode(body, MSGPACK, {})
    return caught.value


def test_one_map():
    # The example on the format's home page, {"compact":true,"schema":0}, with a time.
    body = b"\x83" + TS + bytes.fromhex("a7636f6d70616374c3a6736368656d6100")
    assert decoded(body).payload == b'{"ts":1,"compact":true,"schema":0}\n'


@pytest.mark.parametrize("head", [b"\x93", b"\xdc\x00\x03", b"\xdd\x00\x00\x00\x03"])
def test_an_array_of_maps(head):
    arrival = decoded(head + (b"\x81" + TS) * 3)
    assert arrival.times.tolist() == [1, 1, 1]
    assert decoded(head[:-1] + (b"\x90" if len(head) == 1 else b"\0")).received == 0


@pytest.mark.parametrize("head", [b"\x81", b"\xde\x00\x01", b"\xdf\x00\x00\x00\x01"])
def test_every_kind_of_map(head):
    assert decoded(head + TS).times.tolist() == [1]
    assert decoded(b"\x91" + head + TS).times.tolist() == [1]


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (b"\xc0", "null"), (b"\xc2", "false"), (b"\xc3", "true"), (b"\x7f", "127"), (b"\xe0", "-32"),
        (b"\xcc\xff", "255"), (b"\xcd\xff\xff", "65535"), (b"\xce\xff\xff\xff\xff", "4294967295"),
        (b"\xcf" + b"\xff" * 8, "18446744073709551615"), (b"\xd0\x80", "-128"), (b"\xd1\x80\x00", "-32768"),
        (b"\xd2\x80\0\0\0", "-2147483648"), (b"\xd3\x80" + b"\0" * 7, "-9223372036854775808"),
        (b"\xcb" + struct.pack(">d", 0.1), "0.1"), (b"\xca" + struct.pack(">f", 0.5), "0.5"),
        (b"\xcb" + struct.pack(">d", -0.0), "-0.0"), (b"\xcb" + struct.pack(">d", 5e-324), "5e-324"),
        (b"\xa0", '""'), (b"\xd9\x01a", '"a"'), (b"\xda\x00\x01a", '"a"'), (b"\xdb\0\0\0\x01a", '"a"'),
        (b"\xa4\xf0\x9f\x98\x80", '"😀"'), (b"\xa3\x00\x0a\x22", '"\\u0000\\n\\""'),
        (b"\x90", "[]"), (b"\x92\x01\x90", "[1,[]]"), (b"\x80", "{}"), (b"\x81\xa1a\x80", '{"a":{}}'),
        (b"\x82\xa1a\x01\xa1a\x02", '{"a":2}'),  # a key that stands twice counts with its last value
    ],
)  # fmt: skip
def test_values_become_compact_json(value, text):
    arrival = decoded(with_value(value))
    assert arrival.payload == b'{"ts":1,"x":' + text.encode() + b"}\n"
    assert json.loads(arrival.payload)["x"] == json.loads(text)


@pytest.mark.parametrize(
    ("value", "words"),
    [
        (b"\xc4\x01a", "binary"), (b"\xc5\x00\x01a", "binary"), (b"\xc6\0\0\0\x01a", "binary"),
        (b"\xc7\x01\x05a", "extension"), (b"\xd4\x05a", "extension"), (b"\xd8\x05" + b"a" * 16, "extension"),
        (b"\xd6\xff\0\0\0\x01", "timestamp"), (b"\xd7\xff" + b"\xff" * 8, "timestamp"),
        (b"\xcb\x7f\xf8" + b"\0" * 6, "not finite"), (b"\xcb\x7f\xf0" + b"\0" * 6, "not finite"),
        (b"\xca\xff\x80\0\0", "not finite"), (b"\x81\x01\x02", "key"), (b"\x81\xc0\x02", "key"),
        (b"\x81\xc4\x01a\x02", "key"), (b"\x81\x80\x02", "key"), (b"\x81\xc3\x02", "key"),
        (b"\xa1\xff", "UTF-8"), (b"\xa3\xed\xa0\x80", "UTF-8"), (b"\x91\x91\xc4\x01a", "binary"),
    ],
)  # fmt: skip
def test_what_json_cannot_hold_is_a_fault_of_its_item(value, words):
    raw = with_value(value)
    arrival = decoded(b"\x93\x81" + TS + raw + b"\x81" + TS)
    (fault,) = arrival.faults
    assert (fault.line, fault.reason) == (2, "malformed")
    assert words in fault.detail
    assert base64.b64decode(json.loads(fault.raw)["messagepack"]) == raw  # nothing of it is lost
    assert line_numbers(arrival) == [1, 3]


def test_items_that_are_no_maps():
    arrival = decoded(b"\x95\x01\xc0\x90\xa1x\x81" + TS)
    assert [(fault.line, fault.reason) for fault in arrival.faults] == [(n, "malformed") for n in (1, 2, 3, 4)]


@pytest.mark.parametrize(
    ("body", "words"),
    [
        (b"\x01", "at byte 0: it begins neither a map nor an array"),
        (b"{}", "neither"),
        (b"\xc0", "neither"),
        (b"\xc1", "neither"),
        (b"\x92\x81" + TS, "truncated"),
        (b"\x81\xa2t", "truncated"),
        (b"\xdc", "truncated"),
        (b"\xdd\x00", "truncated"),
        (b"\x91\xc1", "invalid opcode"),
        (b"\x81" + TS + b"\x81" + TS, "trailing characters"),  # maps one after the other need an array around them
        (b"\x90\x90", "trailing characters"),
        (b"\x91" * 100_000 + b"\xc0", "too deep"),
        (b"\x81\xa1a" * 100_000 + b"\xc0", "too deep"),
    ],
)
def test_what_is_no_messagepack_is_refused_as_a_whole(body, words):
    error = refused(body)
    assert error.status == 422
    assert words in error.detail


def test_nesting_is_a_fault_of_its_item():
    for depth, good in ((63, True), (64, False), (400, False)):
        arrival = decoded(b"\x92" + with_value(b"\x91" * depth + b"\xc0") + b"\x81" + TS)
        assert [fault.reason for fault in arrival.faults] == ([] if good else ["too_deep"])
        assert len(arrival.times) == (2 if good else 1)


def test_limits():
    limits = BodyLimits(decoded_bytes_at_most=100, event_bytes_at_most=40, events_at_most=4)
    feed = Decoder("river", "/ts", "ns", limits=limits)
    assert refused(b"\x95" + b"\x80" * 5, feed).status == 413
    assert refused(b"\xdd\xff\xff\xff\xff", feed).status == 413  # counted before it is read
    assert refused(b"\x90" * 101, feed).status == 413
    long = with_value(b"\xd9\x25" + b"x" * 37)
    grows = with_value(b"\xaa" + b"\x00" * 10)  # 18 bytes, and 73 as JSON
    arrival = decoded(b"\x93\x81" + TS + long + grows, feed)
    assert [(fault.line, fault.reason) for fault in arrival.faults] == [(2, "too_large"), (3, "too_large")]
    assert len(arrival.faults[0].raw) <= 40
    error = refused(b"\x94" + grows * 4, feed)
    assert (error.status, "as JSON" in error.detail) == (413, True)


def test_items_that_are_none_count_as_faults_of_the_body():
    limits = BodyLimits(faults_at_most=3)
    feed = Decoder("river", "/ts", "ns", limits=limits)
    assert len(decoded(b"\x94\x01\x02\x03\x81" + TS, feed).faults) == 3
    for way in (feed.decode, feed.decode_line_by_line):
        with pytest.raises(TooManyFaults, match="line 1: malformed"):
            way(b"\x95\x01\x02\x03\x04\x81" + TS, MSGPACK, {})

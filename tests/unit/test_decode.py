"""Decoding bodies: cases that the laws in tests/property/test_decode_laws.py do not reach or do not name."""

from __future__ import annotations

import json
from hashlib import blake2b

import numpy as np
import pytest
from helpers_arrival import check_arrival, line_numbers, plain, source_names
from strandline.errors import BodyError
from strandline.ingest.decode import Decoder
from strandline.ingest.formats import MEDIA_TYPES
from strandline.ingest.limits import BodyLimits
from strandline.ingest.lines import utf8_fault
from strandline.ingest.pointer import PointerError
from strandline.ingest.timestamps import parse_rfc3339

NDJSON, JSON = "application/x-ndjson", "application/json"
RIVER = Decoder("river", "/ts", "ns", "/station")
SMALL = BodyLimits(decoded_bytes_at_most=10_000, event_bytes_at_most=40, events_at_most=3, nesting_at_most=2)


def event(time=1, station="gauge-1", **more):
    return json.dumps({"ts": time, "station": station, **more}).encode()


def decoded(decoder, body, media_type=NDJSON, table=None):
    """The arrival, checked, and the same as by the slow way."""
    arrival = decoder.decode(body, media_type, table or {})
    check_arrival(arrival, table or {})
    assert plain(arrival) == plain(decoder.decode_line_by_line(body, media_type, table or {}))
    return arrival


def faults(arrival):
    return [(fault.line, fault.reason) for fault in arrival.faults]


@pytest.mark.parametrize(
    ("body", "media_type"),
    [
        (body, kind)
        for kind in MEDIA_TYPES
        for body in (b"", b"\n", b"\r\n \t\n\n")
        if not (body and ("msgpack" in kind or "arrow" in kind))
    ],
)
def test_an_empty_body_is_an_arrival_of_nothing(body, media_type):
    arrival = decoded(RIVER, body, media_type)
    assert arrival.received == 0
    assert arrival.payload == b""
    assert decoded(Decoder("river", "/ts", "ns"), b"").new_sources == []


def test_an_empty_array_is_an_arrival_of_nothing():
    assert decoded(RIVER, b" [ ] ", JSON).received == 0


def test_sources_are_numbered_in_order_of_first_appearance():
    table = {"gauge-1": 0, "gauge-2": 1}
    names = ["neu", "gauge-2", "ä", "neu", "gauge-1", 7, "7"]
    arrival = decoded(RIVER, b"\n".join(event(station=name) for name in names), table=table)
    assert arrival.sources.tolist() == [2, 1, 3, 2, 0, 4, 4]
    assert arrival.new_sources == ["neu", "ä", "7"]
    assert source_names(arrival, table) == list(map(str, names))


def test_a_source_that_only_faulty_lines_name_is_not_new():
    arrival = decoded(RIVER, event(station="bad", time="x") + b"\n" + event(station="good") + b"\n" + event(station=""))
    assert arrival.new_sources == ["good"]
    assert arrival.sources.tolist() == [0]
    assert faults(arrival) == [(1, "time_invalid"), (3, "source_invalid")]


def test_without_a_source_pointer_the_feed_is_the_source():
    decoder = Decoder("river", "/ts", "ns")
    arrival = decoded(decoder, event() + b"\n" + event())
    assert (arrival.sources.tolist(), arrival.new_sources) == ([0, 0], ["river"])
    arrival = decoded(decoder, event() + b"\n" + event(), table={"other": 0, "river": 1})
    assert (arrival.sources.tolist(), arrival.new_sources) == ([1, 1], [])


def test_identities_are_the_same_in_every_process_and_version():
    decoder = Decoder("river", "/ts", "ns", "/station", "/id")
    lines = [
        event(station="ab", id="c"),
        event(station="a", id="bc"),
        event(station="ab", id=7),
        event(station="ab", id="7"),
    ]
    identities = decoded(decoder, b"\n".join(lines)).identities.tolist()
    assert len(set(identities)) == 3
    assert identities[2] == identities[3]
    # BLAKE2b (RFC 7693) of the standard library over the bytes that the docstring states; and one frozen value.
    assert identities[0] == int.from_bytes(blake2b(b"\x02\0\0\0abc", digest_size=8).digest(), "little")
    assert identities[0] == 0xA3AF54334CCCBAEC
    assert decoded(Decoder("ab", "/ts", "ns", None, "/id"), event(id="c")).identities.tolist() == identities[:1]
    assert decoded(RIVER, lines[0]).identities is None


def test_line_numbers_are_those_of_the_body():
    body = b"\r\n" + event(1) + b"\r\n\r\n" + b"nonsense\r\n" + event(2) + b"\n"
    arrival = decoded(RIVER, body)
    assert line_numbers(arrival) == [2, 5]
    assert faults(arrival) == [(4, "malformed")]
    assert arrival.faults[0].raw == b"nonsense"
    assert arrival.payload == event(1) + b"\n" + event(2) + b"\n"
    assert decoded(RIVER, event(1) + b"\n\n \n").line_numbers is None


def test_two_texts_on_one_line_are_no_event():
    arrival = decoded(RIVER, event(1) + event(2) + b"\n\n" + event(3))
    assert faults(arrival) == [(1, "malformed")]
    assert arrival.times.tolist() == [3]


def test_what_stands_in_a_line_is_passed_on_as_it_came():
    line = b' {"ts" : 1,\t"station":"\\u0061", "x": 1e999, "x": "\\/"} '
    arrival = decoded(RIVER, line + b"\r\n" + event(2))
    assert arrival.payload == line + b"\n" + event(2) + b"\n"
    assert arrival.new_sources == ["a", "gauge-1"]


TIMES = [
    ("ns", "1", 1),
    ("s", "9223372036", 9223372036_000000000),
    ("ms", "-1", -1_000_000),
    ("us", "1700000000000000", 1_700_000_000_000_000_000),
    ("ns", "9223372036854775807", 2**63 - 1),
    ("ns", "-9223372036854775808", -(2**63)),
    ("rfc3339", '"1990-12-31T15:59:60-08:00"', 662_688_000_000_000_000),
    ("ns", "1.0", "time_invalid"),
    ("ns", "1e3", "time_invalid"),
    ("ns", '"1"', "time_invalid"),
    ("ns", "true", "time_invalid"),
    ("ns", "[1]", "time_invalid"),
    ("ns", "1e999", "time_invalid"),
    ("ns", "null", "time_missing"),
    ("ns", "9223372036854775808", "time_out_of_range"),
    ("ns", "18446744073709551616", "time_out_of_range"),
    ("ns", "1" * 5000, "time_out_of_range"),
    ("s", "9223372037", "time_out_of_range"),
    ("rfc3339", "1", "time_invalid"),
    ("rfc3339", '"2026-01-31 12:34:56Z"', "time_invalid"),
    ("rfc3339", '"2026-01-31T12:34:56Z\\n"', "time_invalid"),
    ("rfc3339", '"\\ud800"', "time_invalid"),
    ("rfc3339", '"0001-01-01T00:00:00Z"', "time_out_of_range"),
]


@pytest.mark.parametrize(("unit", "text", "expected"), TIMES)
@pytest.mark.parametrize("count", [1, 30])
def test_times(unit, text, expected, count):
    good = '"2026-01-31T12:34:56Z"' if unit == "rfc3339" else "1"
    lines = [f'{{"ts":{good}}}'] * 20 + [f'{{"ts":{text}}}'] * count
    arrival = decoded(Decoder("river", "/ts", unit), "\n".join(lines).encode())
    if isinstance(expected, int):
        assert arrival.times.tolist()[20:] == [expected] * count
    else:
        assert faults(arrival) == [(21 + row, expected) for row in range(count)]
        assert "/ts" in arrival.faults[0].detail
        assert len(arrival.times) == 20


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ('"' + "x" * 256 + '"', "x" * 256),
        ('"' + "ö" * 128 + '"', "ö" * 128),
        ("-12", "-12"),
        ("9" * 256, "9" * 256),
        ('"\\ud83d\\ude00"', "😀"),
        ('"' + "x" * 257 + '"', "source_invalid"),
        ('"' + "ö" * 129 + '"', "source_invalid"),
        ("9" * 257, "source_invalid"),
        ("9" * 4300, "source_invalid"),
        ("9" * 4301, "source_invalid"),
        ("9" * 9000, "source_invalid"),
        ('""', "source_invalid"),
        ("1.5", "source_invalid"),
        ("true", "source_invalid"),
        ('{"a":1}', "source_invalid"),
        ('"\\ud800"', "source_invalid"),
        ('"\\ude00\\ud83d"', "source_invalid"),
        ("null", "source_missing"),
    ],
)
def test_sources(text, expected):
    arrival = decoded(RIVER, event() + b"\n" + f'{{"ts":1,"station":{text}}}'.encode())
    if expected.startswith("source_"):
        assert faults(arrival) == [(2, expected)]
    else:
        assert arrival.new_sources == ["gauge-1", expected]


@pytest.mark.parametrize(
    ("text", "reason"),
    [('""', "id_invalid"), ('"' + "x" * 1025 + '"', "id_invalid"), ("9" * 1025, "id_invalid"),
     ("9" * 5000, "id_invalid"), ("1.5", "id_invalid"), ("false", "id_invalid"),
     ('"\\udfff"', "id_invalid"), ("null", "id_missing"),
     ('"' + "x" * 1024 + '"', None), ("9" * 1024, None), ('"ö"', None)],
)  # fmt: skip
def test_ids(text, reason):
    decoder = Decoder("river", "/ts", "ns", "/station", "/id")
    arrival = decoded(decoder, event(id=1) + b"\n" + f'{{"ts":1,"station":"a","id":{text}}}'.encode())
    assert faults(arrival) == ([] if reason is None else [(2, reason)])
    missing = decoded(decoder, event() + b"\n" + b'{"ts":1,"id":1}')
    assert faults(missing) == [(1, "id_missing"), (2, "source_missing")]


@pytest.mark.parametrize(
    ("line", "words"),
    [
        (b"garbage", "not one JSON object at byte 0: invalid character"),
        (b"[1]", "not a JSON object: expected `object`, got `array`"),
        (b'{"ts":1,"station":"a","x":"\xff"}', "not UTF-8: invalid start byte at byte 27"),
        (b'{"ts":1,"station":"a","x":"\xed\xa0\x80"}', "not UTF-8: invalid continuation byte at byte 27"),
        (b'{"ts":1,"station":"a","x":"\\ud800"}', "half a surrogate pair"),
        (b'{"ts":1,"station":"a","x":"a\tb"}', "invalid character"),
        (b'\xef\xbb\xbf{"ts":1,"station":"a"}', "at byte 0: invalid character"),
        (b'{"ts":1,"station":"a"', "at byte 21: input data was truncated"),
        (b'{"ts":1,"station":"a"}\x00', "at byte 22: trailing characters"),
    ],
)
def test_malformed_lines_hinder_no_other(line, words):
    arrival = decoded(RIVER, event(1) + b"\n" + line + b"\n" + event(3))
    assert faults(arrival) == [(2, "malformed")]
    assert words in arrival.faults[0].detail
    assert arrival.faults[0].raw == line
    assert arrival.times.tolist() == [1, 3]
    assert line_numbers(arrival) == [1, 3]


def test_details_are_short_and_harmless_whatever_stands_there():
    hostile = "\x1b[2J\n<script>" + "\u202e" * 300 + "\x7f"
    decoder = Decoder("river", "/" + "p" * 300 + "\u202e", "rfc3339")
    line = json.dumps({"p" * 300 + "\u202e": hostile}).encode()
    (fault,) = decoded(decoder, line).faults  # decoded() checks length and characters
    assert fault.reason == "time_invalid"
    assert "\\u001b" in fault.detail
    assert "\\u202e" in fault.detail


@pytest.mark.parametrize("depth", [100, 2000, 100_000])
@pytest.mark.parametrize("closed", [True, False])
def test_nesting_without_end_is_a_fault_of_its_line(depth, closed):
    deep = b'{"ts":1,"station":"a","x":' + b"[" * depth + (b"]" * depth + b"}" if closed else b"")
    nested = b'{"a":' * depth + (b"1" + b"}" * depth if closed else b"")
    arrival = decoded(RIVER, b"\n".join([event(1), deep, event(2), nested, event(3)]))
    assert faults(arrival) == [(2, "too_deep"), (4, "too_deep")]
    assert arrival.times.tolist() == [1, 2, 3]


@pytest.mark.parametrize("depth", [100, 2000, 100_000])
def test_nesting_without_end_in_an_array(depth):
    deep = b'{"ts":1,"station":"a","x":' + b"[" * depth + b"]" * depth + b"}"
    arrival = decoded(RIVER, b"[" + b" ,\n".join([event(1), deep, event(2), deep, event(3)]) + b"]", JSON)
    assert faults(arrival) == [(2, "too_deep"), (4, "too_deep")]
    assert arrival.faults[0].raw == deep
    assert arrival.times.tolist() == [1, 2, 3]
    assert line_numbers(arrival) == [1, 3, 5]
    assert faults(decoded(RIVER, deep, JSON)) == [(1, "too_deep")]
    with pytest.raises(BodyError) as caught:
        RIVER.decode(b"[" + event(1) + b"," + b"[" * depth, JSON, {})
    assert caught.value.status == 422


def test_nesting_at_the_limit():
    def line(brackets):
        return b'{"ts":1,"station":"a","x":' + b"[" * brackets + b"]" * brackets + b',"y":"' + b"[{" * 99 + b'"}'

    assert faults(decoded(RIVER, event() + b"\n" + line(63))) == []
    assert faults(decoded(RIVER, event() + b"\n" + line(64))) == [(2, "too_deep")]
    wide = b'{"ts":1,"station":"a","x":[' + b",".join([b"[[1],{}]"] * 200) + b"]}"
    assert faults(decoded(RIVER, b"\n".join([wide] * 50))) == []
    assert decoded(RIVER, b"\n".join([wide] * 50) + b"\n").payload == (wide + b"\n") * 50


def test_long_lines():
    decoder = Decoder("river", "/ts", "ns", limits=SMALL)
    fits, long = b'{"ts":1,"x":"%s"}' % (b"x" * 25), b'{"ts":1,"x":"%s"}' % (b"x" * 26)
    assert len(fits) == 40
    arrival = decoded(decoder, fits + b"\r\n" + long + b"\r\n" + fits)
    assert faults(arrival) == [(2, "too_large")]
    assert arrival.faults[0].raw == long[:40]
    assert arrival.payload == (fits + b"\n") * 2


def test_too_many_events():
    decoder = Decoder("river", "/ts", "ns", limits=SMALL)
    line = b'{"ts":1}\n'
    assert decoded(decoder, line * 3 + b"\n\n").received == 3
    assert decoded(decoder, b'{"ts":1}\nbad\n\nbad').received == 3
    for body, media_type in [
        (line * 4, NDJSON), (b"bad\n" * 4, NDJSON), (b"\n" * 13, NDJSON), (b"\n" * 200, NDJSON), (b"[1,1,1,1]", JSON),
        (b"[" + b"1," * 20 + b"1]", JSON),
    ]:  # fmt: skip
        with pytest.raises(BodyError, match="send it in smaller parts") as caught:
            decoder.decode(body, media_type, {})
        assert caught.value.status == 413


def test_an_array_of_very_many_small_items_is_counted_before_it_is_split():
    limits = BodyLimits(events_at_most=2_000_000)
    items = b"[" + b"1," * 1_100_000 + b"1]"
    with pytest.raises(BodyError, match="items or more") as caught:
        RIVER.decode(items, JSON, {})
    assert caught.value.status == 413
    few = b'[{"ts":1,"station":"a","x":[' + b"1," * 500_000 + b"1]}]"
    roomy = Decoder("river", "/ts", "ns", limits=limits)
    assert decoded(roomy, b"[" + few[1:-1] + b"," + few[1:-1] + b"," + few[1:-1] + b"]", JSON).received == 3


def test_too_many_bytes():
    with pytest.raises(BodyError, match="10000 are allowed") as caught:
        Decoder("river", "/ts", "ns", limits=SMALL).decode(b" " * 10_001, NDJSON, {})
    assert caught.value.status == 413


@pytest.mark.parametrize(
    ("body", "words"),
    [
        (b"5", "at byte 0: it begins neither an object nor an array"),
        (b" \n nonsense", "at byte 3"),
        (b'[{"ts":1},]', "at byte 10"),
        (b'[{"ts":1}', "at byte 9"),
        (b'[{"ts":01}]', "at byte 8"),
        (b'{"ts":1}{"ts":2}', "at byte 8"),
        (b'{"ts":1}\n{"ts":2}\n', "at byte 9"),
        (b'["a\nb"]', "at byte 3"),
        (b'{"x":"\xff"}', "not UTF-8: invalid start byte at byte 6"),
        (b'[{"x":"\\ud800"}]', "at byte"),
    ],
)
def test_what_is_no_json_is_refused_as_a_whole(body, words):
    with pytest.raises(BodyError) as caught:
        RIVER.decode(body, JSON, {})
    assert caught.value.status == 422
    assert words in caught.value.detail


def test_items_are_passed_on_with_their_own_bytes():
    body = b'\n[ {"ts" :\r\n 1, "station":"a\\n" } ,\n\n{"ts":2,"station":"b"}, 3, {"ts":4,"station":"[,]"}]\r\n'
    arrival = decoded(RIVER, body, JSON)
    assert arrival.payload == b'{"ts" :   1, "station":"a\\n" }\n{"ts":2,"station":"b"}\n{"ts":4,"station":"[,]"}\n'
    assert faults(arrival) == [(3, "malformed")]
    assert line_numbers(arrival) == [1, 2, 4]
    one = decoded(RIVER, b'\n{"ts":1,\n"station":"a"}\n', JSON)
    assert one.payload == b'{"ts":1, "station":"a"}\n'


def test_media_types():
    assert decoded(RIVER, event(), "application/jsonl").received == 1
    with pytest.raises(BodyError) as caught:
        RIVER.decode(event(), "text/plain", {})
    assert (caught.value.status, caught.value.accept_encoding) == (415, None)


def test_bad_pointers():
    with pytest.raises(PointerError):
        Decoder("river", "ts", "ns")


def is_utf8_to_python(body):
    try:
        body.decode()
    except UnicodeDecodeError:
        return False
    return True


def test_utf8_is_checked_across_the_steps(monkeypatch):
    monkeypatch.setattr("strandline.ingest.lines._UTF8_STEP", 8)
    for text in ("a" * 7 + "é" * 20, "€" * 30, "a😀" * 20, "é" * 40):
        body = text.encode()
        assert utf8_fault(body) is None
        for at in range(len(body)):
            for damaged in (body[:at], body[:at] + b"\xff" + body[at + 1 :], body[:at] + body[at + 1 :]):
                assert (utf8_fault(damaged) is None) == is_utf8_to_python(damaged)


def test_a_body_of_five_thousand_takes_the_fast_way_and_keeps_its_bytes():
    start = parse_rfc3339("2026-01-31T12:00:00Z")
    lines = [event(start + row * 1_000_003 % 10**9, f"gauge-{row % 64}", note="ü[{") for row in range(5000)]
    body = b"\n".join(lines) + b"\n"
    arrival = decoded(RIVER, body, table={f"gauge-{k}": k for k in range(64)})
    assert arrival.payload is body
    assert arrival.times.tolist() == [json.loads(line)["ts"] for line in lines]
    assert np.array_equal(arrival.sources, np.arange(5000) % 64)

"""Laws of decoding, on bodies of every kind: clean, odd, faulty and hostile.

The fast way, the slow way and an opinion from the standard library's json must agree on every line.
"""

from __future__ import annotations

import json
import re

import numpy as np
import pytest
from helpers_arrival import check_arrival, line_numbers, plain, source_names
from hypothesis import example, given, settings
from hypothesis import strategies as st
from strandline.errors import BodyError
from strandline.ingest.decode import Decoder
from strandline.ingest.limits import BodyLimits
from strandline.ingest.nesting import deep_items, deep_suspects, deepest
from strandline.ingest.timestamps import TimestampError, from_unit, parse_rfc3339

NDJSON = "application/x-ndjson"
LIMITS = BodyLimits(event_bytes_at_most=700, nesting_at_most=6)
TABLE = {"gauge-1": 0, "gauge-2": 1, "ö": 2}
FEEDS = {
    "flat": Decoder("river", "/ts", "ns", "/station", "/id", LIMITS),
    "seconds": Decoder("river", "/ts", "s", "/station", None, LIMITS),
    "text": Decoder("river", "/at", "rfc3339", "/station", None, LIMITS),
    "one source": Decoder("river", "/ts", "ms", None, "/id", LIMITS),
    "nested": Decoder("river", "/meta/ts", "ns", "/meta/from/station", "/id", LIMITS),
    "array": Decoder("river", "/readings/0/ts", "ns", "/station", None, LIMITS),
    "quoted": Decoder("river", '/a"b', "ns", "/a~1b", None, LIMITS),
    "same": Decoder("river", "/ts", "ns", "/ts", "/ts", LIMITS),
    "compiled": Decoder("river", "/ts", "ns", "/station", None, LIMITS, is_compiled=True),
    "compiled text": Decoder("river", "/at", "rfc3339", None, None, LIMITS, is_compiled=True),
}
POINTERS = {
    "flat": ("/ts", "ns", "/station", "/id"),
    "seconds": ("/ts", "s", "/station", None),
    "text": ("/at", "rfc3339", "/station", None),
    "one source": ("/ts", "ms", None, "/id"),
    "nested": ("/meta/ts", "ns", "/meta/from/station", "/id"),
    "array": ("/readings/0/ts", "ns", "/station", None),
    "quoted": ('/a"b', "ns", "/a~1b", None),
    "same": ("/ts", "ns", "/ts", "/ts"),
    "compiled": ("/ts", "ns", "/station", None),
    "compiled text": ("/at", "rfc3339", None, None),
}

# --- bodies ------------------------------------------------------------------------------------------------------

times = st.one_of(
    st.integers(-(2**63), 2**63 - 1).map(str),
    st.integers(1_700_000_000, 1_700_000_100).map(str),
    st.sampled_from(
        ["0", "-0", "9223372036854775808", "-9223372036854775809", "18446744073709551616", "1.0", "1e3", "1e999", '"5"',
         "true", "null", "[]", "{}", "9" * 40, '"2026-01-31T12:34:56.789Z"', '"1998-12-31T23:59:60Z"',
         '"9999-12-31T23:59:59Z"', '"2026-02-30T00:00:00Z"', '"2026-01-31T12:34:56\\u005a"', '"\\ud800"', '"\\udc00Z"']
    ),
)  # fmt: skip
names = st.one_of(
    st.sampled_from(['"gauge-1"', '"gauge-2"', '"\\u00f6"', '"ö"', "7", "-0", '""', '"\\ud800"', '"a\\u0000b"', "null",
                     "1.5", "false", "[1]", "9" * 30, '"' + "x" * 257 + '"', '"\\"\\\\/"']),
    st.text(max_size=5).map(json.dumps),
)  # fmt: skip
junk = st.sampled_from(
    ["1", '"[[[[[[[["', '"}\\n{"', "1e999", "[{}]", '{"a":[1,{"b":null}]}', "[[[[[]]]]]", "[[[[[[]]]]]]",
     '"\\ud83d\\ude00"', '"\\ud83d"', "01", "nul", '"\t"', "NaN", "", '{"ts":1}', "{,}"]
)  # fmt: skip
keys = st.sampled_from(["ts", "at", "station", "id", "\\u0074s", "note", "meta", "from", 'a\\"b', "a/b", "readings"])


@st.composite
def members(draw, depth=0):
    parts = []
    for key in (
        draw(st.lists(keys, max_size=5)) if depth else ["ts", "at", "station", "id", *draw(st.lists(keys, max_size=3))]
    ):
        if draw(st.integers(0, 15)) == 0:
            continue
        if key in ("meta", "from") and depth < 2:
            value = draw(members(depth=depth + 1))
        elif key == "readings":
            value = "[" + ",".join(draw(st.lists(members(depth=2), max_size=2))) + "]"
        elif key in ("ts", "at", "\\u0074s", 'a\\"b'):
            value = draw(times)
        else:
            value = draw(names if key in ("station", "id", "a/b") else junk)
        space = draw(st.sampled_from(["", "", "", " ", "\t"]))
        parts.append(f'"{key}"{space}:{space}{value}')
    return "{" + ",".join(parts) + "}"


@st.composite
def good_lines(draw, odds=True):
    """Lines that are events of the feeds "flat", "text" and "nested", but for what is too long or too deep in them."""
    time = draw(st.integers(-(2**63), 2**63 - 1))
    station = draw(st.sampled_from(["gauge-1", "gauge-2", "ö", "neu", 7]))
    event = {"ts": time, "station": station, "id": draw(st.integers(0, 9) | st.text("abc", min_size=1, max_size=3))}
    event |= {"at": "2026-01-31T12:34:56Z", "meta": {"ts": time, "from": {"station": station}}}
    odd = draw(st.integers(0, 7)) if odds else 7
    if odd == 0:
        event["note"] = "x" * draw(st.integers(550, 650))
    elif odd == 1:
        event["note"] = json.loads("[" * (depth := draw(st.integers(4, 7))) + "]" * depth)
    elif odd == 2:
        event["station"] = draw(st.sampled_from(["", "x" * 256, "x" * 257, "ö" * 129, "a\0b"]))
    elif odd == 3:
        event["id"] = draw(st.sampled_from(["", 10**255, 10**256]))
    return json.dumps(event, ensure_ascii=draw(st.booleans()), separators=(",", ":"))


odd_lines = st.one_of(
    members(),
    members().map(lambda line: line + line),
    members().map(lambda line: " " + line + "\t"),
    members().map(lambda line: line[: len(line) // 2]),
    st.sampled_from(["", " ", "\t", "[]", "5", "null", "{}", "\ufeff{}", "{" * 9, "\x00", "\x0c", "}",
                     '{"a":' * 7 + "1" + "}" * 7]),
    st.text(max_size=12),
)  # fmt: skip
endings = st.sampled_from([b"\n", b"\n", b"\n", b"\r\n", b"\n\n", b"\r", b"\r\r\n", b"\n \n"])


@st.composite
def bodies(draw):
    lines = draw(st.lists(good_lines() if draw(st.booleans()) else good_lines() | odd_lines, max_size=8))
    body = b"".join(line.encode("utf-8", "surrogatepass") + draw(endings) for line in lines)
    if draw(st.booleans()):
        body = body.removesuffix(b"\n")
    if body and draw(st.integers(0, 5)) == 0:
        at = draw(st.integers(0, len(body) - 1))
        body = (
            body[:at]
            + draw(st.sampled_from([b"\xff", b"\xc0\x80", b"\x00", b'"', b"{", b"\\", b"\n"]))
            + body[at + 1 :]
        )
    return body


# --- an outside opinion: the standard library's json, line by line, sharing only the scalar time parser ----------


def depth_of(text: str) -> int:
    """Nesting, character by character, strings left out."""
    level = deepest_level = 0
    inside = escaped = False
    for character in text:
        if inside:
            inside = escaped or character != '"'
            escaped = character == "\\" and not escaped
        elif character == '"':
            inside = True
        elif character in "[{":
            level += 1
            deepest_level = max(deepest_level, level)
        elif character in "]}":
            level -= 1
    return deepest_level


def refuse(text):
    raise ValueError(text)


def loaded(text):
    """The document, and whether any string in it, of repeated members too, holds half a surrogate pair."""
    halves = []

    def seen(pairs):
        halves.extend(
            half for pair in pairs for half in re.findall("[\ud800-\udfff]", json.dumps(pair, ensure_ascii=False))
        )
        return dict(pairs)

    document = json.loads(text, parse_constant=refuse, object_pairs_hook=seen)
    return document, bool(halves)


def stands_at(document, pointer):
    for escaped in pointer.split("/")[1:]:
        token = escaped.replace("~1", "/").replace("~0", "~")
        if isinstance(document, dict) and token in document:
            document = document[token]
        elif isinstance(document, list) and token.isdigit() and int(token) < len(document):
            document = document[int(token)]
        else:
            return None
    return document


def opinion(line: bytes, feed: str):
    """(time, source, id) of a line, or the reason why it is none."""
    time_at, unit, source_at, id_at = POINTERS[feed]
    if len(line) > LIMITS.event_bytes_at_most:
        return "too_large"
    try:
        text = line.decode()
    except UnicodeDecodeError:
        return "malformed"
    if depth_of(text) > LIMITS.nesting_at_most:
        return "too_deep"
    try:
        document, has_halves = loaded(text.strip(" \t\r\n"))
    except ValueError:
        return "malformed"
    if not isinstance(document, dict):
        return "malformed"
    found = [opinion_on_time(stands_at(document, time_at), unit)]
    found += [opinion_on_source(stands_at(document, source_at)) if source_at else "river"]
    found += [opinion_on_text(stands_at(document, id_at), "id", 1024) if id_at else None]
    for value in found:
        if isinstance(value, Broken):
            return value.reason
    return "malformed" if has_halves else tuple(found)


class Broken:
    def __init__(self, reason):
        self.reason = reason


def opinion_on_time(value, unit):
    if value is None:
        return Broken("time_missing")
    try:
        if unit == "rfc3339":
            return parse_rfc3339(value) if isinstance(value, str) else Broken("time_invalid")
        return from_unit(value, unit) if type(value) is int else Broken("time_invalid")
    except TimestampError as error:
        return Broken(error.reason)


def opinion_on_text(value, role, bytes_at_most):
    if value is None:
        return Broken(f"{role}_missing")
    if type(value) not in (int, str):
        return Broken(f"{role}_invalid")
    size = len(str(value).encode("utf-8", "surrogatepass"))
    surrogate = any(0xD800 <= ord(character) < 0xE000 for character in str(value))
    return Broken(f"{role}_invalid") if surrogate or not 1 <= size <= bytes_at_most else str(value)


def opinion_on_source(value):
    found = opinion_on_text(value, "source", 256)
    return Broken("source_invalid") if isinstance(found, str) and "\0" in found else found


def lines_of(body: bytes):
    """(number, line) of the lines that are not empty."""
    lines = body.split(b"\n")
    if lines[-1] == b"":
        lines.pop()
    elif lines[-1].endswith(b"\r"):
        lines[-1] = lines[-1].removesuffix(b"\r") + b"\r"
    return [(n, line.removesuffix(b"\r")) for n, line in enumerate(lines, 1) if line.strip(b" \t\r")]


# --- the laws ----------------------------------------------------------------------------------------------------

feeds = st.sampled_from(list(FEEDS))


@settings(max_examples=400)
@given(bodies(), feeds)
@example(b'{"ts":1,"station":"a","id":1}{"ts":2,"station":"a","id":1}\n\n', "flat")
@example(b'{"ts":\n1,"station":"a","id":1}{"ts":2,"station":"a","id":1}\n', "flat")
@example(b'{"ts":1,"station":"a","id":1,"x":\n{}}{"ts":2,"station":"a","id":1}\n', "flat")
@example(b'{"ts":"x","ts":1,"station":"a","id":1}\n', "flat")
@example(b'{"ts":"x","ts":1,"station":"a","v":1e999,"id":1}\n', "flat")
@example(b'{"meta":{"ts":1,"from":{"station":"a"}},"meta":{"ts":2},"id":1}\n', "nested")
@example(b'{"ts":1,"station":"\\ud800","id":1}\n', "flat")
@example(b'{"ts":"\\ud800","ts":1,"station":"a","id":1}\n', "flat")
@example(b'{"ts":1,"station":"a","id":1,"x":"\xff"}\n{"ts":1,"station":"a","id":1}\n', "flat")
@example(b'{"ts":1,"station":"a","id":' + b"1" * 4299 + b"}\n", "flat")
def test_fast_slow_and_outside_opinion_agree(body, feed):
    decoder = FEEDS[feed]
    arrival = decoder.decode(body, NDJSON, TABLE)
    check_arrival(arrival, TABLE)
    assert plain(arrival) == plain(decoder.decode_line_by_line(body, NDJSON, TABLE))

    expected = {number: (line, opinion(line, feed)) for number, line in lines_of(body)}
    faults = {fault.line: (fault.raw, fault.reason) for fault in arrival.faults}
    cut = LIMITS.event_bytes_at_most
    assert faults == {n: (line[:cut], found) for n, (line, found) in expected.items() if isinstance(found, str)}
    good = {n: (line, *found[:2]) for n, (line, found) in expected.items() if not isinstance(found, str)}
    lines = bytes(arrival.payload).split(b"\n")[:-1]
    rows = zip(lines, arrival.times.tolist(), source_names(arrival, TABLE), strict=True)
    assert dict(zip(line_numbers(arrival), rows, strict=True)) == good
    if arrival.identities is not None:
        pairs = [found[1:] for _, found in expected.values() if not isinstance(found, str)]
        assert len(dict(zip(pairs, arrival.identities.tolist(), strict=True))) == len(set(arrival.identities.tolist()))


@given(st.lists(good_lines(odds=False), min_size=1, max_size=30), st.sampled_from(["flat", "text", "nested"]))
def test_a_clean_body_is_its_own_payload(lines, feed):
    body = "".join(line + "\n" for line in lines).encode()
    arrival = FEEDS[feed].decode(body, NDJSON, TABLE)
    assert arrival.payload is body
    assert not arrival.faults
    assert arrival.line_numbers is None


def is_json(line):
    """Whether the line is JSON also to those who do not take half a surrogate pair."""
    try:
        return not loaded(line)[1]
    except ValueError:
        return False


items = st.one_of(good_lines(), members().filter(is_json), st.sampled_from(["1", "[]", "null", '"}{"', "{}"]))


@given(st.lists(items, max_size=12), st.sampled_from(["flat", "text", "nested", "array"]), st.data())
def test_array_and_lines_give_the_same(lines, feed, data):
    """Whatever the format (DESIGN section 6): items count as lines, and their own bytes are passed on."""
    breaks = st.sampled_from(["", " ", "\n", "\r\n\t"])
    body = data.draw(breaks) + "[" + ",".join(data.draw(breaks) + line + data.draw(breaks) for line in lines) + "]"
    array = FEEDS[feed].decode((body + data.draw(breaks)).encode(), "application/json", TABLE)
    check_arrival(array, TABLE)
    assert plain(array) == plain(FEEDS[feed].decode("\n".join(lines).encode(), NDJSON, TABLE))
    if len(lines) == 1 and lines[0].startswith("{"):
        one = FEEDS[feed].decode(lines[0].encode(), "application/json", TABLE)
        assert plain(one) == plain(array)


@given(bodies(), bodies(), feeds)
def test_two_bodies_are_their_parts_one_after_the_other(first, second, feed):
    if not first.endswith(b"\n") and first:
        first += b"\n"
    decoder = FEEDS[feed]
    whole, one = (decoder.decode(body, NDJSON, TABLE) for body in (first + second, first))
    two = decoder.decode(second, NDJSON, TABLE | {name: len(TABLE) + i for i, name in enumerate(one.new_sources)})
    assert bytes(whole.payload) == bytes(one.payload) + bytes(two.payload)
    assert whole.times.tolist() == one.times.tolist() + two.times.tolist()
    assert whole.sources.tolist() == one.sources.tolist() + two.sources.tolist()
    assert list(whole.new_sources) == [*one.new_sources, *two.new_sources]
    shift = first.count(b"\n")
    assert line_numbers(whole) == line_numbers(one) + [shift + n for n in line_numbers(two)]
    assert [fault.line for fault in whole.faults] == [f.line for f in one.faults] + [shift + f.line for f in two.faults]


@given(st.binary(max_size=60) | bodies(), st.sampled_from([NDJSON, "application/jsonl", "application/json"]), feeds)
def test_no_body_makes_it_fall_over(body, media_type, feed):
    try:
        arrival = FEEDS[feed].decode(body, media_type, TABLE)
    except BodyError as error:
        assert media_type == "application/json"
        assert error.status == 422
    else:
        check_arrival(arrival, TABLE)


# --- nesting -----------------------------------------------------------------------------------------------------

bracketed = st.text('[]{}",\\a\n', max_size=60)


@given(bracketed)
@example('"\\"[["[')
def test_depth_by_brackets(text):
    assert deepest(text.encode()) == depth_of(text)


@given(st.lists(st.text('[]{}",\\a', max_size=30) | st.text("[{", max_size=9), min_size=1), st.integers(1, 8))
@example(["[[["], 2)
@example(["{", "[[[", "{"], 2)
def test_no_deep_line_escapes_suspicion(lines, limit):
    payload = "".join(line + "\n" for line in lines).encode()
    lengths = np.array([len(line) + 1 for line in lines])
    suspects = deep_suspects(payload, np.cumsum(lengths) - lengths, limit).tolist()
    assert {i for i, line in enumerate(lines) if depth_of(line) > limit} <= set(suspects)


values = st.recursive(
    st.none() | st.integers() | st.text('[]{}",\\ab', max_size=6),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text('[]"\\', max_size=3), inner, max_size=3),
    max_leaves=12,
)


@given(st.lists(values, min_size=1, max_size=8), st.integers(0, 4), st.integers(1, 40))
def test_deep_items_of_an_array(items, limit, chunk_bytes):
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("strandline.ingest.nesting._CHUNK_BYTES", chunk_bytes)  # so that chunks end everywhere
        texts = [json.dumps(item) for item in items]
        body = ("[" + ",".join(texts) + "]").encode()
        count, found = deep_items(body, limit, 1000)
    assert count == len(items)
    expected = [(n, text) for n, text in enumerate(texts, 1) if depth_of(text) > limit]
    assert [(n, body[start:end].decode()) for n, start, end in found] == expected

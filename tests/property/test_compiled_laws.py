"""Laws of compiled decoding: it answers what plain decoding answers, whatever the body, and it does take clean bodies.

`test_decode_laws` holds it against the slow way and an outside opinion on odd bodies; here the bodies are clean, alike
from line to line, and then damaged a little: what a prover that trusts the last line could fall for.
"""

from __future__ import annotations

import json
import math
import zlib
from pathlib import Path
from random import Random

import pytest
from fuzz_mutate import mutated
from helpers_arrival import check_arrival, plain
from hypothesis import example, given, settings
from hypothesis import strategies as st
from strandline.ingest import compiled_lines, compiled_marks, compiled_text
from strandline.ingest.compiled import Scanner, serves
from strandline.ingest.decode import Decoder
from strandline.ingest.formats import NDJSON
from strandline.ingest.limits import BodyLimits
from strandline.ingest.lines import split_lines
from strandline.ingest.pointer import PointerError
from strandline.ingest.values import SOURCE_BYTES_AT_MOST

LIMITS = BodyLimits(event_bytes_at_most=2000, nesting_at_most=5, faults_at_most=5)
TABLE = {"weir": 0, "gauge-2": 1}
POINTERS = {
    "ns": ("/ts", "ns", "/station"),
    "ms": ("/ts", "ms", "/station"),
    "text": ("/at", "rfc3339", "/station"),
    "one source": ("/ts", "ns", None),
    "one source, text": ("/at", "rfc3339", None),
    "empty name": ("/ts", "ns", "/"),
}
PLAIN = {name: Decoder("river", *pointers, None, LIMITS) for name, pointers in POINTERS.items()}
COMPILED = {name: Decoder("river", *pointers, None, LIMITS, is_compiled=True) for name, pointers in POINTERS.items()}
feeds = st.sampled_from(list(POINTERS))

# --- clean bodies: every line has the members of the first, as devices send them ------------------------------------

numbers = st.one_of(
    st.integers(-(10**20), 10**20).map(str),
    st.decimals(-9999, 9999, allow_nan=False, allow_infinity=False, places=2).map(str),
    st.floats(allow_nan=False, allow_infinity=False).map(json.dumps),
    st.sampled_from(["0", "-0", "0.0", "1E5", "1e-7", "0e+1", "12345678", "123456789.5", "1234567.5", "123456.75"]),
)
texts = st.one_of(st.text(max_size=20), st.text('ab\\"\n/ö🌊', max_size=9)).map(
    lambda text: json.dumps(text.encode("utf-8", "replace").decode(), ensure_ascii=False)
)
nested = st.recursive(
    st.one_of(numbers, texts, st.sampled_from(["true", "false", "null", "[]", "{}", "[ ]", "{\t}"])),
    lambda inner: st.one_of(
        st.lists(inner, max_size=3).map(lambda items: "[" + " ,".join(items) + "]"),
        st.lists(inner, max_size=3).map(
            lambda items: "{" + ", ".join(f'"k{i}" :{item}' for i, item in enumerate(items)) + "}"
        ),
    ),
    max_leaves=6,
)
stations = st.one_of(
    st.sampled_from(["weir", "gauge-2", "ö", "neu", "a" * 8, "a" * 7 + "b", "a" * 16, "a" * 255 + "b", "gauge-10"]),
    st.text("abcdefgh", min_size=1, max_size=40),
)
instants = st.sampled_from(
    ["2026-01-31T12:34:56.789Z", "2026-01-31T12:34:56.788Z", "2026-01-31T12:34:56Z", "1998-12-31T23:59:60Z",
     "1969-12-31t23:59:59.999999999+23:59"]
)  # fmt: skip
times = st.integers(-(2**63) // 10**6 + 1, 2**63 // 10**6 - 1)


@st.composite
def lines(draw):
    """Lines of one order of members, with one kind of value in each place."""
    order = draw(st.permutations(["ts", "at", "station", "", *draw(st.lists(st.sampled_from("abcdefgh"), max_size=5))]))
    kinds = {key: draw(st.sampled_from([numbers, texts, nested])) for key in order}
    kinds |= {"ts": times.map(str), "at": instants.map(json.dumps)}
    kinds |= {"station": stations.map(lambda name: f'"{name}"'), "": stations.map(lambda name: f'"{name}"')}
    comma, colon = draw(st.sampled_from([(",", ":"), (", ", ": "), (" ,\t", " :")]))
    return [
        "{" + comma.join(f'"{key}"{colon}{draw(kinds[key])}' for key in order) + draw(st.sampled_from(["}", " }"]))
        for _ in range(draw(st.integers(1, 14)))
    ]


def body_of(given_lines):
    return "".join(line + "\n" for line in given_lines).encode()


# A line that is an event of every feed here, behind which no line is near the end of a payload: the last 128 bytes are
# read without marks (compiled_marks), so without this most lines of a short body would be.
LAST = b'{"ts":1,"at":"2026-01-31T12:34:56Z","station":"weir","":"weir","note":"%s"}\n' % (b"x" * 200)


def is_taken(feed, body):
    """Whether the scan proves the body; the same with marks and without, split before and not."""
    time_at, unit, source = POINTERS[feed]
    scanner = Scanner(time_at, unit, source, LIMITS.nesting_at_most)
    answers = set()
    for whole in (body, body + LAST):
        split = split_lines(whole, LIMITS)
        answers.add(split.is_regular and scanner.columns(split, TABLE) is not None)
        answers.add(scanner.columns_of(whole, TABLE, LIMITS.events_at_most) is not None)
    assert len(answers) == 1
    return answers.pop()


def agree(feed, body):
    for whole in (body + LAST, LAST + body + LAST, body):
        found = [decoder.decode(whole, NDJSON, TABLE) for decoder in (COMPILED[feed], PLAIN[feed])]
        check_arrival(found[0], TABLE)
        assert plain(found[0]) == plain(found[1])
    return found[0]


# --- the laws ----------------------------------------------------------------------------------------------------


@settings(max_examples=300)
@given(lines(), feeds)
def test_both_ways_give_the_same(given_lines, feed):
    agree(feed, body_of(given_lines))


@settings(max_examples=600)
@given(lines(), feeds, st.randoms(use_true_random=False), st.booleans())
@example(['{"ts":1,"station":"a"}', '{"ts":01,"station":"a"}'], "ns", Random(3), False)
def test_both_ways_give_the_same_of_damaged_bodies(given_lines, feed, draw, in_one_line):
    """One line is damaged, or the body as a whole: a byte set, taken, put in, a token laid over (fuzz_mutate)."""
    parts = [line.encode() for line in given_lines]
    if in_one_line:
        at = draw.randrange(len(parts))
        parts[at] = mutated(draw, parts[at], parts)
    body = b"".join(part + b"\n" for part in parts)
    body = body if in_one_line else mutated(draw, body, parts)
    if draw.random() < 0.7:
        body = body + b"\n" * (not body.endswith(b"\n")) + LAST
    found = []
    for decoder in (COMPILED[feed], PLAIN[feed]):
        try:
            found.append(plain(decoder.decode(body, NDJSON, TABLE)))
        except Exception as error:  # TooManyFaults, and whatever else: the same of both
            found.append(f"{type(error).__name__}: {error}")
    assert found[0] == found[1]


@settings(max_examples=300)
@given(lines(), feeds)
def test_clean_bodies_are_taken(given_lines, feed):
    """So that the laws above speak of the scan at all: what no rule of its own keeps out, it proves."""
    body = body_of(given_lines)
    arrival = agree(feed, body)
    has_surrogates = b"\\u" in body  # texts here are written as they are but for control characters
    repeated = any(len(set(keys := list(pairs))) < len(keys) for pairs in map(keys_of, given_lines))
    leap = "rfc3339" in POINTERS[feed] and b":60Z" in body
    too_small = POINTERS[feed][1] == "ms" and arrival.faults
    if not (arrival.faults or has_surrogates or repeated or leap or too_small):
        assert is_taken(feed, body)


def keys_of(line):
    return json.loads(line, object_pairs_hook=lambda pairs: [key for key, _ in pairs])


@given(nested, st.integers(0, 3))
def test_a_value_that_nobody_asks_for_is_json_or_not(value, shorter):
    """The standard library's json is the outside opinion; it lets pass NaN and the like, which never begin so here."""
    value = value[: len(value) - shorter]
    try:
        json.loads(value)
        is_json = True
    except ValueError:
        is_json = False
    deep = sum(value.count(bracket) for bracket in "[{") >= LIMITS.nesting_at_most
    for text in (f'{{"ts":1,"x":{value},"y":0}}\n', f'{{"ts":1,"x":{value}}}\n'):
        taken = is_taken("one source", text.encode())
        assert not taken or is_json or not_one_value(value)
        assert taken or not is_json or deep or "\\u" in value


def not_one_value(value):
    """Whether it is a value and more members, such as `1,"k1":2`: then the line is JSON although its piece is none."""
    try:
        json.loads(f'{{"x":{value}}}')
    except ValueError:
        return False
    return True


@pytest.mark.parametrize(
    "number",
    ["01", "-", "-a", "1.", ".5", "1.e5", "1e", "1e+", "+1", "00", "00000000", "0000000000", "1234567.", "1.5.5", "1-",
     "0x1", "12345678a", "1_0", "1 2", "１", "1.23456a", "123456.e"],
)  # fmt: skip
def test_what_is_no_number_is_not_taken(number):
    for end in ("}", " }", ',"y":123456789}', ',"y":[1]}'):
        body = f'{{"ts":1,"x":0{end}\n{{"ts":1,"x":{number}{end}\n'.encode()
        assert not is_taken("one source", body)
        assert agree("one source", body).faults


@pytest.mark.parametrize(
    "line",
    ['{"ts":1,"station":"neu","station":"weir"}', '{"ts":5,"ts":1,"station":"weir"}', '@,"ts":1}', '@}@}', '@} }',
     '@},{}', '@}]}', '@,}', '@,,"x":1}', '{"ts":1 "station":"weir"}', '@,"x":[1}}', '@,"x":{"y":1]}', '@,"x":[1 2]}',
     '@,"x":[1,]}', '@,"x":{"y"}}', '@,"x":{1:2}}', '@,"x":{"y":1,}}', '@,"x"}', '@,"x":}', '@,"x":nul}',
     '@,"x":nullx}',
     '@,"x":True}', '{"ts":1,"\\u0073tation":"neu","station":"weir"}', '{"ts":1,"station":"we\\u0069r"}',
     '{"ts":1,"station":"we\tir"}', '{"ts":1,"station":"we\x01ir"}',
     '{"station":"weir"}', '{"ts":1}', "{}", "{,}", '{"":1}', '{"ts":1,"station":7}', '{"ts":1,"station":""}'],
)  # fmt: skip
def test_lines_that_are_not_taken(line):
    """Alone, and behind a line whose keys are remembered. Some are events: that is for the other way to say."""
    line = line.replace("@", '{"ts":1,"station":"weir"') + "\n"
    for body in (line, '{"ts":1,"station":"weir","x":0}\n' + line):
        assert not is_taken("ns", body.encode())
        agree("ns", body.encode())


@pytest.mark.parametrize(
    ("string", "taken"),
    [(r'"\n\"\\\/\b\f\r\t"', True), (r'"\u00f6\u00DF"', True), (r'"\uD7ff\ue000"', True), ('"\x7f\\u0000"', True),
     (r'"\ud800"', False), (r'"\uDFFFx"', False), (r'"\udBff\uDC00"', False), (r'"\x"', False), (r'"\u12"', False),
     (r'"\u12g4"', False), (r'"\u004"', False), (r'"\U0041"', False), ('"\t"', False), ('"1234567\x01"', False),
     ('"a', False), ('"\\', False), (r'"\"', False), ('"\x00"', False)],
)  # fmt: skip
def test_strings_that_nobody_asks_for(string, taken):
    """A pair of surrogates is sound, and yet left to the other way: half of one is no character."""
    for body in (f'"x":{string}', f'"x":[0, {string} ]', f'"x":{{{string} : 0}}', f'"x":{string},"y":"12345678"'):
        line = f'{{"ts":1,{body}}}\n'.encode()
        assert is_taken("one source", line) == taken
        assert bool(agree("one source", line).faults) == (not taken and "udBff" not in string)


@pytest.mark.parametrize(
    ("time", "taken"),
    [("0", True), ("-0", True), (str(2**63 - 1), True), (str(1 - 2**63), True), (str(-(2**63)), False),
     (str(2**63), False), ("9" * 19, False), ("1" + "0" * 19, False), ("18446744073709551617", False), ("1.0", False),
     ("1e3", False), ("01", False), ("--1", False), ('"1"', False), ("null", False), ("[1]", False), ("", False)],
)  # fmt: skip
def test_times_at_the_edges(time, taken):
    body = f'{{"ts":{time},"station":"weir"}}\n'.encode()
    assert is_taken("ns", body) == taken
    agree("ns", body)


@pytest.mark.parametrize("size", [1, 7, 8, 9, 15, 16, 17, SOURCE_BYTES_AT_MOST, SOURCE_BYTES_AT_MOST + 1])
def test_names_of_every_length_are_told_apart_by_every_byte(size):
    names = ["x" * size, *("x" * at + "y" + "x" * (size - at - 1) for at in range(size))]
    body = "".join(f'{{"ts":{at},"station":"{name}"}}\n' for at, name in enumerate(names + names[::-1])).encode()
    assert is_taken("ns", body) == (size <= SOURCE_BYTES_AT_MOST)
    arrival = Decoder("river", "/ts", "ns", "/station", None, is_compiled=True).decode(body, NDJSON, TABLE)
    if size <= SOURCE_BYTES_AT_MOST:
        assert list(arrival.new_sources) == names
        assert arrival.sources.tolist() == [2 + at for at in (*range(size + 1), *range(size, -1, -1))]


def test_many_names_and_many_members():
    names = [f"ford-{number}" for number in range(5000)]
    members = ",".join(f'"m{number}":{number}' for number in range(100))
    body = "".join(f'{{{members},"station":"{name}","ts":1}}\n' for name in names).encode()
    assert is_taken("ns", body)
    assert list(agree("ns", body).new_sources) == names


def test_names_made_to_collide_cost_little():
    """Names of eight bytes that differ by one multiple in the mixing: found by trying, the same slot for all."""
    lowest = (1 << 12) - 1
    slots: dict[int, list[str]] = {}
    for number in range(400_000):
        name = f"{number:08}"
        slots.setdefault(slot_of(name.encode()) & lowest, []).append(name)
    same = max(slots.values(), key=len)
    assert len(same) > 64  # else the bound on probes would not come into play
    body = "".join(f'{{"ts":1,"station":"{name}"}}\n' for name in same).encode()
    assert not is_taken("ns", body)
    assert list(agree("ns", body).new_sources) == same


def slot_of(name):
    """The mixing of compiled_lines._slot for a name of eight bytes, written again."""
    scatter, mask = 0x9E3779B97F4A7C15, 2**64 - 1
    mixed = int.from_bytes(name, "little") * scatter & mask
    return ((mixed ^ mixed >> 32) * scatter & mask) >> 40


@given(st.text("/~01abc", max_size=6), st.text("/~01abc", max_size=6) | st.none(), st.sampled_from([None, "/id"]))
def test_who_is_served(time_at, source, id):
    """Whoever is served can be built; whoever is not is decoded the plain way."""
    try:
        served = serves(time_at, source, id)
    except PointerError:
        return
    if served:
        assert (time_at.count("/"), id) == (1, None)
        assert source is None or source.count("/") == 1
        Decoder("river", time_at, "ns", source, id, is_compiled=True)


def test_the_checksum_is_that_of_the_other_files():
    """numba would go on with what it compiled from an earlier compiled_text.py: see there."""
    contents = b"".join(Path(module.__file__).read_bytes() for module in (compiled_text, compiled_marks))
    assert zlib.crc32(contents) == compiled_lines.TEXT_CHECKSUM, "set TEXT_CHECKSUM in compiled_lines.py"


def test_no_level_is_beyond_the_bits():
    for levels, taken in ((compiled_text.LEVELS_AT_MOST, True), (compiled_text.LEVELS_AT_MOST + 1, False)):
        split = split_lines(b'{"ts":1,"x":' + b"[" * levels + b"]" * levels + b"}\n", BodyLimits(nesting_at_most=200))
        assert (Scanner("/ts", "ns", None, 200).columns(split, {}) is not None) == taken
    assert math.log2(compiled_text.LEVELS_AT_MOST + 1) == 6

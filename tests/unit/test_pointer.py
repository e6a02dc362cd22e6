"""JSON Pointers and the decoding of only the fields that they name."""

from __future__ import annotations

import json

import msgspec
import pytest
from hypothesis import given
from hypothesis import strategies as st
from strandline.ingest.pointer import MISSING, Fields, PointerError, Unheld, Values, parse_pointer

# RFC 6901 section 5: the document's members and the pointers to them.
RFC_DOCUMENT = {
    "foo": ["bar", "baz"], "": 0, "a/b": 1, "c%d": 2, "e^f": 3, "g|h": 4, "i\\j": 5, 'k"l': 6, " ": 7, "m~n": 8,
}  # fmt: skip
RFC_POINTERS = {
    "/foo": ["bar", "baz"], "/foo/0": "bar", "/": 0, "/a~1b": 1, "/c%d": 2, "/e^f": 3, "/g|h": 4, "/i\\j": 5,
    '/k"l': 6, "/ ": 7, "/m~0n": 8,
}  # fmt: skip


@pytest.mark.parametrize("text", RFC_POINTERS)
def test_examples_of_the_rfc(text):
    fields = Fields(text, int)
    assert fields.read(json.dumps(RFC_DOCUMENT).encode()).time == RFC_POINTERS[text]
    assert fields.pick(RFC_DOCUMENT).time == RFC_POINTERS[text]


def test_tokens():
    assert parse_pointer("") == ()
    assert parse_pointer("/") == ("",)
    assert parse_pointer("/a~1b/m~0n//0") == ("a/b", "m~n", "", "0")
    assert parse_pointer("/~01") == ("~1",)  # RFC 6901 section 4: ~1 first, so that this is not "/"


@given(st.lists(st.text(st.characters(codec="utf-8")), max_size=4))
def test_escaping_and_back(tokens):
    text = "".join("/" + token.replace("~", "~0").replace("/", "~1") for token in tokens)
    assert parse_pointer(text) == tuple(tokens)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("a", "must begin with '/'"),
        ("#/a", "must begin with '/'"),
        ("/~", "'~' at character 1"),
        ("/a/~2", "'~' at character 3"),
        ("/a~", "'~' at character 2"),
        ("/\ud800", "surrogate"),
    ],
)
def test_no_pointers(text, message):
    with pytest.raises(PointerError, match=message):
        parse_pointer(text)


@pytest.mark.parametrize(
    ("pointers", "message"),
    [
        (("", None, None), "whole event"),
        (("/ts", "", None), "whole event"),
        (("/a/b", "/a", None), "'/a/b' lies inside '/a'"),
        (("/a", "/b", "/a/0"), "'/a/0' lies inside '/a'"),
    ],
)
def test_pointers_that_no_event_can_satisfy(pointers, message):
    with pytest.raises(PointerError, match=message):
        Fields(pointers[0], str, pointers[1], pointers[2])


@pytest.mark.parametrize(
    ("pointers", "is_fast"),
    [
        (("/ts", "/station", "/id"), True),
        (("/ts", "/ts", None), True),
        (("/meta/ts", "/meta/from/name", "/id"), True),
        (("/", "/ ", "/é"), True),
        (("/time", "/source", "/inner_0"), True),
        (("/source", "/time", "/time"), True),
        (("/-/ts", "/station", None), True),
        (("/0/ts", "/station", None), False),
        (("/readings/10/ts", None, None), False),
        (("/ts", '/k"l', None), False),
        (("/ts", "/i\\j", None), False),
        (("/ts", "/new\nline", None), False),
    ],
)
def test_records_and_values_agree(pointers, is_fast):
    """Whatever the way, the same values come out; `decoder` exists where no array and no odd name is in the way."""
    fields = Fields(pointers[0], int, pointers[1], pointers[2])
    assert (fields.decoder is not None) == is_fast
    document: dict[str, object] = {"other": {"ts": 1, "0": 2}}
    written = {pointer: 7 + at for at, pointer in reversed(list(enumerate(pointers))) if pointer is not None}
    for pointer, value in written.items():
        inner = document
        *path, last = parse_pointer(pointer)
        for token in path:
            inner = inner.setdefault(token, {})
        inner[last] = value
    line = json.dumps(document).encode()
    expected = Values(*(None if pointer is None else written[pointer] for pointer in pointers))
    assert fields.read(line) == fields.pick(document) == expected
    records = [fields.record(expected)] * 3 + ([] if fields.decoder is None else fields.decoder.decode_lines(line))
    assert list(fields.times(records)) == [expected.time] * len(records)
    if pointers[1] is not None:
        assert list(fields.sources(records)) == [expected.source] * len(records)
        table = {expected.source: 5}
        assert list(fields.source_numbers(records, table)) == [5] * len(records)
        with pytest.raises(KeyError):
            fields.source_numbers(records, {})
    if pointers[2] is not None:
        assert list(fields.ids(records)) == [expected.id] * len(records)


def test_index_or_name():
    """RFC 6901 section 4: digits are an index where an array stands, a name where an object stands."""
    fields = Fields("/a/1/ts", int)
    assert fields.read(b'{"a": [{"ts":1},{"ts":2}]}').time == 2
    assert fields.read(b'{"a": {"1": {"ts":3}}}').time == 3
    for line in (b'{"a":[{"ts":1}]}', b'{"a":[]}', b'{"a":5}', b'{"a":null}', b'{"a":{"01":{"ts":3}}}', b"{}"):
        assert fields.read(line).time is MISSING
        assert fields.pick(json.loads(line)).time is MISSING
    assert Fields("/a/01", int).read(b'{"a":[1,2]}').time is MISSING  # no leading zeros
    assert Fields("/a/-", int).read(b'{"a":[1,2]}').time is MISSING  # after the last item: nothing
    assert Fields("/a/" + "9" * 5000, int).read(b'{"a":[1,2]}').time is MISSING


def test_last_of_repeated_members_counts():
    fields = Fields("/ts", int, "/a/b")
    assert fields.read(b'{"ts":"x","a":{"b":1},"ts":2,"a":{"b":3}}') == Values(2, 3, None)
    assert fields.read(b'{"ts":1,"a":{"b":1},"a":{}}').source is MISSING


def test_numbers_beyond_python():
    fields = Fields("/ts", int, "/s")
    assert fields.read(b'{"ts":1e999,"s":' + b"1" * 5000 + b"}") == Values(Unheld("1e999"), Unheld("1" * 5000), None)
    assert fields.read(b'{"ts":18446744073709551616,"s":1e999}').time == 2**64


@pytest.mark.parametrize("line", [b"[1]", b"5", b"", b"{", b'{"ts":1}{}', b'{"ts":01}', b'{"x":"\\q"}'])
def test_no_object(line):
    with pytest.raises(msgspec.DecodeError):
        Fields("/ts", int).read(line)

"""JSON text sequences (RFC 7464): the vectors of its sections 2.1 to 2.4, and what follows from its grammar.

Each vector is given as texts that are read, in terms of RFC 7464; here every text but an object is a fault as well.
"""

from __future__ import annotations

import pytest
from helpers_arrival import check_arrival, line_numbers, plain
from strandline.errors import BodyError
from strandline.ingest.decode import Decoder
from strandline.ingest.limits import BodyLimits

SEQUENCE, NDJSON = "application/json-seq", "application/x-ndjson"
A, B = b'{"ts":1}', b'{"ts":2}'
FEED = Decoder("river", "/ts", "ns")


def decoded(body, decoder=FEED):
    arrival = decoder.decode(body, SEQUENCE, {})
    check_arrival(arrival, {})
    assert plain(arrival) == plain(decoder.decode_line_by_line(body, SEQUENCE, {}))
    return arrival


def faults(arrival):
    return [(fault.line, fault.reason, fault.raw) for fault in arrival.faults]


@pytest.mark.parametrize(
    ("body", "times", "faulty"),
    [
        (b"", [], []),  # 2.1: a sequence may be empty; there is no end marker
        (b"\x1e%b\n\x1e%b\n" % (A, B), [1, 2], []),
        (b"\x1e\x1e%b\n" % A, [1], []),  # 2.1: consecutive RS denote no text between them
        (b"\x1e\x1e\x1e", [], []),
        (b'\x1e{"a":\x1e%b\n' % B, [2], [(1, "malformed", b'{"a":')]),  # 2.3: go on after what cannot be read
        (b"\x1e%b\x1e%b" % (A, B), [1, 2], []),  # an object ends by itself, without a line feed (2.4)
        (b"\x1e%b" % A, [1], []),
        (b"\x1e123\x1e%b\n" % A, [1], [(1, "malformed", b"123")]),  # 2.4: may be cut short
        (b"\x1etrue\x1e", [], [(1, "malformed", b"true")]),
        (b"\x1e123\n", [], [(1, "malformed", b"123")]),  # a text, and no event
        (b"\x1etruefalse\x1e%b" % A, [1], [(1, "malformed", b"truefalse")]),  # one text that is none, not two
        (b'\x1e"foo"\x1e', [], [(1, "malformed", b'"foo"')]),
        (b"\x1e%b%b\n" % (A, B), [], [(1, "malformed", A + B)]),
        (b"\x1e%b\n%b\n" % (A, B), [], [(1, "malformed", A + b" " + B)]),
        (b'\x1e{"ts":1,"x":"\xff"}\n\x1e%b\n' % B, [2], [(1, "malformed", b'{"ts":1,"x":"\xff"}')]),  # UTF-8 only
    ],
)
def test_vectors(body, times, faulty):
    arrival = decoded(body)
    assert arrival.times.tolist() == times
    assert faults(arrival) == faulty


def test_texts_are_numbered_without_the_empty_ones():
    arrival = decoded(b"\x1e\x1e \n\x1e%b\n\x1enonsense\n\x1e\n\x1e%b\n" % (A, B))
    assert line_numbers(arrival) == [1, 3]
    assert [fault.line for fault in arrival.faults] == [2]


def test_separators_and_line_feeds_that_only_agree_in_number():
    """As many of one as of the other, and not in pairs: a text's end is the next separator, not the line's end."""
    arrival = decoded(b"\x1e%b\n%b\x1e%b\n" % (A, A, B))
    assert faults(arrival) == [(1, "malformed", A + b" " + A)]
    assert (arrival.times.tolist(), line_numbers(arrival)) == ([2], [2])
    arrival = decoded(b"\x1e%b\n\x1e\n\x1e \n\x1e %b \n" % (A, B))
    assert (arrival.times.tolist(), line_numbers(arrival)) == ([1, 2], [1, 2])
    assert arrival.payload == A + b"\n" + B + b"\n"


def test_texts_of_several_lines_come_on_one_and_keep_their_bytes():
    arrival = decoded(b'\x1e\r\n {\r\n "ts" : 1,\t"x":"\\n"}\n \n\x1e' + B)
    assert arrival.payload == b'{   "ts" : 1,\t"x":"\\n"}\n' + B + b"\n"


def test_a_line_break_within_a_string_is_not_mended():
    arrival = decoded(b'\x1e{"ts":1,"x":"a\nb"}\n\x1e' + B)
    assert faults(arrival) == [(1, "malformed", b'{"ts":1,"x":"a b"}')]
    assert arrival.times.tolist() == [2]


@pytest.mark.parametrize("body", [A, b"  x", A + b"\n\x1e" + B, b"\xef\xbb\xbf\x1e" + A])
def test_what_stands_before_the_first_separator_is_no_sequence(body):
    with pytest.raises(BodyError, match="0x1E") as caught:
        FEED.decode(body, SEQUENCE, {})
    assert caught.value.status == 422


def test_limits():
    limits = BodyLimits(events_at_most=3, event_bytes_at_most=20, nesting_at_most=3)
    feed = Decoder("river", "/ts", "ns", limits=limits)
    for body in (b"\x1e{}" * 4, b"\x1e" * 13, b"\x1e1\n" * 4):
        with pytest.raises(BodyError) as caught:
            feed.decode(body, SEQUENCE, {})
        assert caught.value.status == 413
    deep, long = b'{"x":\n[[[1]]]}', b'{\n"x":"' + b"x" * 20 + b'"}'
    arrival = decoded(b"\x1e" + deep + b"\x1e" + long + b"\x1e" + A, feed)
    assert [fault.reason for fault in arrival.faults] == ["too_deep", "too_large"]
    assert arrival.times.tolist() == [1]


@pytest.mark.parametrize("depth", [2000, 100_000])
def test_nesting_without_end_is_a_fault_of_its_text(depth):
    deep = b'{"x":' + b"[\n" * depth + b"]" * depth + b"}"
    arrival = decoded(b"\x1e" + A + b"\n\x1e" + deep + b"\n\x1e" + B + b"\n")
    assert [(fault.line, fault.reason) for fault in arrival.faults] == [(2, "too_deep")]
    assert arrival.times.tolist() == [1, 2]

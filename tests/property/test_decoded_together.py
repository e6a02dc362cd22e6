"""Bodies that are decoded in one go become the arrivals that they become one by one."""

from __future__ import annotations

import json

from helpers_arrival import check_arrival, plain
from hypothesis import event, example, given
from hypothesis import strategies as st
from strandline.errors import BodyError
from strandline.ingest.decode import Decoder
from strandline.ingest.limits import BodyLimits
from strandline.ingest.together import decoded_together

NDJSON = "application/x-ndjson"
LIMITS = BodyLimits(event_bytes_at_most=200, nesting_at_most=4, events_at_most=20)
TABLE = {"gauge-1": 0, "gauge-2": 1}
FEEDS = [
    Decoder("river", "/ts", "ns", "/station", None, LIMITS),
    Decoder("river", "/ts", "ns", "/station", "/id", LIMITS),
    Decoder("gauge-2", "/ts", "ns", None, None, LIMITS),
    Decoder("river", "/ts", "ns", "/station", None, LIMITS, is_compiled=True),
]


def line(ts: int, station: str, note: object) -> bytes:
    return json.dumps({"ts": ts, "station": station, "id": ts % 7, "note": note}).encode()


lines = st.builds(line, st.integers(-(2**63), 2**63 - 1), st.sampled_from(list(TABLE)), st.sampled_from(("", "}\n{")))
odd = st.one_of(
    st.builds(line, st.just(2**63), st.just("gauge-1"), st.none()),
    st.builds(line, st.just(1), st.sampled_from(("new", "")), st.none()),
    st.builds(line, st.just(1), st.just("gauge-1"), st.sampled_from(("x" * 200, [[[[]]]]))),
    st.sampled_from((b"", b"{", b"}", b"{}", b" ", b'{"ts":1', b"{\xff}", b'{"ts":1}{"ts":2}')),
)
bodies = st.lists(lines, min_size=1, max_size=6) | st.lists(lines | odd, max_size=4)
joined = st.builds(
    lambda found, ending, last: ending.join(found) + (b"\n" if last else b""),
    *(bodies, st.sampled_from((b"\n", b"\n", b"\n", b"\r\n", b"\n\n")), st.booleans()),
)


@given(st.sampled_from(FEEDS), st.lists(joined, max_size=6))
@example(FEEDS[0], [b'{"ts":1,"station":"gauge-1"', b"}"])  # two halves of one
@example(FEEDS[0], [line(1, "gauge-1", ""), b"", line(2, "gauge-1", "")])
def test_in_one_go_as_one_by_one(decoder: Decoder, found: list[bytes]) -> None:
    together = decoded_together(decoder, found, NDJSON, TABLE, LIMITS)
    if together is None:
        event("one by one")
        return
    event("in one go")
    assert len(together) == len(found)
    for arrival, body in zip(together, found, strict=True):
        check_arrival(arrival, TABLE)
        assert plain(arrival) == plain(decoder.decode(body, NDJSON, TABLE))


@given(st.sampled_from(FEEDS), st.lists(st.lists(lines, min_size=1, max_size=3), min_size=1, max_size=6))
def test_bodies_in_which_all_is_well_are_decoded_in_one_go(decoder: Decoder, found: list[list[bytes]]) -> None:
    made = [b"\n".join(each) for each in found]
    together = decoded_together(decoder, made, NDJSON, TABLE, LIMITS)
    assert together is not None and [len(arrival.times) for arrival in together] == list(map(len, found))


def test_only_json_lines_are_decoded_in_one_go() -> None:
    body = line(1, "gauge-1", "")
    assert decoded_together(FEEDS[0], [body, body], "application/json", TABLE, LIMITS) is None
    assert decoded_together(FEEDS[0], [body] * 21, NDJSON, TABLE, LIMITS) is None, "more than one body may hold"
    assert len(FEEDS[0].decode(body, NDJSON, TABLE).times) == 1
    try:
        FEEDS[0].decode(b"\n".join([body] * 21), NDJSON, TABLE)
    except BodyError as error:
        assert error.status == 413

"""Bodies: every line is one JSON object that says what its row says, whatever the block, the cut and the style."""

from __future__ import annotations

import json
from datetime import UTC, datetime
from itertools import pairwise
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from strandline_loadgen.bodies import BLOCK_ROWS, Style, bodies, cut_by_count, cut_by_window
from strandline_loadgen.shapes import SECOND_NS, shape
from strandline_loadgen.trace import Trace


def instant_ns(text: str) -> int:
    """RFC 3339 with nine decimals, by the standard library to the second and by hand below it."""
    whole = datetime.strptime(text[:19], "%Y-%m-%dT%H:%M:%S").replace(tzinfo=UTC)
    assert text[19] == "."
    assert text[29:] == "Z"
    return int(whole.timestamp()) * SECOND_NS + int(text[20:29])


def lines(payloads: list[bytes]) -> list[dict[str, Any]]:
    whole = b"".join(payloads)
    assert whole == b"" or whole.endswith(b"\n")
    return [json.loads(line) for line in whole.splitlines()]


@st.composite
def traces(draw: st.DrawFn) -> Trace:
    n = draw(st.integers(0, 40))
    edge = st.one_of(st.integers(-(2**63) + 1, 2**63 - 1), st.integers(-20, 20), st.just(1_772_344_800 * SECOND_NS))
    times = np.array(draw(st.lists(edge, min_size=n, max_size=n)), dtype=np.int64)
    names = draw(st.lists(st.text(max_size=12), min_size=1, max_size=4, unique=True))
    sources = np.array(draw(st.lists(st.integers(0, len(names) - 1), min_size=n, max_size=n)), dtype=np.uint32)
    ids = np.array(draw(st.lists(st.integers(0, 10**12), min_size=n, max_size=n, unique=True)), dtype=np.int64)
    arrivals = np.sort(np.array(draw(st.lists(st.integers(0, 99), min_size=n, max_size=n)), dtype=np.int64))
    return Trace.arriving("drawn", times, arrivals, sources, names, ids=ids)


@settings(max_examples=150)
@given(trace=traces(), size=st.integers(1, 50), unit=st.sampled_from(["rfc3339", "ns"]), width=st.integers(0, 400))
def test_law_lines_say_what_the_rows_say(trace: Trace, size: int, unit: Any, width: int) -> None:
    made = list(bodies(trace, cut_by_count(trace, size), Style(unit, width)))
    found = lines([body.payload for body in made])
    assert [line["id"] for line in found] == trace.ids.tolist()
    assert [line["station"] for line in found] == [trace.source_names[s] for s in trace.sources]
    read = [line["observed_at"] if unit == "ns" else instant_ns(line["observed_at"]) for line in found]
    assert read == trace.times.tolist()
    named = ("observed_at", "station", "id", "note")
    assert all(isinstance(line[name], float) for line in found for name in line if name not in named)
    assert sum(map(len, made)) == len(trace)
    widths = {len(line) for body in made for line in body.payload.splitlines(keepends=True)}
    assert len(widths) <= 1, "all lines of a trace are of one width"


@given(size=st.integers(1, 700), window=st.integers(1, 20 * SECOND_NS), most=st.integers(1, 200))
@settings(max_examples=60)
def test_law_cuts_take_every_row_once_in_order(size: int, window: int, most: int) -> None:
    trace = shape("bursty_gateways", 600, 1)
    for bounds in (cut_by_count(trace, size), cut_by_window(trace, window, most)):
        assert bounds[0] == 0
        assert bounds[-1] == 600
        assert np.all(np.diff(bounds) > 0)
    assert np.diff(cut_by_count(trace, size)).max() <= size
    assert np.diff(bounds).max() <= most
    for start, stop in pairwise(bounds):
        assert trace.arrivals[start] // window == trace.arrivals[stop - 1] // window
        whole = stop == 600 or trace.arrivals[stop] // window != trace.arrivals[stop - 1] // window
        assert whole or stop - start == most


@pytest.mark.parametrize("width", [87, 100, 143, 160, 161, 172, 200, 2000])
def test_an_event_has_the_bytes_that_were_asked_for(width: int) -> None:
    trace = shape("jitter", 10, 1)
    body = next(bodies(trace, cut_by_count(trace, 10), Style(event_bytes=width)))
    assert {len(line) for line in body.payload.splitlines(keepends=True)} == {width}


def test_by_default_an_event_has_nine_members_and_some_150_bytes() -> None:
    trace = shape("jitter", 10, 1)
    for unit, width in (("ns", 147), ("rfc3339", 160)):
        body = next(bodies(trace, cut_by_count(trace, 10), Style(unit)))  # type: ignore[arg-type]
        assert {len(line) for line in body.payload.splitlines(keepends=True)} == {width}
        assert {len(line) for line in lines([body.payload])} == {9}


def test_blocks_join_where_bodies_are_cut() -> None:
    trace = shape("exponential", 3 * BLOCK_ROWS + 17, 1)
    whole = next(bodies(trace, cut_by_count(trace, len(trace)))).payload
    for size in (700, BLOCK_ROWS, BLOCK_ROWS + 1):
        made = list(bodies(trace, cut_by_count(trace, size)))
        assert b"".join(body.payload for body in made) == whole
        assert [body.number for body in made] == list(range(len(made)))
        assert all(body.due_ns == trace.arrivals[body.stop - 1] for body in made)


def test_copies_of_an_event_are_the_same_bytes() -> None:
    trace = shape("duplicates", 2_000, 1)
    seen: dict[int, bytes] = {}
    for body in bodies(trace, cut_by_count(trace, 100)):
        for number, line in zip(trace.ids[body.start : body.stop].tolist(), body.payload.splitlines(), strict=True):
            assert seen.setdefault(number, line) == line
    assert len(seen) == 1_900


@pytest.mark.parametrize(
    "wrong",
    [
        lambda: Style("minutes"),  # type: ignore[arg-type]
        lambda: Style(event_bytes=-1),
        lambda: cut_by_count(shape("jitter", 5, 1), 0),
        lambda: cut_by_window(shape("jitter", 5, 1), 0),
    ],
)
def test_wrong_use_is_refused(wrong: Any) -> None:
    with pytest.raises(ValueError, match="must be"):
        wrong()

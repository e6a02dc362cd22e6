"""Counting in columns comes to what counting one by one does: released lines by arrival, values by bucket, zeros."""

from __future__ import annotations

import tempfile
from bisect import bisect_left
from collections import Counter
from pathlib import Path

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from strandline.core.arrivals import Arrivals
from strandline.core.columns import REF
from strandline.core.histogram import POWERS, SECONDS_NS, SORTED_EVENTS, Histogram
from strandline.journal.disk import LocalDisk
from strandline.journal.spares import last_set

LINE_BYTES = 20


@given(st.lists(st.integers(1, 6), min_size=1, max_size=300), st.lists(st.integers(1, 40), max_size=12), st.randoms())
@settings(deadline=None)
def test_what_is_released_is_counted_with_the_arrival_that_it_came_with(
    sizes: list[int], takes: list[int], random: object
) -> None:
    """Whatever order lines leave in, few of many arrivals or all at once; the books of what is held follow."""
    arrivals, lines, place = Arrivals(), [], 0
    for number, size in enumerate(sizes):
        place += 500
        arrivals.note(place, number, size)
        lines += [(place + LINE_BYTES * row, number) for row in range(size)]
        place += LINE_BYTES * size
    random.shuffle(lines)  # type: ignore[attr-defined]
    for take in [*takes, len(lines)]:
        part, lines = lines[:take], lines[take:]
        if not part:
            continue
        refs = np.zeros(len(part), dtype=REF)
        refs["place"], refs["length"] = [line for line, _ in part], LINE_BYTES - 1
        came, counts = arrivals.release(refs)
        told = {number: count for number, count in zip(came.tolist(), counts.tolist(), strict=True) if count}
        assert told == Counter(number for _, number in part)
        arrivals.check(len(lines))
        assert arrivals.oldest_ns == min((number for _, number in lines), default=None)


@given(
    st.sampled_from([SECONDS_NS, POWERS]),
    st.integers(1, 3 * SORTED_EVENTS),
    st.integers(0, 2**32),
    st.sampled_from([10, 10**6, 10**12, 2**62]),
)
@settings(deadline=None)
def test_a_column_of_any_length_falls_into_the_buckets_that_its_values_do(
    bounds: tuple[int, ...], count: int, seed: int, greatest: int
) -> None:
    chance = np.random.default_rng(seed)
    values = chance.integers(0, greatest, count)
    on_bounds = chance.random(count) < 0.3
    values[on_bounds] = chance.choice(np.array(bounds), int(on_bounds.sum()))
    histogram = Histogram(bounds)
    histogram._add_exactly(values)
    told = Counter(bisect_left(bounds, value) for value in values.tolist())
    assert {place: number for place, number in enumerate(histogram.counts.tolist()) if number} == told
    assert histogram.total == sum(values.tolist())


@given(st.integers(0, 3 << 20), st.lists(st.integers(0, 2**62), max_size=3), st.integers(0, 2**62), st.integers(1, 255))
@settings(deadline=None, max_examples=30)
def test_the_last_byte_that_is_set_is_found(size: int, places: list[int], start: int, byte: int) -> None:
    content = bytearray(size)
    for place in places:
        if size:
            content[place % size] = byte
    begin = start % (size + 1)
    assert last_set(memoryview(content), begin) == max(begin, len(content.rstrip(b"\0")))


@given(st.lists(st.tuples(st.integers(0, 300_000), st.integers(0, 9_000), st.booleans()), max_size=5), st.booleans())
@settings(deadline=None, max_examples=40)
def test_where_a_file_is_known_to_hold_zeros_it_does(writes: list[tuple[int, int, bool]], mapped: bool) -> None:
    """Whatever was written into reserved room, zeros too, and whether or not it was read before."""
    with tempfile.TemporaryDirectory() as folder:
        file = LocalDisk(Path(folder)).create("room", 400_000)
        for offset, size, zero in writes:
            file.write(offset, [bytes(size) if zero else b"x" * size])
        content = bytes(file.view()) if mapped else Path(folder, "room").read_bytes()
        for start in (0, 1, 70_000, 399_999, 400_000):
            end = file.data_end(start)
            assert start <= end <= 400_000 and not content[end:].strip(b"\0")
        file.close()


def test_room_that_was_never_written_is_not_looked_through(tmp_path: Path) -> None:
    file = LocalDisk(tmp_path).create("room", 1 << 20)
    tells = file.data_end(0) == 0  # else the file system tells of no holes
    assert tells or file.data_end(0) == file.size
    file.write(5, [b"x"])
    assert 5 < file.data_end(0) <= (1 << 16 if tells else file.size)
    file.close()

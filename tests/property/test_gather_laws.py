"""Reading lines back equals the naive join, for any places, whatever way of copying is chosen."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from strandline.journal import gather
from strandline.journal.compiled_copies import copied
from strandline.journal.gather import Source


def naive(sources: list[Source], owners: np.ndarray, offsets: np.ndarray, lengths: np.ndarray) -> list[bytes]:
    """One slice a line."""
    return [
        bytes(sources[owner].view[offset : offset + length])
        for owner, offset, length in zip(owners.tolist(), offsets.tolist(), lengths.tolist(), strict=True)
    ]


def equal(
    sources: list[Source], owners: np.ndarray, offsets: np.ndarray, lengths: np.ndarray, feeds: bool = False
) -> None:
    """Both ways of reading give what the naive one gives."""
    expected = naive(sources, owners, offsets, lengths)
    given_owners = owners if len(sources) > 1 else None
    assert gather.lines(sources, given_owners, offsets, lengths) == expected
    joined = b"".join(line + b"\n" for line in expected)
    assert gather.block(sources, given_owners, offsets, lengths) == joined
    assert not len(offsets) or copied(sources, given_owners, offsets, lengths) == joined
    if feeds:
        # Not only after falling back, as `block` does where a line feed is missing.
        assert gather._copied(sources, gather.stretches(given_owners, offsets, lengths)) == joined


def segment(rng: np.random.Generator, lengths: np.ndarray, feeds: bool = True) -> tuple[Source, np.ndarray]:
    """A source of lines of these lengths one after the other, and their offsets."""
    ends = np.cumsum(lengths + 1) + 24
    content = rng.integers(0 if not feeds else 32, 256, int(ends[-1]) + 8 if len(ends) else 32, dtype=np.uint8)
    if feeds:
        content[ends - 1] = 10
    return Source(memoryview(content.tobytes()), 0, len(content) - 8), ends - lengths - 1


SHAPES = {
    "one length": lambda rng, n: np.full(n, 143),
    "two lengths": lambda rng, n: rng.integers(143, 145, n),
    "few lengths": lambda rng, n: rng.integers(128, 161, n),
    "many lengths": lambda rng, n: rng.integers(0, 1200, n),
    "short": lambda rng, n: rng.integers(0, 4, n),
    "long": lambda rng, n: rng.integers(2000, 3000, n),
    "one giant": lambda rng, n: np.where(np.arange(n) == n // 2, 70_000, 100),
}
ORDERS = {
    "as written": lambda rng, n: np.arange(n),
    "scattered": lambda rng, n: rng.permutation(n),
    "stretches": lambda rng, n: np.concatenate(_shuffled(rng, np.array_split(np.arange(n), n // 9 + 1))),
    "every other": lambda rng, n: np.arange(0, n, 2),
    "repeated": lambda rng, n: rng.integers(0, n, 2 * n),
    "one only": lambda rng, n: np.array([n - 1]),
}  # fmt: skip


def _shuffled(rng: np.random.Generator, parts: list[np.ndarray]) -> list[np.ndarray]:
    return [parts[index] for index in rng.permutation(len(parts))]


@pytest.mark.parametrize(("shape", "order"), list(itertools.product(SHAPES, ORDERS)))
@pytest.mark.parametrize("count", [1, 7, 150, 1500])
def test_every_way_of_copying_is_equal(shape: str, order: str, count: int) -> None:
    rng = np.random.default_rng([count, *shape.encode(), *order.encode()])
    lengths = SHAPES[shape](rng, count).astype(np.int64)
    chosen = ORDERS[order](rng, count)
    source, offsets = segment(rng, lengths)
    equal([source], np.zeros(len(chosen), np.intp), offsets[chosen], lengths[chosen], feeds=True)
    other_lengths = SHAPES[shape](rng, count).astype(np.int64)
    other, other_offsets = segment(rng, other_lengths)
    owners = rng.integers(0, 2, len(chosen))
    equal(
        [source, other],
        owners,
        np.where(owners == 0, offsets[chosen], other_offsets[chosen]),
        np.where(owners == 0, lengths[chosen], other_lengths[chosen]),
        feeds=True,
    )


@pytest.mark.parametrize("shape", SHAPES)
def test_lines_without_a_line_feed_behind_them(shape: str) -> None:
    rng = np.random.default_rng(1)
    lengths = SHAPES[shape](rng, 700).astype(np.int64)
    source, offsets = segment(rng, lengths, feeds=False)
    for chosen in (np.arange(700), rng.permutation(700)):
        equal([source], np.zeros(700, np.intp), offsets[chosen], lengths[chosen])


@given(st.data())
@settings(max_examples=300)
def test_any_places_are_equal(data: st.DataObject) -> None:
    contents = data.draw(st.lists(st.binary(min_size=1, max_size=60), min_size=1, max_size=3))
    if data.draw(st.booleans()):
        contents = [content.replace(content[:1], b"\n") for content in contents]
    sources = [Source(memoryview(content), 0, len(content)) for content in contents]
    rows = []
    for _ in range(data.draw(st.integers(0, 30))):
        owner = data.draw(st.integers(0, len(contents) - 1))
        offset = data.draw(st.integers(0, len(contents[owner]) - 1))
        length = data.draw(st.integers(0, len(contents[owner]) - offset))
        # Now and then a run of neighbours, as a payload has them.
        for _ in range(data.draw(st.integers(1, 4))):
            if offset + length > len(contents[owner]):
                break
            rows.append((owner, offset, length))
            offset += length + 1
            length = data.draw(st.integers(0, 5))
    columns = np.array(rows, np.int64).reshape(-1, 3)
    equal(sources, columns[:, 0].astype(np.intp), columns[:, 1].copy(), columns[:, 2].copy())


def test_the_thresholds_are_met_by_the_tests_above() -> None:
    # 1,500 scattered lines of few lengths must be beyond every break-even, or the windows would go untested.
    assert gather.TWO_WINDOWS_FROM * 2 * 2 < 1500 and gather.SHARED_LENGTH_FROM * 33 < 1500
    assert gather.ONE_WINDOW_FROM < 150 and 300 < gather.LONG_STRETCH_BYTES < 2000


@given(st.data())
@settings(max_examples=200)
def test_what_lies_outside_is_not_copied_by_compiled_code(data: st.DataObject) -> None:
    """One line of some does not lie within its source: nothing is answered, the plain way may say why."""
    source = Source(memoryview(bytes(range(200))), 0, data.draw(st.integers(1, 150)))
    rows = data.draw(st.lists(st.tuples(st.integers(0, source.end), st.integers(0, 9)), max_size=12))
    rows = [(offset, min(length, source.end - offset)) for offset, length in rows]
    offset = data.draw(st.integers(-5, source.end + 5))
    length = data.draw(st.one_of(st.integers(-5, -1), st.integers(max(0, source.end - offset + 1), 300)))
    if offset < 0:
        length = abs(length)
    bad = np.array([*rows, (offset, length)], np.int64)[data.draw(st.permutations(range(len(rows) + 1)))]
    assert copied([source], None, bad[:, 0], bad[:, 1]) is None
    for owners in (None, np.zeros(len(rows), np.intp)):
        good = np.array(rows, np.int64).reshape(-1, 2)
        lines = b"".join(bytes(source.view[place : place + size]) + b"\n" for place, size in rows)
        assert not rows or copied([source], owners, good[:, 0], good[:, 1]) == lines

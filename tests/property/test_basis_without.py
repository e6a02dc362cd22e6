"""Laws of a basis without one source: as if the source had never been there, request by request, over any blocks."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from strandline.core.sketch import buckets_of
from strandline.replay.basis import ArrivalClock, Basis, LeastOfSources, NewestOfAll, Requests, said
from strandline.replay.basis_without import EachWithout, LeastWithout, leaving
from strandline.replay.leaving_out import leave_out

SOURCES = 4
events = st.lists(st.tuples(st.integers(-60, 30), st.integers(0, SOURCES - 1)), min_size=1, max_size=4)
requests = st.lists(st.tuples(st.integers(0, 40), events), min_size=1, max_size=25)
feeds = st.tuples(requests, st.lists(st.integers(1, 24), max_size=3), st.none() | st.integers(1, 60))


def blocks_of(rows: list[tuple[int, list[tuple[int, int]]]], cuts: list[int]) -> list[Requests]:
    """The feed in blocks that begin at these requests; each request comes some time after the one before it."""
    edges = sorted({0, *(cut for cut in cuts if cut < len(rows)), len(rows)})
    instants = np.cumsum([wait for wait, _ in rows]).tolist()
    blocks = []
    for begin, end in pairwise(edges):
        rows_of = [(instants[r] + time, source, r) for r in range(begin, end) for time, source in rows[r][1]]
        numbers = np.array([row for _, _, row in rows_of])
        starts = np.flatnonzero(np.diff(numbers, prepend=-1))
        times, sources = np.array([t for t, _, _ in rows_of]), np.array([s for _, s, _ in rows_of], dtype=np.uint32)
        blocks.append(Requests(times, starts, np.array(instants[begin:end]), sources))
    return blocks


def without(block: Requests, source: int) -> tuple[Requests | None, list[int]]:
    """The block without the source, row by row; and the requests that are left."""
    assert block.sources is not None
    numbers = np.repeat(np.arange(len(block.starts)), np.diff(block.starts, append=len(block.times)))
    rows = [row for row in range(len(block.times)) if block.sources[row] != source]
    kept = sorted({int(numbers[row]) for row in rows})
    if not rows:
        return None, []
    starts = np.array([min(i for i, row in enumerate(rows) if numbers[row] == request) for request in kept])
    return Requests(block.times[rows], starts, block.instants[kept], block.sources[rows]), kept


@settings(max_examples=200)
@given(feeds)
def test_the_least_of_the_others_is_that_of_a_feed_without_the_source(feed: tuple) -> None:
    rows, cuts, idle = feed
    numbers = range(SOURCES)
    quick = LeastWithout(LeastOfSources(idle), numbers)
    whole, alone = LeastOfSources(idle), [LeastOfSources(idle) for _ in numbers]
    for block in blocks_of(rows, cuts):
        moves, stood = quick.add(said(block))
        expected = whole.add(block)
        assert np.array_equal(moves.before, expected.before) and np.array_equal(moves.after, expected.after)
        for source in numbers:
            others, kept = without(block, source)
            assert np.flatnonzero(stood[source].others).tolist() == kept
            if others is not None:
                there = alone[source].add(others)
                assert np.array_equal(stood[source].before[kept], there.before)
                assert np.array_equal(stood[source].after[kept], there.after)


@settings(max_examples=50)
@given(feeds, st.sampled_from([NewestOfAll, ArrivalClock]))
def test_other_bases_too(feed: tuple, begin: type[Basis]) -> None:
    rows, cuts, _ = feed
    found, alone = leaving(begin, [0, 1]), [begin(), begin()]
    assert isinstance(found, EachWithout)
    for block in blocks_of(rows, cuts):
        _, stood = found.add(said(block))
        for source in (0, 1):
            others, kept = without(block, source)
            if others is not None:
                there = alone[source].add(others)
                assert np.array_equal(stood[source].before[kept], there.before)
                assert np.array_equal(stood[source].after[kept], there.after)


@settings(max_examples=100)
@given(feeds, st.integers(0, 400), st.integers(0, 50))
def test_what_is_counted_without_a_source_is_counted_row_by_row(feed: tuple, cut_ns: int, slack_ns: int) -> None:
    """Lateness of the others in the first part, and how many of the source's own would be late unwaited for."""
    rows, cuts, idle = feed
    blocks, buckets = blocks_of(rows, cuts), buckets_of(0.01)
    _, found = leave_out(blocks, range(SOURCES), lambda: LeastOfSources(idle), buckets, cut_ns, slack_ns)
    follower = LeastWithout(LeastOfSources(idle), range(SOURCES))
    lateness: list[list[int]] = [[] for _ in range(SOURCES)]
    excused = [0] * SOURCES
    for block in blocks:
        _, stood = follower.add(said(block))
        sizes = np.diff(block.starts, append=len(block.times))
        numbers, instants = np.repeat(np.arange(len(sizes)), sizes), np.repeat(block.instants, sizes)
        assert block.sources is not None
        for row, (time, source) in enumerate(zip(block.times.tolist(), block.sources.tolist(), strict=True)):
            for left in range(SOURCES):
                behind = int(stood[left].before[numbers[row]]) - time
                if source == left:
                    excused[left] += behind > slack_ns
                elif instants[row] < cut_ns:
                    lateness[left].append(max(behind, 0))
    for left, each in enumerate(found):
        each.sketch.check()
        assert np.array_equal(each.sketch.counts, buckets.counts(np.array(lateness[left], dtype=np.int64)))
        assert each.sketch.greatest_ns == max(lateness[left], default=0)
        assert each.late_if_excused == excused[left]


@pytest.mark.parametrize("rows", [1, 3])
def test_a_request_of_one_source_is_one_word(rows: int) -> None:
    sources = np.array([2] * rows + [1] * rows, dtype=np.uint32)
    block = Requests(np.arange(2 * rows), np.array([0, rows]), np.array([10, 20]), sources)
    words = said(block)
    assert words.times.tolist() == [rows - 1, 2 * rows - 1]
    assert words.sources is not None and words.sources.tolist() == [2, 1]
    assert words.starts.tolist() == [0, 1]

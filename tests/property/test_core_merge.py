"""Laws of searching and merging: whatever is switched off or made small, a merge is one stable sort.

Outside opinions: list.sort, heapq.merge, numpy's stable argsort, bisect.
"""

from __future__ import annotations

import heapq
import itertools
from bisect import bisect_left, bisect_right

import numpy as np
from helpers_strands import Costing, constants, in_order, rows_of, strand, strands
from hypothesis import event, given, settings
from hypothesis import strategies as st
from strandline.core.columns import TIME_MAX, TIME_MIN
from strandline.core.gallop import gallop_left, gallop_right
from strandline.core.merge import GALLOP_WINS, GALLOP_WINS_AT_MOST, Merger, power
from strandline.core.runs import Strand

few = st.integers(-3, 3)  # ties nearly everywhere
some = st.integers(-50, 50)
any_time = st.one_of(few, some, st.integers(TIME_MIN, TIME_MAX), st.sampled_from((TIME_MIN, TIME_MAX)))


@st.composite
def blocks(draw: st.DrawFn) -> list[int]:
    """Ascending times with long streaks: what galloping is for."""
    steps = draw(st.lists(st.tuples(st.integers(0, 9), st.integers(1, 60)), max_size=6))
    found, time = [], 0
    for step, length in steps:
        time += step
        found += range(time, time + length)
        time += length
    return sorted(found)


head = st.one_of(
    *(st.lists(kind, min_size=1, max_size=30).map(sorted) for kind in (few, some, any_time)),
    blocks().filter(len),
)
heads = st.lists(head, max_size=8)
# Every branch of the merge within a few dozen rows: small windows, small groups, galloping that pays at once or never.
smallness = st.fixed_dictionaries(
    {
        "GALLOP_PAYS_EVENTS": st.sampled_from((1, 2, 5, 1024)),
        "WINDOW_EVENTS": st.sampled_from((1, 2, 3, 4096)),
        "FUSE_EVENTS": st.sampled_from((1, 4, 20, 2**18)),
        "GALLOP_WINS": st.sampled_from((1, 2, 7)),
        "GALLOP_WINS_AT_MOST": st.sampled_from((2, 8, 4096)),
    }
)


@settings(max_examples=300)
@given(heads, st.booleans(), st.booleans(), smallness, st.integers(1, 9))
def test_a_merge_is_a_stable_sort(
    columns: list[list[int]], galloping: bool, fusing: bool, small: dict[str, int], wins: int
) -> None:
    given_heads = strands(columns)
    with constants(**small):
        merger = Merger(galloping=galloping, fusing=fusing)
        merger.wins = wins
        result = merger.merge(given_heads)
    rows = rows_of(*given_heads)
    assert rows_of(result) == in_order(rows)
    # Second opinion: heapq.merge, which is stable over its inputs in order.
    assert rows_of(result) == list(heapq.merge(*map(rows_of, given_heads), key=lambda row: row[0]))
    # Third: numpy.
    times = np.array([time for time, _ in rows], dtype=np.int64)
    assert [serial for _, serial in rows_of(result)] == np.argsort(times, kind="stable").tolist()
    if merger.counts.gallops:
        event("galloped")
    if any(merger.counts.streaks[3:]):
        event("a streak of 8 or more")


@settings(max_examples=200)
@given(head, head, st.booleans(), smallness)
def test_two_neighbours_count_what_they_move(
    one: list[int], other: list[int], galloping: bool, small: dict[str, int]
) -> None:
    older, newer = strands([one, other])
    with constants(**small):
        merger = Merger(galloping=galloping)
        result = merger.merge_two(older, newer)
    rows = len(one) + len(other)
    counts = merger.counts
    assert len(result.times) == rows and counts.merges == 1 and counts.copies == rows
    streaks = sum(counts.streaks)
    assert 1 <= streaks <= rows
    assert sum(number << bucket for bucket, number in enumerate(counts.streaks)) <= rows
    assert sum(number * (2 * 2**bucket - 1) for bucket, number in enumerate(counts.streaks)) >= rows
    assert counts.comparisons >= 1


@given(heads, smallness)
def test_the_threshold_of_galloping_stays_within_its_bounds(columns: list[list[int]], small: dict[str, int]) -> None:
    with constants(**small | {"GALLOP_WINS": 2, "GALLOP_WINS_AT_MOST": 64}):
        merger = Merger(fusing=False)
        merger.wins = 2
        for _ in range(3):
            merger.merge(strands(columns))
            assert 2 <= merger.wins <= 64


def test_the_threshold_rises_when_galloping_does_not_pay_and_falls_while_it_does() -> None:
    # Streaks of 64 pass the first threshold but are far below what pays, so that it must rise.
    count = 40_000
    streaks = np.arange(count) // 64 % 2
    mixed = np.arange(count, dtype=np.int64)
    merger = Merger()
    merger.merge_two(strand(mixed[streaks == 0]), strand(mixed[streaks == 1], count))
    assert merger.counts.gallops >= 1 and GALLOP_WINS < merger.wins <= GALLOP_WINS_AT_MOST
    risen, gallops = merger.wins, merger.counts.gallops
    # Streaks of 10,000 pay: few comparisons, and the threshold falls again.
    count = 400_000
    mixed = np.arange(count, dtype=np.int64)
    long = np.arange(count) // 10_000 % 2
    comparisons = merger.counts.comparisons
    merger.merge_two(strand(mixed[long == 0]), strand(mixed[long == 1], count))
    assert merger.counts.gallops > gallops and merger.wins < risen
    assert merger.counts.comparisons - comparisons < count / 20


def test_strands_that_follow_one_another_are_searched_not_compared() -> None:
    merger = Merger(fusing=False)
    columns = [range(index * 1000, index * 1000 + 1000) for index in range(8)]
    result = merger.merge(strands(columns))
    assert result.times.tolist() == list(range(8000))
    assert merger.counts.comparisons < 8 * 2 * 12 and merger.counts.merges == 7


def test_nothing_to_merge() -> None:
    result = Merger().merge([])
    assert len(result.times) == len(result.refs) == 0
    only = strand([1, 2, 2, 9])
    assert rows_of(Merger().merge([only])) == rows_of(only)


# ---- searching ------------------------------------------------------------------------------------------------------

spans = (
    st.lists(any_time, max_size=70)
    .map(sorted)
    .flatmap(
        lambda column: st.tuples(
            st.just(column), st.integers(0, len(column)), st.integers(0, len(column)), st.sampled_from([*column, 0, 1])
        )
    )
)


@settings(max_examples=200)
@given(spans)
def test_galloping_finds_what_bisection_finds(span: tuple[list[int], int, int, int]) -> None:
    column, one, other, key = span
    start, stop = min(one, other), max(one, other)
    times = np.array(column, dtype=np.int64)
    right, probes_right = gallop_right(times, key, start, stop)
    left, probes_left = gallop_left(times, key, start, stop)
    assert right == bisect_right(column, key, start, stop)
    assert left == bisect_left(column, key, start, stop)
    for place, probes in ((right, probes_right), (left, probes_left)):
        found = place - start
        assert probes <= (1 if found == 0 else 2 * (found.bit_length() - 1) + 2)
        assert probes >= (stop > start)


# ---- the power rule -------------------------------------------------------------------------------------------------


@given(st.lists(st.integers(1, 10_000), min_size=2, max_size=60))
def test_the_power_is_the_first_binary_digit_in_which_the_middles_differ(lengths: list[int]) -> None:
    """Munro & Wild 2018, definition of a node's power, computed in whole numbers of any size."""
    total, start = sum(lengths), 0
    for first, second in itertools.pairwise(lengths):
        lower, upper = 2 * start + first, 2 * (start + first) + second  # the middles are these over 2 * total
        level = 1
        # Least level with a multiple k * 2^-level: lower / (2 total) < k * 2^-level <= upper / (2 total).
        while (upper << level) // (2 * total) == (lower << level) // (2 * total):
            level += 1
        assert power(start, first, second, total) == level
        start += first


@settings(max_examples=200)
@given(st.lists(st.integers(1, 60), min_size=1, max_size=40))
def test_neighbours_only_are_merged(lengths: list[int]) -> None:
    """Equal times everywhere: any merge of strands that are no neighbours would break the order of serials."""
    merger = Costing()
    result = merger.merge(strands([[7] * length for length in lengths]))
    assert [serial for _, serial in rows_of(result)] == list(range(sum(lengths)))
    assert len(merger.results) == len(lengths) - 1


def test_a_merge_does_not_touch_its_inputs() -> None:
    given_heads = strands([[1, 3, 5], [2, 3, 9], [0, 3]])
    before = [(one.times.tobytes(), one.refs.tobytes()) for one in given_heads]
    for fusing in (False, True):
        result = Merger(fusing=fusing).merge(given_heads)
        assert isinstance(result, Strand)
    assert [(one.times.tobytes(), one.refs.tobytes()) for one in given_heads] == before


@given(heads, st.integers(1, 40))
def test_no_sort_takes_more_rows_than_the_limit_but_a_single_head(columns: list[list[int]], limit: int) -> None:
    merger = Merger()
    sizes: list[list[int]] = []
    interleave = merger._interleave

    def noted(group: list[Strand]) -> Strand:
        sizes.append([len(one.times) for one in group])
        return interleave(group)

    merger._interleave = noted  # type: ignore[method-assign]
    with constants(FUSE_EVENTS=limit):
        merger.merge(strands(columns))
    assert all(len(group) == 1 or sum(group) <= limit for group in sizes)
    assert [size for group in sizes for size in group] == [len(times) for times in columns]
    for group, following in itertools.pairwise(sizes):
        assert sum(group) + following[0] > limit, "a group is as large as it may be"

"""Figures of disorder against their definitions, taken word by word and in quadratic time, on random sequences."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
import pytest
from hypothesis import example, given
from hypothesis import strategies as st
from strandline.replay import disorder
from strandline.replay.density import NOT_COUNTED, occupancy_density, ranks, reorder_density
from strandline.replay.gaps import NEVER, sequence_gaps
from strandline.replay.reordering import Reordering
from strandline_loadgen.shapes import poisson_exponential


@st.composite
def sequences(draw: st.DrawFn) -> list[int]:
    """Mostly in order: shifted a few places, some lost, some twice, some far off."""
    keys = list(range(draw(st.integers(0, 40))))
    for _ in range(draw(st.integers(0, 6))):
        if keys:
            moved = keys.pop(draw(st.integers(0, len(keys) - 1)))
            keys.insert(min(len(keys), draw(st.integers(0, 40))), moved)
    lost = draw(st.sets(st.integers(0, 40), max_size=4))
    keys = [key for key in keys if key not in lost]
    for copy in draw(st.lists(st.tuples(st.integers(0, 40), st.integers(0, 40)), max_size=3)):
        if keys:
            keys.insert(min(len(keys), copy[1]), keys[copy[0] % len(keys)])
    return keys


any_keys = st.one_of(sequences(), st.lists(st.integers(-9, 9), max_size=40))


def column(keys: list[int]) -> np.ndarray:
    return np.array(keys, dtype=np.int64)


def first_copies(keys: list[int]) -> list[int]:
    return list(dict.fromkeys(keys))


# ---- RFC 4737 -----------------------------------------------------------------------------------------------------


@given(keys=any_keys, numbered=st.booleans())
def test_rfc_4737_by_its_definitions(keys: list[int], numbered: bool) -> None:
    s = first_copies(keys) if numbered else keys
    rows = [keys.index(key) for key in s] if numbered else list(range(len(keys)))
    clock, lengths = np.cumsum(np.arange(len(keys)) % 5), np.arange(len(keys)) % 7
    found = Reordering(column(keys), clock, lengths, numbered=numbered)
    assert found.kept.tolist() == rows and found.duplicates == len(keys) - len(s)
    extents, late, offsets, runs, run = {}, [], [], [], 0
    for i, key in enumerate(s):
        earlier = [j for j in range(i) if s[j] > key]
        if earlier:
            extents[i] = i - earlier[0]
            late.append(int(clock[rows[i]] - clock[rows[earlier[0]]]))
            offsets.append(sum(int(lengths[rows[j]]) for j in earlier))
            runs.append(run)
        run = 0 if earlier else run + 1
    assert found.reordered.tolist() == list(extents) and found.extents.tolist() == list(extents.values())
    assert (found.late_times_ns.tolist(), found.byte_offsets.tolist()) == (late, offsets)
    assert (found.runs.closed.tolist(), found.runs.open) == (runs, run)
    assert found.runs.q == sum(each * each for each in runs)
    for n in range(1, len(s)):
        many = sum(all(s[j] > s[i] for j in range(i - n, i)) for i in range(n, len(s)))
        assert found.n_reordering.degree_by_definition(n) == many / len(s)
        assert found.n_reordering.degree_by_listing(n) == many / (len(s) - n)


@given(keys=any_keys)
def test_discontinuities_as_they_are_found(keys: list[int]) -> None:
    found = Reordering(column(keys), np.arange(len(keys)) * 3, numbered=False)
    known: list[int] = []
    gaps: list[int] = []
    for i, key in enumerate(keys):
        at = next((j for j in range(i) if keys[j] > key), None)
        if at is not None and at not in known:
            gaps.append(at - max((each for each in known if each < at), default=at))
            known.append(at)
    assert found.discontinuities.positions.tolist() == known
    assert found.discontinuities.gaps.tolist() == gaps
    assert found.discontinuities.gap_times_ns is not None
    assert found.discontinuities.gap_times_ns.tolist() == [3 * gap for gap in gaps]


@given(keys=sequences())
def test_sequence_discontinuities_by_next_expected(keys: list[int]) -> None:
    s = first_copies(keys)
    expected, jumps = (s[0] if s else 0), {}
    for i, key in enumerate(s):
        if key >= expected:
            if key > expected:
                jumps[i] = key - expected
            expected = key + 1
    positions, sizes = Reordering(column(keys)).gaps_in_sequence
    assert dict(zip(positions.tolist(), sizes.tolist(), strict=True)) == jumps


# ---- overtakers, buffers ------------------------------------------------------------------------------------------


@given(keys=any_keys)
def test_a_sorting_buffer_loses_those_with_more_overtakers_than_slots(keys: list[int]) -> None:
    overtaken = disorder.overtakers(column(keys)).tolist()
    assert overtaken == [sum(keys[j] > keys[i] for j in range(i)) for i in range(len(keys))]
    for slots in range(max(overtaken, default=0) + 1):
        buffer: list[int] = []
        passed, lost = -(10**9), []
        for i, key in enumerate(keys):
            if key < passed:
                lost.append(i)
                continue
            buffer.append(key)
            if len(buffer) > slots:
                passed = min(buffer)
                buffer.remove(passed)
        assert lost == [i for i, many in enumerate(overtaken) if many > slots]


@given(keys=any_keys)
def test_the_smallest_k_and_the_smallest_slack(keys: list[int]) -> None:
    k, slack = disorder.smallest_k(column(keys)), disorder.smallest_slack(column(keys))

    def is_ordered(within: int) -> bool:
        return all(keys[j] >= keys[i] for i in range(len(keys)) for j in range(i + within + 1, len(keys)))

    assert is_ordered(k) and (k == 0 or not is_ordered(k - 1))
    late = [max([0, *(keys[j] - keys[i] for j in range(i))]) for i in range(len(keys))]
    assert slack == max(late, default=0)
    runs = sum(i == 0 or keys[i] < keys[i - 1] for i in range(len(keys)))
    assert disorder.ascending_runs(column(keys)) == runs


def merged_inversions(keys: np.ndarray) -> int:
    """Inversions by merging halves, with numpy's binary search (an independent way to count)."""
    if len(keys) <= 64:
        return int(np.count_nonzero(np.triu(keys[:, None] > keys[None, :])))
    left, right = keys[: len(keys) // 2], keys[len(keys) // 2 :]
    across = len(left) * len(right) - int(np.searchsorted(np.sort(left), right, side="right").sum())
    return merged_inversions(left) + merged_inversions(right) + across


@pytest.mark.parametrize("kind", ["delays", "stragglers", "random", "reversed", "ties"])
def test_overtakers_of_more_keys_than_fit_in_one_block(kind: str) -> None:
    """Beyond 4,096 keys blocks are merged one by one, beyond 65,536 stretches too."""
    n, draw = 150_001, np.random.default_rng(6)
    keys = {
        "delays": poisson_exponential(1000, 0.5, n, 6).times,
        "stragglers": np.insert(np.arange(n), [100, 70_000], [n + 7, -1]),
        "random": draw.permutation(n),
        "reversed": np.arange(n)[::-1].copy(),
        "ties": draw.integers(0, 50, n),
    }[kind]
    overtaken = disorder.overtakers(keys)
    assert int(overtaken.sum()) == merged_inversions(keys) == disorder.inversions(keys)
    lengths = draw.integers(0, 1000, len(keys))
    offsets = disorder.overtaking_bytes(keys, lengths)
    behind = disorder.consecutive_greater(keys)
    for i in draw.integers(0, len(keys), 60).tolist():
        greater = keys[:i] > keys[i]
        assert overtaken[i] == np.count_nonzero(greater)
        assert offsets[i] == lengths[:i][greater].sum()
        smaller = np.flatnonzero(~greater)
        assert behind[i] == (i - 1 - smaller[-1] if len(smaller) else i)


# ---- RFC 5236 -----------------------------------------------------------------------------------------------------


def received(arrivals: list[int], threshold: int) -> dict[int, tuple[int, int]]:
    """Section 7.1 in the RFC's own order of steps: row -> (receive index, displacement)."""
    rest = iter(range(len(arrivals)))
    window: list[int] = []
    buffer: set[int] = set()
    found: dict[int, tuple[int, int]] = {}

    def pull(index: int) -> Iterator[int]:
        for row in rest:
            if arrivals[row] >= index and arrivals[row] not in buffer | {arrivals[w] for w in window}:
                yield row

    index = min(arrivals, default=0)
    while len(window) <= threshold and (row := next(pull(index), None)) is not None:
        window.append(row)
    while window:
        inside = {arrivals[row] for row in window} | buffer
        if index in inside:
            row = window.pop(0)
            displaced = index - arrivals[row]
            if abs(displaced) <= threshold:
                found[row] = (index, displaced)
                buffer.discard(index)
                if displaced < 0:
                    buffer.add(arrivals[row])
                index += 1
            row = next(pull(index), -1)
            if row >= 0:
                window.append(row)
        else:
            index = max(index + 1, min(inside))
    return found


def kept_back(arrivals: list[int], limit: int, expected: int) -> list[int]:
    """Section 7.2: occupancy after each arrival, -1 where it is ignored."""
    buffer: set[int] = set()
    found = []
    for number in arrivals:
        if number in buffer or number < expected:
            found.append(-1)
            continue
        if number > expected and len(buffer) >= limit:
            expected = min(buffer | {number})
        buffer.add(number)
        while expected in buffer:
            buffer.remove(expected)
            expected += 1
        found.append(len(buffer))
    return found


# -3 is in sight when its index comes, but 4 away when taken: all that follow are displaced by one more, to the end.
@example(arrivals=[0, 1, -3, 3, 4, 5, 6, 7, 2, 9, 10, 11], threshold=3)
# 8 is discarded as too early, and comes again after 10.
@example(arrivals=[0, 0, 5, 2, 8, 3, 6, 10, 8, 12, 10, 6, 12, 13, 14, 14], threshold=2)
@given(arrivals=any_keys, threshold=st.integers(0, 8))
def test_reorder_density_by_the_algorithm_of_the_rfc(arrivals: list[int], threshold: int) -> None:
    found = reorder_density(column(arrivals), threshold)
    counted = np.flatnonzero(found.displacement != NOT_COUNTED).tolist()
    got = {row: (int(found.receive_index[row]), int(found.displacement[row])) for row in counted}
    assert got == received(arrivals, threshold)
    for displaced in range(-threshold, threshold + 1):
        assert found.counts[displaced + threshold] == sum(each == displaced for _, each in got.values())


@given(arrivals=any_keys, limit=st.integers(0, 8), before=st.integers(0, 3))
def test_occupancy_by_the_algorithm_of_the_rfc(arrivals: list[int], limit: int, before: int) -> None:
    first = min(arrivals, default=0) - before
    found = occupancy_density(column(arrivals), limit, first)
    assert found.occupancy.tolist() == kept_back(arrivals, limit, first)
    if not before:
        assert found.occupancy.tolist() == occupancy_density(column(arrivals), limit).occupancy.tolist()


@given(times=st.lists(st.integers(-9, 9), max_size=40))
def test_without_loss_displacements_cancel(times: list[int]) -> None:
    found = reorder_density(ranks(column(times)), 50)
    assert int((found.counts * np.arange(-50, 51)).sum()) == 0
    assert int(found.counts.sum()) == len(times)


# ---- gaps ---------------------------------------------------------------------------------------------------------


def gaps_of(numbers: list[int], rows: list[int]) -> tuple[list[tuple[int, ...]], dict[str, int]]:
    """Gaps of one source, and its counts. A gap: first, last, opened, filled, lost, filled_by."""
    open_gaps: list[dict[str, object]] = []
    seen: set[int] = set()
    counts = dict.fromkeys(("received", "in_order", "late", "before_first", "duplicates"), 0)
    newest = None
    for number, row in zip(numbers, rows, strict=True):
        counts["received"] += 1
        if number in seen:
            counts["duplicates"] += 1
        elif newest is None or number > newest:
            if newest is not None and number > newest + 1:
                open_gaps.append({"missing": set(range(newest + 1, number)), "row": row, "by": NEVER, "filled": 0})
            newest = number
            counts["in_order"] += 1
        elif number < numbers[0]:
            counts["before_first"] += 1
        else:
            counts["late"] += 1
            gap = next(each for each in open_gaps if number in each["missing"])  # type: ignore[operator]
            gap["filled"], gap["by"] = gap["filled"] + 1, row  # type: ignore[operator]
        seen.add(number)
    listed = []
    for gap in open_gaps:
        missing, filled = gap["missing"], gap["filled"]
        ends = min(missing), max(missing)  # type: ignore[call-overload]
        listed.append((*ends, gap["row"], filled, len(missing) - filled, gap["by"]))  # type: ignore[arg-type, operator]
    return listed, counts


@given(arrivals=st.one_of(sequences(), st.lists(st.integers(-9, 20), max_size=40)), sources=st.integers(1, 3))
def test_gaps_that_filled_and_gaps_that_did_not_by_source(arrivals: list[int], sources: int) -> None:
    owners = [(key * 7 + row) % sources for row, key in enumerate(arrivals)]
    gaps, counts = sequence_gaps(column(arrivals), np.array(owners, dtype=np.uint32))
    expected = []
    for source in range(sources):
        rows = [row for row, owner in enumerate(owners) if owner == source]
        if not rows:
            continue
        listed, totals = gaps_of([arrivals[row] for row in rows], rows)
        expected += [(source, *gap) for gap in listed]
        assert {name: int(getattr(counts, name)[source]) for name in totals} == totals
        assert counts.lost[source] == sum(gap[4] for gap in listed) and counts.gaps[source] == len(listed)
    columns = (gaps.source, gaps.first, gaps.last, gaps.opened, gaps.filled, gaps.lost, gaps.filled_by)
    got = list(zip(*(each.tolist() for each in columns), strict=True))
    assert got == sorted(expected, key=lambda gap: gap[3])


@given(arrivals=sequences())
def test_one_source_needs_no_column_of_sources(arrivals: list[int]) -> None:
    alone, counts = sequence_gaps(column(arrivals))
    named, same = sequence_gaps(column(arrivals), np.zeros(len(arrivals), dtype=np.uint32))
    assert alone.opened.tolist() == named.opened.tolist() and counts.lost.tolist() == same.lost.tolist()


def test_what_gaps_cannot_be_found_in_is_refused() -> None:
    one = np.array([1], dtype=np.int64)
    with pytest.raises(ValueError, match="sources for"):
        sequence_gaps(one, np.zeros(2, dtype=np.uint32))
    with pytest.raises(ValueError, match="2\\^62"):
        sequence_gaps(np.array([2**62 + 1]))
    with pytest.raises(ValueError, match="groups must be numbers"):
        sequence_gaps(one, np.array([2**24], dtype=np.uint32))

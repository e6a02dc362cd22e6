"""Runs, galloping and merge costs against published figures (check-values, section 6).

Sources: CPython, Objects/listsort.txt (minimum runs, run detection, gallop costs, powers, the 2112 example); Munro &
Wild, "Nearly-Optimal Mergesorts", ESA 2018 (the power rule, its bound n(H + 2) and, from memory, the stack's height);
Bentley & Yao 1976 (doubling search). Merge costs are those of the merger at work: rows of every result, added up.
"""

from __future__ import annotations

import itertools
import math
from statistics import mean

import numpy as np
import pytest
from helpers_strands import Costing, constants, rows_of, strand, strands
from strandline.core.columns import as_refs
from strandline.core.gallop import gallop_left, gallop_right
from strandline.core.merge import GALLOP_WINS, Merger, power
from strandline.core.runs import Strand, Stretch, minimum_run, stretches

# ---- minimum runs (listsort.txt; values recomputed on CPython 3.11.7) -----------------------------------------------

MINIMUM_RUNS = {
    63: 63, 64: 32, 65: 33, 66: 33, 127: 64, 128: 32, 129: 33, 255: 64, 256: 32, 1000: 63, 1024: 32, 1025: 33,
    2047: 64, 2048: 32, 2049: 33, 2112: 33, 4095: 64, 4096: 32, 4097: 33, 10**4: 40, 10**5: 49, 10**6: 62,
    2**20: 32, 2**20 + 1: 33,
}  # fmt: skip


@pytest.mark.parametrize(("events", "least"), list(MINIMUM_RUNS.items()))
def test_minimum_run_table(events: int, least: int) -> None:
    assert minimum_run(events) == least


def test_minimum_run_is_n_below_64_and_32_to_64_above() -> None:
    assert all(minimum_run(events) == events for events in range(64))
    assert all(32 <= minimum_run(events) <= 64 for events in range(64, 20_000))


# ---- run detection (listsort.txt: ascending is non-decreasing, descending is strictly so) ---------------------------


@pytest.mark.parametrize(
    ("times", "found"),
    [
        ([], []),
        ([7], [Stretch(0, 1, "ascending")]),
        ([1, 2, 3], [Stretch(0, 3, "ascending")]),
        ([1, 1, 1], [Stretch(0, 3, "ascending")]),
        ([3, 2, 1], [Stretch(0, 3, "descending")]),
        ([3, 2, 2, 1], [Stretch(0, 2, "descending"), Stretch(2, 4, "descending")]),
        ([1, 2, 3, 2, 1], [Stretch(0, 3, "ascending"), Stretch(3, 5, "descending")]),
        ([5, 4, 3, 4, 5], [Stretch(0, 3, "descending"), Stretch(3, 5, "ascending")]),
    ],
)
def test_natural_runs(times: list[int], found: list[Stretch]) -> None:
    assert stretches(np.array(times, dtype=np.int64), 2) == found


def test_equal_neighbours_end_a_descending_run() -> None:
    """Otherwise reversing it would break ties."""
    found = stretches(np.array([9, 8, 7, 7, 6, 5], dtype=np.int64), 2)
    assert found[0] == Stretch(0, 3, "descending")
    assert all(stretch.start >= 3 for stretch in found[1:])


# ---- gallop costs (listsort.txt) ------------------------------------------------------------------------------------

GALLOP_COSTS = [1, 2, 4, 4, 6, 6, 6, 6, 8, 8, 8, 8]  # linear search would take i + 1


@pytest.mark.parametrize(("place", "cost"), list(enumerate(GALLOP_COSTS)))
def test_gallop_cost_table(place: int, cost: int) -> None:
    times = np.arange(0, 2000, 2, dtype=np.int64)
    assert gallop_left(times, 2 * place) == (place, cost)
    assert gallop_right(times, 2 * place - 1) == (place, cost)
    linear = place + 1
    assert (cost > linear) == (place in (2, 4)) and (cost == linear) == (place in (0, 1, 3, 5))


def test_gallop_cost_is_twice_the_logarithm() -> None:
    times = np.arange(20_000, dtype=np.int64)
    for place in itertools.chain(range(1, 300), range(300, 8000, 97)):
        expected = 2 * math.floor(math.log2(place)) + 2
        assert gallop_left(times, place) == (place, expected)
        # At most one more than Bentley & Yao's B1, 2 floor(lg) + 1 for position place + 1 (from memory).
        assert expected <= 2 * math.floor(math.log2(place + 1)) + 1 + 1


def test_galloping_starts_at_seven_wins() -> None:
    """Common practice, no source."""
    assert GALLOP_WINS == 7 and Merger().wins == 7


# ---- powers (Munro & Wild 2018; values recomputed) ------------------------------------------------------------------

POWERS = [
    ((0, 40, 60, 100), 1), ((0, 50, 50, 100), 1), ((0, 10, 10, 100), 3), ((10, 10, 80, 100), 1), ((0, 25, 25, 100), 2),
    ((25, 25, 50, 100), 1), ((50, 25, 25, 100), 2), ((0, 1, 1, 8), 3), ((1, 1, 1, 8), 2), ((3, 1, 1, 8), 1),
    ((90, 5, 5, 100), 4),
]  # fmt: skip


@pytest.mark.parametrize(("runs", "level"), POWERS)
def test_power_vectors(runs: tuple[int, int, int, int], level: int) -> None:
    assert power(*runs) == level


# ---- merge costs ----------------------------------------------------------------------------------------------------


def interleaved(lengths: list[int]) -> list[Strand]:
    """Strands of these lengths whose times overlap, so that nothing is left out of any merge."""
    generator = np.random.default_rng(sum(lengths))
    return strands([np.sort(generator.integers(0, 10**6, length)) for length in lengths])


def cost_of(lengths: list[int]) -> int:
    merger = Costing()
    result = merger.merge(interleaved(lengths))
    assert len(result.times) == sum(lengths) and np.all(result.times[1:] >= result.times[:-1])
    return merger.cost


COSTS = [
    ([5, 3, 3, 14, 1, 2], 67),
    ([1, 2, 3, 4, 5], 33),
    ([128, 64, 32, 16, 8, 4, 2, 2], 508),
    ([10000, 20000, 10000], 70000),
    ([30, 20, 10], 90),
    ([500, 400, 1000], 2800),
    ([2, 3, 5, 7, 11, 13], 97),
    ([9, 16, 7, 4, 25, 36, 1], 268),
    ([1] * 16, 64),
]


@pytest.mark.parametrize(("lengths", "cost"), COSTS)
def test_merge_cost_vectors(lengths: list[int], cost: int) -> None:
    assert cost_of(lengths) == cost


def test_2112_elements_are_cut_so_that_all_merges_balance() -> None:
    """listsort.txt: 64 runs of 33 against 66 runs of 32."""
    assert minimum_run(2112) == 33
    assert cost_of([33] * 64) == 12672
    assert cost_of([32] * 66) == 12800


def entropy(lengths: list[int]) -> float:
    total = sum(lengths)
    return sum(length / total * math.log2(total / length) for length in lengths)


def stacks(merged: list[tuple[int, int]], lengths: list[int]) -> list[list[int]]:
    """Before each merge: the boundaries (numbers of the strand to their left) that wait on the stack, from the bottom.

    Read off what was merged: a merge of [a, b) and [b, c) happens while [0, b) lies on the stack in merged pieces.
    """
    ends = list(itertools.accumulate(lengths))
    boundary_at = {end: index for index, end in enumerate(ends)}
    pieces = {0, *ends}  # where merged pieces begin and end
    found = []
    for start, middle in merged:
        found.append([boundary_at[end] for end in sorted(pieces) if 0 < end <= middle])
        assert start in pieces
        pieces.discard(middle)
    return found


class Watched(Costing):
    """Notes which stretches of rows each merge joins, by the serial numbers of their rows."""

    def __init__(self) -> None:
        super().__init__()
        self.merged: list[tuple[int, int]] = []

    def merge_two(self, older: Strand, newer: Strand) -> Strand:
        starts = [int(as_refs(one.refs)["place"].min()) for one in (older, newer)]
        self.merged.append((starts[0], starts[1]))
        return super().merge_two(older, newer)


def random_lengths(generator: np.random.Generator) -> list[int]:
    count = int(generator.integers(2, 41))
    return np.maximum(1, generator.pareto(0.7, count) * 3).astype(int).clip(1, 2000).tolist()


def test_merge_cost_is_bounded_by_the_entropy_of_the_runs() -> None:
    """n(H + 2), Munro & Wild 2018; no cost is below the entropy (Shannon)."""
    generator = np.random.default_rng(11)
    excess = []
    for _ in range(300):
        lengths = random_lengths(generator)
        cost, total = cost_of(lengths), sum(lengths)
        excess.append(cost / total - entropy(lengths))
    assert min(excess) >= -1e-9 and max(excess) <= 2
    assert max(excess) > 0.5  # the lists are not all easy


def test_the_stack_of_the_power_rule_is_low_and_its_powers_ascend() -> None:
    """At most floor(lg n) + 1 boundaries wait (from memory), with powers strictly ascending towards the top."""
    generator = np.random.default_rng(12)
    highest = 0
    for _ in range(200):
        lengths = random_lengths(generator)
        merger = Watched()
        merger.merge(interleaved(lengths))
        total, starts = sum(lengths), [0, *itertools.accumulate(lengths)]
        for waiting in stacks(merger.merged, lengths):
            powers = [power(starts[index], lengths[index], lengths[index + 1], total) for index in waiting]
            assert all(one < other for one, other in itertools.pairwise(powers))
            assert len(waiting) <= math.floor(math.log2(total)) + 1
            highest = max(highest, len(waiting))
    assert highest >= 4


def test_three_runs_are_always_merged_in_the_best_order() -> None:
    """listsort.txt: the middle one with the shorter of its neighbours first."""
    for first, middle, last in itertools.product((1, 2, 5, 9, 30), repeat=3):
        total = first + middle + last
        assert cost_of([first, middle, last]) == total + middle + min(first, last)


# ---- comparisons ----------------------------------------------------------------------------------------------------


def test_galloping_ten_into_a_thousand_takes_far_fewer_comparisons_than_a_linear_merge() -> None:
    """Linear merging takes up to 1,009; no method does with fewer than lg C(1010, 10) on average (information)."""
    generator, counts = np.random.default_rng(13), []
    with constants(WINDOW_EVENTS=1, GALLOP_WINS=1, GALLOP_PAYS_EVENTS=1):
        for _ in range(200):
            merger = Merger()
            times = generator.permutation(1010)
            few, many = np.sort(times[:10]), np.sort(times[10:])
            older, newer = strand(few), strand(many, 10)
            assert rows_of(merger.merge_two(older, newer)) == sorted(rows_of(older, newer))
            counts.append(merger.counts.comparisons)
    assert math.log2(math.comb(1010, 10)) <= mean(counts) < 300
    assert max(counts) < 1009 / 2


def test_as_it_stands_a_merge_never_compares_more_than_linear_merging_and_two_searches() -> None:
    generator = np.random.default_rng(14)
    for _ in range(100):
        sizes = generator.integers(1, 3000, 2)
        older, newer = (strand(np.sort(generator.integers(0, 10**6, size))) for size in sizes)
        merger = Merger()
        merger.merge_two(older, newer)
        assert merger.counts.comparisons <= sizes.sum() + 4 * int(sizes.max()).bit_length() + 4

"""Every worked example of RFC 4737 (Packet Reordering Metrics, November 2006), with rows derived from it outside.

Check-values, section 1: what the RFC prints, and, named "derived", what was computed from its definitions outside this
project. Positions in the RFC count from 1, here from 0.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import pytest
from strandline.replay.disorder import ascending_runs, inversions, overtakers, smallest_k
from strandline.replay.reordering import Reordering


@dataclass(frozen=True)
class Example:
    """A sequence and its figures. By key: extents, late times, byte offsets, discontinuities, and n of n-reordering."""

    keys: list[int]
    extents: dict[int, int]
    in_sequence: dict[int, int]  # derived: key in order but not expected yet -> size
    discontinuities: list[int]
    closed: list[int]  # derived: closed runs
    open: int
    q: int
    n_reordered: dict[int, int]
    listing: list[float]  # per cent, by the denominator of appendix A
    arrivals: list[int] | None = None
    late_times: dict[int, int] = field(default_factory=dict)
    byte_offsets: dict[int, int] = field(default_factory=dict)
    gaps: list[int] | None = None


EXAMPLES = {
    "table 1": Example(
        [1, 2, 3, 5, 6, 7, 8, 4, 9, 10],
        {4: 4},
        {5: 1},
        [5],
        [7],
        2,
        49,
        {4: 4},
        [11.111111, 12.5, 14.285714, 16.666667],
        [68, 88, 108, 148, 168, 188, 208, 210, 228, 248],
        {4: 62},
        {4: 400},
    ),
    "table 2": Example(
        [1, 2, 3, 4, 7, 5, 6, 8, 9, 10],
        {5: 1, 6: 2},
        {7: 2},
        [7],
        [5, 0],
        3,
        25,
        {5: 1},
        [11.111111],
        [68, 88, 108, 128, 188, 189, 190, 208, 228, 248],
        {5: 1, 6: 2},
        {5: 100, 6: 100},
    ),
    "table 3": Example(
        [1, 2, 3, 7, 8, 9, 10, 4, 5, 6, 11],
        {4: 4, 5: 5, 6: 6},
        {7: 3},
        [7],
        [7, 0, 0],
        1,
        49,
        {4: 4},
        [10.0, 11.111111, 12.5, 14.285714],
        [68, 88, 108, 188, 208, 228, 248, 250, 252, 256, 268],
        {4: 62, 5: 64, 6: 68},
        {4: 400, 5: 400, 6: 400},
    ),
    "table 4": Example(
        [1, 2, 3, 6, 7, 4, 5, 8, 9, 10, 12, 13, 11, 14, 15, 16],
        {4: 2, 5: 3, 11: 2},
        {6: 2, 12: 1},
        [6, 12],
        [5, 0, 5],
        3,
        50,
        {4: 2, 11: 2},
        [13.333333, 14.285714],
        gaps=[0, 7],
    ),
    "section 5.3": Example(
        [1, 2, 3, 7, 8, 9, 4, 5, 6],
        {4: 3, 5: 4, 6: 5},
        {7: 3},
        [7],
        [6, 0, 0],
        0,
        36,
        {4: 3},
        [12.5, 14.285714, 16.666667],
    ),
    "usage of appendix A": Example(
        [1, 2, 3, 7, 8, 4, 5, 6],
        {4: 2, 5: 3, 6: 4},
        {7: 3},
        [7],
        [5, 0, 0],
        0,
        25,
        {4: 2},
        [100 / 7, 100 / 6],
    ),
    "section 4.3.4": Example([1, 10, 5], {5: 1}, {10: 8}, [10], [2], 0, 4, {5: 1}, [50.0]),
}
EVERY = pytest.mark.parametrize("name", EXAMPLES)


def figures(name: str) -> tuple[Example, Reordering, np.ndarray]:
    """The example, its figures, and its keys as a column; each arrival holds 100 bytes."""
    example = EXAMPLES[name]
    arrivals = None if example.arrivals is None else np.array(example.arrivals, dtype=np.int64)
    keys = np.array(example.keys, dtype=np.int64)
    return example, Reordering(keys, arrivals, np.full(len(keys), 100)), keys


@EVERY
def test_reordered_arrivals_ratio_and_extents(name: str) -> None:
    example, found, keys = figures(name)
    assert found.duplicates == 0 and found.received == len(keys)
    assert dict(zip(keys[found.reordered].tolist(), found.extents.tolist(), strict=True)) == example.extents
    assert found.ratio == len(example.extents) / len(keys)


@EVERY
def test_sequence_discontinuities(name: str) -> None:
    example, found, keys = figures(name)
    positions, sizes = found.gaps_in_sequence
    assert dict(zip(keys[positions].tolist(), sizes.tolist(), strict=True)) == example.in_sequence


@EVERY
def test_late_times_and_byte_offsets(name: str) -> None:
    example, found, keys = figures(name)
    reordered = keys[found.reordered].tolist()
    if example.arrivals is not None:
        assert dict(zip(reordered, found.late_times_ns.tolist(), strict=True)) == example.late_times
        assert dict(zip(reordered, found.byte_offsets.tolist(), strict=True)) == example.byte_offsets


@EVERY
def test_reordering_discontinuities_and_gaps(name: str) -> None:
    example, found, keys = figures(name)
    assert keys[found.discontinuities.positions].tolist() == example.discontinuities
    assert found.discontinuities.gaps.tolist() == (example.gaps or [0])
    if example.arrivals is not None and found.discontinuities.gap_times_ns is not None:
        assert found.discontinuities.gap_times_ns.tolist() == [0]


@EVERY
def test_reordering_free_runs(name: str) -> None:
    example, found, keys = figures(name)
    runs = found.runs
    assert (runs.closed.tolist(), runs.open) == (example.closed, example.open)
    assert (runs.x, runs.a, runs.p, runs.q) == (
        len(example.extents),
        len(keys) - len(example.extents),
        len(keys),
        example.q,
    )


@EVERY
def test_n_reordering_with_both_denominators(name: str) -> None:
    """The trap: definition 2 divides by all arrivals, the listing of appendix A by all but n."""
    example, found, keys = figures(name)
    reordering = found.n_reordering
    count = len(keys)
    greatest = max(example.n_reordered.values())
    assert reordering.greatest == greatest == len(example.listing)
    for n in range(1, greatest + 1):
        many = sum(each >= n for each in example.n_reordered.values())
        assert reordering.degree_by_definition(n) == many / count
        assert 100 * reordering.degree_by_listing(n) == pytest.approx(example.listing[n - 1], abs=5e-7)
    if greatest + 1 < count:
        assert reordering.degree_by_definition(greatest + 1) == 0  # "no (n+1)-reordering"


def test_the_two_denominators_of_table_1() -> None:
    reordering = figures("table 1")[1].n_reordering
    assert 100 * reordering.degree_by_definition(1) == 10
    assert 100 * reordering.degree_by_listing(1) == pytest.approx(11.111111, abs=5e-7)


def test_gap_time_of_table_4() -> None:
    """The RFC prints no clock for table 4: with 10 ns an arrival the gap of 7 positions lasts 70 ns (derived)."""
    keys = np.array(EXAMPLES["table 4"].keys, dtype=np.int64)
    found = Reordering(keys, 10 * np.arange(len(keys))).discontinuities
    assert found.gap_times_ns is not None and found.gap_times_ns.tolist() == [0, 70]


def test_the_histogram_of_extents_of_table_3() -> None:
    assert np.bincount(figures("table 3")[1].extents, minlength=8)[1:].tolist() == [0, 0, 0, 1, 1, 1, 0]


def test_runs_of_section_4_6_4() -> None:
    """Two feeds of 36 with the same share reordered; the sequences were made outside to fit the printed counters."""
    even = Reordering(np.array([*range(2, 13), 1, *range(14, 25), 13, *range(26, 37), 25]))
    assert (even.runs.p, even.runs.x, even.runs.a, even.runs.q) == (36, 3, 33, 363)
    assert (even.runs.mean, even.runs.mean_square, even.runs.variation) == (11, 11, 1.0)
    uneven = Reordering(np.array([2, 1, 4, 3, *range(6, 37), 5]))
    assert (uneven.runs.p, uneven.runs.x, uneven.runs.a, uneven.runs.q) == (36, 3, 33, 963)
    assert uneven.runs.closed.tolist() == [1, 1, 31]
    assert uneven.runs.mean == 11
    assert uneven.runs.mean_square == pytest.approx(29.181818, abs=5e-7)
    assert uneven.runs.variation == pytest.approx(2.652893, abs=5e-7)
    assert even.runs.percent_in_order == uneven.runs.percent_in_order == pytest.approx(100 * 33 / 36)


# ---- facts that tie the RFC to a reorder buffer (check-values, section 1.3; computed outside) -----------------------


@pytest.mark.parametrize(
    ("name", "slots", "extent", "pairs", "runs"),
    [("table 1", 4, 4, 4, 2), ("table 2", 1, 2, 2, 2), ("table 3", 4, 6, 12, 2), ("table 4", 2, 3, 6, 3)],
)
def test_buffer_slots_extents_inversions_and_runs(name: str, slots: int, extent: int, pairs: int, runs: int) -> None:
    keys = np.array(EXAMPLES[name].keys, dtype=np.int64)
    assert overtakers(keys).max() == slots
    assert smallest_k(keys) == extent
    assert inversions(keys) == pairs
    assert ascending_runs(keys) == runs


# ---- duplicates, loss, and nothing at all -------------------------------------------------------------------------


def test_a_duplicate_is_noted_and_left_out() -> None:
    """Section 3.6: a naive test would call the second copy of 2 reordered."""
    found = Reordering(np.array([1, 2, 3, 2, 5, 4, 5]), np.arange(7) * 10)
    assert (found.duplicates, found.received, found.kept.tolist()) == (2, 5, [0, 1, 2, 4, 5])
    assert found.keys[found.reordered].tolist() == [4]
    assert found.extents.tolist() == [1] and found.late_times_ns.tolist() == [10]


def test_equal_event_times_are_neither_duplicates_nor_reordered() -> None:
    found = Reordering(np.array([5, 5, 7, 7, 5]), numbered=False)
    assert (found.duplicates, found.reordered.tolist(), found.extents.tolist()) == (0, [4], [2])
    with pytest.raises(ValueError, match="no sequence discontinuities"):
        _ = found.gaps_in_sequence


def test_loss_alone_reorders_nothing() -> None:
    """Section 6."""
    found = Reordering(np.array([1, 2, 5, 9]))
    assert found.ratio == 0 and found.n_reordering.greatest == 0
    assert found.gaps_in_sequence[1].tolist() == [2, 3]
    assert (found.runs.x, found.runs.mean, found.runs.variation, found.runs.open) == (0, None, None, 4)
    assert len(found.discontinuities.positions) == 0


def test_nothing_has_no_figures() -> None:
    found = Reordering(np.empty(0, dtype=np.int64))
    assert (found.received, found.ratio, found.n_reordering.greatest, found.runs.p) == (0, 0.0, 0, 0)


def test_what_a_figure_needs_is_said() -> None:
    found = Reordering(np.array([2, 1]))
    with pytest.raises(ValueError, match="arrivals"):
        _ = found.late_times_ns
    with pytest.raises(ValueError, match="lengths"):
        _ = found.byte_offsets
    with pytest.raises(ValueError, match="n goes from 1 to 1"):
        found.n_reordering.degree_by_definition(2)
    with pytest.raises(ValueError, match="a column of 1"):
        Reordering(np.array([2, 1]), np.array([0]))
    with pytest.raises(ValueError, match="2\\^62"):
        Reordering(np.array([2**62 + 1]))

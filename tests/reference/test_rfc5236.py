"""Every worked example of RFC 5236 (Improved Packet Reordering Metrics, June 2008), with rows derived from it outside.

Check-values, section 2. In table 6 the RFC prints E = 7 for the last column where the others show E before the arrival;
that cell is nowhere asserted (no figure here shows E).
"""

from __future__ import annotations

import numpy as np
import pytest
from strandline.replay.density import NOT_COUNTED, occupancy_density, ranks, reorder_density

FAR = 16  # a threshold where an example names none


def column(arrivals: list[int]) -> np.ndarray:
    return np.array(arrivals, dtype=np.int64)


def noted(values: np.ndarray) -> list[int | None]:
    return [None if value == NOT_COUNTED else value for value in values.tolist()]


# arrivals, DT, receive index, displacement ("-" in the RFC: None), RD
RECEIVED = {
    "8a, tables 1-2": (
        [1, 4, 2, 5, 3, 6, 7, 8],
        4,
        [1, 2, 3, 4, 5, 6, 7, 8],
        [0, -2, 1, -1, 2, 0, 0, 0],
        {-2: 0.125, -1: 0.125, 0: 0.5, 1: 0.125, 2: 0.125},
    ),
    "8b, table 5": ([1, 2, 4, 5, 6, 7], 3, [1, 2, 4, 5, 6, 7], [0] * 6, {0: 1.0}),
    "8c, table 7": (
        [1, 3, 2, 3, 4, 5],
        2,
        [1, 2, 3, None, 4, 5],
        [0, -1, 1, None, 0, 0],
        {-1: 0.2, 0: 0.6, 1: 0.2},
    ),
    "3.1, example 1 (displacement derived)": (
        [2, 1, 4, 5, 3],
        FAR,
        [1, 2, 3, 4, 5],
        [-1, 1, -1, -1, 2],
        {-1: 0.6, 1: 0.2, 2: 0.2},
    ),
    "3.1, example 2": ([1, 4, 3, 5, 3], FAR, [1, 3, 4, 5, None], [0, -1, 1, 0, None], {-1: 0.25, 0: 0.5, 1: 0.25}),
    "3.3, example 3": (
        [1, 4, 3, 5, 3, 8, 7, 6],
        FAR,
        [1, 3, 4, 5, None, 6, 7, 8],
        [0, -1, 1, 0, None, -2, 0, 2],
        {-2: 1 / 7, -1: 1 / 7, 0: 3 / 7, 1: 1 / 7, 2: 1 / 7},
    ),
    "4, example 4": (
        [1, 2, 3, 5, 4, 6],
        FAR,
        [1, 2, 3, 4, 5, 6],
        [0, 0, 0, -1, 1, 0],
        {-1: 1 / 6, 0: 4 / 6, 1: 1 / 6},
    ),
    "4, example 5": (
        [1, 2, 5, 3, 6, 2],
        FAR,
        [1, 2, 3, 5, 6, None],
        [0, 0, -2, 2, 0, None],
        {-2: 0.2, 0: 0.6, 2: 0.2},
    ),
    "2b, loss": ([1, 3, 4, 5, 6], FAR, [1, 3, 4, 5, 6], [0] * 5, {0: 1.0}),
    "2b, a duplicate": ([1, 2, 3, 2, 4, 5], FAR, [1, 2, 3, None, 4, 5], [0, 0, 0, None, 0, 0], {0: 1.0}),
    "3.8 (displacement derived)": (
        [1, 2, 4, 5, 3],
        FAR,
        [1, 2, 3, 4, 5],
        [0, 0, -1, -1, 2],
        {-1: 0.4, 0: 0.4, 2: 0.2},
    ),
    "6, a rogue number": (
        [1, 5430, 2, 3, 4, 5],
        4,
        [1, None, 2, 3, 4, 5],
        [0, None, 0, 0, 0, 0],
        {0: 1.0},
    ),
}


@pytest.mark.parametrize("name", RECEIVED)
def test_receive_index_displacement_and_reorder_density(name: str) -> None:
    arrivals, threshold, index, displacement, density = RECEIVED[name]
    found = reorder_density(column(arrivals), threshold)
    assert noted(found.receive_index) == index
    assert noted(found.displacement) == displacement
    for each in range(-threshold - 1, threshold + 2):
        assert found.density(each) == pytest.approx(density.get(each, 0.0), abs=1e-12)


def test_the_running_counts_of_table_1() -> None:
    """FD of the displacement of each arrival, as it stands then."""
    arrivals, threshold, *_ = RECEIVED["8a, tables 1-2"]
    displacement = reorder_density(column(arrivals), threshold).displacement.tolist()
    running = [displacement[: row + 1].count(each) for row, each in enumerate(displacement)]
    assert running == [1, 1, 1, 1, 1, 2, 3, 4]


# arrivals, BT, occupancy after each (None: ignored), FB
KEPT = {
    "8a, tables 3-4": ([1, 4, 2, 5, 3, 6, 7, 8], 4, [0, 1, 1, 2, 0, 0, 0, 0], {0: 5, 1: 2, 2: 1}),
    "8b, table 6": ([1, 2, 4, 5, 6, 7], 3, [0, 0, 1, 2, 3, 0], {0: 3, 1: 1, 2: 1, 3: 1}),
    "8c, table 8": ([1, 3, 2, 3, 4, 5], 2, [0, 1, 0, None, 0, 0], {0: 4, 1: 1}),
    "3.1, example 1": ([2, 1, 4, 5, 3], FAR, [1, 0, 1, 2, 0], {0: 2, 1: 2, 2: 1}),
    "4, example 4": ([1, 2, 3, 5, 4, 6], FAR, [0, 0, 0, 1, 0, 0], {0: 5, 1: 1}),
    "3.8": ([1, 2, 4, 5, 3], FAR, [0, 0, 1, 2, 0], {0: 3, 1: 1, 2: 1}),
}


@pytest.mark.parametrize("name", KEPT)
def test_occupancy_and_its_density(name: str) -> None:
    arrivals, limit, occupancy, counts = KEPT[name]
    found = occupancy_density(column(arrivals), limit)
    assert [None if each < 0 else each for each in found.occupancy.tolist()] == occupancy
    total = sum(counts.values())
    assert found.counts.tolist() == [counts.get(kept, 0) for kept in range(limit + 1)]
    for kept in range(limit + 2):
        assert found.density(kept) == pytest.approx(counts.get(kept, 0) / total)
    assert found.mean == pytest.approx(sum(kept * many for kept, many in counts.items()) / total)


@pytest.mark.parametrize(
    ("name", "running"),
    [
        ("8a, tables 3-4", [1, 1, 2, 1, 2, 3, 4, 5]),
        ("8b, table 6", [1, 2, 1, 1, 1, 3]),
        ("8c, table 8", [1, 1, 2, None, 3, 4]),
    ],
)
def test_the_running_counts_of_occupancy(name: str, running: list[int | None]) -> None:
    arrivals, limit, *_ = KEPT[name]
    kept = occupancy_density(column(arrivals), limit).occupancy.tolist()
    assert [None if each < 0 else kept[: row + 1].count(each) for row, each in enumerate(kept)] == running


def test_densities_of_8b_and_8c_as_printed() -> None:
    found = occupancy_density(column([1, 2, 4, 5, 6, 7]), 3)
    assert [round(found.density(kept), 4) for kept in range(4)] == [0.5, 0.1667, 0.1667, 0.1667]
    found = occupancy_density(column([1, 3, 2, 3, 4, 5]), 2)
    assert [found.density(kept) for kept in range(3)] == [0.8, 0.2, 0.0]


# Derived outside for tables 1 to 4 of RFC 4737, with DT = BT = 16: FD, FB.
OF_4737 = {
    1: ([1, 2, 3, 5, 6, 7, 8, 4, 9, 10], {-1: 4, 0: 5, 4: 1}, {0: 6, 1: 1, 2: 1, 3: 1, 4: 1}),
    2: ([1, 2, 3, 4, 7, 5, 6, 8, 9, 10], {-2: 1, 0: 7, 1: 2}, {0: 8, 1: 2}),
    3: ([1, 2, 3, 7, 8, 9, 10, 4, 5, 6, 11], {-3: 4, 0: 4, 4: 3}, {0: 5, 1: 1, 2: 1, 3: 1, 4: 3}),
    4: (
        [1, 2, 3, 6, 7, 4, 5, 8, 9, 10, 12, 13, 11, 14, 15, 16],
        {-2: 2, -1: 2, 0: 9, 2: 3},
        {0: 11, 1: 2, 2: 3},
    ),
}


@pytest.mark.parametrize("table", OF_4737)
def test_the_tables_of_rfc_4737(table: int) -> None:
    arrivals, displaced, kept = OF_4737[table]
    density = reorder_density(column(arrivals), 16)
    assert {k - 16: many for k, many in enumerate(density.counts.tolist()) if many} == displaced
    assert sum(k * many for k, many in displaced.items()) == 0  # invariant without loss
    occupancy = occupancy_density(column(arrivals), 16)
    assert {b: many for b, many in enumerate(occupancy.counts.tolist()) if many} == kept
    late = sum(many for k, many in displaced.items() if k >= 3) / len(arrivals)
    assert density.late_share() == pytest.approx(late)


def test_event_times_take_part_by_rank() -> None:
    """Equal times keep their order of arrival, so they are neither displaced nor duplicates."""
    assert ranks(column([50, 20, 20, 70, 50])).tolist() == [2, 0, 1, 4, 3]
    assert noted(reorder_density(ranks(column([20, 20, 50])), 4).displacement) == [0, 0, 0]


def test_what_cannot_be_is_refused() -> None:
    for of in (reorder_density, occupancy_density):
        with pytest.raises(ValueError, match="threshold"):
            of(column([1]), -1)
        with pytest.raises(ValueError, match="2\\^62"):
            of(column([2**62 + 1]), 1)
    nothing = column([])
    assert reorder_density(nothing, 3).density(0) == 0 == occupancy_density(nothing, 3).mean

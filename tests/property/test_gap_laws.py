"""Laws of what never came, and of late numbers over several sources: as a plain walk through the arrivals says."""

from __future__ import annotations

import numpy as np
from hypothesis import given
from hypothesis import strategies as st
from strandline.replay.gaps import lifted, lost_ranges, sequence_gaps
from strandline.replay.reordering import Reordering

arrivals = st.lists(st.tuples(st.integers(0, 2), st.integers(-6, 25)), max_size=50)


def columns(rows: list[tuple[int, int]]) -> tuple[np.ndarray, np.ndarray]:
    numbers = np.array([number for _, number in rows], dtype=np.int64)
    return numbers, np.array([source for source, _ in rows], dtype=np.uint32)


def missing(rows: list[tuple[int, int]]) -> dict[tuple[int, int], int]:
    """(source, number) that was jumped over and never came: the row that jumped over it."""
    jumped: dict[tuple[int, int], int] = {}
    newest: dict[int, int] = {}
    for row, (source, number) in enumerate(rows):
        if source in newest:
            for each in range(newest[source] + 1, number):
                jumped[source, each] = row
        newest[source] = max(number, newest.get(source, number))
    came = set(rows)
    return {key: row for key, row in jumped.items() if key not in came}


@given(arrivals)
def test_lost_ranges_are_the_numbers_that_were_jumped_over_and_never_came(rows: list[tuple[int, int]]) -> None:
    found = lost_ranges(*columns(rows))
    told: dict[tuple[int, int], int] = {}
    for source, first, last, opened in zip(found.source, found.first, found.last, found.opened, strict=True):
        for number in range(first, last + 1):
            assert (int(source), number) not in told
            told[int(source), number] = int(opened)
    assert told == missing(rows)
    _, counts = sequence_gaps(*columns(rows))
    assert len(told) == counts.lost.sum()


@given(arrivals)
def test_ranges_are_as_long_as_they_can_be(rows: list[tuple[int, int]]) -> None:
    found = lost_ranges(*columns(rows))
    ends = list(zip(found.source.tolist(), found.first.tolist(), found.last.tolist(), strict=True))
    assert ends == sorted(ends)
    for source, first, last in ends:
        assert (source, first - 1) in rows and (source, last + 1) in rows


@given(arrivals)
def test_sources_joined_are_reordered_as_each_is_alone(rows: list[tuple[int, int]]) -> None:
    numbers, sources = columns(rows)
    whole = lifted(numbers, sources)
    clock = np.arange(len(rows), dtype=np.int64) * 7
    together = Reordering(whole.keys, clock[whole.rows], numbered=False)
    extents: list[int] = []
    late_times: list[int] = []
    late_rows: list[int] = []
    n_counts = np.zeros(len(rows) + 1, dtype=np.int64)
    for source in range(3):
        own = np.flatnonzero(sources == source)
        alone = Reordering(numbers[own], clock[own])
        extents += alone.extents.tolist()
        late_times += alone.late_times_ns.tolist()
        late_rows += own[alone.kept[alone.reordered]].tolist()
        n_counts[: alone.n_reordering.greatest] += alone.n_reordering.counts
    assert together.extents.tolist() == extents
    assert together.late_times_ns.tolist() == late_times
    assert whole.rows[together.reordered].tolist() == late_rows
    assert together.n_reordering.counts.tolist() == np.trim_zeros(n_counts, "b").tolist()
    _, counts = sequence_gaps(numbers, sources)
    assert len(late_rows) == counts.late.sum() + counts.before_first.sum()

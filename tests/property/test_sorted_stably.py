"""Law of the stable sort of a time column: whichever way it goes, numpy's stable sort by index is the reference."""

from __future__ import annotations

import numpy as np
from hypothesis import example, given
from hypothesis import strategies as st
from strandline.core.columns import TIME_MAX, TIME_MIN
from strandline.core.sorting import PACKED_EVENTS, sorted_runs, sorted_stably

ROWS = st.one_of(st.integers(0, 40), st.integers(PACKED_EVENTS - 2, PACKED_EVENTS + 40))
# How far the times lie apart: ties everywhere, the edge of what fits beside a row's number, all of int64.
SPANS = st.one_of(st.integers(0, 5), st.integers(2**50, 2**56), st.just(TIME_MAX - TIME_MIN))


def agrees(times: np.ndarray) -> None:
    expected = np.argsort(times, kind="stable")
    for packing in (True, False):
        found, order = sorted_stably(times, packing=packing)
        assert np.array_equal(order, expected) and np.array_equal(found, times[expected])
        assert found.dtype == np.int64


@given(ROWS, SPANS, st.integers(0, 2**32), st.booleans())
def test_packed_or_not_the_order_is_that_of_a_stable_sort(rows: int, span: int, seed: int, low: bool) -> None:
    random = np.random.default_rng(seed)
    offsets = random.integers(0, span, rows, dtype=np.uint64, endpoint=True)
    base = np.uint64((TIME_MIN if low else TIME_MAX - span) % 2**64)
    agrees((base + offsets).view(np.int64))


@given(st.integers(0, 1))
@example(0)
def test_the_widest_span_that_is_packed_and_the_narrowest_that_is_not(more: int) -> None:
    bits = (PACKED_EVENTS - 1).bit_length()
    times = np.zeros(PACKED_EVENTS, dtype=np.int64)
    times[0] = 2 ** (63 - bits) - 1 + more
    times[-1] = 1
    agrees(times)
    agrees(times + TIME_MIN)
    agrees(times + (TIME_MAX - int(times[0])))


@given(st.integers(1, 2_000), st.integers(0, 60), st.integers(1, 60), st.integers(0, 2**32))
def test_with_few_falls_the_order_is_that_of_a_stable_sort_too(rows: int, late: int, runs: int, seed: int) -> None:
    """Rows that come late one by one, and long runs that interleave: whichever way the falls make it go."""
    random = np.random.default_rng(seed)
    parts = np.array_split(np.sort(random.integers(0, 500, rows)), runs)
    times = np.concatenate([part - 40 * number for number, part in enumerate(parts)])
    times[random.integers(0, rows, late)] -= random.integers(0, 300, late)
    found, order = sorted_runs(times, int(np.count_nonzero(times[1:] < times[:-1])))
    expected = np.argsort(times, kind="stable")
    assert np.array_equal(order, expected) and np.array_equal(found, times[expected])

"""Laws of the sketch of lateness: its relative error, its bounds, fading, and one value like a column of it."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from strandline.core.sketch import GREATEST_NS, LEAST_NS, Buckets, Sketch, buckets_of

VALUE_MAX = 2**63 - 1
errors = st.sampled_from([0.0005, 0.001, 0.01, 0.02, 0.05, 0.25])
values = st.one_of(st.integers(-5, 200), st.integers(0, VALUE_MAX), st.sampled_from([-(2**63), VALUE_MAX, 2**53 + 1]))
columns = st.lists(values, max_size=60)


def sketch_of(column: list[int], error: float = 0.01) -> Sketch:
    sketch = Sketch(buckets_of(error))
    sketch.add(np.array(column, dtype=np.int64))
    sketch.check()
    return sketch


@pytest.mark.parametrize(("least", "greatest"), [(1, VALUE_MAX), (LEAST_NS, GREATEST_NS), (997, 10**12)])
@pytest.mark.parametrize("error", [0.0005, 0.001, 0.01, 0.02, 0.05, 0.25])
def test_every_bound_and_every_cell_lies_on_the_right_side(error: float, least: int, greatest: int) -> None:
    """The quick way to a place against a binary search, where it could go wrong: around bounds, powers of two, ends."""
    buckets = Buckets(error, least, greatest)
    powers = [2**exponent + 2**exponent * part // 512 for exponent in range(63) for part in range(0, 512)]
    edges = np.unique(np.array([*buckets.upper.tolist(), *powers], dtype=np.int64))
    tried = np.concatenate((edges, edges - 1, np.minimum(edges, VALUE_MAX - 1) + 1, VALUE_MAX - np.arange(2000)))
    expected = np.searchsorted(buckets.upper, np.maximum(tried, 0))
    assert np.array_equal(buckets.places(tried), expected)
    few = tried[:: len(tried) // 500]
    assert [buckets.place(value) for value in few.tolist()] == buckets.places(few).tolist()


@given(column=columns, error=errors)
def test_a_quantile_is_within_the_relative_error(column: list[int], error: float) -> None:
    sketch = sketch_of(column, error)
    ordered = sorted(max(value, 0) for value in column)
    for q in (0.0, 0.1, 0.5, 0.9, 0.999, 1.0):
        found = sketch.quantile(q)
        if not column:
            assert found == 0
        else:
            exact = ordered[math.floor(q * (len(ordered) - 1))]
            assert abs(found - exact) <= error * exact * (1 + 1e-9)


@given(
    column=columns,
    error=errors,
    slack=st.one_of(st.integers(0, 300), st.integers(0, VALUE_MAX)),
    near=st.none() | st.tuples(st.integers(0, 59), st.floats(0.9, 1.1)),
)
def test_the_late_share_lies_between_the_bounds(
    column: list[int], error: float, slack: int, near: tuple[int, float] | None
) -> None:
    """Of any slack, and of one that lies in the same bucket as some value, or in the next."""
    if column and near:
        slack = min(VALUE_MAX, max(0, round(column[near[0] % len(column)] * near[1])))
    sketch = sketch_of(column, error)
    share = sum(value > slack for value in column) / len(column) if column else 0.0
    bounds = sketch.late_share(slack)
    assert bounds.at_least <= share <= bounds.at_most
    upper = int(sketch.buckets.upper[sketch.buckets.place(slack)])
    exact = sketch.late_share(upper)
    assert exact.exact and exact.at_least == (sum(value > upper for value in column) / len(column) if column else 0.0)


@given(column=columns, error=errors, target=st.floats(0, 1))
def test_a_slack_for_a_share_keeps_it_and_is_hardly_longer_than_needed(
    column: list[int], error: float, target: float
) -> None:
    sketch = sketch_of(column, error)
    slack = sketch.slack_for(target)
    late = sorted((max(value, 0) for value in column), reverse=True)
    least = next((s for s in [0, *sorted(late)] if sum(value > s for value in late) <= target * len(late)), 0)
    assert sum(value > slack for value in late) <= target * len(late)
    assert least <= slack <= math.ceil(least * sketch.buckets.gamma * (1 + 1e-9))


@given(column=columns)
def test_one_by_one_is_as_if_in_a_column(column: list[int]) -> None:
    single, whole = Sketch(buckets_of(0.01)), sketch_of(column)
    for value in column:
        single.add_same(value)
        single.check()
    assert np.array_equal(single.counts, whole.counts)
    assert (single.total, single.greatest_ns) == (whole.total, whole.greatest_ns)


@given(before=columns, after=columns, error=errors)
def test_what_has_faded_weighs_half(before: list[int], after: list[int], error: float) -> None:
    sketch = sketch_of(before, error)
    sketch.fade()
    sketch.add(np.array(after, dtype=np.int64))
    sketch.check()
    weighed = sketch_of([*before, *after, *after], error)
    assert np.array_equal(2 * sketch.counts, weighed.counts)
    for slack in (0, 150, *after):
        assert sketch.late_share(max(slack, 0)) == weighed.late_share(max(slack, 0))


@given(values=st.lists(st.integers(0, VALUE_MAX), min_size=1, max_size=60))
def test_a_range_counts_what_lies_beyond_it_in_its_ends(values: list[int]) -> None:
    narrow, whole = Buckets(0.01, LEAST_NS, GREATEST_NS), Buckets(0.01)
    shift = whole.place(LEAST_NS) - 1
    expected = np.clip(whole.places(np.array(values)) - shift, 0, len(narrow) - 1)
    assert narrow.places(np.array(values)).tolist() == expected.tolist()
    assert narrow.values[1:].tolist() == whole.values[shift + 1 : shift + len(narrow)].tolist()


def test_wrong_arguments_are_refused() -> None:
    sketch = sketch_of([1, 2])
    for call in (
        lambda: sketch.late_share(-1),
        lambda: sketch.slack_for(1.1),
        lambda: sketch.quantile(-0.1),
        lambda: sketch.add_same(3, -1),
        lambda: Buckets(0.0),
    ):
        with pytest.raises(ValueError):
            call()

"""Laws of the sketch of lateness: its relative error, its bounds, merging, and its state as plain values."""

from __future__ import annotations

import json
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from strandline.replay.sketch import Buckets, LatenessSketch

VALUE_MAX = 2**63 - 1
errors = st.sampled_from([0.0005, 0.001, 0.01, 0.02, 0.05, 0.25])
values = st.one_of(st.integers(-5, 200), st.integers(0, VALUE_MAX), st.sampled_from([-(2**63), VALUE_MAX, 2**53 + 1]))
columns = st.lists(values, max_size=60)


def sketch_of(column: list[int], error: float = 0.01) -> LatenessSketch:
    sketch = LatenessSketch(error)
    sketch.add(np.array(column, dtype=np.int64))
    sketch.check()
    return sketch


@pytest.mark.parametrize("error", [0.0005, 0.001, 0.01, 0.02, 0.05, 0.25])
def test_every_bound_and_every_cell_lies_on_the_right_side(error: float) -> None:
    """The quick way to a place against a binary search, where it could go wrong: around bounds, powers of two, ends."""
    buckets = Buckets(error)
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
            assert math.isnan(found)
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


@given(parts=st.lists(columns, max_size=4), error=errors)
def test_merging_is_as_if_one_had_seen_everything(parts: list[list[int]], error: float) -> None:
    merged = LatenessSketch(error)
    for part in parts:
        merged.merge(sketch_of(part, error))
        merged.check()
    assert merged.to_plain() == sketch_of([value for part in parts for value in part], error).to_plain()


@given(column=columns)
def test_one_by_one_is_as_if_in_a_column(column: list[int]) -> None:
    single = LatenessSketch()
    for value in column:
        single.add_one(value)
        single.check()
    assert single.to_plain() == sketch_of(column).to_plain()


@given(column=columns, error=errors)
def test_plain_values_survive_json(column: list[int], error: float) -> None:
    plain = sketch_of(column, error).to_plain()
    again = LatenessSketch.from_plain(json.loads(json.dumps(plain)))
    again.check()
    assert again.to_plain() == plain


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"places": [3], "counts": []}, "once"),
        ({"places": [0, 0], "counts": [1, 1]}, "once"),
        ({"counts": [0, 1]}, "at least 1"),
        ({"places": [0, 2186]}, "outside"),
        ({"places": [-1, 3]}, "outside"),
        ({"lateness_ns_max": 10**9}, "last place"),
        ({"relative_error": 0.5}, "relative_error"),
    ],
)
def test_a_saved_sketch_that_contradicts_itself_is_refused(change: dict[str, object], message: str) -> None:
    with pytest.raises(ValueError, match=message):
        LatenessSketch.from_plain(sketch_of([0, 500]).to_plain() | change)


def test_wrong_arguments_are_refused() -> None:
    sketch = sketch_of([1, 2])
    for call in (
        lambda: sketch.late_share(-1),
        lambda: sketch.slack_for(1.1),
        lambda: sketch.quantile(-0.1),
        lambda: sketch.add_one(3, -1),
        lambda: sketch.merge(LatenessSketch(0.02)),
        lambda: Buckets(0.0),
    ):
        with pytest.raises(ValueError):
            call()

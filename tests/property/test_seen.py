"""The window of identities against a plain model: nothing within the window is forgotten, nothing is invented."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from strandline.core.seen import Seen

BATCHES = st.lists(st.lists(st.integers(0, 60), max_size=12), max_size=30)


@given(BATCHES)
def test_without_a_limit_it_is_a_set(batches: list[list[int]]) -> None:
    seen, model = Seen(10**6), set[int]()
    for batch in batches:
        expected = []
        for identity in batch:
            expected.append(max(identity, 1) not in model)
            model.add(max(identity, 1))
        assert seen.first_time(np.array(batch, dtype=np.uint64)).tolist() == expected
        seen.check()


@given(BATCHES, st.integers(1, 20))
def test_the_last_identities_are_known_and_no_more_than_twice_the_window(batches: list[list[int]], window: int) -> None:
    seen, firsts = Seen(window), list[int]()
    for batch in batches:
        first = seen.first_time(np.array(batch, dtype=np.uint64))
        for identity, new in zip((max(each, 1) for each in batch), first.tolist(), strict=True):
            if new:
                assert identity not in firsts[-window:], "the last ones are known"
                firsts.append(identity)
            else:
                assert identity in firsts, "only what came before can be a repeat"
        assert seen.known <= 2 * window
        seen.check()


@given(BATCHES, st.integers(0, 30), st.integers(1, 40))
def test_a_restored_window_answers_the_same(batches: list[list[int]], cut: int, window: int) -> None:
    straight, other = Seen(window), Seen(window)
    for index, batch in enumerate(batches):
        if index == cut:
            restored = Seen(window)
            restored.restore(*other.columns())
            other = restored
        column = np.array(batch, dtype=np.uint64)
        assert straight.first_time(column).tolist() == other.first_time(column).tolist()
    assert [column.tolist() for column in straight.columns()] == [column.tolist() for column in other.columns()]


@settings(max_examples=20, deadline=None)
@given(st.integers(0, 2**32))
def test_identities_that_meet_in_one_slot_are_kept_apart(seed: int) -> None:
    # Multiples of a large power of two share their mixed upper bits with neighbours far more often than chance.
    generator = np.random.default_rng(seed)
    column = (generator.integers(1, 4000, 3000).astype(np.uint64) << np.uint64(52)) | np.uint64(1)
    seen = Seen(5000)
    assert int(np.count_nonzero(seen.first_time(column))) == len(np.unique(column))
    assert not np.any(seen.first_time(column))
    seen.check()


@pytest.mark.parametrize("identity", [0, 1, 2**64 - 1])
def test_ends_of_the_range(identity: int) -> None:
    seen = Seen(10)
    column = np.array([identity, identity], dtype=np.uint64)
    assert seen.first_time(column).tolist() == [True, False]
    assert seen.first_time(column).tolist() == [False, False]

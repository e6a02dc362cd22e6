"""The window over a feed's ordered batches: what is in it, what has gone, and the bell, after every step."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from strandline import recent as recent_module
from strandline.core.columns import REF, Batch
from strandline.recent import Recent


def batch(number: int, rows: int = 1, place: int = 0) -> Batch:
    """A batch whose lines start at `place`."""
    refs = np.zeros(rows, dtype=REF)
    refs["place"] = place + np.arange(rows)
    return Batch("ordered", number, np.zeros(rows, dtype=np.int64), refs, 0, 0)


def numbers(window: Recent, after: int) -> list[int]:
    return [each.number for each in window.after(after)]


def test_a_new_window_holds_all_that_will_come() -> None:
    window = Recent()
    assert window.holds_all_after(0) and window.reached == 0 and window.first_number == 1
    window.begin(7)
    assert window.holds_all_after(7) and not window.holds_all_after(6) and window.reached == 7
    window.check()


def test_batches_that_leave_again_after_a_start_are_in_the_window() -> None:
    window = Recent()
    window.begin(7)
    for number in (6, 7, 8):
        window.add(batch(number))
        window.check()
    assert numbers(window, 5) == [6, 7, 8] and window.holds_all_after(5) and not window.holds_all_after(4)
    assert window.reached == 8


def test_the_window_is_bounded_by_events_and_keeps_one_batch_at_least(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(recent_module, "EVENTS_AT_MOST", 10)
    window = Recent()
    for number in range(1, 6):
        window.add(batch(number, rows=4))
    assert numbers(window, 0) == [4, 5] and not window.holds_all_after(2) and window.holds_all_after(3)
    window.add(batch(6, rows=100))
    assert numbers(window, 0) == [6] and window.first_number == 6
    window.check()


def test_the_bell_rings_for_each_batch_and_at_the_end() -> None:
    window = Recent()
    bell = window.bell()
    assert not bell.is_set()
    window.add(batch(1))
    assert bell.is_set() and not window.bell().is_set()
    bell = window.bell()
    window.close()
    assert bell.is_set() and window.closed


steps = st.lists(
    st.one_of(st.tuples(st.just("add"), st.integers(1, 5)), st.tuples(st.just("forget"), st.integers(0, 40)))
)


@given(steps, st.integers(0, 3))
def test_a_listener_gets_every_batch_or_is_told_that_some_are_gone(
    given_steps: list[tuple[str, int]], every: int
) -> None:
    """One that looks after every few steps, as `observe` does, sees no gap as long as the window holds all after it."""
    window = Recent()
    place, last, heard, told = 0, 0, [], False
    for index, (what, value) in enumerate(given_steps):
        if what == "add":
            last += 1
            window.add(batch(last, rows=value, place=place))
            place += value
        else:
            window.forget_before(value)
        window.check()
        assert window.reached == last
        if index % (every + 1) == 0 and not told:
            told = not window.holds_all_after(heard[-1] if heard else 0)
            if not told:
                heard += numbers(window, heard[-1] if heard else 0)
                assert heard == list(range(1, last + 1))
    for each in window.after(0):
        assert window.holds_all_after(each.number - 1)

"""The judge where order was promised within each source only: against a plain judge, and what it must tell."""

from __future__ import annotations

from collections import defaultdict

import numpy as np
from hypothesis import given
from hypothesis import strategies as st
from strandline_loadgen.checker import Rows, Sent, judge

events = st.lists(st.tuples(st.integers(0, 6), st.integers(0, 2)), min_size=1, max_size=30)


def plain_disorder(rows: list[tuple[int, int, int]]) -> int:
    """Rows that stand behind a later time, or a later arrival of the same time, of their own source."""
    found, before = 0, defaultdict[int, list[tuple[int, int]]](list)
    for number, time, source in rows:
        last = before[source][-1] if before[source] else None
        earlier = [other for other_time, other in before[source] if other_time == time]
        found += (last is not None and time < last[0]) or any(number < other for other in earlier)
        before[source].append((time, number))
    return found


@given(events, st.randoms(use_true_random=False), st.integers(1, 7))
def test_it_finds_disorder_where_a_plain_judge_does(
    drawn: list[tuple[int, int]], random: np.random.Generator, piece: int
) -> None:
    sent = [(number, time, source) for number, (time, source) in enumerate(drawn)]
    rows = sorted(sent, key=lambda _: random.random())
    pieces = [Rows.of(rows[at : at + piece]) for at in range(0, len(rows), piece)]
    verdict = judge(Sent(Rows.of(sent)), pieces, by_source=True)
    assert (verdict.disordered > 0) == (plain_disorder(rows) > 0)
    assert not (verdict.lost or verdict.unexpected or verdict.duplicated or verdict.misplaced)


@given(events)
def test_each_source_in_order_is_all_that_it_asks_for(drawn: list[tuple[int, int]]) -> None:
    sent = [(number, time, source) for number, (time, source) in enumerate(drawn)]
    rows = sorted(sent, key=lambda row: (row[2], row[1], row[0]))
    verdict = judge(Sent(Rows.of(sent)), Rows.of(rows), by_source=True)
    assert verdict.ok


def test_disorder_is_told_with_its_source() -> None:
    sent = [(0, 5, 0), (1, 4, 0), (2, 3, 1)]
    verdict = judge(Sent(Rows.of(sent)), Rows.of([(0, 5, 0), (2, 3, 1), (1, 4, 0)]), by_source=True)
    assert verdict.disordered == 1 and not verdict.lost
    assert judge(Sent(Rows.of(sent)), Rows.of([]), by_source=True).lost == 3

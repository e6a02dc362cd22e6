"""Cutting late events into repair batches: nothing lost, partitions never mixed, sorted by source and time."""

from __future__ import annotations

import json

from hypothesis import given
from hypothesis import strategies as st
from strandline.sinks.repairs import RepairRow, cut

ROWS = st.lists(
    st.tuples(st.integers(-(10**6), 10**6), st.sampled_from(["weir", "mill", "ford", None])), max_size=60
)


@given(ROWS, st.integers(1, 10**6), st.integers(1, 1000))
def test_the_law_of_cutting(pairs: list[tuple[int, str | None]], partition_ns: int, first: int) -> None:
    rows = [RepairRow(index, time, source, 5, 7, b'{"n":%d}' % index) for index, (time, source) in enumerate(pairs)]
    repairs = cut(rows, partition_ns, first)
    assert [repair.number for repair in repairs] == list(range(first, first + len(repairs)))
    assert sorted(row.number for repair in repairs for row in repair.rows) == list(range(len(rows)))
    begins = [repair.partition_ns for repair in repairs]
    assert begins == sorted(set(begins)) and all(begin % partition_ns == 0 for begin in begins)
    for repair in repairs:
        assert all(repair.partition_ns <= row.time_ns < repair.partition_ns + partition_ns for row in repair.rows)
        keys = [(row.source or "", row.time_ns, row.number) for row in repair.rows]
        assert keys == sorted(keys)
        lines = [json.loads(line) for line in repair.ndjson().splitlines()]
        assert [line["event"]["n"] for line in lines] == [row.number for row in repair.rows]
        assert [line["source"] for line in lines] == [row.source for row in repair.rows]


@given(ROWS)
def test_cutting_again_gives_the_same_batches(pairs: list[tuple[int, str | None]]) -> None:
    rows = [RepairRow(index, time, source, 0, 0, b"{}") for index, (time, source) in enumerate(pairs)]
    assert cut(rows, 1000, 1) == cut(list(reversed(rows)), 1000, 1)

"""Batches read together give what each of them gives alone, however they are cut and wherever their lines stand."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager

import numpy as np
import pytest
from helpers_journal import lines_body, opened, write
from hypothesis import given
from hypothesis import strategies as st
from simdisk import SimDisk
from strandline import lines as module
from strandline.core.columns import REF, Batch
from strandline.core.feed import Feed
from strandline.core.records import FRAME_HEADER_BYTES
from strandline.core.settings import Settings
from strandline.errors import JournalError
from strandline.lines import JournalLines

LINES = [b'{"station":"weir-%d","level":"%s"}' % (number % 7, b"=" * (number * 31 % 90)) for number in range(240)]


@contextmanager
def together(events: int, size: int) -> Iterator[None]:
    """Read so many at a time, of so many bytes."""
    before = module.EVENTS_TOGETHER, module.BYTES_TOGETHER
    module.EVENTS_TOGETHER, module.BYTES_TOGETHER = events, size
    try:
        yield
    finally:
        module.EVENTS_TOGETHER, module.BYTES_TOGETHER = before


def held() -> tuple[JournalLines, np.ndarray]:
    """Lines in several segments of a journal, and a reference to each."""
    journal = opened(SimDisk())
    refs = np.zeros(len(LINES), REF)
    for first in range(0, len(LINES), 8):
        [lsn] = write(journal, (3, lines_body(*LINES[first : first + 8])))
        place = lsn + FRAME_HEADER_BYTES
        for row in range(first, first + 8):
            refs[row]["place"], refs[row]["length"] = place, len(LINES[row])
            place += len(LINES[row]) + 1
    assert len(journal._segments) > 2
    return JournalLines(journal, Feed(Settings("river-gauges"))), refs


READER, REFS = held()


@given(
    st.permutations(range(len(LINES))).map(list),
    st.lists(st.integers(1, 40), max_size=30),
    st.sampled_from([1, 7, 25, 10_000]),
    st.sampled_from([1, 500, 1 << 30]),
)
def test_the_same_as_one_by_one(order: list[int], sizes: list[int], events: int, size: int) -> None:
    batches, first = [], 0
    for number, count in enumerate(sizes, 1):
        rows = order[first : first + count]
        if not rows:
            break
        batches.append(Batch("ordered", number, np.zeros(len(rows), np.int64), REFS[rows], 0, 0))
        first += count
    with together(events, size):
        found = [bytes(block) for block in READER.ndjson_each(batches)]
        portions = list(module._portions(batches))
    assert found == [READER.ndjson(batch) for batch in batches]
    assert b"".join(found) == lines_body(*(LINES[row] for row in order[: sum(map(len, batches))]))
    for some in portions:
        total = sum(int(batch.refs["length"].sum()) for batch in some)
        assert len(some) == 1 or (sum(map(len, some)) <= events and total <= size)
    assert [batch for some in portions for batch in some] == batches


@given(st.integers(1, 6), st.integers(0, 5))
def test_one_that_cannot_be_read_holds_back_none_before_it(count: int, broken: int) -> None:
    broken %= count
    batches = [
        Batch("ordered", number + 1, np.zeros(5, np.int64), REFS[number * 5 : number * 5 + 5].copy(), 0, 0)
        for number in range(count)
    ]
    batches[broken].refs["place"][2] = 1 << 60
    given = []
    with pytest.raises(JournalError):
        for block in READER.ndjson_each(batches):
            given.append(bytes(block))
    assert given == [READER.ndjson(batch) for batch in batches[:broken]]

"""Strands, runs and merges for tests: every row carries a serial number, so that equal times can be told apart."""

from __future__ import annotations

import itertools
from collections.abc import Iterable, Iterator, Sequence
from contextlib import AbstractContextManager, contextmanager

import numpy as np
from strandline.core import fresh, held, held_by_source, merge, near, runs, slack, tails
from strandline.core.columns import REF, as_refs, as_rows
from strandline.core.merge import Merger
from strandline.core.runs import OpenRuns, Strand

Rows = list[tuple[int, int]]  # (time, serial number)


def strand(times: Sequence[int] | np.ndarray, first: int = 0) -> Strand:
    """A strand whose rows are numbered from `first`; the times must ascend where a strand is asked for."""
    refs = np.zeros(len(times), dtype=REF)
    refs["place"] = np.arange(first, first + len(times))
    return Strand(np.array(times, dtype=np.int64), as_rows(refs))


def strands(columns: Iterable[Sequence[int]]) -> list[Strand]:
    """Several strands, numbered on from one to the next."""
    found, first = [], 0
    for times in columns:
        found.append(strand(times, first))
        first += len(times)
    return found


def rows_of(*given: Strand) -> Rows:
    """(time, serial number) of each row, strand after strand."""
    return [row for one in given for row in zip(one.times.tolist(), as_refs(one.refs)["place"].tolist(), strict=True)]


def numbered(times: Iterable[int], first: int = 0) -> Rows:
    """The same for plain times, as they arrive."""
    return list(zip(times, itertools.count(first), strict=False))


def in_order(rows: Rows) -> Rows:
    """Outside opinion: Python's stable sort by time alone."""
    return sorted(rows, key=lambda row: row[0])


def held_rows(open_runs: OpenRuns) -> list[list[int]]:
    """Times of each open run, in order of opening."""
    return [[time for chunk in run.chunks for time in chunk.times.tolist()] for run in open_runs.runs]


class Costing(Merger):
    """A merger that makes every single merge of two and adds up what it costs: the rows of each result."""

    def __init__(self) -> None:
        super().__init__(fusing=False)
        self.cost = 0
        self.results: list[int] = []

    def merge_two(self, older: Strand, newer: Strand) -> Strand:
        result = super().merge_two(older, newer)
        self.cost += len(result.times)
        self.results.append(len(result.times))
        return result


MODULES = (fresh, held, held_by_source, merge, near, runs, slack, tails)


@contextmanager
def constants(**values: int) -> Iterator[None]:
    """Constants of the ordering and the slack at other values: what is rare in small tests happens often."""
    before = []
    try:
        for name, value in values.items():
            module = next(module for module in MODULES if hasattr(module, name))
            before.append((module, name, getattr(module, name)))
            setattr(module, name, value)
        yield
    finally:
        for module, name, value in reversed(before):
            setattr(module, name, value)


NEAR = (0, 3, 1 << 17)  # rows that may be near their release: none, so that all are dealt; a few; in a small test all


def near_at_most(rows: int, **values: int) -> AbstractContextManager[None]:
    """So many rows may be near, in strands as short and as often joined as can be."""
    small = {"PART_EVENTS": 4, "STRANDS_AT_MOST": 1, "RESORTED_EVENTS": 0, "RESORTED_FRESH": 1 << 30}
    return constants(NEAR_EVENTS=rows, **small, **values)

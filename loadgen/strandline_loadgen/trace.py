"""A trace: a feed as it arrives, in columns. What generators make and what bodies, simulations and the checker read.

Here lives the one form that every invented or real sequence takes. No generating, no rendering, no judging.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

Int64s = NDArray[np.int64]
Sources = NDArray[np.uint32]

FIRST_ID = 1_000_000_000  # ten digits from the first event on, so that rendered lines have one width
EVENTS_AT_MOST = 100_000_000  # 28 bytes a row: 2.8 GB


@dataclass(frozen=True, slots=True)
class Trace:
    """n events in order of arrival; equal arrivals keep the order in which they were observed.

    `times` and `arrivals` are int64 ns since 1970 UTC, `arrivals` never goes back. `sources` are numbers into
    `source_names`. `ids` name the event: rows with the same id are copies of one event and agree in time and source.
    """

    name: str
    times: Int64s
    arrivals: Int64s
    sources: Sources
    source_names: tuple[str, ...]
    ids: Int64s

    def __len__(self) -> int:
        return len(self.times)

    @classmethod
    def arriving(
        cls,
        name: str,
        times: Int64s,
        arrivals: Int64s,
        sources: Sources,
        source_names: Sequence[str],
        *,
        ids: Int64s | None = None,
    ) -> Trace:
        """Rows in any order, put in order of arrival (stable). Without ids, row i is event FIRST_ID + i."""
        if ids is None:
            ids = np.arange(FIRST_ID, FIRST_ID + len(times), dtype=np.int64)
        order = np.argsort(arrivals, kind="stable")
        columns = times[order], arrivals[order], sources[order]
        return cls(name, *columns, tuple(source_names), ids[order])

    def part(self, start: int, stop: int) -> Trace:
        """Rows start to stop (exclusive), as views."""
        rows = slice(start, stop)
        return replace(
            self,
            times=self.times[rows],
            arrivals=self.arrivals[rows],
            sources=self.sources[rows],
            ids=self.ids[rows],
        )

    def shifted(self, by_ns: int) -> Trace:
        """The same trace, `by_ns` later (event and arrival times alike)."""
        return replace(self, times=self.times + by_ns, arrivals=self.arrivals + by_ns)

    def check(self) -> None:
        """Assert what the class promises. Raises AssertionError."""
        n = len(self.times)
        assert n <= EVENTS_AT_MOST
        assert self.times.dtype == self.arrivals.dtype == self.ids.dtype == np.int64
        assert self.sources.dtype == np.uint32
        assert len(self.arrivals) == len(self.sources) == len(self.ids) == n
        assert bool(np.all(self.arrivals[1:] >= self.arrivals[:-1])), "arrivals go back"
        assert n == 0 or int(self.sources.max()) < len(self.source_names)
        order = np.argsort(self.ids, kind="stable")
        same = self.ids[order][1:] == self.ids[order][:-1]
        for column in (self.times[order], self.sources[order]):
            assert bool(np.all(column[1:][same] == column[:-1][same])), "copies of one event differ"


def join(name: str, parts: Sequence[Trace]) -> Trace:
    """Several traces as one, in order of arrival; sources of the same name are one source, events are named anew.

    Copies of one event within a part stay copies.
    """
    names = list(dict.fromkeys(source for part in parts for source in part.source_names))
    number = {source: index for index, source in enumerate(names)}
    sources, ids, following = [], [], FIRST_ID
    for part in parts:
        renumbered = np.array([number[source] for source in part.source_names], dtype=np.uint32)
        sources.append(renumbered[part.sources])
        distinct, events = np.unique(part.ids, return_inverse=True)
        ids.append(following + events.astype(np.int64))
        following += len(distinct)
    times, arrivals = (np.concatenate([getattr(part, column) for part in parts]) for column in ("times", "arrivals"))
    return Trace.arriving(name, times, arrivals, np.concatenate(sources), names, ids=np.concatenate(ids))

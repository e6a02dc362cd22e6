"""The sources of a feed: names and numbers, newest event time, last word, active or idle, excused.

Columns by source number; nothing here depends on how many sources did not speak. The watermark's rule is in
`watermark.py`. A source is active from its first event (an expected one from the feed's start) until it has been silent
for `idle_after`; an excused one takes no part until it speaks again.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from .columns import NO_SOURCE, TIME_MIN, Times, greatest_of, grown
from .least import NONE, Least

NEVER = TIME_MIN  # newest event time of a source that was never heard
EACH_ONCE_FROM = 2  # an arrival with more than so many events for each source that there is has its sources told apart


class Touched:
    """Which sources something was said of, or by, since it was last asked; costs at most what all of them do."""

    def __init__(self) -> None:
        self.pieces: list[NDArray[np.intp]] = []  # numbers; a number may stand in it more than once
        self.everyone = False
        self.notes = 0
        self._count = 0

    def note(self, numbers: NDArray[np.intp], sources: int) -> None:
        """These were touched, of so many sources that there are."""
        self.notes += 1
        self._count += len(numbers)
        if self.everyone or self._count > sources:
            self.touch_all()
        else:
            self.pieces.append(numbers)

    def touch_all(self) -> None:
        """All of them were touched."""
        self.notes += 1
        self.everyone, self.pieces = True, []

    def forget(self) -> None:
        """Begin anew: nobody was touched."""
        self.pieces, self.everyone, self._count = [], False, 0
        self.notes += 1

    def __bool__(self) -> bool:
        return self.everyone or bool(self.pieces)

    def check(self, sources: int) -> None:
        """Assert that no more is kept than there are sources, however long nobody asks."""
        assert sum(map(len, self.pieces)) <= sources and not (self.everyone and self.pieces)


class Sources:
    """State of every source of one feed."""

    def __init__(self) -> None:
        self.names: list[str] = []
        self.numbers: dict[str, int] = {}
        self.newest: NDArray[np.int64] = np.empty(0, dtype=np.int64)  # or what was promised if later
        self.heard: NDArray[np.int64] = np.empty(0, dtype=np.int64)  # arrival clock of its last word
        self.active: NDArray[np.bool_] = np.empty(0, dtype=np.bool_)
        self.excused: NDArray[np.bool_] = np.empty(0, dtype=np.bool_)
        # A promise plus the slack that will be taken off: counts for the watermark where it is later than `newest`.
        self.vouched: NDArray[np.int64] = np.empty(0, dtype=np.int64)
        self.promised: NDArray[np.int64] = np.empty(0, dtype=np.int64)  # nothing older was to come; NEVER: no promise
        self.broken: NDArray[np.int64] = np.empty(0, dtype=np.int64)  # events that came older than promised
        self.newest_ns = NEVER  # newest event time over all sources
        self.broken_events = 0
        self.touched: Touched | None = None  # kept where each source has its own watermark
        self._promising = False
        self._by_newest = Least()  # active and not excused ones
        self._by_heard = Least()  # active ones

    def add(self, names: Sequence[str]) -> None:
        """Number new names in the order given; they are idle until heard or expected."""
        for name in names:
            if name in self.numbers:
                raise ValueError(f"source {name!r} has a number already")
            self.numbers[name] = len(self.names)
            self.names.append(name)
        if len(self.names) > len(self.newest):
            size = max(64, 2 * len(self.newest), len(self.names))
            self.newest = grown(self.newest, size, NEVER)
            self.heard = grown(self.heard, size, NEVER)
            self.active = grown(self.active, size, False)
            self.excused = grown(self.excused, size, False)
            self.vouched = grown(self.vouched, size, NEVER)
            self.promised = grown(self.promised, size, NEVER)
            self.broken = grown(self.broken, size, 0)
            self._by_newest.grow(size)
            self._by_heard.grow(size)

    def expect(self, names: Sequence[str], now_ns: int) -> None:
        """Sources that hold the feed from now on although they were not heard yet."""
        numbers = np.array([self.numbers[name] for name in names if not self.is_active(name)], dtype=np.intp)
        if len(numbers):
            self.active[numbers] = True
            self.heard[numbers] = now_ns
            self._refresh(numbers)

    def keep_alive(self, now_ns: int) -> None:
        """Count silence of the active sources from this instant on (the service itself did not listen before)."""
        numbers = np.flatnonzero(self.active[: len(self.names)])
        if len(numbers):
            self.heard[numbers] = now_ns
            self._refresh(numbers)

    def hear(self, sources: NDArray[np.uint32], times: Times, now_ns: int) -> None:
        """Take note of events (at least one), none of them too far in the future."""
        if len(times) == 1:
            self.newest_ns = max(self.newest_ns, int(times[0]))
            self._word(int(sources[0]), int(times[0]), now_ns)
            return
        numbers = sources.astype(np.intp)
        np.maximum.at(self.newest, numbers, times)
        self.newest_ns = max(self.newest_ns, greatest_of(times))
        if len(numbers) > EACH_ONCE_FROM * len(self.names):  # each once: what follows costs some 10 ns a number
            numbers = np.bincount(numbers).nonzero()[0]
        self.heard[numbers] = now_ns
        self.active[numbers] = True
        self.excused[numbers] = False
        if self.touched is not None:
            self.touched.note(numbers, len(self.names))
        self._by_heard.update(numbers, now_ns)
        known = self.newest[numbers]
        if self._promising:
            known = np.maximum(known, self.vouched[numbers])
        self._by_newest.update(numbers, np.minimum(known, NONE - 1))

    def promise(self, source: int, time_ns: int, now_ns: int, slacks_ns: int | Times) -> None:
        """Nothing older than time_ns will come from this source; it counts as a word of the source.

        No slack is needed behind a promise, so the watermark may go right up to it: the slack (one for all sources, or
        a column by source) is added here.
        """
        slack_ns = slacks_ns if isinstance(slacks_ns, int) else int(slacks_ns[source])
        self.promised[source] = max(int(self.promised[source]), time_ns)
        self.vouched[source] = max(int(self.vouched[source]), min(time_ns + slack_ns, NONE - 1))
        self._promising = True
        self._word(source, NEVER, now_ns)

    def vouch_again(self, slacks_ns: int | Times) -> None:
        """Another slack will be taken off from now on: a promise lets the watermark go right up to it all the same."""
        if self.touched is not None:
            self.touched.touch_all()
        if not self._promising:
            return
        numbers = np.flatnonzero(self.promised[: len(self.names)] != NEVER)
        promised, slack_ns = self.promised[numbers], slacks_ns if isinstance(slacks_ns, int) else slacks_ns[numbers]
        self.vouched[numbers] = np.minimum(promised, NONE - 1 - slack_ns) + slack_ns  # within int64, as in `promise`
        self._refresh(numbers)

    def note_broken(self, sources: NDArray[np.uint32], times: Times) -> None:
        """Count events that are older than what their source had promised before they came."""
        if not self._promising:
            return
        broken = times < self.promised[sources]
        count = int(np.count_nonzero(broken))
        if count:
            np.add.at(self.broken, sources[broken], 1)
            self.broken_events += count

    @property
    def promising(self) -> bool:
        """Whether any source ever promised anything."""
        return self._promising

    def _word(self, source: int, time_ns: int, now_ns: int) -> None:
        if self.touched is not None:
            self.touched.note(np.array([source], dtype=np.intp), len(self.names))
        newest = max(int(self.newest[source]), time_ns)
        self.newest[source] = newest
        self.heard[source] = now_ns
        self.active[source] = True
        self.excused[source] = False
        self._by_heard.set(source, now_ns)
        self._by_newest.set(source, min(max(newest, int(self.vouched[source])), NONE - 1))

    def excuse(self, source: int) -> None:
        """Do not wait for this source until it speaks again."""
        self.excused[source] = True
        self._refresh(np.array([source], dtype=np.intp))

    def falls_idle(self, silent_since_ns: int) -> bool:
        """Whether the last word of some active source came at or before this instant."""
        return self._by_heard.least()[0] <= silent_since_ns

    def expire(self, silent_since_ns: int) -> int:
        """Let every active source whose last word came at or before this instant fall idle; how many did."""
        if not self.falls_idle(silent_since_ns):
            return 0
        numbers = self._by_heard.below(silent_since_ns + 1)
        self.active[numbers] = False
        self._refresh(numbers)
        return len(numbers)

    def least(self) -> tuple[int, int] | None:
        """(newest event time, number) of the active source that is furthest behind; None if nobody is waited for."""
        value, number = self._by_newest.least()
        return None if number < 0 else (value, number)

    def next_idle(self) -> tuple[int, int] | None:
        """(arrival clock of its last word, number) of the active source that has been silent longest."""
        value, number = self._by_heard.least()
        return None if number < 0 else (value, number)

    def is_active(self, name: str) -> bool:
        """Whether the feed regards this source as alive."""
        number = self.numbers.get(name, NO_SOURCE)
        return number != NO_SOURCE and bool(self.active[number])

    def active_count(self) -> int:
        """Active sources (for observers: costs all sources)."""
        return int(np.count_nonzero(self.active[: len(self.names)]))

    def idle_count(self) -> int:
        """Sources that fell silent and are no longer waited for by themselves (for observers: costs all sources)."""
        count = len(self.names)
        return int(np.count_nonzero(~(self.active[:count] | self.excused[:count])))

    def _refresh(self, numbers: NDArray[np.intp]) -> None:
        if self.touched is not None:
            self.touched.note(numbers, len(self.names))
        active = self.active[numbers]
        self._by_heard.update(numbers, np.where(active, self.heard[numbers], NONE))
        self._by_newest.update(numbers, self._waited_for(numbers))

    def _waited_for(self, numbers: NDArray[np.intp]) -> NDArray[np.int64]:
        # An event at the very end of int64 must not look like a source that takes no part.
        waiting = self.active[numbers] & ~self.excused[numbers]
        known = np.maximum(self.newest[numbers], self.vouched[numbers]) if self._promising else self.newest[numbers]
        return np.where(waiting, np.minimum(known, NONE - 1), NONE)

    def restore(
        self,
        names: Sequence[str],
        newest: Times,
        heard: Times,
        active: NDArray[np.bool_],
        excused: NDArray[np.bool_],
        vouched: Times,
        promised: Times,
        broken: Times,
        newest_ns: int,
    ) -> None:
        """Take over a saved state (columns by number)."""
        self.add(names)
        count = len(self.names)
        self.newest[:count], self.heard[:count] = newest, heard
        self.active[:count], self.excused[:count] = active, excused
        self.vouched[:count], self.promised[:count], self.broken[:count] = vouched, promised, broken
        self.newest_ns, self.broken_events = newest_ns, int(broken.sum())
        self._promising = bool(np.any(promised != NEVER))
        if count:
            self._refresh(np.arange(count))

    def check(self) -> None:
        """Assert that names, columns and tournaments agree."""
        count = len(self.names)
        assert [self.numbers[name] for name in self.names] == list(range(count))
        self._by_heard.check()
        self._by_newest.check()
        heard = np.where(self.active[:count], self.heard[:count], NONE)
        assert np.array_equal(self._by_heard.values()[:count], heard)
        assert np.array_equal(self._by_newest.values()[:count], self._waited_for(np.arange(count)))
        assert self.broken_events == int(self.broken[:count].sum())
        assert self._promising == bool(np.any(self.promised[:count] != NEVER))
        if self.touched is not None:
            self.touched.check(count)

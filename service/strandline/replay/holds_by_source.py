"""How long events are held where each source is in order by itself: the mean hold that slacks by source give.

An event is let go once its source's newest event stands a slack beyond it, or once the source has been silent for
`idle_after`. Pure: words of sources and lateness in (`basis_by_source`), sums out. Several ways to wait are followed in
one pass; what waits is carried from block to block, and a way that would hold too much is given up.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from .basis import Int64s, Requests
from .basis_by_source import Words

HELD_EVENTS_AT_MOST = 4_000_000  # 24 bytes each and way
KEYS_AT_MOST = 2**62
_NOWHERE = 2**62


def _no_rows() -> Int64s:
    return np.zeros(0, dtype=np.int64)


class _Rows(NamedTuple):
    """Events that wait or have just come: source, event time, arrival, and the first word that may let each go.

    `offsets`, `lows`, `highs` lift a time among the keys of the block's words; `ends` is behind its source's last word.
    """

    sources: Int64s
    times: Int64s
    arrived: Int64s
    first: Int64s
    offsets: Int64s
    lows: Int64s
    highs: Int64s
    ends: Int64s


class Followed:
    """A block made ready for every way to wait. `keys` None: sources lie too far apart for one search over all."""

    def __init__(self, block: Requests, words: Words, idle_after_ns: int | None) -> None:
        self.words, self.idle_after_ns, self.now_ns = words, idle_after_ns, int(block.instants[-1])
        self._ends = np.append(words.begins[1:], len(words.sources))
        self._lows = words.newest[words.begins]
        self._highs = words.newest[self._ends - 1] + 1
        spans = self._highs - self._lows + 1
        self.fits = float(spans.astype(np.float64).sum()) < KEYS_AT_MOST
        # Newest times ascend within a source. Lifted one source above the other they ascend throughout: one search.
        self._offsets = np.cumsum(spans) - spans - self._lows
        group_of = np.repeat(np.arange(len(words.begins)), self._ends - words.begins)
        self.keys = words.newest + self._offsets[group_of]
        self._instants = np.append(words.instants, _NOWHERE)
        silent = np.zeros(0, dtype=np.int64)
        if idle_after_ns is not None:  # before this word; not before a source's first one
            silent = np.flatnonzero(words.instants - words.heard >= idle_after_ns)
        self._silent = np.append(silent, len(words.sources))
        self.rows = self._rows(
            words.sources[words.of], block.times, words.instants[words.of], words.of, group_of[words.of]
        )

    def _rows(self, sources: Int64s, times: Int64s, arrived: Int64s, first: Int64s, groups: Int64s) -> _Rows:
        columns = (self._offsets[groups], self._lows[groups], self._highs[groups], self._ends[groups])
        return _Rows(sources, times, arrived, first, *columns)

    def earlier(self, sources: Int64s, times: Int64s, arrived: Int64s) -> tuple[_Rows, NDArray[np.bool_]]:
        """Events that came before the block, those of sources that speak in it; and which of all these are."""
        speaking = self.words.sources[self.words.begins]
        groups = np.searchsorted(speaking, sources)
        heard = groups < len(speaking)
        heard[heard] = speaking[groups[heard]] == sources[heard]
        groups = groups[heard]
        return self._rows(sources[heard], times[heard], arrived[heard], self.words.begins[groups], groups), heard

    def lets_go(self, rows: _Rows, slacks_ns: Int64s | int) -> Int64s:
        """The instant at which each row is let go in this block; _NOWHERE: not in it."""
        wanted = rows.times + slacks_ns
        np.maximum(wanted, rows.lows, out=wanted)
        np.minimum(wanted, rows.highs, out=wanted)
        wanted += rows.offsets
        places = np.maximum(np.searchsorted(self.keys, wanted), rows.first)
        found: Int64s = self._instants[np.where(places < rows.ends, places, len(self._instants) - 1)]
        return found

    def falls_silent(self, after: Int64s, ends: Int64s, sources: Int64s, found: Int64s) -> Int64s:
        """The same, where a source that falls silent lets go what it has; `after`: the first word to look at."""
        if self.idle_after_ns is None:
            return found
        if len(self._silent) > 1:
            words = self._silent[np.searchsorted(self._silent, after)]
            falls = np.flatnonzero(words < ends)
            instants = self.words.heard[words[falls]] + self.idle_after_ns
            found[falls] = np.minimum(found[falls], instants)
        return self.silent_since(sources, found)

    def silent_since(self, sources: Int64s, found: Int64s) -> Int64s:
        """The same for who has fallen silent since its last word, and may not be heard again."""
        if self.idle_after_ns is None:
            return found
        left = np.flatnonzero(found == _NOWHERE)
        falls = self.words.last_heard[sources[left]] + self.idle_after_ns
        found[left] = np.where(falls <= self.now_ns, falls, _NOWHERE)
        return found


@dataclass(slots=True)
class Hold:
    """One way to wait: a slack by source number, or one for all. Times in ns."""

    slacks_ns: Int64s | int
    events: int = 0  # let go
    sum_ns: float = 0.0
    given_up: bool = False
    _sources: Int64s = field(default_factory=_no_rows)
    _times: Int64s = field(default_factory=_no_rows)
    _arrived: Int64s = field(default_factory=_no_rows)

    @property
    def mean_ns(self) -> float | None:
        """Mean hold of what was on time and let go; None where nothing was, or it was given up."""
        return self.sum_ns / self.events if self.events and not self.given_up else None

    def follow(self, block: Followed) -> None:
        """The next block."""
        if self.given_up or not block.fits:
            self.given_up = True
            return
        rows, (before, heard) = block.rows, block.earlier(self._sources, self._times, self._arrived)
        slacks = self._of(rows.sources)
        found = block.falls_silent(rows.first + 1, rows.ends, rows.sources, block.lets_go(rows, slacks))
        on_time = block.words.lateness <= slacks
        waited = np.full(len(self._sources), _NOWHERE, dtype=np.int64)
        known = block.lets_go(before, self._of(before.sources))
        waited[heard] = block.falls_silent(before.first, before.ends, before.sources, known)
        waited = block.silent_since(self._sources, waited)
        self._note(found, rows.arrived, on_time)
        self._note(waited, self._arrived, np.ones(len(waited), dtype=np.bool_))
        stay, kept = np.flatnonzero(on_time & (found == _NOWHERE)), np.flatnonzero(waited == _NOWHERE)
        self._sources = np.concatenate((self._sources[kept], rows.sources[stay]))
        self._times = np.concatenate((self._times[kept], rows.times[stay]))
        self._arrived = np.concatenate((self._arrived[kept], rows.arrived[stay]))
        if len(self._times) > HELD_EVENTS_AT_MOST:
            self.given_up = True
            self._sources = self._times = self._arrived = _no_rows()

    def _of(self, sources: Int64s) -> Int64s | int:
        return self.slacks_ns if isinstance(self.slacks_ns, int) else self.slacks_ns[sources]

    def _note(self, found: Int64s, arrived: Int64s, counted: NDArray[np.bool_]) -> None:
        gone = counted & (found != _NOWHERE)
        self.events += int(np.count_nonzero(gone))
        self.sum_ns += float(np.where(gone, found - arrived, 0).sum(dtype=np.float64))

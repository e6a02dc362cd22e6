"""The watermark of each source, for a feed whose order is kept within each source only (`order = "source"`).

A column by source number that only marks move. Where a source's watermark may stand is a function of what the sources
said, of the slack and of the arrival clock, so a mark need say no more than when it was decided (and whether it is a
drain): whoever folds the records again moves the same watermarks. Nothing is held here (`held_by_source.py`), and
whether a mark is set is `feed.py`'s decision.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from .columns import NO_SOURCE, TIME_MIN, Times, distances, grown
from .held_by_source import HeldBySource
from .records import Cause, Mark
from .runs import Strand
from .sources import Sources, Touched
from .watermark import Candidate, basis_of

if TYPE_CHECKING:
    from .state import State

FLAGS_PART = 64  # so many flags take as long as sorting one number in
Numbers = NDArray[np.intp]
Steps = tuple[Numbers, Times]  # sources that are looked at, and where their watermarks then stand


class OwnWatermarks:
    """Where each source's watermark stands, and which sources were touched since the last mark."""

    def __init__(self, sources: Sources) -> None:
        self._sources = sources
        self._at = np.full(64, TIME_MIN, dtype=np.int64)
        self._touched = sources.touched = Touched()
        self.waits = False  # something is held that its source has passed: a row with the very time of its watermark
        self._found: tuple[int, int, Steps] | None = None  # of the decision, for the fold of its mark that follows

    @property
    def at(self) -> Times:
        """The watermarks by source number; TIME_MIN: none yet."""
        count = len(self._sources.names)
        if count > len(self._at):
            self._at = grown(self._at, max(count, 2 * len(self._at)), TIME_MIN)
        return self._at[:count]

    def touch_all(self) -> None:
        """Any source's watermark may move: the settings changed."""
        self._touched.touch_all()

    def restore(self, at: Times, held: HeldBySource) -> None:
        """Take over saved watermarks; the sources and what is held are there already."""
        self.at[:] = at
        self._touched.touch_all()
        self.waits = bool(np.any(self._passed(held)))

    def begin_at(self, watermark_ns: int, held: HeldBySource) -> None:
        """The feed was kept in order as a whole so far: no source goes back behind what was its watermark."""
        times, sources = held.columns()
        self.at[:] = watermark_ns
        np.minimum.at(self.at, sources, times)  # where that stands before it, order of the feed had just begun
        self._touched.touch_all()
        self.waits = bool(np.any(self._passed(held)))

    @property
    def greatest_ns(self) -> int:
        """Where the most advanced source's watermark stands; TIME_MIN without sources."""
        return int(self.at.max(initial=TIME_MIN))

    def _passed(self, held: HeldBySource) -> NDArray[np.bool_]:
        times, sources = held.columns()
        return np.asarray(times <= self.at[sources])

    # ---- arrivals -------------------------------------------------------------------------------------------------

    def late(self, sources: NDArray[np.uint32], times: Times) -> NDArray[np.bool_] | None:
        """Which rows came behind the watermark of their own source; None where none did."""
        stood = self.at[sources]
        late = times < stood
        self.waits = self.waits or bool(np.any(times == stood))
        return np.asarray(late) if np.any(late) else None

    def behind(self, sources: NDArray[np.uint32], times: Times) -> Times:
        """How far each row stands behind the newest event (or promise) of its own source, at least 0."""
        known = self._sources
        return distances(np.maximum(known.newest[sources], known.vouched[sources]), times)

    # ---- marks ----------------------------------------------------------------------------------------------------

    def candidate(self, state: State, now_ns: int) -> Candidate | None:
        """What the next mark says; None where it would move nothing and release nothing."""
        due_place = self._due_place(state, now_ns)
        if not (self._touched or self.waits or due_place is not None):
            return None
        numbers, values = steps = self._steps(state, Cause.SOURCES, due_place)
        if not self.waits and not np.any(values > self.at[numbers]):
            self._forget_touched()
            return None
        self._found = (now_ns, self._touched.notes, steps)
        cause = Cause.SOURCES if due_place is None else Cause.HOLD_AT_MOST
        return self._told(state, steps, cause)

    def drained(self, state: State) -> Candidate:
        """What the mark of a drain says."""
        return self._told(state, self._steps(state, Cause.DRAIN, None), Cause.DRAIN)

    def release(self, state: State, held: HeldBySource, mark: Mark) -> Strand:
        """Move the watermarks as a mark says, and take out what the sources have passed."""
        decided = mark.decided_ns, self._touched.notes
        if mark.cause != Cause.DRAIN and self._found is not None and self._found[:2] == decided:
            numbers, values = self._found[2]
        else:
            numbers, values = self._steps(state, mark.cause, self._due_place(state, mark.decided_ns))
        self.at[numbers] = values
        self._forget_touched()
        self.waits = False
        return held.release(numbers, self.at)

    def _forget_touched(self) -> None:
        self._touched.forget()
        self._found = None

    def _told(self, state: State, steps: Steps, cause: Cause) -> Candidate:
        """The feed's own watermark is that of the source furthest behind among those that speak: observers see it."""
        least = self._sources.least()
        if least is None:
            silent = Cause.SILENCE if cause == Cause.SOURCES else cause
            return Candidate(basis_of(self._sources), silent, NO_SOURCE)
        numbers, values = steps
        found = np.flatnonzero(numbers == least[1])
        stands = values[found[0]] if len(found) else self.at[least[1]]
        return Candidate(int(stands), cause, least[1])

    def _steps(self, state: State, cause: Cause, due_place: int | None) -> Steps:
        """The touched sources, and where their watermarks may stand; never further back than they do."""
        held = state.runs
        assert isinstance(held, HeldBySource)
        due = None if due_place is None else held.rows_before(due_place)
        numbers = self._looked_at(cause == Cause.DRAIN, None if due is None else due[1])
        sources = self._sources
        newest = sources.newest[numbers]
        if cause == Cause.DRAIN:
            values = newest
        else:
            waited_for = sources.active[numbers] & ~sources.excused[numbers]
            slacks_ns = state.slacks_ns
            slack_ns = np.where(waited_for, slacks_ns if isinstance(slacks_ns, int) else slacks_ns[numbers], 0)
            values = np.maximum(newest, TIME_MIN + slack_ns) - slack_ns
        if sources.promising:
            values = np.maximum(values, sources.promised[numbers])
        stood = self.at
        if due is not None:
            stood = stood.copy()
            np.maximum.at(stood, due[1], due[0])
        return numbers, np.maximum(values, stood[numbers])

    def _looked_at(self, everyone: bool, more: NDArray[np.uint32] | None) -> Numbers:
        """Numbers of the sources to look at, each once, ascending."""
        count, pieces = len(self._sources.names), self._touched.pieces
        if everyone or self._touched.everyone:
            return np.arange(count)
        if more is None and len(pieces) == 1 and len(pieces[0]) == 1:
            return pieces[0]
        if more is not None:
            pieces = [*pieces, more.astype(np.intp)]
        if sum(map(len, pieces)) < count // FLAGS_PART:
            return np.unique(np.concatenate(pieces))
        flags = np.zeros(count, dtype=np.bool_)  # a flag a source: np.unique would sort
        for numbers in pieces:
            flags[numbers] = True
        return np.flatnonzero(flags)

    @staticmethod
    def _due_place(state: State, now_ns: int) -> int | None:
        """Lines before this place have been held for `hold_at_most`; None where nothing has."""
        bound, oldest_ns = now_ns - state.settings.hold_at_most_ns, state.arrivals.oldest_ns
        return None if oldest_ns is None or oldest_ns > bound else state.arrivals.place_after(bound)

    def check(self, held: HeldBySource) -> None:
        """Assert that nothing is held behind its source's watermark, and at it only where a mark is due."""
        times, sources = held.columns()
        stood = self.at[sources]
        assert np.all(times >= stood), "held behind the watermark of its source"
        assert self.waits or not np.any(times == stood)
        assert np.all(self._at[len(self._sources.names) :] == TIME_MIN)

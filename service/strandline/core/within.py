"""Within what a feed keeps order: as a whole, or within each source only, and the change from one to the other.

The feed as a whole has one watermark, `State.watermark_ns`. Within sources each has its own (`own.py`), and
`State.watermark_ns` only tells observers where the source furthest behind stands. Whatever is decided differently is
chosen here; observers and snapshots ask whether there is a `State.own`.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from .columns import NO_SOURCE, TIME_MIN, Refs, Times, distances, greatest_of, least_of
from .held import Held
from .held_by_source import HeldBySource
from .lateness import Behind
from .own import OwnWatermarks
from .records import Cause, Mark
from .runs import Strand
from .slack import FixedSlack
from .watermark import Candidate, basis_of, candidate

if TYPE_CHECKING:
    from .state import State


def keep_order(state: State) -> None:
    """Keep order as the settings in force say; what is held goes on being held."""
    by_source = state.settings.order == "source"
    if by_source == (state.own is not None):
        if state.own is not None:
            state.own.touch_all()
        return
    if by_source:
        _order_by_source(state)
    else:
        _order_the_feed(state)


def _order_by_source(state: State) -> None:
    """From now on each source has its own watermark; all that are known begin at the feed's."""
    assert isinstance(state.runs, Held)
    held = HeldBySource()
    strands = [chunk for run in state.runs.runs for chunk in run.chunks]
    if strands:
        held.take_over(strands)
    state.own = OwnWatermarks(state.sources)
    state.own.begin_at(state.watermark_ns, held)
    state.hold.pairs.clear()
    state.runs = held


def _order_the_feed(state: State) -> None:
    """From now on there is one watermark. It stands where the most advanced source's did: none of them goes back.

    What is held before it is not late: the next mark lets it go, in one release.
    """
    assert isinstance(state.runs, HeldBySource) and state.own is not None
    held, strand = Held(state.merger), state.runs.copied()
    if len(strand.times):
        held.hold(*strand)
        assert state.arrivals.oldest_ns is not None
        # All of it goes with the oldest, so that none waits longer than it may.
        state.hold.note(state.arrivals.oldest_ns, int(strand.times.max()))
    state.watermark_ns = max(state.watermark_ns, state.own.greatest_ns)
    state.own = state.sources.touched = None
    state.runs = held
    state.reordered = is_reordered(state)


def is_reordered(state: State) -> bool:
    """Whether something is held before the feed's watermark."""
    head = state.runs.head_ns
    return state.own is None and head is not None and head < state.watermark_ns


def late_rows(state: State, times: Times, refs: Refs) -> NDArray[np.bool_] | None:
    """Which rows came behind the watermark, their source's own where it has one; None where none did."""
    if not len(times):
        return None
    if state.own is not None:
        return state.own.late(refs["source"], times)
    return times < state.watermark_ns if least_of(times) < state.watermark_ns else None


def behind_of(state: State, times: Times, refs: Refs, arrived_ns: int) -> Times | Behind | None:
    """How far each event stands behind what its watermark follows, before the slack; None where none does.

    Where the slack learns nothing from it, it is not reckoned yet.
    """
    if state.own is not None:
        return state.own.behind(refs["source"], times)
    basis = arrived_ns if state.settings.clock == "arrival" else basis_of(state.sources)
    if len(times) and isinstance(state.slack, FixedSlack):
        return Behind(basis, times)
    return None if not len(times) or least_of(times) >= basis else distances(basis, times)


def note_held(state: State, times: Times, arrived_ns: int) -> None:
    """Rows of an arrival (at least one) are held from now on: `hold_at_most` will ask for them."""
    if state.own is None:  # else the arrivals alone tell what is due
        state.hold.note(arrived_ns, greatest_of(times))


def stood(state: State, late: Refs) -> tuple[int, Times | None]:
    """The watermark that late rows came behind; where sources have their own, the greatest of these, and each."""
    if state.own is None:
        return state.watermark_ns, None
    each = state.own.at[late["source"]]
    return int(each.max()), each


def step(state: State, now_ns: int, *, only_releasing: bool) -> Candidate | None:
    """What the next mark says; None where it would move nothing, or `only_releasing`: where it would release nothing.

    Where sources have their own watermarks, what a mark releases is known once it is folded: any that moves sets one.
    """
    if state.own is not None:
        return state.own.candidate(state, now_ns)
    best = candidate(state.settings, state.slack_ns, state.sources, state.hold, now_ns)
    head = state.runs.head_ns
    releasing = head is not None and head <= max(best.watermark_ns, state.watermark_ns)
    return best if releasing or (best.watermark_ns > state.watermark_ns and not only_releasing) else None


def further(state: State, one: Candidate | None, other: Candidate | None) -> Candidate | None:
    """What takes the feed's watermark further; where `other` was put off it may stand behind: then it says nothing."""
    if other is None or state.own is not None:  # order within sources has just begun: they stand where the feed's did
        return one
    return other if other.watermark_ns > max(state.watermark_ns, one.watermark_ns if one else TIME_MIN) else one


def leaves_be(state: State, mark: Candidate, times: Times) -> bool:
    """Whether an arrival's events are judged the same before this mark as behind it: none of them is late for it."""
    return state.own is None and (not len(times) or least_of(times) >= mark.watermark_ns)


def release(state: State, mark: Mark) -> Strand:
    """Take out what a mark makes final, by time, then arrival."""
    if isinstance(state.runs, HeldBySource):
        assert state.own is not None
        return state.own.release(state, state.runs, mark)
    state.hold.passed(mark.watermark_ns)
    state.reordered = False
    return state.runs.release(mark.watermark_ns)


def drained(state: State) -> Candidate:
    """What the mark of a drain says; something is held."""
    if state.own is not None:
        return state.own.drained(state)
    tail = state.runs.tail_ns
    assert tail is not None
    return Candidate(tail, Cause.DRAIN, NO_SOURCE)


def check_order(state: State) -> None:
    """Assert that nothing is held behind a watermark, and that the bound on holding is about what is held."""
    if isinstance(state.runs, HeldBySource):
        assert state.own is not None and state.settings.order == "source" and not state.hold.pairs
        state.own.check(state.runs)
        return
    assert state.own is None and state.settings.order != "source"
    state.hold.check(state.runs.tail_ns)
    assert state.reordered == is_reordered(state), "held behind the watermark"

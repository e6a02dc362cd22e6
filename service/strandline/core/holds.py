"""Who held a feed, from when to when, and why: told by the fold alone, so recovery and replay tell the same history.

A holder is (why, source number, sink), why a key of `view.HOLD_WHYS`; it is looked at after each record. Nothing here
decides what is released, and names and texts are made elsewhere.

What is kept, and how exactly. A hold of a second or longer is kept as it was, to the nanosecond. Shorter ones are told
together, in stretches that end once they are a second long: a stretch counts for the holder that had most of it (of
two with equal time: the first). Neighbours with the same holder are one. When 10,000 are kept, the older half is told
again in stretches of a minute; if more than 7,500 are left then, the oldest go. So the rows cover the time from the
first one on without gaps, whatever the feed does.
"""

from __future__ import annotations

from collections.abc import Iterator
from itertools import pairwise
from typing import TYPE_CHECKING, Any, NamedTuple

from .columns import NO_SOURCE
from .records import Cause
from .settings import SECOND_NS
from .sources import NEVER

if TYPE_CHECKING:
    from .state import State

BRIEF_NS = SECOND_NS
BRIEF_OLD_NS = 60 * SECOND_NS
ROWS_AT_MOST = 10_000
ROWS_AFTER = 7_500
# A holder silent for a quarter of idle_after is called silent, not slow: common practice, no source.
SILENT_PART = 4

Holder = tuple[str, int, str]  # why, source (NO_SOURCE if no single one), sink ("" if none)
Row = tuple[int, Holder]  # since when; a row ends where the next begins
NOTHING: Holder = ("nothing_held", NO_SOURCE, "")
STOPPED: Holder = ("stopped", NO_SOURCE, "")


class Held(NamedTuple):
    """One stretch of the history; `to_ns` None: it goes on."""

    why: str
    source: int
    sink: str
    from_ns: int
    to_ns: int | None


def holder_of(state: State) -> tuple[Holder, int | None]:
    """Who holds the feed at its arrival clock; and when a slow source will have been silent for long, if it is slow."""
    if state.outbox.undelivered_events > state.settings.undelivered_events_at_most:
        return _sink(state), None
    if not state.runs.held:
        return NOTHING, None
    slack = "slack" if state.acts.slack_set is None else "slack_set"
    if state.settings.clock == "arrival" or state.own is not None:  # nobody waits for another source
        return (slack, NO_SOURCE, ""), None
    least = state.sources.least()
    if least is None:
        return ("all_silent", NO_SOURCE, ""), None
    newest, source = least
    if newest >= state.sources.newest_ns:
        return (slack, source, ""), None
    if state.cause == Cause.HOLD_AT_MOST and newest - state.slack_ns < state.watermark_ns:
        return ("hold_at_most", source, ""), None
    if newest == NEVER:
        return ("expected_source", source, ""), None
    silent_ns = int(state.sources.heard[source]) + state.settings.idle_after_ns // SILENT_PART + 1
    if state.now_ns >= silent_ns:
        return ("silent_source", source, ""), None
    if newest > state.sources.newest[source]:  # its promise is what is known of it
        return ("promised_source", source, ""), silent_ns
    return ("slow_source", source, ""), silent_ns


def _sink(state: State) -> Holder:
    """The sink that is furthest behind, by batches."""
    outbox = state.outbox
    behind = {
        name: sum(outbox.next_number[lane] - number for lane, number in lanes.items())
        for name, lanes in outbox.positions.items()
    }
    sink = max(behind, key=behind.__getitem__, default="")
    return ("sink_paused" if sink in state.acts.paused else "sink_full", NO_SOURCE, sink)


class _Telling:
    """Puts stretches of time into rows, those shorter than `brief_ns` together."""

    def __init__(self, brief_ns: int) -> None:
        self.brief_ns = brief_ns
        self.rows: list[Row] = []
        self.mixed_ns = 0  # since when the short ones are told together
        self.mixed: dict[Holder, int] = {}  # ns that each of them had since

    def add(self, holder: Holder, from_ns: int, to_ns: int) -> None:
        """The next stretch of time."""
        if to_ns - from_ns >= self.brief_ns:
            self.flush()
            self.append(from_ns, holder)
        elif to_ns > from_ns:
            if not self.mixed:
                self.mixed_ns = from_ns
            self.mixed[holder] = self.mixed.get(holder, 0) + to_ns - from_ns
            if to_ns - self.mixed_ns >= self.brief_ns:
                self.flush()

    def flush(self) -> None:
        """Tell those that were short until now."""
        if self.mixed:
            self.append(self.mixed_ns, self.most)
            self.mixed = {}

    @property
    def most(self) -> Holder:
        """Who had most of the time in which they were short."""
        return max(self.mixed, key=self.mixed.__getitem__)

    def append(self, from_ns: int, holder: Holder) -> None:
        """A row from this instant on."""
        if not self.rows or self.rows[-1][1] != holder:
            self.rows.append((from_ns, holder))


class Holds:
    """The history of one feed's holds up to its last record, and from then on as far as time alone decides it."""

    def __init__(self) -> None:
        self._telling = _Telling(BRIEF_NS)
        self.holder: Holder | None = None  # None before the first record
        self.since_ns = 0
        self.silent_ns: int | None = None  # when the holder, a slow source, will be a silent one
        self._before: Row | None = None  # the stretch before, not told yet: a change of no length is none

    def note(self, now_ns: int, holder: Holder, silent_ns: int | None) -> None:
        """A record was folded at this instant of the arrival clock. With `holder_of` 0.7 us, 1.6 us at a change."""
        if holder == self.holder and silent_ns == self.silent_ns:
            return
        if self.holder is None:
            self.holder, self.since_ns = holder, now_ns
        if self.silent_ns is not None and self.silent_ns <= now_ns:
            self._change(self.silent_ns, ("silent_source", *self.holder[1:]))
        if holder != self.holder:
            self._change(now_ns, holder)
        self.silent_ns = silent_ns

    def note_stopped(self, since_ns: int) -> None:
        """The service has just been started; nothing was noted since this instant, and if something was held, by it."""
        if self.holder not in (None, NOTHING):
            self.note(since_ns, STOPPED, None)

    def _change(self, at_ns: int, holder: Holder) -> None:
        assert self.holder is not None
        if at_ns > self.since_ns:
            self._tell(self._telling)
            self._before = self.since_ns, self.holder
            self.holder, self.since_ns = holder, at_ns
            if len(self._telling.rows) > ROWS_AT_MOST:
                self._shorten()
        elif self._before is not None and self._before[1] == holder:  # an arrival and its mark, say, in one instant
            self.since_ns, self.holder = self._before
            self._before = None
        else:
            self.holder = holder

    def _tell(self, telling: _Telling) -> None:
        if self._before is not None:
            telling.add(self._before[1], self._before[0], self.since_ns)

    def _shorten(self) -> None:
        rows = self._telling.rows
        half = len(rows) // 2
        coarse = _Telling(BRIEF_OLD_NS)
        for (from_ns, holder), (to_ns, _) in pairwise(rows[: half + 1]):
            coarse.add(holder, from_ns, to_ns)
        coarse.flush()
        for from_ns, holder in rows[half:]:
            coarse.append(from_ns, holder)
        self._telling.rows = coarse.rows[-ROWS_AFTER:]

    # ---- what observers see ---------------------------------------------------------------------------------------

    def at(self, now_ns: int) -> tuple[Holder, int]:
        """Who holds the feed at an instant not before the last record, and since when."""
        if self.holder is None:
            return NOTHING, now_ns
        if self.silent_ns is not None and self.silent_ns <= now_ns:
            return ("silent_source", *self.holder[1:]), self.silent_ns
        return self.holder, self.since_ns

    def history(self, now_ns: int) -> Iterator[Held]:
        """From the first instant known up to now, ascending, without gaps; the last one goes on."""
        if self.holder is None:
            return
        telling = _Telling(BRIEF_NS)
        telling.rows, telling.mixed_ns, telling.mixed = (
            list(self._telling.rows), self._telling.mixed_ns, dict(self._telling.mixed)
        )  # fmt: skip
        self._tell(telling)
        telling.flush()
        telling.append(self.since_ns, self.holder)
        holder, since_ns = self.at(now_ns)
        telling.append(since_ns, holder)
        ends: list[int | None] = [from_ns for from_ns, _ in telling.rows[1:]]
        for (from_ns, (why, source, sink)), to_ns in zip(telling.rows, [*ends, None], strict=True):
            yield Held(why, source, sink, from_ns, to_ns)

    # ---- snapshots ------------------------------------------------------------------------------------------------

    def saved(self) -> list[Any]:
        """All of it as plain values."""
        telling, now = self._telling, [self.holder, self.since_ns, self.silent_ns, self._before]
        return [*now, telling.rows, telling.mixed_ns, list(telling.mixed.items())]

    def restore(self, values: list[Any]) -> None:
        """Take over saved values."""
        holder, self.since_ns, self.silent_ns, before, rows, self._telling.mixed_ns, mixed = values
        self._before = None if before is None else (before[0], _holder(before[1]))
        self.holder = None if holder is None else _holder(holder)
        self._telling.rows = [(from_ns, _holder(holder)) for from_ns, holder in rows]
        self._telling.mixed = {_holder(holder): lasted_ns for holder, lasted_ns in mixed}

    def check(self) -> None:
        """Assert that rows ascend, that neighbours differ, and that what is told together is all of its time."""
        telling, told_ns = self._telling, self.since_ns if self._before is None else self._before[0]
        assert told_ns <= self.since_ns and (self._before is None or self._before[1] != self.holder)
        assert len(telling.rows) <= ROWS_AT_MOST
        assert all(one[0] < other[0] and one[1] != other[1] for one, other in pairwise(telling.rows))
        assert self.holder is not None or not telling.rows
        if telling.mixed:
            assert sum(telling.mixed.values()) == told_ns - telling.mixed_ns < BRIEF_NS
            assert not telling.rows or telling.rows[-1][0] < telling.mixed_ns
        elif telling.rows:
            assert telling.rows[-1][0] < told_ns


def _holder(values: list[Any]) -> Holder:
    why, source, sink = values
    return why, source, sink

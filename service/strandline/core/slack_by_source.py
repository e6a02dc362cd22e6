"""A slack of its own for each source, each steered as `slack.py` steers one for a feed: for `order = "source"`.

Columns by source number: an arrival costs what its events and the sources in it cost, never what all sources do. The
events of one source in one arrival are one step, limited once, as a whole arrival is for a feed. Lateness is that
behind the source's own newest event. Pure; fed by the fold, so a replay steers the same way. How late each source's
events come is remembered in `tails.py`; what watermarks do with a slack is `own.py`.

Memory: 80 bytes for a step, 32 beside it and 152 of lateness: 264 bytes a source, 248 of them in a snapshot.
"""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from . import slack
from .columns import Times, grown
from .settings import Settings
from .slack import FixedSlack, SteeredSlack, note_period, share_since, slack_of
from .tails import Floats, Numbers, Tails

SLACK_AT_MOST_NS = 2**62  # as a float and as an int64; 146 years
MEMORY_AT_MOST = 2**22  # float32 counts single events up to 2^24, and twice this and one arrival are remembered
MANY_EVENTS = 4  # sources are counted in a column of all of them where these are at most so many times the events
BLOCK = 4_096  # sources that observers look at together

# Columns of a step: slack, eta (0: warming up), what limits took off or added (ns); events and late in the stretch;
# events in the stretch at which the tail is looked at; events that really came late, in all.
EXACT, ETA, CLIPPED, EVENTS, LATE, TUNE_AT, ALL_LATE = range(7)
STEP_COLUMNS = 8  # one is spare: a row is a line of the processor's cache,
LINE = np.dtype("V64")  # and moves as such at half of what its numbers take
# Beside it: slack at the stretch's begin, events before it, stretches begun; events remembered, less those of the
# stretch (so below 0 where many of these have faded).
FIRST, BEFORE, STRETCHES, REMEMBERED = range(4)


@dataclass(frozen=True, slots=True)
class OwnSteering:
    """One source's slack at one moment. Shares are None without events."""

    slack_ns: int
    events: int
    late: int  # really late, since the source was first heard
    share_stretch: float | None  # since eta last changed; within `bound` of the target, whatever comes
    bound: float | None
    warming_up: bool
    binding: bool  # target and longest wait contradict each other for this source
    attainable: float  # about the share that the longest wait gives it, from the lateness remembered


@dataclass(frozen=True, slots=True)
class OwnStretch:
    """A time of constant eta of one source, and where its slack is: what the identity speaks of. Times in ns."""

    number: int  # from 1; 0 while warming up
    eta_ns: float
    first_ns: float
    exact_ns: float
    events: int
    late: int
    clipped_ns: float


@dataclass(frozen=True, slots=True)
class SteeredSources:
    """All sources' slacks in a few figures. `median_ns` is None without sources past their warm-up."""

    warming_up: int
    binding: int
    median_ns: int | None
    longest_ns: int
    binding_source: int | None  # the one that the longest wait suits least
    attainable: float | None  # with the longest wait, for that one


class SteeredBySource:
    """A slack for each source that keeps the share of its late events at `target`, between the two limits."""

    def __init__(self, target: float, at_most_ns: int, at_least_ns: int = 0) -> None:
        self.target = target
        self.at_most_ns, self.at_least_ns = min(at_most_ns, SLACK_AT_MOST_NS), min(at_least_ns, SLACK_AT_MOST_NS)
        self.events = self.late = 0  # of all sources, since the feed began
        self.periods: deque[tuple[int, int, int]] = deque(maxlen=slack.PERIODS)
        self._tails = Tails()
        self._memory = min(max(slack.MEMORY_PER_LATE / target, slack.MEMORY_EVENTS), MEMORY_AT_MOST)
        self._steps = np.empty((0, STEP_COLUMNS), dtype=np.float64)
        self._lines = np.empty(0, dtype=LINE)  # the same rows
        self._beside = np.empty((0, 4), dtype=np.float64)
        self._slacks = np.empty(0, dtype=np.int64)  # EXACT, rounded: what is in force
        self._scratch = np.empty(0, dtype=np.int64)  # all 0 between arrivals

    def _reach(self, count: int) -> None:
        """Have rows for so many sources; a new one is held for the longest wait."""
        known = len(self._slacks)
        if count <= known:
            return
        size = max(64, 2 * known, count)
        for name, fill in (("_steps", 0), ("_beside", 0), ("_slacks", self.at_most_ns), ("_scratch", 0)):
            setattr(self, name, grown(getattr(self, name), size, fill))
        self._lines = self._steps.view(LINE)[:, 0]
        self._steps[known:, EXACT] = self._beside[known:, FIRST] = self.at_most_ns
        self._steps[known:, TUNE_AT] = slack.WARM_UP_EVENTS
        self._tails.reach(size)

    def each(self, count: int) -> Times:
        """The slacks of the first `count` sources, by number."""
        self._reach(count)
        return self._slacks[:count]

    @property
    def slack_ns(self) -> int:
        """The longest slack of any source past its warm-up, for observers: costs all sources."""
        begun = self._steps[:, ETA] > 0
        return int(self._slacks[begun].max()) if begun.any() else self.at_most_ns

    # ---- learning -------------------------------------------------------------------------------------------------

    def learn(
        self,
        now_ns: int,
        events: int,
        late: int,
        lateness_ns: Times | None,
        *,
        set_aside: bool = False,
        rows: slack.Rows | None = None,
    ) -> None:
        """One arrival's events, as for a whole feed; here each one's source must be given."""
        assert rows is not None and lateness_ns is not None
        self.events += events
        self.late += late
        note_period(self.periods, now_ns, events, late)
        self._reach(rows.known)
        if events == 1:
            self._learn_one(int(rows.sources[0]), late, int(lateness_ns[0]), set_aside)
            return
        numbers = rows.sources.astype(np.intp)
        self._tails.add(numbers, lateness_ns)
        which = lateness_ns > self._slacks[numbers] if set_aside else rows.late
        if rows.known <= MANY_EVENTS * events:
            counts = np.bincount(numbers, minlength=rows.known)
            touched = counts.nonzero()[0]
            counts = counts[touched]
        else:  # few of all sources: each is looked at as often as it has events, to the same end, without sorting
            touched, counts = numbers, self._occurring(numbers, numbers)
        self._step(touched, counts, self._of(touched, numbers, which), self._of(touched, numbers, rows.late))

    def _of(self, touched: Numbers, numbers: Numbers, which: NDArray[np.bool_] | None) -> NDArray[np.int64] | None:
        """How many rows of `which` each of these sources has; None where none has any."""
        return None if which is None or not which.any() else self._occurring(touched, numbers[which])

    def _occurring(self, touched: Numbers, numbers: Numbers) -> NDArray[np.int64]:
        """How often each of the touched sources occurs in `numbers`."""
        np.add.at(self._scratch, numbers, 1)
        counts: NDArray[np.int64] = self._scratch[touched]
        self._scratch[numbers] = 0
        return counts

    def _step(
        self,
        touched: Numbers,
        events: NDArray[np.int64],
        counted: NDArray[np.int64] | None,
        came_late: NDArray[np.int64] | None,
    ) -> None:
        """S(t+1) = S(t) + eta (late - target * events), within the limits, for each source that is in the arrival.

        A source may stand in it more than once, each time with the same values.
        """
        steps = self._lines.take(touched).view(np.float64).reshape(-1, STEP_COLUMNS)
        exact, clipped, seen = steps[:, EXACT], steps[:, CLIPPED], steps[:, EVENTS]  # views: each call costs 1 us
        wanted = events * -self.target
        if counted is not None:
            wanted += counted
            steps[:, LATE] += counted
        wanted *= steps[:, ETA]
        wanted += exact
        np.maximum(wanted, float(self.at_least_ns), out=exact)
        np.minimum(exact, float(self.at_most_ns), out=exact)
        np.subtract(exact, wanted, out=wanted)
        clipped += wanted
        seen += events
        if came_late is not None:
            steps[:, ALL_LATE] += came_late
        self._lines[touched] = steps.view(LINE)[:, 0]
        self._slacks[touched] = np.rint(exact, out=wanted)
        due = seen >= steps[:, TUNE_AT]
        if np.count_nonzero(due):
            self._tune(np.unique(touched[due]))

    def _learn_one(self, number: int, late: int, lateness_ns: int, set_aside: bool) -> None:
        """The same for an arrival of one event, with the same roundings: 4 us where columns of one row take 30."""
        self._tails.add_one(number, lateness_ns)
        exact, eta, clipped, events, counted, tune_at, all_late, _ = self._steps[number].tolist()
        is_late = int(lateness_ns > round(exact)) if set_aside else late
        wanted = (is_late - self.target) * eta + exact
        limited = min(max(wanted, float(self.at_least_ns)), float(self.at_most_ns))
        clipped += limited - wanted
        self._steps[number] = limited, eta, clipped, events + 1, counted + is_late, tune_at, all_late + late, 0.0
        self._slacks[number] = round(limited)
        if events + 1 >= tune_at:
            self._tune(np.array([number], dtype=np.intp))

    def _tune(self, numbers: Numbers) -> None:
        """Look at these sources' tails: begin, or change eta where it no longer fits."""
        steps = self._steps[numbers]
        weight = self._weight(numbers)
        scale, first = self._tails.tails(numbers, weight, self.target)
        eta = slack.STEP_PER_TAIL * scale
        warming = steps[:, ETA] == 0
        ratio = eta / np.where(warming, 1.0, steps[:, ETA])
        begins = warming | (ratio < 1 / slack.RETUNE_RATIO) | (ratio > slack.RETUNE_RATIO)
        total = self._beside[numbers, BEFORE] + steps[:, EVENTS]
        limited = np.minimum(np.maximum(first, float(self.at_least_ns)), float(self.at_most_ns))
        steps[:, EXACT] = np.where(warming, limited, steps[:, EXACT])
        fades = weight > 2 * self._memory
        self._beside[numbers[fades], REMEMBERED] -= weight[fades] / 2
        self._tails.fade(numbers[fades])
        self._steps[numbers] = steps
        self._slacks[numbers] = np.rint(steps[:, EXACT])
        self._begin(numbers[begins], eta[begins])
        step = np.maximum(1, np.floor(np.minimum(total, self._memory) / 4))
        self._steps[numbers, TUNE_AT] = self._steps[numbers, EVENTS] + step

    def _begin(self, numbers: Numbers, eta_ns: Floats) -> None:
        """Begin stretches of constant eta from the present slacks."""
        self._beside[numbers, BEFORE] += self._steps[numbers, EVENTS]
        self._beside[numbers, REMEMBERED] += self._steps[numbers, EVENTS]
        self._beside[numbers, FIRST] = self._steps[numbers, EXACT]
        self._beside[numbers, STRETCHES] += 1
        self._steps[numbers, ETA] = eta_ns
        for column in (CLIPPED, EVENTS, LATE):
            self._steps[numbers, column] = 0.0

    def _weight(self, numbers: Numbers) -> Floats:
        """Events remembered of each source; those that have faded count for less than one."""
        weight: Floats = self._beside[numbers, REMEMBERED] + self._steps[numbers, EVENTS]
        return weight

    # ---- what observers see ---------------------------------------------------------------------------------------

    def share_since(self, since_ns: int) -> float | None:
        """Share of late events of all sources from the period on that holds this instant; None without events."""
        return share_since(self.periods, since_ns)

    def attainable(self, numbers: Numbers) -> Floats:
        """About the late share that the longest wait gives each source, from the lateness remembered."""
        return self._tails.late_share(numbers, self._weight(numbers), self.at_most_ns)

    def _at_limit(self, steps: Floats) -> NDArray[np.bool_]:
        """Where the longest wait keeps the slack down: one more late event would lift it beyond."""
        return np.asarray((steps[:, ETA] > 0) & (steps[:, EXACT] + steps[:, ETA] > self.at_most_ns))

    def seen(self, start: int, stop: int) -> list[OwnSteering]:
        """The sources from number `start` up to before `stop`."""
        self._reach(stop)
        numbers = np.arange(start, stop)
        steps, beside = self._steps[start:stop], self._beside[start:stop]
        attainable = self.attainable(numbers)
        binding = self._at_limit(steps) & (attainable > self.target)
        found = []
        rows = zip(steps.tolist(), beside.tolist(), binding.tolist(), attainable.tolist(), strict=True)
        for (exact, eta, clipped, events, late, _, all_late, _), (first, before, *_), binds, share in rows:
            counted = eta > 0 and events > 0
            room = max(self.at_most_ns - first, first - self.at_least_ns) + eta + abs(clipped)
            found.append(
                OwnSteering(
                    slack_ns=round(exact),
                    events=int(before + events),
                    late=int(all_late),
                    share_stretch=late / events if counted else None,
                    bound=room / (eta * events) if counted else None,
                    warming_up=eta == 0,
                    binding=binds,
                    attainable=share,
                )
            )
        return found

    def stretch(self, number: int) -> OwnStretch:
        """The present stretch of one source, for tests and explanations."""
        self._reach(number + 1)
        _, eta, clipped, events, late, *_ = self._steps[number].tolist()
        first, _, begun, _ = self._beside[number].tolist()
        return OwnStretch(int(begun), eta, first, float(self._steps[number, EXACT]), int(events), int(late), clipped)

    def together(self, count: int) -> SteeredSources:
        """All `count` sources in a few figures: costs all of them."""
        self._reach(count)
        steps = self._steps[:count]
        begun = steps[:, ETA] > 0
        slacks = self._slacks[:count][begun]
        binding, worst, most = 0, None, None
        candidates = np.flatnonzero(self._at_limit(steps))
        for begin in range(0, len(candidates), BLOCK):
            numbers = candidates[begin : begin + BLOCK]
            shares = self.attainable(numbers)
            binding += int(np.count_nonzero(shares > self.target))
            row = int(shares.argmax())
            if shares[row] > (self.target if most is None else most):
                worst, most = int(numbers[row]), float(shares[row])
        return SteeredSources(
            warming_up=count - len(slacks),
            binding=binding,
            median_ns=int(np.median(slacks)) if len(slacks) else None,
            longest_ns=int(slacks.max()) if len(slacks) else self.at_most_ns,
            binding_source=worst,
            attainable=most,
        )

    # ---- other settings, and snapshots ----------------------------------------------------------------------------

    def limit(self, at_most_ns: int, at_least_ns: int) -> None:
        """Other limits from now on: what was learned stays; a slack that they move begins a stretch."""
        self.at_most_ns, self.at_least_ns = min(at_most_ns, SLACK_AT_MOST_NS), min(at_least_ns, SLACK_AT_MOST_NS)
        before = self._steps[:, EXACT].copy()
        warming = self._steps[:, ETA] == 0
        limited = np.minimum(np.maximum(before, float(self.at_least_ns)), float(self.at_most_ns))
        self._steps[:, EXACT] = np.where(warming, float(self.at_most_ns), limited)
        self._slacks[:] = np.rint(self._steps[:, EXACT])
        self._beside[warming, FIRST] = self.at_most_ns
        moved = np.flatnonzero(~warming & (self._steps[:, EXACT] != before))
        self._steps[moved, TUNE_AT] -= self._steps[moved, EVENTS]  # it is counted within the stretch
        self._begin(moved, self._steps[moved, ETA])

    def saved(self) -> list[Any]:
        """All of it but the columns, as plain values."""
        return [self.events, self.late, list(self.periods)]

    def columns(self, count: int) -> list[NDArray[Any]]:
        """Copies of the columns of so many sources."""
        self._reach(count)
        self._tails.settle()
        return [column[:count].copy().reshape(-1) for column in self._columns()]

    def _columns(self) -> tuple[NDArray[Any], ...]:
        return self._steps, self._beside, self._tails.greatest, self._tails.counts

    def restore(self, values: list[Any], columns: list[NDArray[Any]]) -> None:
        """Take over saved values and columns."""
        self.events, self.late, periods = values
        self.periods.extend(tuple(row) for row in periods)
        self._reach(len(columns[2]))
        for column, saved in zip(self._columns(), columns, strict=True):
            rows = saved.reshape(-1, *column.shape[1:])
            column[: len(rows)] = rows
        self._slacks[:] = np.rint(self._steps[:, EXACT])

    def check(self, count: int) -> None:
        """Assert that slacks are within their limits and what is counted by source adds up."""
        steps, beside = self._steps, self._beside
        assert np.array_equal(self._slacks, np.rint(steps[:, EXACT]).astype(np.int64))
        begun = steps[:, ETA] > 0
        assert np.all(steps[begun, EXACT] >= self.at_least_ns) and np.all(steps[:, EXACT] <= self.at_most_ns)
        assert np.all(steps[~begun, EXACT] == self.at_most_ns)
        assert int(steps[:, EVENTS].sum() + beside[:, BEFORE].sum()) == self.events
        assert int(steps[:, ALL_LATE].sum()) == self.late
        assert not steps[count:, EVENTS].any() and not beside[count:, STRETCHES].any()
        assert not self._scratch.any()
        self._tails.check(self._weight(np.arange(len(steps))))


Slack = FixedSlack | SteeredSlack | SteeredBySource


def slack_for(settings: Settings, before: Slack | None = None) -> Slack:
    """The slack that these settings ask for; one that is steered towards the same target goes on from where it is."""
    if settings.late_share is None or settings.order != "source":
        return slack_of(settings, None if isinstance(before, SteeredBySource) else before)
    if isinstance(before, SteeredBySource) and before.target == settings.late_share:
        before.limit(settings.slack_ns, settings.slack_at_least_ns)
        return before
    return SteeredBySource(settings.late_share, settings.slack_ns, settings.slack_at_least_ns)

"""How far the watermark stays behind: a fixed slack, or one that is steered so that a wanted share of events is late.

Method: online quantile tracking, S(t+1) = S(t) + eta (late(t) - target), summed over each arrival's events (Gibbs &
Candes, NeurIPS 2021; Angelopoulos, Candes & Tibshirani, NeurIPS 2023). For constant eta the share of late over T
events differs from the target by exactly (S(T+1) - S(1) - clipped) / (eta T), on any feed. `slack.md` tells how
eta is chosen, what that costs and where the method loses. Pure; fed by the fold, so a replay steers the same way. A
slack for each source is `slack_by_source.py`.
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Iterable
from dataclasses import astuple, dataclass
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from .settings import Settings
from .sketch import Sketch

WARM_UP_EVENTS = 200  # seen before the first slack is taken from their lateness; until then the longest wait holds
STEP_PER_TAIL = 0.15  # eta as a share of the tail's mean excess: see slack.md for 0.05 to 0.4
RETUNE_RATIO = 1.5  # eta is changed only when it is off by this factor: identity and bound hold within a stretch
MEMORY_PER_LATE = 20  # lateness is remembered over about so many wanted late events before it fades by half,
MEMORY_EVENTS = 10_000  # and at least over so many events
PERIOD_NS = 10_000_000_000
PERIODS = 360  # an hour


class Rows(NamedTuple):
    """The events of an arrival by themselves."""

    sources: NDArray[np.uint32]  # number of each one's source
    late: NDArray[np.bool_] | None  # which came late; None: none
    known: int  # sources there are


def note_period(periods: deque[tuple[int, int, int]], now_ns: int, events: int, late: int) -> None:
    """Add an arrival's events to the period that holds this instant."""
    start = now_ns - now_ns % PERIOD_NS
    if periods and periods[-1][0] >= start:
        last = periods[-1]
        periods[-1] = (last[0], last[1] + events, last[2] + late)
    else:
        periods.append((start, events, late))


def share_since(periods: Iterable[tuple[int, int, int]], since_ns: int) -> float | None:
    """Share of late events from the period on that holds this instant; None without events."""
    rows = [row for row in periods if row[0] + PERIOD_NS > since_ns]
    events = sum(row[1] for row in rows)
    return sum(row[2] for row in rows) / events if events else None


class FixedSlack:
    """A slack that stays as it was configured."""

    def __init__(self, slack_ns: int) -> None:
        self.slack_ns = slack_ns

    def learn(
        self,
        now_ns: int,
        events: int,
        late: int,
        lateness_ns: NDArray[np.int64] | None,
        *,
        set_aside: bool = False,
        rows: Rows | None = None,
    ) -> None:
        """Nothing is learned."""


@dataclass(slots=True)
class Stretch:
    """A time of constant eta: what the identity and the bound speak of."""

    eta_ns: float
    first_ns: float  # S(1)
    events: int = 0
    late: int = 0
    clipped_ns: float = 0.0  # what the limits took off (negative) or added


class SteeredSlack:
    """A slack that keeps the share of late events at `target`, between `at_least_ns` and `at_most_ns`."""

    def __init__(self, target: float, at_most_ns: int, at_least_ns: int = 0) -> None:
        self.target, self.at_most_ns, self.at_least_ns = target, at_most_ns, at_least_ns
        self.exact_ns = float(at_most_ns)
        self.sketch = Sketch()
        self.events = self.late = 0  # since the feed began
        self.stretch: Stretch | None = None  # None while warming up
        self.stretches = 0
        self.periods: deque[tuple[int, int, int]] = deque(maxlen=PERIODS)  # (start, events, late)
        self._tune_at = WARM_UP_EVENTS

    @property
    def slack_ns(self) -> int:
        """The slack in force."""
        return round(self.exact_ns)

    def learn(
        self,
        now_ns: int,
        events: int,
        late: int,
        lateness_ns: NDArray[np.int64] | None,
        *,
        set_aside: bool = False,
        rows: Rows | None = None,
    ) -> None:
        """One arrival's events: how many, how many came late, and how far behind the watermark's basis each stood.

        `lateness_ns` is None where none stood behind it at all. `set_aside`: another slack is in force for a time; then
        those count for the steering that this one would have made late, since it has no hand in which really are.
        `rows` are for a slack of each source (`slack_by_source.py`).
        """
        self.events += events
        self.late += late
        note_period(self.periods, now_ns, events, late)
        if lateness_ns is None:
            self.sketch.add_same(0, events)
        else:
            self.sketch.add(lateness_ns)
        if self.stretch is not None:
            if set_aside:
                late = 0 if lateness_ns is None else int(np.count_nonzero(lateness_ns > self.slack_ns))
            self._step(self.stretch, events, late)
        if self.events >= self._tune_at:
            self._tune()

    def _step(self, stretch: Stretch, events: int, late: int) -> None:
        wanted = self.exact_ns + stretch.eta_ns * (late - self.target * events)
        limited = min(max(wanted, float(self.at_least_ns)), float(self.at_most_ns))
        stretch.clipped_ns += limited - wanted
        stretch.events += events
        stretch.late += late
        self.exact_ns = limited

    def _tune(self) -> None:
        """Look at the tail: begin, or change eta where it no longer fits."""
        eta = STEP_PER_TAIL * self._tail_ns()
        if self.stretch is None:
            self.exact_ns = min(max(self._first_ns(), float(self.at_least_ns)), float(self.at_most_ns))
            self.begin(eta)
        elif not self.stretch.eta_ns / RETUNE_RATIO <= eta <= self.stretch.eta_ns * RETUNE_RATIO:
            self.begin(eta)
        memory = max(MEMORY_PER_LATE / self.target, MEMORY_EVENTS)
        if self.sketch.total > 2 * memory:
            self.sketch.fade()
        self._tune_at = self.events + max(1, int(min(self.events / 4, memory / 4)))

    def begin(self, eta_ns: float) -> None:
        """Begin a stretch of constant eta from the present slack."""
        self.stretch = Stretch(eta_ns, self.exact_ns)
        self.stretches += 1

    def _seen_share(self) -> float:
        """The share of events beyond which enough were seen to know the tail: the target, or what 8 events make."""
        return min(max(self.target, 8 / max(self.sketch.total, 1.0)), 0.25)

    def _tail_ns(self) -> float:
        edge = self.sketch.quantile(1 - self._seen_share())
        return max(self.sketch.excess(edge), 1e-3 * edge, 1e6)

    def _first_ns(self) -> float:
        """The quantile wanted; where too few events were seen, carried on from what was as an exponential tail."""
        share = self._seen_share()
        return self.sketch.quantile(1 - share) + self._tail_ns() * math.log(share / min(self.target, share))

    # ---- what observers see ---------------------------------------------------------------------------------------

    def share_since(self, since_ns: int) -> float | None:
        """Share of late events from the period on that holds this instant; None without events."""
        return share_since(self.periods, since_ns)

    @property
    def bound(self) -> float | None:
        """How far the share since the present stretch began may be from the target, at most, whatever comes."""
        if self.stretch is None or not self.stretch.events:
            return None
        room = max(self.at_most_ns - self.stretch.first_ns, self.stretch.first_ns - self.at_least_ns)
        overshoot = self.stretch.eta_ns  # one more step may be on its way
        return (room + overshoot + abs(self.stretch.clipped_ns)) / (self.stretch.eta_ns * self.stretch.events)

    @property
    def binding(self) -> bool:
        """Whether target and longest wait contradict each other: the slack stands at its limit and more came late."""
        return self.stretch is not None and self.exact_ns >= self.at_most_ns and self.attainable > self.target

    @property
    def attainable(self) -> float:
        """The late share that the longest wait can give, from the lateness remembered."""
        return self.sketch.late_share(self.at_most_ns).at_least

    def saved(self) -> list[Any]:
        """All of it as plain values."""
        stretch = self.stretch
        return [
            self.exact_ns,
            self.events,
            self.late,
            None if stretch is None else list(astuple(stretch)),
            self.stretches,
            list(self.periods),
            self._tune_at,
            self.sketch.counts.tolist(),
            self.sketch.total,  # not the sum of the counts to the last bit, once they have faded often
            self.sketch.greatest_ns,
        ]

    def restore(self, values: list[Any]) -> None:
        """Take over saved values."""
        self.exact_ns, self.events, self.late, stretch, self.stretches, periods, self._tune_at, *sketch = values
        self.stretch = None if stretch is None else Stretch(*stretch)
        self.periods.extend(tuple(row) for row in periods)
        self.sketch.counts[:] = sketch[0]
        self.sketch.total = sketch[1]
        # Snapshots of before it was kept: the upper bound of the last bucket that is not empty stands for the greatest.
        last = int(np.flatnonzero(self.sketch.counts)[-1]) if self.sketch.total else 0
        self.sketch.greatest_ns = sketch[2] if len(sketch) > 2 else int(self.sketch.buckets.upper[last])


Slack = FixedSlack | SteeredSlack


def slack_of(settings: Settings, before: Slack | None = None) -> Slack:
    """The slack that these settings ask for; one that is steered towards the same target goes on from where it is."""
    if settings.late_share is None:
        return FixedSlack(settings.slack_ns)
    fresh = SteeredSlack(settings.late_share, settings.slack_ns, settings.slack_at_least_ns)
    if isinstance(before, SteeredSlack) and before.target == fresh.target:
        fresh.restore(before.saved())
        fresh.exact_ns = min(max(fresh.exact_ns, float(fresh.at_least_ns)), float(fresh.at_most_ns))
        if fresh.exact_ns != before.exact_ns and fresh.stretch is not None:
            fresh.begin(fresh.stretch.eta_ns)  # a jump begins a stretch: identity and bound hold within one
    return fresh

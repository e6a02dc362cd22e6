"""Advice on how long to wait: chosen on the first part of a feed, verified on the rest. Pure: columns in, figures out.

The slack is the least that would have kept the wanted late share on the first part, rounded up to three digits; then
each event of the rest is judged by it, and the share found there has Wilson's interval (`intervals`). Nothing of the
rest has a say in the choice. What each source costs is found by leaving it out and choosing again (`costs`).

What is exact: late events of the second part (counted one by one), and whose they are. The choice lies within the
sketch's relative error (0.2 %) above the least slack there is. Not followed: repeated events, promises, excuses and
`hold_at_most`; a watermark is taken to follow its basis at once (`slacks` says what that means). The interval presumes
that events are late independently of each other; where they are late in bursts the tenths of the second part show it.
It is the one of the second part's share with this slack; that the slack is a finding of chance too is not in it: of
400 steady feeds of 30,000 events (target 1 %) 9 % and not 2.5 % were called missed.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Literal, NamedTuple

import numpy as np
from numpy.typing import NDArray

from strandline.core.sketch import Sketch, buckets_of

from .basis import ArrivalClock, Basis, LeastOfSources, NewestOfAll, Requests
from .intervals import order_statistics, wilks, wilson
from .leaving_out import leave_out
from .slacks import SLACK_NS_AT_MOST, BasisName, SlackFigure, SlackFigures

Int64s = NDArray[np.int64]
Blocks = Callable[[], Iterator[Requests]]  # the feed from its begin, as often as it is asked for
Verdict = Literal["shown", "open", "missed", "contradiction", "too_short"]

RELATIVE_ERROR = 0.001
LEARN_PART = 2 / 3
CONFIDENCE = 0.95
DIGITS = 3
TENTHS = 10
NEARLY_EMPTY = 0.1
SUPPORTED: tuple[Verdict, ...] = ("shown", "open")
VERDICTS: dict[Verdict, str] = {
    "shown": "the whole interval lies at or below the target: what was chosen on the first part holds on the second",
    "open": "the target lies within the interval: the second part agrees with it, but does not prove it",
    "missed": "the whole interval lies above the target: the feed has changed, its late events come in bursts, or the "
    "first part was short for the choice",
    "contradiction": "target and longest wait contradict each other: even the longest wait gives more late events",
    "too_short": "the capture is too short for this claim: capture for longer, or ask for a larger share",
}


class Rule(NamedTuple):
    """What the watermark follows."""

    basis: BasisName
    idle_after_ns: int | None = None

    def begin(self) -> Basis:
        """The basis of a feed that begins."""
        if self.basis == "arrival":
            return ArrivalClock()
        return NewestOfAll() if self.basis == "event" else LeastOfSources(self.idle_after_ns)


class Wanted(NamedTuple):
    """What is asked for. Raises nothing; `advise` does."""

    late_share: float
    at_most_ns: int | None = None
    learn_part: float = LEARN_PART
    confidence: float = CONFIDENCE


@dataclass(slots=True)
class Part:
    """A part of the feed by the arrival clock, its last instant included only in the second part."""

    from_ns: int
    to_ns: int
    events: int = 0
    late: int = 0  # with the slack chosen; of the first part at most so many, within a bucket of the sketch


@dataclass(slots=True)
class Advice:
    """The slack chosen, and what came of it out of sample. Times in ns."""

    wanted: Wanted
    rule: Rule
    first: Part
    second: Part
    slack_ns: int  # at most `wanted.at_most_ns`
    least_ns: int  # before it was rounded up or cut
    interval_ns: tuple[int, int] | None  # the least slack as sure as `confidence`; None where events are too few
    late_share: float
    interval: tuple[float, float]
    verdict: Verdict
    events_needed: int  # in each part, for a claim to be possible at all (Wilks)
    attainable: float | None  # late share of the first part with the longest wait, where it binds
    tenths: list[Part]

    @property
    def supported(self) -> bool:
        """Whether the second part supports the slack chosen: only then is it one to go by."""
        return self.verdict in SUPPORTED

    @property
    def nearly_empty(self) -> Literal["first", "second"] | None:
        """The part with less than a tenth of the events that its share of the time would have: a gap in the traffic."""
        events, learn = self.first.events + self.second.events, self.wanted.learn_part
        if self.first.events < NEARLY_EMPTY * learn * events:
            return "first"
        return "second" if self.second.events < NEARLY_EMPTY * (1 - learn) * events else None


def advise(blocks: Blocks, span_ns: tuple[int, int], rule: Rule, wanted: Wanted) -> Advice:
    """Choose on the first part of the feed, verify on the rest, in one pass.

    `span_ns`: the first and the last arrival. Raises ValueError for what cannot be wanted or a part without events.
    """
    require_possible(wanted)
    cut_ns = cut_of(span_ns, wanted.learn_part)
    first, second = Part(span_ns[0], cut_ns), Part(cut_ns, span_ns[1])
    tenths = _tenths(second)
    bounds = np.array([part.from_ns for part in tenths[1:]], dtype=np.int64)
    sketch = Sketch(buckets_of(RELATIVE_ERROR))
    chosen: int | None = None
    for block, lateness in judged(blocks(), rule):
        row = block.first_row(cut_ns)
        sketch.add(lateness[:row])
        if row == len(lateness):
            continue
        chosen = _cut(sketch, wanted) if chosen is None else chosen
        late = lateness[row:] > chosen
        _count(tenths, bounds, block.by_row(block.instants)[row:], late)
        second.late += int(np.count_nonzero(late))
        second.events += len(late)
    first.events = int(sketch.total)
    if chosen is None or not first.events or not second.events:
        raise ValueError(f"{first.events:,} events to choose on and {second.events:,} to verify on: one part is empty")
    first.late = round(sketch.late_share(chosen).at_most * first.events)
    return _advice(rule, wanted, first, second, tenths, sketch, chosen)


def require_possible(wanted: Wanted) -> None:
    """Raise ValueError for what no feed could be asked for."""
    if not 0 < wanted.late_share < 1:
        raise ValueError(f"a late share lies between 0 and 1, not at {wanted.late_share}")
    if not 0 < wanted.learn_part < 1:
        raise ValueError(f"the part to choose on lies between 0 and 1, not at {wanted.learn_part}")
    if wanted.at_most_ns is not None and not 0 <= wanted.at_most_ns <= SLACK_NS_AT_MOST:
        raise ValueError("the longest wait lies between 0 and 73 years")


def verdict_on(interval: tuple[float, float], late_share: float) -> Verdict:
    """Of the interval of a share beside the share that was wanted, where there were events enough and time to wait."""
    low, high = interval
    return "shown" if high <= late_share else "open" if low <= late_share else "missed"


def cut_of(span_ns: tuple[int, int], learn_part: float) -> int:
    """The instant at which the second part begins."""
    return span_ns[0] + max(1, round((span_ns[1] - span_ns[0]) * learn_part))


def judged(blocks: Iterator[Requests], rule: Rule) -> Iterator[tuple[Requests, Int64s]]:
    """Each block and the lateness of its events, at least 0."""
    basis = rule.begin()
    for block in blocks:
        if len(block.times):
            moves = basis.add(block)
            yield block, np.maximum(block.by_row(moves.before) - block.times, 0)


def rounded_up(ns: int) -> int:
    """The next number up that has three digits, for people to read and paste."""
    step: int = 10 ** max(0, len(str(ns)) - DIGITS)
    return -(-ns // step) * step


def _cut(sketch: Sketch, wanted: Wanted) -> int:
    chosen = rounded_up(sketch.slack_for(wanted.late_share))
    return chosen if wanted.at_most_ns is None else min(chosen, wanted.at_most_ns)


def _tenths(second: Part) -> list[Part]:
    bounds = [second.from_ns + (second.to_ns - second.from_ns) * tenth // TENTHS for tenth in range(TENTHS + 1)]
    return [Part(begin, end) for begin, end in pairwise(bounds)]


def _count(tenths: list[Part], bounds: Int64s, instants: Int64s, late: NDArray[np.bool_]) -> None:
    places = np.searchsorted(bounds, instants, side="right")
    counts = np.bincount(places, minlength=TENTHS)
    lates = np.bincount(places[late], minlength=TENTHS)
    for part, events, found in zip(tenths, counts.tolist(), lates.tolist(), strict=True):
        part.events += events
        part.late += found


def _advice(
    rule: Rule, wanted: Wanted, first: Part, second: Part, tenths: list[Part], sketch: Sketch, chosen: int
) -> Advice:
    share, needed = wanted.late_share, wilks(1 - wanted.late_share, wanted.confidence)
    found = wilson(second.late, second.events, wanted.confidence)
    binds = wanted.at_most_ns is not None and sketch.late_share(wanted.at_most_ns).at_least > share
    verdict = verdict_on(found, share)
    if binds:
        verdict = "contradiction"
    if min(first.events, second.events) < needed:  # of too few events not even a contradiction is shown
        verdict = "too_short"
    ranks = order_statistics(first.events, 1 - share, wanted.confidence)
    return Advice(
        wanted=wanted,
        rule=rule,
        first=first,
        second=second,
        slack_ns=chosen,
        least_ns=sketch.slack_for(share),
        interval_ns=None if ranks is None else (_of_rank(sketch, ranks[0]), _of_rank(sketch, ranks[1])),
        late_share=second.late / second.events,
        interval=found,
        verdict=verdict,
        events_needed=needed,
        attainable=first.late / first.events if binds else None,
        tenths=tenths,
    )


def _of_rank(sketch: Sketch, rank: int) -> int:
    place = int(np.searchsorted(np.cumsum(sketch.counts), rank))
    return min(int(sketch.buckets.upper[place]), sketch.greatest_ns)


# ---- other slacks, and what sources have to do with it --------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Alternative:
    """Another slack: late shares of both parts exactly, hold and held over the whole feed."""

    slack_ns: int
    first_share: float
    second_share: float
    figure: SlackFigure


@dataclass(slots=True)
class SourceCost:
    """A source: its events, those late with the slack chosen, its mean delay, and what would be without it. In ns."""

    source: int
    events: int
    late: int
    delay_ns_mean: float
    slack_without_ns: int | None = None  # chosen again, without its events
    lag_saved_ns: float | None = None  # by which the watermark would follow more closely, mean over time
    late_if_excused: int | None = None  # of its own events, with the slack chosen and nobody waiting for it


@dataclass(frozen=True, slots=True)
class Comparison:
    """Other slacks, ascending; the sources that cost most; how far the basis lies behind the arrival clock."""

    alternatives: list[Alternative]
    sources: list[SourceCost]
    sources_known: int
    lag_ns_mean: float


def compare(blocks: Blocks, advice: Advice, slacks_ns: Sequence[int], sources_at_most: int) -> Comparison:
    """A second pass: what other slacks would give, and which sources are to be looked at; a third one for those."""
    cut_ns, rule = advice.second.from_ns, advice.rule
    grid = sorted({*slacks_ns, advice.slack_ns})
    idle_after_ns = rule.idle_after_ns if rule.basis == "sources" else None
    figures = SlackFigures(grid, rule.basis, idle_after_ns=idle_after_ns, sketched=False)
    late, events = np.zeros((2, len(grid)), dtype=np.int64), np.zeros((2, 1), dtype=np.int64)
    sums = _SourceSums()
    for block in blocks():
        for part, piece in enumerate(block.parted(cut_ns)):
            if len(piece.times):
                before, instants = figures.late, piece.by_row(piece.instants)
                lateness = figures.add(piece.times, instants, starts=piece.starts, sources=piece.sources)
                late[part] += figures.late - before
                events[part] += len(lateness)
                sums.add(piece, instants, lateness > advice.slack_ns)
    shares = late / events
    alternatives = [
        Alternative(figure.slack_ns, float(shares[0, place]), float(shares[1, place]), figure)
        for place, figure in enumerate(figures.figures())
    ]
    costs = sums.chosen(sources_at_most)
    if len(sums.events) > 1:
        _say_without(blocks, advice, costs)
    return Comparison(alternatives, costs, int(np.count_nonzero(sums.events)), figures.lag_ns_mean)


class _SourceSums:
    """Events, late events and delays by source number."""

    def __init__(self) -> None:
        self.events = self.late = np.zeros(0, dtype=np.int64)
        self.delay = np.zeros(0)

    def add(self, block: Requests, instants: Int64s, late: NDArray[np.bool_]) -> None:
        if block.sources is None:
            return
        size = max(len(self.events), int(block.sources.max()) + 1)
        if size > len(self.events):
            more = size - len(self.events)
            self.events, self.late = (np.append(c, np.zeros(more, np.int64)) for c in (self.events, self.late))
            self.delay = np.append(self.delay, np.zeros(more))
        self.events += np.bincount(block.sources, minlength=size)
        self.late += np.bincount(block.sources[late], minlength=size)
        self.delay += np.bincount(block.sources, (instants - block.times).astype(np.float64), size)

    def chosen(self, at_most: int) -> list[SourceCost]:
        """Half of them those with most late events, the others those with the longest mean delay."""
        mean = self.delay / np.maximum(self.events, 1)
        heard = np.flatnonzero(self.events)
        by_late = heard[np.lexsort((-mean[heard], -self.late[heard]))].tolist()
        by_delay = heard[np.argsort(-mean[heard], kind="stable")].tolist()
        numbers = by_late[: (at_most + 1) // 2]
        numbers += [number for number in by_delay if number not in numbers][: at_most - len(numbers)]
        return [
            SourceCost(number, int(self.events[number]), int(self.late[number]), float(mean[number]))
            for number in numbers
        ]


def _say_without(blocks: Blocks, advice: Advice, costs: list[SourceCost]) -> None:
    """Choose again without each of these sources, all of them in one pass."""
    numbers, buckets = [cost.source for cost in costs], buckets_of(RELATIVE_ERROR)
    lag, found = leave_out(blocks(), numbers, advice.rule.begin, buckets, advice.second.from_ns, advice.slack_ns)
    for cost, without in zip(costs, found, strict=True):
        if without.sketch.total:
            cost.slack_without_ns = rounded_up(without.sketch.slack_for(advice.wanted.late_share))
        if without.lag.ns_mean is not None and lag.ns_mean is not None:
            cost.lag_saved_ns = lag.ns_mean - without.lag.ns_mean
            cost.late_if_excused = without.late_if_excused

"""Advice on how long to wait where each source is in order by itself: which source needs which slack.

As for a whole feed (`advice.py`), source by source: for each one the least slack that would have kept the wanted late
share on the first part of the time, rounded up to three digits; then each event of the rest is judged by it. Nothing of
the rest has a say in the choice. Columns by source number throughout: memory grows with sources, not with events.

Three ways to wait are compared: the least slack that keeps the share over all events (`pooled`), one that keeps it for
every source (`fixed`), and a slack for each source (`steered`: where steering would settle, which is not followed step
by step here). What is exact: late events of the second part. Slacks lie within the sketch's relative error.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal, NamedTuple

import numpy as np
from numpy.typing import NDArray

from strandline.core.columns import grown

from .advice import DIGITS, Blocks, Part, Verdict, Wanted, cut_of, require_possible, rounded_up, verdict_on
from .basis import Int64s
from .basis_by_source import NewestOfEach
from .holds_by_source import Followed, Hold
from .intervals import wilks, wilson, wilson_columns
from .sketch_by_source import SketchBySource
from .slacks import SLACK_NS_AT_MOST

WayName = Literal["pooled", "fixed", "steered"]
STEERING_PAYS = 0.8  # of the fixed slack's mean hold: less of a difference is not worth a slack that moves
JUDGED_PART = 0.9  # of the second part's events must be of sources with enough events for a claim
_POWERS = 10 ** np.arange(19, dtype=np.int64)
# In the order in which sources are shown: what asks for somebody's attention first.
SHOWN_FIRST: tuple[Verdict, ...] = ("contradiction", "missed", "open", "shown", "too_short")


@dataclass(slots=True)
class Way:
    """One way to wait. Late events are those of the second part; `above`: sources whose share is surely too large."""

    name: WayName
    slack_ns: int  # of steered: the longest
    median_ns: int
    least_ns: int
    late: int
    above: int
    hold_ns_mean: float | None = None  # over both parts


class SourceRow(NamedTuple):
    """One source. Late events are those of the second part, with its own slack and with the fixed one."""

    source: int
    slack_ns: int
    first_events: int
    second_events: int
    late: int
    late_fixed: int
    late_share: float | None
    interval: tuple[float, float]
    verdict: Verdict


@dataclass(slots=True)
class Rest:
    """Sources that are not shown by themselves, together."""

    sources: int
    first_events: int
    second_events: int
    late: int
    late_fixed: int
    longest_ns: int


@dataclass(slots=True)
class AdviceBySource:
    """What each source needs, by source number, and what the ways to wait would cost. Times in ns."""

    wanted: Wanted
    idle_after_ns: int | None
    first: Part
    second: Part
    events_needed: int  # of a source in each part, for a claim on it (Wilks)
    relative_error: float
    slacks_ns: Int64s
    first_events: Int64s
    second_events: Int64s
    late: Int64s
    late_fixed: Int64s
    binding: NDArray[np.bool_]  # even the longest wait gave more late events in the first part
    ways: dict[WayName, Way]

    @property
    def judged(self) -> NDArray[np.bool_]:
        """The sources that have enough events in both parts."""
        return np.minimum(self.first_events, self.second_events) >= self.events_needed

    @property
    def recommended(self) -> WayName:
        """A slack for each source where that is held for clearly less long (or where even its slacks are shorter)."""
        fixed, steered = self.ways["fixed"], self.ways["steered"]
        one, other = fixed.hold_ns_mean, steered.hold_ns_mean
        if one is None or other is None:
            one, other = float(fixed.slack_ns), float(steered.median_ns)
        return "steered" if other < STEERING_PAYS * one else "fixed"

    def totals(self) -> tuple[int, int]:
        """Late events and events of the second part, of the sources judged, with what is recommended."""
        late = self.late if self.recommended == "steered" else self.late_fixed
        judged = self.judged
        return int(late[judged].sum()), int(self.second_events[judged].sum())

    @property
    def verdict(self) -> Verdict:
        """Of what is recommended, over all sources that can be judged; by source see `verdicts`."""
        late, events = self.totals()
        if events < JUDGED_PART * self.second.events or not events:
            return "too_short"
        binds = self.binding & self.judged
        if int(self.second_events[binds].sum()) > (1 - JUDGED_PART) * events:
            return "contradiction"
        return verdict_on(wilson(late, events, self.wanted.confidence), self.wanted.late_share)

    def verdicts(self) -> NDArray[np.int8]:
        """By source the place of its verdict in SHOWN_FIRST, with its own slack."""
        low, high = wilson_columns(self.late, self.second_events, self.wanted.confidence)
        share = self.wanted.late_share
        names: list[Verdict] = ["missed", "open", "shown"]
        missed, open_, shown = (SHOWN_FIRST.index(name) for name in names)
        found = np.where(high <= share, shown, np.where(low <= share, open_, missed))
        found = np.where(self.binding, SHOWN_FIRST.index("contradiction"), found)
        return np.where(self.judged, found, SHOWN_FIRST.index("too_short")).astype(np.int8)

    def rows(self, at_most: int) -> tuple[list[SourceRow], Rest]:
        """The sources that need somebody's attention most, and all others together.

        First by verdict, then those with the longest slack; sources without enough events for a claim come last.
        """
        heard = np.flatnonzero(self.first_events + self.second_events)
        verdicts = self.verdicts()
        # A claim that holds is no reason to be shown first: open and shown go by their slack alone.
        rank = np.array([0, 1, 2, 2, 3])[verdicts[heard]]
        order = heard[np.lexsort((heard, -self.slacks_ns[heard], rank))]
        shown, rest = order[:at_most], order[at_most:]
        rows = [self._row(number, SHOWN_FIRST[verdicts[number]]) for number in shown.tolist()]
        columns = self.first_events, self.second_events, self.late, self.late_fixed
        first, second, late, late_fixed = (int(column[rest].sum()) for column in columns)
        return rows, Rest(len(rest), first, second, late, late_fixed, int(self.slacks_ns[rest].max(initial=0)))

    def _row(self, number: int, verdict: Verdict) -> SourceRow:
        first, second = int(self.first_events[number]), int(self.second_events[number])
        late, fixed = int(self.late[number]), int(self.late_fixed[number])
        interval = wilson(late, second, self.wanted.confidence)
        share = late / second if second else None
        return SourceRow(number, int(self.slacks_ns[number]), first, second, late, fixed, share, interval, verdict)


def advise_by_source(
    blocks: Blocks, span_ns: tuple[int, int], idle_after_ns: int | None, wanted: Wanted, *, holding: bool = True
) -> AdviceBySource:
    """Choose for each source on the first part, verify on the rest, in one pass; `holding`: holds in a second one.

    Raises ValueError for what cannot be wanted, a part without events, or more sources than fit.
    """
    require_possible(wanted)
    cut_ns = cut_of(span_ns, wanted.learn_part)
    basis, sketch, judging = NewestOfEach(idle_after_ns), SketchBySource(), _Judging()
    chosen: _Chosen | None = None
    for block in blocks():
        if not len(block.times):
            continue
        assert block.sources is not None
        lateness, row = basis.add(block).lateness, block.first_row(cut_ns)
        sketch.add(block.sources[:row], lateness[:row])
        if row < len(lateness):
            chosen = _Chosen.of(sketch, wanted) if chosen is None else chosen
            judging.add(block.sources[row:], lateness[row:], chosen)
    first = Part(span_ns[0], cut_ns, int(sketch.events.sum()))
    second = Part(cut_ns, span_ns[1], int(judging.events.sum()))
    if chosen is None or not first.events or not second.events:
        raise ValueError(f"{first.events:,} events to choose on and {second.events:,} to verify on: one part is empty")
    count = len(judging.events)
    chosen.reach(count)
    found = _found(sketch, judging, chosen, wanted, (first, second))
    found.idle_after_ns = idle_after_ns
    if holding:
        _hold(blocks, found, chosen)
    return found


def _hold(blocks: Blocks, found: AdviceBySource, chosen: _Chosen) -> None:
    basis = NewestOfEach(found.idle_after_ns)
    held = {name: Hold(chosen.own if name == "steered" else way.slack_ns) for name, way in found.ways.items()}
    for block in blocks():
        if len(block.times):
            followed = Followed(block, basis.add(block), found.idle_after_ns)
            for hold in held.values():
                hold.follow(followed)
    for name, way in found.ways.items():
        way.hold_ns_mean = held[name].mean_ns


@dataclass(slots=True)
class _Chosen:
    """Slacks chosen on the first part: for each source its own, and two for all of them."""

    own: Int64s
    fixed: int
    pooled: int
    binding: NDArray[np.bool_]

    @classmethod
    def of(cls, sketch: SketchBySource, wanted: Wanted) -> _Chosen:
        longest = SLACK_NS_AT_MOST if wanted.at_most_ns is None else wanted.at_most_ns
        needed = sketch.slacks_for(wanted.late_share)
        enough = sketch.events >= wilks(1 - wanted.late_share, wanted.confidence)
        pooled = min(rounded_up(_pooled(sketch, wanted.late_share)), longest)
        fixed = min(rounded_up(int(needed[enough].max())), longest) if enough.any() else pooled
        binding = sketch.late(longest) > wanted.late_share * sketch.events
        own = np.minimum(rounded_up_column(needed), longest)
        # Too few events show nothing: such a source gets what keeps the share for all others.
        return cls(np.where(enough, own, fixed), fixed, pooled, binding)

    def reach(self, count: int) -> None:
        """A source that is first heard in the second part, likewise."""
        if count > len(self.own):
            self.own, self.binding = grown(self.own, count, self.fixed), grown(self.binding, count, False)


class _Judging:
    """Events of the second part by source, and those late with each way."""

    def __init__(self) -> None:
        self.events = self.own = self.fixed = self.pooled = np.zeros(0, dtype=np.int64)

    def add(self, sources: NDArray[np.uint32], lateness: Int64s, chosen: _Chosen) -> None:
        """Costs some 10 ns an event."""
        count = max(len(self.events), int(sources.max()) + 1, len(chosen.own))
        chosen.reach(count)
        if count > len(self.events):
            self.events, self.own, self.fixed, self.pooled = (
                grown(column, count, 0) for column in (self.events, self.own, self.fixed, self.pooled)
            )
        self.events += np.bincount(sources, minlength=count)
        behind = np.flatnonzero(lateness)
        numbers, values = sources[behind], lateness[behind]
        self.own += np.bincount(numbers[values > chosen.own[numbers]], minlength=count)
        self.fixed += np.bincount(numbers[values > chosen.fixed], minlength=count)
        self.pooled += np.bincount(numbers[values > chosen.pooled], minlength=count)


def _pooled(sketch: SketchBySource, late_share: float) -> int:
    """The least slack that keeps the share over all events of all sources."""
    counts = sketch.of_all()
    allowed = max(int(late_share * int(sketch.events.sum())) - int(sketch.never.sum()), 0)
    above = int(counts.sum()) - np.cumsum(counts)
    if int(counts.sum()) <= allowed:
        return 0
    return min(int(sketch.buckets.upper[int(np.argmax(above <= allowed))]), int(sketch.greatest.max()))


def rounded_up_column(ns: Int64s) -> Int64s:
    """`advice.rounded_up` for a column."""
    steps = _POWERS[np.maximum(np.searchsorted(_POWERS, ns, side="right") - DIGITS, 0)]
    found: Int64s = -(-ns // steps) * steps
    return found


def _found(
    sketch: SketchBySource, judging: _Judging, chosen: _Chosen, wanted: Wanted, parts: tuple[Part, Part]
) -> AdviceBySource:
    count = len(chosen.own)
    first_events = grown(sketch.events, count, 0)
    needed = wilks(1 - wanted.late_share, wanted.confidence)
    enough = np.minimum(first_events, judging.events) >= needed
    own = chosen.own[enough] if enough.any() else chosen.own[first_events + judging.events > 0]
    ways: dict[WayName, Way] = {}
    slacks: list[tuple[WayName, Int64s, Int64s]] = [
        ("pooled", np.array([chosen.pooled]), judging.pooled),
        ("fixed", np.array([chosen.fixed]), judging.fixed),
        ("steered", own, judging.own),
    ]
    for name, column, late in slacks:
        low, _ = wilson_columns(late[enough], judging.events[enough], wanted.confidence)
        above = int(np.count_nonzero(low > wanted.late_share))
        spread = int(column.max()), int(np.median(column)), int(column.min())
        ways[name] = Way(name, *spread, int(late.sum()), above)
    return AdviceBySource(
        wanted=wanted,
        idle_after_ns=None,
        first=parts[0],
        second=parts[1],
        events_needed=needed,
        relative_error=sketch.relative_error,
        slacks_ns=chosen.own,
        first_events=first_events,
        second_events=judging.events,
        late=judging.own,
        late_fixed=judging.fixed,
        binding=chosen.binding,
        ways=ways,
    )

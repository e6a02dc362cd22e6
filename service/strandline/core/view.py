"""What observers see of a feed: plain values, taken from the state without changing it.

Who holds the feed, and why, is judged here; HTTP, metrics and the dashboard only render it.
"""

from __future__ import annotations

from dataclasses import asdict, dataclass
from functools import partial

import numpy as np

from .columns import NO_SOURCE, TIME_MIN, Lane
from .outbox import LANES
from .records import ActRecord, Cause
from .settings import SECOND_NS
from .slack import FixedSlack, SteeredSlack
from .slack_by_source import OwnSteering, SteeredBySource, SteeredSources
from .state import State

# Why a feed is held, in words for a person, with what to do where something can be done. The keys are stable.
HOLD_WHYS: dict[str, str] = {
    "nothing_held": "nothing is held",
    "slack": "waiting out the slack behind the newest event; a shorter slack would shorten it",
    "slack_set": "waiting out the slack that an operator has set for a time; it can be ended early",
    "slow_source": "this source is the one furthest behind; if its backlog may come late, excuse it",
    "promised_source": "this source is furthest behind, by its promise; it holds until it promises more or sends",
    "expected_source": "this expected source has not been heard yet; start it, or excuse it until it speaks",
    "silent_source": "this source has fallen silent and is not idle yet; if it will not be back soon, excuse it",
    "all_silent": "no source is waited for; what is held drains at hold_at_most, or at once if you release it now",
    "hold_at_most": "this source is so far behind that hold_at_most goes past it: what it still sends comes late; mend "
    "its link, or excuse it",
    "sink_full": "too much is released and not yet taken by this sink; mend its store",
    "sink_paused": "too much is released and not yet taken by this sink, which is paused; resume it",
    "stopped": "the service was stopped or restarted in this time; what was held waited for it",
}


@dataclass(frozen=True, slots=True)
class Hold:
    """What keeps the watermark from moving."""

    source: int  # NO_SOURCE if no single one
    why: str  # a key of HOLD_WHYS
    since_ns: int  # arrival clock since when this source holds for this reason
    sink: str = ""  # where a sink holds it
    idle_ns: int | None = None  # arrival clock at which this source will be waited for no more, if it stays silent


@dataclass(frozen=True, slots=True)
class LaneView:
    """One lane towards one sink."""

    taken: int
    waiting_batches: int
    waiting_events: int
    oldest_ns: int | None  # arrival clock at which the oldest waiting batch became final


@dataclass(frozen=True, slots=True)
class View:
    """A feed at one moment. Times in ns since 1970 UTC; TIME_MIN stands for "not yet"."""

    name: str
    now_ns: int
    clock: str
    order: str  # "feed" or "source"; with "source" the watermark is that of the source furthest behind
    watermark_ns: int
    marked_ns: int
    cause: str
    slack_ns: int  # in force
    slack_set: ActRecord | None  # the act that set it, where an operator did for a time
    paused: dict[str, ActRecord]  # by sink
    newest_ns: int
    hold: Hold
    hold_source: str | None
    held_events: int
    held_oldest_ns: int | None
    open_runs: list[int]
    ledger: dict[str, int]
    balance: int
    sources: int
    sources_active: int
    sources_idle: int
    next_number: dict[Lane, int]
    undelivered_events: int
    sinks: dict[str, dict[Lane, LaneView]]
    marks: dict[str, int]
    arrivals: int
    comparisons: int
    copies: int
    gallops: int
    merges: int
    refusals: dict[str, int]
    identities_known: int
    keys_kept: int
    steering: Steering | None
    promises_broken: int  # events that came older than their source had promised
    promises_broken_by: str | None  # the source that broke most


@dataclass(frozen=True, slots=True)
class Steering:
    """A steered slack: the wanted share of late events, the shares reached, and how sure they are."""

    target: float
    at_most_ns: int
    at_least_ns: int
    share_minute: float | None
    share_hour: float | None
    share_begun: float | None  # since the feed began
    share_stretch: float | None  # since eta last changed; within `bound` of the target, whatever comes
    bound: float | None
    warming_up: bool
    binding: bool  # target and longest wait contradict each other
    attainable: float  # the share that the longest wait can give
    by_source: SteeredSources | None = None  # where each source has a slack of its own: then no bound for all of them
    binding_most: str | None = None  # then the source that the longest wait suits least


def hold_of(state: State, now_ns: int) -> Hold:
    """Who holds the feed at an instant not before the state's last record, and since when."""
    (why, source, sink), since_ns = state.holds.at(now_ns)
    idle_ns = None
    if source != NO_SOURCE and state.sources.active[source]:
        idle_ns = int(state.sources.heard[source]) + state.settings.idle_after_ns
    return Hold(source, why, since_ns, sink, idle_ns)


def view_of(state: State, now_ns: int, refusals: dict[str, int]) -> View:
    """The feed at this moment."""
    counts, hold = state.merger.counts, hold_of(state, now_ns)
    return View(
        name=state.settings.name,
        now_ns=now_ns,
        clock=state.settings.clock,
        order="feed" if state.own is None else "source",
        watermark_ns=state.watermark_ns,
        marked_ns=state.marked_ns,
        cause=state.cause.name.lower(),
        slack_ns=state.slack_ns,
        slack_set=state.acts.slack_set,
        paused=dict(state.acts.paused),
        newest_ns=state.sources.newest_ns,
        hold=hold,
        hold_source=None if hold.source == NO_SOURCE else state.sources.names[hold.source],
        held_events=state.runs.held,
        held_oldest_ns=state.arrivals.oldest_ns,
        open_runs=state.runs.lengths(),
        ledger=asdict(state.ledger),
        balance=state.ledger.balance(),
        sources=len(state.sources.names),
        sources_active=state.sources.active_count(),
        sources_idle=state.sources.idle_count(),
        next_number=dict(state.outbox.next_number),
        undelivered_events=state.outbox.undelivered_events,
        sinks={name: _lanes(state, name) for name in state.outbox.positions},
        marks={cause.name.lower(): state.figures.marks_by_cause[cause] for cause in Cause},
        arrivals=state.figures.arrivals,
        comparisons=counts.comparisons + state.runs.comparisons,
        copies=counts.copies,
        gallops=counts.gallops,
        merges=counts.merges,
        refusals=refusals,
        identities_known=state.seen.known,
        keys_kept=len(state.keys.kept),
        steering=_steering(state, now_ns),
        promises_broken=state.sources.broken_events,
        promises_broken_by=_breaker(state),
    )


def _breaker(state: State) -> str | None:
    if not state.sources.broken_events:
        return None
    return state.sources.names[int(state.sources.broken.argmax())]


def _steering(state: State, now_ns: int) -> Steering | None:
    slack = state.slack
    if isinstance(slack, FixedSlack):
        return None
    steering = partial(
        Steering,
        target=slack.target,
        at_most_ns=slack.at_most_ns,
        at_least_ns=slack.at_least_ns,
        share_minute=slack.share_since(now_ns - 60 * SECOND_NS),
        share_hour=slack.share_since(now_ns - 3600 * SECOND_NS),
        share_begun=slack.late / slack.events if slack.events else None,
    )
    if isinstance(slack, SteeredSlack):
        stretch = slack.stretch
        return steering(
            share_stretch=stretch.late / stretch.events if stretch is not None and stretch.events else None,
            bound=slack.bound,
            warming_up=stretch is None,
            binding=slack.binding,
            attainable=slack.attainable,
        )
    # All sources together; attainable is what the one gets that the longest wait suits least, if there is one.
    seen = slack.together(len(state.sources.names))
    of_all = state.lateness.sketch.late_share(slack.at_most_ns).at_least
    return steering(
        share_stretch=None,
        bound=None,
        warming_up=seen.warming_up == len(state.sources.names),
        binding=bool(seen.binding),
        attainable=of_all if seen.attainable is None else seen.attainable,
        by_source=seen,
        binding_most=None if seen.binding_source is None else state.sources.names[seen.binding_source],
    )


def _lanes(state: State, sink: str) -> dict[Lane, LaneView]:
    views: dict[Lane, LaneView] = {}
    for lane in LANES:
        if lane not in state.outbox.positions[sink]:
            continue
        waiting = list(state.outbox.waiting(sink, lane))
        oldest = waiting[0].instant_ns if waiting else None
        views[lane] = LaneView(state.outbox.positions[sink][lane], len(waiting), sum(map(len, waiting)), oldest)
    return views


@dataclass(frozen=True, slots=True)
class SourceView:
    """One source at one moment."""

    name: str
    newest_ns: int | None
    heard_ns: int | None
    active: bool
    excused: bool
    promised_ns: int | None
    promises_broken: int
    watermark_ns: int | None  # its own, where it has one
    slack_ns: int | None = None  # in force, and how it is steered: where each source has a slack of its own
    steering: OwnSteering | None = None


def sources_of(state: State, after: int, limit: int) -> list[SourceView]:
    """Sources by number, from `after` on, at most `limit`."""
    stop = min(len(state.sources.names), after + limit)
    sources, slack = state.sources, state.slack
    own = slack.seen(after, stop) if isinstance(slack, SteeredBySource) and after < stop else None
    return [
        SourceView(
            sources.names[number],
            _known(sources.newest[number]),
            _known(sources.heard[number]),
            bool(sources.active[number]),
            bool(sources.excused[number]),
            _known(sources.promised[number]),
            int(sources.broken[number]),
            None if state.own is None else _known(state.own.at[number]),
            None if own is None else _in_force(state, own[number - after]),
            None if own is None else own[number - after],
        )
        for number in range(after, stop)
    ]


def _in_force(state: State, own: OwnSteering) -> int:
    return own.slack_ns if state.acts.slack_set is None else state.slack_ns


def _known(value: np.int64) -> int | None:
    return None if value == TIME_MIN else int(value)

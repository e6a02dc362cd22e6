"""What a report is made of, read from a running feed: `look` takes copies at one instant, `facts_of` works them out.

`look` runs on the event loop and changes nothing; `facts_of` may run in a thread: it reads the late lane's file.
Measured with 10,000 holds kept and a day of history: 22 ms and 0.14 s.
"""

from __future__ import annotations

import logging
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from ..core.acts import ACTS_AT_MOST
from ..core.columns import NO_SOURCE, TIME_MIN
from ..core.holds import Held
from ..core.records import ActRecord
from ..core.view import View
from ..dashboard.history import SECOND_NS, SINKS, Rows, merged, starts_of
from ..dashboard.sampling import BOOKS, FeedMemory
from ..errors import StrandlineError
from ..hops import HOPS
from ..sinks.delivery import DeliveryState
from ..sinks.lane_summary import late_sums, refused_sums
from ..sinks_of import LANE_STORE
from .bursts import late_of
from .delays import Behind
from .facts import (
    Act,
    Acts,
    Books,
    Count,
    Facts,
    Failing,
    Hold,
    Late,
    LateSource,
    RefusedRows,
    Series,
    SinkState,
    Trouble,
    tenth,
)
from .holding import Rules, holds_of

log = logging.getLogger(__name__)
POINTS_AT_MOST = 1500
ACTS_LISTED_AT_MOST, FAILING_AT_MOST = 200, 100
OWN_SINK = "lanes, the service's own"  # keeps the late lane and the quarantine


@dataclass(frozen=True, slots=True)
class Look:
    """A feed at one instant, as far as a report needs it: copies, which nothing changes any more."""

    view: View
    from_ns: int
    to_ns: int
    idle_after_ns: int
    hold_at_most_ns: int
    held: list[Held]
    names: dict[int, str]
    acts: list[ActRecord]
    sinks: list[DeliveryState]
    step_ns: int
    rows: Rows  # of the history, from the time's begin up to now
    sampled: dict[str, int]  # the books that the rows lead up to
    recognises_repeats: bool
    failure: str | None
    lanes_file: Path
    partition: bool
    since_ns: int  # nothing is remembered of what was before
    flush_after_ns: int  # the longest that a sink of the feed keeps what it took before it completes it, as configured


def look(memory: FeedMemory, from_ns: int, to_ns: int) -> Look:
    """Take what is known of a time; `to_ns` is no later than now."""
    runtime = memory.runtime
    state, view = runtime.feed.state, runtime.view()
    held = list(state.holds.history(view.now_ns))
    step_ns, rows = memory.history.tail(from_ns)
    return Look(
        view=view,
        from_ns=from_ns,
        to_ns=to_ns,
        idle_after_ns=state.settings.idle_after_ns,
        hold_at_most_ns=state.settings.hold_at_most_ns,
        held=held,
        names={each.source: state.sources.names[each.source] for each in held if each.source != NO_SOURCE},
        acts=list(state.acts.kept),
        sinks=[delivery.state() for delivery in runtime.deliveries.values()],
        step_ns=step_ns,
        rows=rows,
        sampled=memory.books,
        recognises_repeats=runtime.config.id is not None,
        failure=runtime.failure,
        lanes_file=runtime.lanes_file,
        partition=runtime.config.partitions is not None,
        since_ns=memory.since_ns,
        flush_after_ns=round(max((each.flush_after_s for each in runtime.deliveries.values()), default=0.0) * 1e9),
    )


def facts_of(seen: Look) -> Facts:
    """Work it out. Blocking."""
    from_ns, to_ns = tenth(seen.from_ns), tenth(seen.to_ns)
    series = _series(seen)
    known_since_ns = tenth(seen.held[0].from_ns) if seen.held else None
    rules = Rules(seen.idle_after_ns, seen.hold_at_most_ns)
    behind = Behind(series)
    holds = holds_of(_holds(seen), from_ns, to_ns, known_since_ns, rules, behind.fallen)
    steering = seen.view.steering
    return Facts(
        feed=seen.view.name,
        made_ns=seen.view.now_ns,
        from_ns=from_ns,
        to_ns=to_ns,
        idle_after_ns=seen.idle_after_ns,
        hold_at_most_ns=seen.hold_at_most_ns,
        late_share_target=None if steering is None else steering.target,
        holds=holds,
        series=series,
        delays=[behind.delay(stall) for stall in holds.stalls],
        books=_books(seen),
        late=_late(seen),
        trouble=_trouble(seen),
        acts=_acts(seen),
        partition=seen.partition,
    )


def _holds(seen: Look) -> list[Hold]:
    return [
        Hold(
            why=each.why,
            source=seen.names.get(each.source),
            sink=each.sink or None,
            from_ns=each.from_ns,
            to_ns=seen.view.now_ns if each.to_ns is None else each.to_ns,
        )
        for each in seen.held
    ]


def _within(seen: Look) -> Rows:
    """Steps of the time that is asked for. A coarse one may begin in it, and the memory itself only after it."""
    return seen.rows[(seen.rows["t_ns"] < seen.to_ns) & (seen.since_ns <= seen.to_ns)]


def _series(seen: Look) -> Series:
    rows, step_ns = _within(seen), seen.step_ns
    factor = 1 + (len(rows) - 1) // POINTS_AT_MOST if len(rows) else 1
    if factor > 1:
        groups = rows["t_ns"] // (step_ns * factor)
        starts = starts_of(groups)
        rows, step_ns = merged(rows, starts), step_ns * factor
    oldest = {name: rows["oldest_ns"][:, place].tolist() for place, name in enumerate(HOPS)}
    behind = [
        None if TIME_MIN in (newest, watermark) else max(0, newest - watermark)
        for newest, watermark in zip(rows["newest_ns"].tolist(), rows["watermark_ns"].tolist(), strict=True)
    ]
    return Series(
        step_ns=step_ns,
        since_ns=_since_ns(seen, int(rows["t_ns"][0])) if len(rows) else None,
        t_ns=rows["t_ns"].tolist(),
        behind_ns=behind,
        waited_ns=oldest["runs"],
        slack_ns=rows["slack_ns"].tolist(),
        late=rows["late"].tolist(),
        refused=rows["refused"].tolist(),
        unsynced_ns=oldest["journal"],
        undelivered_ns=[max(0, waited_ns - seen.flush_after_ns) for waited_ns in oldest["sinks"]],
        balanced=bool(rows["balanced"].all()),
    )


def _since_ns(seen: Look, first_ns: int) -> int:
    """The first step's begin, or when the memory itself begins within it: a coarse step may lie before that."""
    return max(first_ns, seen.since_ns // SECOND_NS * SECOND_NS)


def _books(seen: Look) -> Books:
    """What rows tell was counted in them; so the books at a step's begin are those of now without what came since."""
    rows, view = seen.rows, seen.view
    begin = end = None
    inside = _within(seen)
    if len(inside):
        begin = _count(seen, rows, int(rows["t_ns"][0]))
        after = rows[len(inside) :]
        end = _count(seen, after, int(after["t_ns"][0])) if len(after) else _now(view)
    return Books(begin=begin, end=end, balance=view.balance, recognises_repeats=seen.recognises_repeats)


def _count(seen: Look, since: Rows, at_ns: int) -> Count:
    return Count(at_ns=at_ns, **{name: seen.sampled[name] - int(since[name].sum()) for name in BOOKS})


def _now(view: View) -> Count:
    return Count(at_ns=view.now_ns, **{name: view.ledger[name] for name in BOOKS})


def _late(seen: Look) -> Late | None:
    try:
        sums = late_sums(seen.lanes_file, seen.from_ns, seen.to_ns)
    except StrandlineError as error:
        log.warning("%s: a report is made without late events: %s", seen.view.name, error)
        return None
    totals = (LateSource(**each._asdict()) for each in sums.totals)
    return late_of(totals, sums.seconds, complete=sums.complete)


def _trouble(seen: Look) -> Trouble:
    failing = _failing(seen)
    rows = _within(seen)
    return Trouble(
        failing=failing[-FAILING_AT_MOST:],
        unlisted_failing=len(failing[:-FAILING_AT_MOST]),
        sinks=[
            SinkState(
                sink=_sink_name(state.sink),
                failing_since_ns=state.failing_since_ns,
                last_error=state.last_error,
                paused=state.paused,
                waiting_events=sum(lane.events for lane in state.lanes.values()),
            )
            for state in seen.sinks
        ],
        refused_rows=_refused(seen),
        refused_requests=int(rows["refused"].sum()) if len(rows) else None,
        refusals_since_start=seen.view.refusals,
        failure=seen.failure,
    )


def _sink_name(name: str) -> str:
    return OWN_SINK if name == LANE_STORE else name


def _failing(seen: Look) -> list[Failing]:
    """Neighbouring samples in which a sink failed are one stretch."""
    rows, found = _within(seen), list[Failing]()
    t_ns = rows["t_ns"].tolist()
    names = [_sink_name(state.sink) for state in seen.sinks]
    names = [*names[: SINKS - 1], "or sinks: " + ", ".join(names[SINKS - 1 :])] if len(names) > SINKS else names
    for place, name in enumerate(names[:SINKS]):
        marks = np.concatenate(([False], rows["failing"][:, place], [False])).astype(np.int8)
        begins, ends = (np.flatnonzero(np.diff(marks) == change).tolist() for change in (1, -1))
        for first, past in zip(begins, ends, strict=True):
            goes_on = past == len(t_ns) and past == len(seen.rows)
            end_ns = min(t_ns[past - 1] + seen.step_ns, tenth(seen.to_ns))
            found.append(Failing(sink=name, from_ns=t_ns[first], to_ns=end_ns, goes_on=goes_on))
    return sorted(found, key=lambda each: (each.from_ns, each.sink))


def _refused(seen: Look) -> list[RefusedRows] | None:
    try:
        found = refused_sums(seen.lanes_file, seen.from_ns, seen.to_ns)
    except StrandlineError as error:
        log.warning("%s: a report is made without refused events: %s", seen.view.name, error)
        return None
    return [RefusedRows(sink=sink, events=events, detail=detail) for sink, events, detail in found]


def _acts(seen: Look) -> Acts:
    inside: Sequence[ActRecord] = [act for act in seen.acts if seen.from_ns <= act.now_ns < seen.to_ns]
    listed = [
        Act(
            at_ns=act.now_ns,
            act=act.act,
            subject=act.subject,
            who=act.who,
            reason=act.reason,
            until_ns=act.until_ns,
            slack_ns=act.slack_ns,
        )
        for act in inside[-ACTS_LISTED_AT_MOST:]
    ]
    forgotten = len(seen.acts) == ACTS_AT_MOST
    known = seen.acts[0].now_ns if forgotten else None
    return Acts(listed=listed, unlisted=len(inside) - len(listed), known_since_ns=known)

"""Facts of invented incidents for tests of the report: an hour of a feed of river gauges, and what may happen in it."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any

from strandline.reporting.bursts import late_of
from strandline.reporting.delays import Behind
from strandline.reporting.facts import Act, Acts, Books, Count, Facts, Hold, Late, LateSource, Series, Trouble
from strandline.reporting.holding import Rules, holds_of
from strandline.sinks.lane_summary import LateSecond

SECOND = 1_000_000_000
BEGIN_NS = 1_777_604_400 * SECOND  # 2026-05-01 03:00:00 UTC
HOUR_NS = 3600 * SECOND
SLACK_NS = 5 * SECOND
RULES = Rules(idle_after_ns=60 * SECOND, hold_at_most_ns=120 * SECOND)


def at(seconds: float) -> int:
    """An instant in the hour."""
    return BEGIN_NS + round(seconds * SECOND)


def hold(why: str, begin: float, end: float, source: str | None = None, sink: str | None = None) -> Hold:
    """A hold from one second of the hour to another."""
    return Hold(why=why, source=source, sink=sink, from_ns=at(begin), to_ns=at(end))


def series(
    behind: Callable[[int], float] = lambda second: 5.0, *, since: int = 0, until: int = 3600, step: int = 10
) -> Series:
    """Steps in which the output is so many seconds behind."""
    seconds = range(since, until, step)
    nothing = [0] * len(seconds)
    behind_ns = [round(behind(second) * SECOND) for second in seconds]
    return Series(
        step_ns=step * SECOND,
        since_ns=at(since) if seconds else None,
        t_ns=[at(second) for second in seconds],
        behind_ns=list(behind_ns),
        waited_ns=behind_ns,
        slack_ns=[SLACK_NS] * len(seconds),
        late=nothing,
        refused=nothing,
        unsynced_ns=nothing,
        undelivered_ns=nothing,
        balanced=True,
    )


def books(released: int = 7200, late: int = 0, held: int = 10, **more: Any) -> Books:
    """An hour in which so many were released and late."""
    received = 1000 + released + late + held
    return Books(
        begin=Count(at_ns=at(0), received=1010, released=1000, late=0, duplicate=0, quarantined=0),
        end=Count(at_ns=at(3600), received=received, released=1000 + released, late=late, duplicate=0, quarantined=0),
        balance=0,
        recognises_repeats=more.get("recognises_repeats", True),
    )


def no_trouble(**more: Any) -> Trouble:
    """A journal and sinks that work."""
    found: dict[str, Any] = {
        "failing": [], "unlisted_failing": 0, "sinks": [], "refused_rows": [], "refused_requests": 0,
        "refusals_since_start": {}, "failure": None,
    }  # fmt: skip
    return Trouble(**(found | more))


def late_events(*bursts: tuple[str | None, int, float, float, float]) -> Late:
    """Bursts of (source, events, from, to, late by at most, in seconds), one of each source."""
    seconds = [
        LateSecond(source, events, at(begin), at(end), SECOND, round(by * SECOND))
        for source, events, begin, end, by in sorted(bursts, key=lambda burst: burst[0] or "")
    ]
    totals = [
        LateSource(
            source=each.source,
            events=each.events,
            from_ns=each.from_ns,
            to_ns=each.to_ns,
            late_by_most_ns=each.late_by_most_ns,
        )
        for each in seconds
    ]
    return late_of(totals, seconds, complete=True)


def incident(
    holds: Sequence[Hold] = (),
    *,
    steps: Series | None = None,
    known_since: float = -7200,
    acts: Sequence[Act] = (),
    **more: Any,
) -> Facts:
    """The facts of the hour. `holds` are those that are not of waiting out the slack."""
    steps = series() if steps is None else steps
    known, before = list[Hold](), known_since
    for each in sorted(holds, key=lambda one: one.from_ns):
        begin = (each.from_ns - BEGIN_NS) / SECOND
        if begin > before:
            known.append(hold("slack", before, begin))
        known.append(each)
        before = (each.to_ns - BEGIN_NS) / SECOND
    if before < 3600:
        known.append(hold("slack", before, 3600))

    behind = Behind(steps)
    found = holds_of(known, at(0), at(3600), at(known_since), RULES, behind.fallen)
    given: dict[str, Any] = {
        "feed": "river-gauges", "made_ns": at(3700), "from_ns": at(0), "to_ns": at(3600),
        "idle_after_ns": 60 * SECOND, "hold_at_most_ns": 120 * SECOND, "late_share_target": None,
        "holds": found, "series": steps, "delays": [behind.delay(stall) for stall in found.stalls], "books": books(),
        "late": late_events(), "trouble": no_trouble(),
        "acts": Acts(listed=list(acts), unlisted=0, known_since_ns=None),
    }  # fmt: skip
    return Facts(**(given | more))


# A gateway falls silent at 03:12:05, is excused at 03:14:40, and is back with its backlog at 03:20:00.
FALLS_SILENT = [
    hold("slow_source", 725, 740, "gw-2"),
    hold("silent_source", 740, 785, "gw-2"),
    hold("hold_at_most", 785, 880, "gw-2"),
]
EXCUSE = Act(at_ns=at(880), act="excuse", subject="gw-2", who="night shift", reason="its mast has no mains")


def silent_gateway(**more: Any) -> Facts:
    """What came of it."""

    def behind(second: int) -> float:
        return 5.0 + max(0, min(second, 845) - 725) if second < 880 else 5.0

    given: dict[str, Any] = {
        "steps": series(behind),
        "acts": [EXCUSE],
        "late": late_events(("gw-2", 212, 1200, 1201, 475), ("gw-3", 8, 1300, 1302.5, 3)),
        "books": books(late=220),
    }
    return incident(FALLS_SILENT, **(given | more))

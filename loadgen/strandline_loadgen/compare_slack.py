"""`python -m strandline_loadgen.compare_slack`: the steered slack beside other ways to choose one, on the same feeds.

Four ways: the slack that is steered towards a late share (`strandline.core.slack`, the code that runs in the service);
the best fixed slack chosen in hindsight, which nobody can have; the fixed slack that was best on the first tenth; and
"the largest lateness so far", the rule that is published with the buffer that bears the slack's name (time K-slack).
Each feed is run through one event an arrival, watermark = newest event time - slack, never back. All are judged on the
last nine tenths of the feed: so warm-up and choice are nobody's cost. Nothing here is timed.
"""

from __future__ import annotations

import argparse
import json
import sys
from collections.abc import Callable, Iterable, Sequence
from dataclasses import asdict, dataclass

import numpy as np
from numpy.typing import NDArray
from strandline.core.slack import SteeredSlack

from .flights import flights
from .shapes import START_NS, shape
from .trace import Trace, join

Int64s = NDArray[np.int64]
Floats = NDArray[np.float64]

SECOND_NS = 1_000_000_000
TARGETS = (0.05, 0.01, 0.001)
LEARN_PART = 0.1
SEED = 1
EVENTS = 200_000
EVENTS_AT_MOST = 10_000_000  # some 4 us an event and target
LONGEST_NS = 3600 * SECOND_NS
FLIGHTS_LONGEST_NS = 3000 * 60 * SECOND_NS
DRIFT_MEANS_S = (0.5, 1.0, 2.0, 4.0, 8.0, 4.0, 2.0, 1.0)
SHAPES = ("jitter", "exponential", "heavy_tail", "bursty_gateways", "outage_and_catch_up", "slow_source", "low_tide")
FEEDS = (*SHAPES, "drifting", "flights")


@dataclass(frozen=True, slots=True)
class Outcome:
    """What one way gave over the judged part. Times in s; the hold is the mean of the events that were in time."""

    late_share: float
    slack_s: float
    slack_s_max: float
    hold_s: float


@dataclass(frozen=True, slots=True)
class Compared:
    """All four ways on one feed at one target; and what the steered one promised for its last stretch."""

    feed: str
    target: float
    events: int
    steered: Outcome
    hindsight: Outcome
    first_tenth: Outcome
    largest: Outcome
    stretch_share: float | None  # None: no event since the last stretch began
    stretch_bound: float | None
    stretches: int


def drifting(events: int, seed: int) -> Trace:
    """Exponential delays whose mean doubles step by step from 0.5 s to 8 s and halves again: eight equal parts."""
    parts, start_ns = [], START_NS
    for number, mean_s in enumerate(DRIFT_MEANS_S):
        count = events * (number + 1) // len(DRIFT_MEANS_S) - events * number // len(DRIFT_MEANS_S)
        part = shape("exponential", count, seed + number, mean_s=mean_s, start_ns=start_ns)
        start_ns = int(part.times.max(initial=start_ns))
        parts.append(part)
    return join("drifting", parts)


def feed(name: str, events: int, seed: int) -> tuple[Trace, int]:
    """A feed by name, and the longest wait that steering may use on it. Raises ValueError for another name."""
    if name == "flights":
        return flights(), FLIGHTS_LONGEST_NS
    return drifting(events, seed) if name == "drifting" else shape(name, events, seed), LONGEST_NS


class Course:
    """One feed, one event an arrival, by the event clock: what any course of the slack does to it."""

    def __init__(self, trace: Trace) -> None:
        """Raises ValueError for fewer events than anything can be judged on."""
        if len(trace) < 1000:
            raise ValueError(f"{len(trace)} events are too few to judge a slack on; take 1,000 or more")
        self.trace = trace
        self.newest: Int64s = np.maximum.accumulate(trace.times)  # after each arrival
        before = np.append(trace.times[0], self.newest[:-1])
        self.lateness: Int64s = np.maximum(before - trace.times, 0)
        self.cut = round(len(trace) * LEARN_PART)

    def fixed(self, slack_ns: int) -> Outcome:
        """A slack that stays."""
        return self.outcome(np.full(len(self.trace), float(slack_ns)))

    def least(self, target: float, rows: slice) -> int:
        """The least slack that keeps the target on these rows, exactly."""
        ordered = np.sort(self.lateness[rows])
        return int(ordered[len(ordered) - 1 - int(target * len(ordered))])

    def largest_so_far(self) -> Outcome:
        """The slack is the greatest lateness up to now, the present event's included."""
        return self.outcome(np.maximum.accumulate(self.lateness).astype(np.float64))

    def steered(self, target: float, longest_ns: int) -> tuple[Outcome, SteeredSlack]:
        """The slack that is steered; also as it was left."""
        slack = SteeredSlack(target, longest_ns)
        courses, watermark = [], -(2**62)
        columns = zip(self.trace.times.tolist(), self.trace.arrivals.tolist(), self.newest.tolist(),
                      self.lateness.tolist(), strict=True)  # fmt: skip
        for time, now, newest, lateness in columns:
            behind = np.array([lateness], dtype=np.int64) if lateness else None
            slack.learn(now, 1, int(time < watermark), behind)
            watermark = max(watermark, newest - slack.slack_ns)
            courses.append(slack.slack_ns)
        return self.outcome(np.array(courses, dtype=np.float64)), slack

    def outcome(self, slacks_ns: Floats) -> Outcome:
        """What the slack after each arrival gave over the judged part."""
        watermark = np.maximum.accumulate(self.newest - np.rint(slacks_ns).astype(np.int64))
        times, arrivals, cut = self.trace.times, self.trace.arrivals, self.cut
        late = times[cut:] < watermark[cut - 1 : -1]
        # Held until the arrival with which the watermark reaches it; what nothing reaches any more is not counted.
        reached = np.maximum(np.searchsorted(watermark, times[cut:]), np.arange(cut, len(times)))
        counted = ~late & (reached < len(times))
        holds = arrivals[reached[counted]] - arrivals[cut:][counted]
        judged = slacks_ns[cut - 1 : -1]  # the slack that stood when each judged event arrived
        return Outcome(
            float(late.mean()),
            float(judged.mean()) / SECOND_NS,
            float(judged.max()) / SECOND_NS,
            float(holds.mean()) / SECOND_NS if len(holds) else 0.0,
        )


def compare(name: str, trace: Trace, target: float, longest_ns: int) -> Compared:
    """The four ways on one feed. Raises ValueError for a share that is none, or a feed that is too short."""
    if not 0 < target < 1:
        raise ValueError(f"a late share lies between 0 and 1, not at {target}")
    course = Course(trace)
    steered, slack = course.steered(target, longest_ns)
    stretch = slack.stretch
    return Compared(
        feed=name,
        target=target,
        events=len(trace) - course.cut,
        steered=steered,
        hindsight=course.fixed(course.least(target, slice(course.cut, None))),
        first_tenth=course.fixed(course.least(target, slice(course.cut))),
        largest=course.largest_so_far(),
        stretch_share=stretch.late / stretch.events if stretch is not None and stretch.events else None,
        stretch_bound=slack.bound,
        stretches=slack.stretches,
    )


# ---- the table ------------------------------------------------------------------------------------------------------

HEAD = ("feed", "target", "steered", "best in hindsight", "best on the first tenth", "largest lateness so far")


def figure(value: float) -> str:
    """Three digits, without an exponent."""
    return f"{value:.0f}" if value >= 100 else f"{value:.3g}" if value >= 1e-4 or not value else f"{value:.1e}"


def cell(outcome: Outcome, unit_s: float) -> str:
    """Late share; mean slack (largest); mean hold."""
    slack, largest, hold = (seconds / unit_s for seconds in (outcome.slack_s, outcome.slack_s_max, outcome.hold_s))
    steady = outcome.slack_s_max <= outcome.slack_s * (1 + 1e-9)
    waits = figure(slack) if steady else f"{figure(slack)} ({figure(largest)})"
    return f"{figure(outcome.late_share)}; {waits}; {figure(hold)}"


def row(found: Compared) -> str:
    """One line of the table; flights in minutes, all else in seconds."""
    unit, unit_s = ("min", 60.0) if found.feed == "flights" else ("s", 1.0)
    ways = (found.steered, found.hindsight, found.first_tenth, found.largest)
    return f"| {found.feed}, {unit} | {found.target:g} | " + " | ".join(cell(way, unit_s) for way in ways) + " |"


def table(rows: Iterable[Compared]) -> Iterable[str]:
    """The table's lines, as each is found."""
    yield "| " + " | ".join(HEAD) + " |"
    yield "|" + "---|" * len(HEAD)
    for found in rows:
        yield row(found)


def compared(names: Sequence[str], targets: Sequence[float], events: int, seed: int) -> Iterable[Compared]:
    """All feeds at all targets."""
    for name in names:
        trace, longest_ns = feed(name, events, seed)
        for target in targets:
            yield compare(name, trace, target, longest_ns)


def main(arguments: Sequence[str] | None = None, say: Callable[[str], object] = print) -> int:
    """The command. Exit 0, or 2 for wrong use."""
    parser = argparse.ArgumentParser(prog="python -m strandline_loadgen.compare_slack", description=__doc__)
    parser.add_argument("feeds", nargs="*", metavar="FEED", help=f"some of {', '.join(FEEDS)} (all)")
    parser.add_argument("--target", type=float, action="append", help="a late share; may be repeated (.05 .01 .001)")
    parser.add_argument("--events", type=int, default=EVENTS, help=f"events of each invented feed ({EVENTS:,})")
    parser.add_argument("--seed", type=int, default=SEED)
    parser.add_argument("--json", action="store_true", help="one JSON object a row instead of the table")
    given = parser.parse_args(arguments)
    unknown = sorted(set(given.feeds) - set(FEEDS))
    if unknown or not 1000 <= given.events <= EVENTS_AT_MOST:
        wrong = f"there is no feed {unknown[0]!r}" if unknown else f"--events is {given.events}"
        print(f"{wrong}; feeds are {', '.join(FEEDS)}, events 1,000 to {EVENTS_AT_MOST:,}", file=sys.stderr)
        return 2
    try:
        rows = compared(given.feeds or FEEDS, given.target or TARGETS, given.events, given.seed)
        for line in (json.dumps(asdict(found)) for found in rows) if given.json else table(rows):
            say(line)
    except ValueError as error:
        print(error, file=sys.stderr)
        return 2
    return 0


if __name__ == "__main__":
    sys.exit(main())

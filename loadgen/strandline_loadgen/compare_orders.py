"""What it costs to keep order within each source instead of over the whole feed, both over the same bodies in one run.

    python -m strandline_loadgen.compare_orders [--sources 100000] [--held 1000000] [--body 5000] [--skew-s 0]
    python -m strandline_loadgen.compare_orders --steered      # a steered slack against a fixed one, by source

Body in, ordered bytes out, as `bench/path.py` has it: the service's decoder, the core, a journal in memory. Every
source speaks in turn, in an order drawn anew for each turn, up to 0.3 s late. Only requests after the feed has filled
up count. With `--skew-s` sources stand up to so far apart, which only `order = "source"` is measured with then. With
`--steered` both feeds keep order by source; one steers each source's slack, between limits that are the fixed slack of
the other, so that both hold the same events.
"""

from __future__ import annotations

import argparse
import statistics
import time
from dataclasses import replace
from typing import Any

import msgspec
import numpy as np

from .bench.path import FOREVER_NS, Course, Lap, MemoryJournal, Path
from .bodies import Style
from .trace import Trace

EVENTS_PER_S = 10_000.0
JITTER_S = 0.3
LATE_SHARE = 0.001  # of the steered slack
BEGIN_NS = 1_764_547_200_000_000_000
NS = 1e9


def in_turns(events: int, sources: int, skew_s: float, seed: int) -> Trace:
    """Sources that speak in turn; each stands behind the others by a time of its own."""
    random = np.random.default_rng(seed)
    arrivals = BEGIN_NS + (np.arange(events) / EVENTS_PER_S * NS).astype(np.int64)
    turns = [random.permutation(sources) for _ in range(-(-events // sources))]
    numbers = np.concatenate(turns)[:events].astype(np.uint32)
    skews = (random.random(sources) * skew_s * NS).astype(np.int64)
    times = arrivals - skews[numbers] - (random.random(events) * JITTER_S * NS).astype(np.int64)
    names = [f"gauge-{number:06}" for number in range(sources)]
    return Trace.arriving("in turns", times, arrivals, numbers, names)


def course_of(trace: Trace, body: int, held: int, order: str, late_share: float | None = None) -> Course:
    """Bodies of a trace for a feed of this order, its slack such that about `held` events are held."""
    course = Course.of(trace, body, int(held / EVENTS_PER_S * NS), Style("ns"))
    limits: dict[str, Any] = {"sources_at_most": 10**7, "hold_at_most_ns": FOREVER_NS}
    if order == "source":
        limits["order"] = "source"
    if late_share is not None:
        limits |= {"late_share": late_share, "slack_at_least_ns": course.settings.slack_ns}
    chosen = msgspec.structs.replace(course.settings, **limits)
    return replace(course, settings=chosen)


def cost_ns(course: Course, journal: MemoryJournal, held: int, body: int) -> tuple[float, int]:
    """Processor time an event once the feed is full, and events held at the end."""
    path, full = Path(course, journal, Lap()), -(-held // body) + 20
    begin = 0
    for token, (payload, now_ns) in enumerate(zip(course.payloads, course.arrivals_ns, strict=True)):
        if token == full:
            begin = time.process_time_ns()
        path.take(payload, now_ns, token)
    spent, events = time.process_time_ns() - begin, sum(np.diff(course.bounds)[full:])
    return spent / int(events), path.held


def main() -> None:
    """Both orders, round by round."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    for name, default in (("sources", 100_000), ("held", 1_000_000), ("body", 5_000), ("measured", 500_000)):
        parser.add_argument(f"--{name}", type=int, default=default)
    parser.add_argument("--skew-s", type=float, default=0.0)
    parser.add_argument("--rounds", type=int, default=3)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--steered", action="store_true")
    given = parser.parse_args()
    events = given.held + 20 * given.body + given.measured
    even = in_turns(events, given.sources, 0.0, given.seed)
    skewed = in_turns(events, given.sources, given.skew_s, given.seed) if given.skew_s else even
    first, second = ("fixed", "steered") if given.steered else ("feed", "source")
    courses = {
        first: course_of(even, given.body, given.held, "feed"),
        second: course_of(skewed, given.body, given.held, "source", LATE_SHARE if given.steered else None),
    }
    if given.steered:
        courses[first] = course_of(skewed, given.body, given.held, "source")
    kind = "slack" if given.steered else "order"
    journal = MemoryJournal(max(course.journal_bytes for course in courses.values()) * 5 // 4)
    found: dict[str, list[float]] = {order: [] for order in courses}
    for _ in range(given.rounds):
        for order, course in courses.items():
            cost, held = cost_ns(course, journal, given.held, given.body)
            found[order].append(cost)
            print(f"{kind} = {order:7} {cost:7.0f} ns an event, {held:,} held at the end", flush=True)
    ratio = statistics.median(found[second]) / statistics.median(found[first])
    print(f"{kind} = {second} costs {ratio:.3f} times {kind} = {first}")


if __name__ == "__main__":
    main()

"""From when on a report knows what it tells, and whose memory that is. Facts in, words out; pure.

A process remembers delays, failing sinks and counts from its own start, and of a partition from when it took it over;
the late lane of a partition is a file of each instance that owned it. A number of less than the whole time says so.
"""

from __future__ import annotations

from .facts import Facts
from .words import SECOND_NS, Clock, Words

NEAR_NS = 2 * SECOND_NS  # samples are a second apart, and one may be missed


def seen_since_ns(facts: Facts) -> int | None:
    """From when on this process saw the feed, if that is later than the time's begin; `to_ns`: it saw nothing of it."""
    since_ns = facts.series.since_ns
    if since_ns is None:
        return facts.to_ns
    return since_ns if since_ns > facts.from_ns + NEAR_NS else None


def seer(facts: Facts) -> str:
    """Whose memory it is."""
    return "this instance" if facts.partition else "this process"


def is_lane_whole(facts: Facts) -> bool:
    """Whether the late lane that was read is that of the whole time: a partition may have had other owners in it."""
    return not facts.partition or seen_since_ns(facts) is None


def other_lanes(facts: Facts, clock: Clock) -> Words:
    """What is not in a late lane that is not whole."""
    since_ns = facts.series.since_ns
    saw = "nothing of this time" if since_ns is None else f"this time since {clock.at(since_ns)}"
    end = facts.books.end
    count = "" if end is None else f" At {clock.at(end.at_ns)} the books count {end.late:,} late since the feed began."
    return (
        "What came late while another instance owned the partition is in that one's late lane; "
        f"this instance saw {saw}.{count}",
    )


def stopped_words(facts: Facts) -> str:
    """What a stop was, as far as is known."""
    if facts.partition:
        return "another instance took the partition over, or the service was started"
    return "the service was stopped or starting"


def why_words(why: str, whys: dict[str, str], facts: Facts) -> str:
    """A hold's reason in short words."""
    return stopped_words(facts) if why == "stopped" else whys.get(why, why)

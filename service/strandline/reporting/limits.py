"""What a report cannot know, said as plainly as what it does. Facts in, words out; pure."""

from __future__ import annotations

from collections.abc import Iterator

from .facts import Facts
from .holding import STALL_AT_LEAST_NS
from .knowing import is_lane_whole, seen_since_ns
from .words import Clock, Words, lasted


def limits(facts: Facts) -> list[Words]:
    """Sentences: first what is missing this time, then what is never known."""
    clock = Clock(facts.from_ns, facts.to_ns)
    return [(text,) for text in (*_missing(facts, clock), *_never(facts))]


def _missing(facts: Facts, clock: Clock) -> Iterator[str]:
    known, since = facts.holds.known_since_ns, seen_since_ns(facts)
    if known is None or known >= facts.to_ns:
        yield "Nothing is known of this time's holds: the feed's history begins later."
    elif known > facts.from_ns:
        yield f"Holds are known from {clock.at(known)} on; what was before it is not."
    if since == facts.to_ns:
        taken_over = "this instance took the partition over later, or was started later"
        begun = taken_over if facts.partition else "it was started later"
        yield (
            f"The process keeps delays, failing sinks and counts in memory, and has none of this time: {begun}, or the "
            "time lies more than a day back."
        )
    elif since is not None:
        begun = "this instance took the partition over then, or" if facts.partition else "the process"
        yield (
            f"Delays, failing sinks and counts are known from {clock.at(since)} on: {begun} was started then, or "
            "keeps no more. What they were before it is not known, and no stall is told of it in which a source was "
            "merely furthest behind."
        )
    if not is_lane_whole(facts):
        yield (
            "Late events, and events that a sink refused for good, are told from this instance's late lane. What was "
            "late or refused while another instance owned the partition is kept there: strandline late list, on that "
            "instance's machine."
        )
    if facts.trouble.refused_rows is None or facts.late is None:
        yield "What the late lane keeps could not be read when this report was made."
    elif not facts.late.complete:
        yield "Late events were too many for all bursts to be told; the sums by source are of all of them."
    if facts.acts.known_since_ns is not None and facts.acts.known_since_ns > facts.from_ns:
        yield f"Acts are known from {clock.at(facts.acts.known_since_ns)} on; older ones are in the journal's files."


def _never(facts: Facts) -> Iterator[str]:
    if facts.series.t_ns:
        step = lasted(facts.series.step_ns)
        yield (
            f"Delays, failing sinks and refused requests are samples, here in steps of {step}: a delay that came and "
            "went between two of them is missed."
        )
    least = lasted(STALL_AT_LEAST_NS)
    yield (
        "A hold shorter than a second is told together with its neighbours. A stall is what one source or sink held "
        f"for {least} or longer without a break, or a stop while events were held. That a source is furthest behind, "
        f"as one always is, is a stall only where the output fell behind by {least}."
    )
    yield "Since when a source was silent is reckoned from idle_after as it is now."
    yield (
        "A stop while nothing was held leaves no trace among the holds. Events that never reached the service, or were "
        "never answered with success, are not in its books: their senders must know of them."
    )
    yield (
        "Late events that were forgotten (strandline late forget) are not listed. Who did something is who was named, "
        f"or the token's name. A source counts as silent for good after {lasted(facts.idle_after_ns)}."
    )

"""The tables of a report: every figure that the picture shows and the summary names. Facts in, cells out; pure."""

from __future__ import annotations

from typing import NamedTuple

from .delays import worst_of
from .facts import Count, Facts, Stall
from .knowing import is_lane_whole, seen_since_ns, why_words
from .sentences import done, holder, source_name
from .words import Clock, Foreign, Words, joined, lasted, say

NOT_KNOWN: Words = ("not known",)
NOTHING: Words = ()
# Short, since the explanations that a running feed gives say what to do now.
WHYS = {
    "nothing_held": "nothing was held",
    "slack": "waiting out the slack",
    "slack_set": "waiting out a slack that was set",
    "slow_source": "furthest behind",
    "promised_source": "furthest behind by its promise",
    "expected_source": "expected, not heard yet",
    "silent_source": "silent, still waited for",
    "all_silent": "nobody waited for; until hold_at_most",
    "hold_at_most": "so far behind that hold_at_most went past it",
    "sink_full": "too much waited for this sink",
    "sink_paused": "too much waited for this sink, which was paused",
    "stopped": "the service was stopped or starting",
}


class Table(NamedTuple):
    """`numbers`: columns that are set to the right. `empty` is said where there are no rows."""

    caption: str
    headings: tuple[str, ...]
    rows: list[tuple[Words, ...]]
    numbers: tuple[int, ...] = ()
    empty: str = ""


def _more(number: int, text: str, columns: int, at: int) -> list[tuple[Words, ...]]:
    """A last row for those that are not listed, `text` in column `at`."""
    if not number:
        return []
    cells: list[Words] = [NOTHING] * columns
    cells[0], cells[at] = (f"{number:,} more",), (text,)
    return [tuple(cells)]


def who(source: str | None, sink: str | None) -> Words:
    """A holder in a cell."""
    if source is not None:
        return (Foreign(source),)
    return NOTHING if sink is None else say("sink {name}", name=Foreign(sink))


def stalls(facts: Facts) -> Table:
    """Each stall with its phases."""
    clock, holds = Clock(facts.from_ns, facts.to_ns), facts.holds
    rows: list[tuple[Words, ...]] = []
    for stall in holds.stalls:
        phases = [(f"{why_words(one.why, WHYS, facts)}: {lasted(one.lasted_ns)}",) for one in stall.phases]
        why = joined(phases, "; ", "; ")
        who_held = holder(stall) if stall.source is not None or stall.sink is not None else NOTHING
        rows.append(((clock.at(stall.from_ns),), (_end(stall, clock),), (lasted(stall.lasted_ns),), who_held, why))
    listed_ns = sum(stall.lasted_ns for stall in holds.stalls)
    rows += _more(holds.unlisted_stalls, lasted(holds.stalls_ns - listed_ns), 5, 2)
    return Table("Stalls", ("from", "to", "for", "who", "why"), rows, (2,), "None.")


def _end(stall: Stall, clock: Clock) -> str:
    return f"{clock.at(stall.to_ns)} (goes on)" if stall.goes_on else clock.at(stall.to_ns)


def totals(facts: Facts) -> Table:
    """What each had of the time."""
    holds = facts.holds
    rows: list[tuple[Words, ...]] = [
        (
            (why_words(each.why, WHYS, facts),),
            who(each.source, each.sink),
            (lasted(each.lasted_ns),),
            (f"{each.holds:,}",),
        )
        for each in holds.totals
    ]
    rows += _more(holds.unlisted_totals, lasted(holds.unlisted_totals_ns), 4, 2)
    return Table("Who held the feed, in all", ("why", "who", "for", "holds"), rows, (2, 3), "Not known.")


def holds(facts: Facts) -> Table:
    """Each hold of a second or longer, those of waiting out the slack too; with the last rows the whole time."""
    clock, known = Clock(facts.from_ns, facts.to_ns), facts.holds
    rows: list[tuple[Words, ...]] = [
        (
            (clock.at(each.from_ns),),
            (clock.at(each.to_ns),),
            (lasted(each.lasted_ns),),
            who(each.source, each.sink),
            (why_words(each.why, WHYS, facts),),
        )
        for each in known.listed
    ]
    rows += _more(known.unlisted, lasted(known.unlisted_ns), 5, 2)
    if known.brief:
        text = (f"{known.brief:,} shorter",)
        rows.append((text, NOTHING, (lasted(known.brief_ns),), NOTHING, ("each below 1 s, left out here",)))
    return Table("Every hold, one after the other", ("from", "to", "for", "who", "why"), rows, (2,), "Not known.")


def late_sources(facts: Facts) -> Table:
    """Late events by source."""
    clock, late = Clock(facts.from_ns, facts.to_ns), facts.late
    headings = ("source", "late events", "the first came", "the last came", "at most late by")
    if late is None:
        return Table("Late events by source", headings, [], empty="The late lane could not be read.")
    rows: list[tuple[Words, ...]] = [
        (
            source_name(each.source),
            (f"{each.events:,}",),
            (clock.at(each.from_ns),),
            (clock.at(each.to_ns),),
            (lasted(each.late_by_most_ns),),
        )
        for each in late.sources
    ]
    rows += _more(late.unlisted_sources, f"{late.unlisted_events:,}", 5, 1)
    return Table(f"Late events by source{_of_lane(facts)}", headings, rows, (1, 4), "None is kept.")


def _of_lane(facts: Facts) -> str:
    return "" if is_lane_whole(facts) else ", as far as this instance's late lane goes"


def bursts(facts: Facts) -> Table:
    """Late events by burst."""
    clock, late = Clock(facts.from_ns, facts.to_ns), facts.late
    headings = ("from", "to", "source", "late events", "late by, least", "late by, most")
    if late is None:
        return Table("Bursts of late events", headings, [], empty="The late lane could not be read.")
    rows: list[tuple[Words, ...]] = [
        (
            (clock.at(each.from_ns),),
            (clock.at(each.to_ns),),
            source_name(each.source),
            (f"{each.events:,}",),
            (lasted(each.late_by_least_ns),),
            (lasted(each.late_by_most_ns),),
        )
        for each in late.bursts
    ]
    rows += _more(late.unlisted_bursts, "", 6, 3)
    return Table(f"Bursts of late events{_of_lane(facts)}", headings, rows, (3, 4, 5), "None.")


def _since(facts: Facts, clock: Clock) -> str:
    since_ns = seen_since_ns(facts)
    return "" if since_ns is None else f" since {clock.at(since_ns)}"


def failing(facts: Facts) -> Table:
    """When sinks were failing."""
    clock, trouble = Clock(facts.from_ns, facts.to_ns), facts.trouble
    rows: list[tuple[Words, ...]] = [
        (
            (Foreign(each.sink),),
            (clock.at(each.from_ns),),
            (clock.at(each.to_ns) + (" (goes on)" if each.goes_on else ""),),
            (lasted(each.to_ns - each.from_ns),),
        )
        for each in trouble.failing
    ]
    rows += _more(trouble.unlisted_failing, "", 4, 3)
    empty = f"None was seen failing{_since(facts, clock)}." if facts.series.t_ns else "Not known."
    return Table("When sinks were failing", ("sink", "from", "to", "for"), rows, (3,), empty)


def sinks(facts: Facts) -> Table:
    """How the sinks stood when the report was made."""
    clock = Clock(facts.from_ns, facts.to_ns)
    rows: list[tuple[Words, ...]] = []
    for each in facts.trouble.sinks:
        state = "works"
        if each.failing_since_ns is not None:
            state = f"failing since {clock.at(each.failing_since_ns)}"
        elif each.paused:
            state = "paused"
        error: Words = ("none",) if each.last_error is None else (Foreign(each.last_error),)
        rows.append(((Foreign(each.sink),), (state,), (f"{each.waiting_events:,}",), error))
    caption = "Sinks when this report was made"
    return Table(caption, ("sink", "state", "events waiting", "last error since the start"), rows, (2,), "None.")


def refused(facts: Facts) -> Table:
    """What was refused: by sinks for good, and requests whole."""
    rows: list[tuple[Words, ...]] = [
        (say("events, by sink {name}, for good", name=Foreign(one.sink)), (f"{one.events:,}",), (Foreign(one.detail),))
        for one in facts.trouble.refused_rows or ()
    ]
    number = facts.trouble.refused_requests
    when = _since(facts, Clock(facts.from_ns, facts.to_ns)) if number is not None else ""
    rows.append(((f"requests{when or ' in this time'}",), NOT_KNOWN if number is None else (f"{number:,}",), NOTHING))
    for reason, times in sorted(facts.trouble.refusals_since_start.items()):
        rows.append((("requests since the process was started",), (f"{times:,}",), (reason,)))
    return Table("What was refused", ("what", "how many", "reason"), rows, (1,))


def acts(facts: Facts) -> Table:
    """Acts, oldest first."""
    clock = Clock(facts.from_ns, facts.to_ns)
    rows: list[tuple[Words, ...]] = [
        ((f"{number}",), (clock.at(act.at_ns),), (Foreign(act.who),), done(act, clock), (Foreign(act.reason),))
        for number, act in enumerate(facts.acts.listed, start=1)
    ]
    if facts.acts.unlisted:
        rows += _more(facts.acts.unlisted, "", 5, 1)
    return Table("Acts", ("", "at", "who", "did what", "reason given"), rows, (), "None is recorded.")


COLUMNS = ("received", "released", "late", "duplicate", "quarantined", "buffered")


def books(facts: Facts) -> Table:
    """The books at both ends, and what came between."""
    clock, begin, end = Clock(facts.from_ns, facts.to_ns), facts.books.begin, facts.books.end
    headings = ("", _at(begin, "at the begin", clock), _at(end, "at the end", clock), "between")
    rows: list[tuple[Words, ...]] = [
        ((name,), _cell(begin, name), _cell(end, name), _between(begin, end, name)) for name in COLUMNS
    ]
    return Table("Books: events since the feed began", headings, rows, (1, 2, 3))


def _at(books: Count | None, otherwise: str, clock: Clock) -> str:
    return otherwise if books is None else clock.at(books.at_ns)


def _cell(books: Count | None, name: str) -> Words:
    return NOT_KNOWN if books is None else (f"{getattr(books, name):,}",)


def _between(begin: Count | None, end: Count | None, name: str) -> Words:
    if begin is None or end is None:
        return NOT_KNOWN
    return (f"{getattr(end, name) - getattr(begin, name):+,}",)


def longest_waits(facts: Facts) -> Words:
    """How long what waited for the journal's sync and for the sinks had waited at worst; nothing where not known."""
    clock, series = Clock(facts.from_ns, facts.to_ns), facts.series
    unsynced, undelivered = worst_of(series, series.unsynced_ns), worst_of(series, series.undelivered_ns)
    if unsynced is None or undelivered is None:
        return ("How long requests waited for the journal, and batches for sinks, is not known.",)
    parts = [
        f"{what} {lasted(ns)}" + (f" (at {clock.at(t_ns)})" if ns else "")
        for what, (ns, t_ns) in (("for a sync of the journal", unsynced), ("for a sink", undelivered))
    ]
    return (f"The longest waits that samples show: {' and '.join(parts)}.",)

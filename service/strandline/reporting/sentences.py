"""The summary of a report: sentences that can be pasted into an incident's ticket. Facts in, words out; pure.

Each sentence says what was seen or counted. Where something followed on something, it says when; it never says why,
unless the service knows.
"""

from __future__ import annotations

from collections.abc import Iterator

from .delays import worst_of
from .facts import Act, Burst, Count, Delay, Facts, Late, Stall
from .holding import STALL_AT_LEAST_NS
from .knowing import is_lane_whole, other_lanes, seen_since_ns, seer, stopped_words
from .words import Clock, Foreign, Words, count, joined, lasted, plain, say, share, span

PHASES = {
    "slow_source": "sent, but was furthest behind",
    "promised_source": "was furthest behind by its promise",
    "expected_source": "was expected and had not been heard yet",
    "silent_source": "was silent, and waited for",
    "hold_at_most": "was so far behind that hold_at_most went past it",
    "sink_full": "had too much waiting for it",
    "sink_paused": "was paused and had too much waiting for it",
}
DONE = {
    "excuse": "excused {subject}",
    "drain": "released all that was held (drain)",
    "pause": "paused sink {subject}",
    "resume": "resumed sink {subject}",
}
NEAR_NS = 1_000_000_000  # an act and what follows on it within a second are told together
ACTS_TOLD, SOURCES_TOLD, STALLS_TOLD = 12, 4, 8


def summary(facts: Facts) -> list[Words]:
    """Paragraphs of a few sentences that belong together."""
    return [joined(sentences, " ", " ") for sentences in paragraphs(facts)]


def paragraphs(facts: Facts) -> list[list[Words]]:
    """Sentences that belong together, in the order in which they are read."""
    clock = Clock(facts.from_ns, facts.to_ns)
    found = [list(_head(facts)), *_stalls(facts, clock), list(_delay(facts, clock)), list(_late(facts, clock))]
    found += [list(_books(facts, clock)), *([each] for each in _trouble(facts, clock))]
    found += [*([each] for each in _acts(facts, clock)), list(_slack(facts, clock))]
    return [sentences for sentences in found if sentences]


def _head(facts: Facts) -> Iterator[Words]:
    length = lasted(facts.to_ns - facts.from_ns)
    text = f"Feed {{feed}}, from {span(facts.from_ns, facts.to_ns)} ({length})."
    yield say(text, feed=Foreign(facts.feed))


# ---- who held the feed ----------------------------------------------------------------------------------------------


def _stalls(facts: Facts, clock: Clock) -> Iterator[list[Words]]:
    holds, least = facts.holds, lasted(STALL_AT_LEAST_NS)
    known = holds.known_since_ns
    if known is None or known >= facts.to_ns:
        yield [("Who held the feed in this time is not known.",)]
        return
    number = len(holds.stalls) + holds.unlisted_stalls
    where = "in this time" if known <= facts.from_ns else f"from {clock.at(known)} on, since when holds are known"
    if number == 0:
        yield [(f"No source or sink held the feed for {least} or longer {where}.",)]
    elif number > 1:
        yield [(f"There were {number:,} stalls {where}: {lasted(holds.stalls_ns)} in all.",)]
    for stall, delay in list(zip(holds.stalls, facts.delays, strict=True))[:STALLS_TOLD]:
        yield list(_stall(stall, delay, facts, clock))
    if number > STALLS_TOLD:
        yield [(f"{count(number - STALLS_TOLD, 'more stall')} of this time: see Holds.",)]


def besides(facts: Facts) -> list[Words]:
    """What was held that is no stall, for those who look closer."""
    if not facts.holds.besides_ns:
        return []
    least = lasted(STALL_AT_LEAST_NS)
    text = f"Besides stalls, sources or sinks held the feed for {lasted(facts.holds.besides_ns)} in all: each time for"
    return [(f"{text} less than {least}, or as the one furthest behind without the output falling behind by {least}.",)]


def _stall(stall: Stall, delay: Delay, facts: Facts, clock: Clock) -> Iterator[Words]:
    when = f"From {clock.at(stall.from_ns)} to {clock.at(stall.to_ns)} ({lasted(stall.lasted_ns)})"
    why = stall.phases[0].why
    if stall.source is not None or stall.sink is not None:
        who = holder(stall)
        phases = joined([_phase(phase.why, phase.lasted_ns, len(stall.phases)) for phase in stall.phases], "; ", "; ")
        yield say(f"{when} {{who}} held the feed: it {{phases}}.", who=who, phases=phases)
    elif why == "stopped":
        yield (f"{when} {stopped_words(facts)}; what was held waited for it.",)
    elif why == "all_silent":
        yield (
            f"{when} no source was waited for, since all were silent or excused; what was held waited for "
            f"hold_at_most, which is {lasted(facts.hold_at_most_ns)}.",
        )
    else:
        yield (f"{when} the feed was held ({why}).",)
    yield from _ends(stall, facts, clock)
    yield from _behind(stall, delay, clock)


def holder(stall: Stall) -> Words:
    """Who it is, for a sentence."""
    if stall.source is not None:
        return say("source {name}", name=Foreign(stall.source))
    return say("sink {name}", name=Foreign(stall.sink or ""))


def _phase(why: str, lasted_ns: int, of: int) -> Words:
    words = PHASES.get(why, f"held it ({why})")
    return (words if of == 1 else f"{words} ({lasted(lasted_ns)})",)


def _ends(stall: Stall, facts: Facts, clock: Clock) -> Iterator[Words]:
    if stall.began_before:
        yield ("It had begun before this time.",)
    if stall.goes_on:
        yield ("It was still going on at the end of this time.",)
        return
    acts = [act for act in facts.acts.listed if _bears_on(act, stall)]
    if acts:
        act = acts[-1]
        yield say(f"It ended as {{who}} {{did}} at {clock.at(act.at_ns)}.", who=_who(act), did=done(act, clock))


def _bears_on(act: Act, stall: Stall) -> bool:
    """Whether an act came just when a stall ended, and is of a kind that can end it."""
    if abs(stall.to_ns - act.at_ns) > NEAR_NS:
        return False
    if act.act in ("excuse", "resume"):
        return act.subject in (stall.source, stall.sink)
    return act.act == "drain"


def _behind(stall: Stall, delay: Delay, clock: Clock) -> Iterator[Words]:
    if stall.phases[0].why == "stopped":  # nothing was sampled meanwhile
        if delay.again_at_ns is not None and delay.current_ns is not None:
            current = f"at most {lasted(delay.current_ns)} behind the newest event"
            yield (f"The ordered output was current again, {current}, at {clock.at(delay.again_at_ns)}.",)
        return
    if delay.worst_ns is None or delay.worst_at_ns is None:
        yield ("How far the output was behind in that time is not known.",)
        return
    usual = "" if delay.usual_ns is None else f" (usually {lasted(delay.usual_ns)})"
    text = (
        f"In that time the ordered output stood at most {lasted(delay.worst_ns)} behind the newest event{usual}, at "
        f"{clock.at(delay.worst_at_ns)}"
    )
    if delay.again_at_ns is not None and delay.current_ns is not None:
        text += f"; it was current again, at most {lasted(delay.current_ns)} behind, at {clock.at(delay.again_at_ns)}"
    elif delay.current_ns is not None and delay.worst_ns <= delay.current_ns:
        text += "; that is no further than usual"
    elif not stall.goes_on:
        text += "; it was not current again before the end of this time"
    yield (text + ".",)


# ---- late events and books ------------------------------------------------------------------------------------------


def _late(facts: Facts, clock: Clock) -> Iterator[Words]:
    late, begin, end = facts.late, facts.books.begin, facts.books.end
    whole = is_lane_whole(facts)
    counted = end.late - begin.late if begin is not None and end is not None else None
    if late is None:
        yield ("The late lane could not be read, so which sources' events were late is not known.",)
    elif late.events:
        yield from _late_events(late, clock, "" if whole else "As far as this instance's late lane goes, ")
    elif counted is None or not whole:
        yield (f"The late lane{'' if whole else ' of this instance'} keeps no event of this time.",)
    elif not counted:
        since_ns = seen_since_ns(facts)
        since = "" if since_ns is None else f" since {clock.at(since_ns)}, and of before the late lane keeps none"
        yield (f"No event was late{since}.",)
    if not whole:
        yield other_lanes(facts, clock)
    if counted and begin is not None and end is not None and counted != (late.events if late else None):
        kept = "" if late is None else f"; the late lane keeps {late.events:,} of this time"
        fewer = late is not None and late.events < counted
        forgotten = ". What is not there was forgotten, or is on its way" if fewer else ""
        span = f"from {clock.at(begin.at_ns)} to {clock.at(end.at_ns)}"
        yield (f"The books count {counted:,} late {span}{kept}{forgotten}.",)


def _late_events(late: Late, clock: Clock, begin: str) -> Iterator[Words]:
    events, they, them = count(late.events, "event"), *(("It", "it") if late.events == 1 else ("They", "them"))
    if late.unlisted_sources or len(late.sources) > 1:
        text = f"{begin}{events} came too late to be put in order: {{sources}}. The late lane keeps {them}."
        yield say(text, sources=_late_sources(late))
    else:
        text = f"{begin}{events} of {{source}} came too late to be put in order. The late lane keeps {them}."
        yield say(text, source=source_name(late.sources[0].source))
    first = clock.at(min(each.from_ns for each in late.sources))
    last = clock.at(max(each.to_ns for each in late.sources))
    when = f"at {first}" if first == last else f"from {first} to {last}"
    worst = lasted(max(each.late_by_most_ns for each in late.sources))
    yield (f"{they} came {when}, at most {worst} behind the watermark.",)


def _late_sources(late: Late) -> Words:
    told = late.sources[:SOURCES_TOLD]
    parts = [
        say(f"{each.events:,} of {{name}} ({share(each.events, late.events)})", name=source_name(each.source))
        for each in told
    ]
    rest = late.events - sum(each.events for each in told)
    if rest:
        parts.append((f"{rest:,} of {count(len(late.sources) - len(told) + late.unlisted_sources, 'other source')}",))
    return joined(parts)


def source_name(source: str | None) -> Words:
    """A source, also where a feed has but one without a name."""
    return ("the only source",) if source is None else (Foreign(source),)


def _books(facts: Facts, clock: Clock) -> Iterator[Words]:
    books = facts.books
    if books.balance or not facts.series.balanced:
        yield (
            "The books do not balance: events are missing or stand twice. This is a defect of the service; copy "
            "data_dir and report it.",
        )
    if books.begin is None or books.end is None:
        yield ("How many events were received and released in this time is not known.",)
    else:
        yield (_passed(books.begin, books.end, clock),)
        if not books.balance and facts.series.balanced:
            yield (
                "The books balance: each event that was answered with success stands in them exactly once, so none "
                "of them is missing here and none was released twice.",
            )
    if not books.recognises_repeats:
        yield ("This feed names no id, so an event that a sender sent twice counts as two.",)


def _passed(begin: Count, end: Count, clock: Clock) -> str:
    """held at the begin + received = released + late + duplicate + quarantined + held at the end."""
    received, before = end.received - begin.received, begin.buffered
    fates = [(end.released - begin.released, "released in order"), (end.late - begin.late, "named late")]
    fates += [(end.duplicate - begin.duplicate, "recognised as repeats")]
    fates += [(end.quarantined - begin.quarantined, "put in quarantine"), (end.buffered, "held at its end")]
    parts = [f"{number:,} {'was' if number == 1 else 'were'} {what}" for number, what in fates if number]
    came = count(received, "event was", "events were")
    time = f"From {clock.at(begin.at_ns)} to {clock.at(end.at_ns)} {came} received"
    if not parts:
        return f"{time}."
    held = f" With the {before:,} held at its begin:" if before else " Of them,"
    return f"{time}.{held} {plain(joined([(part,) for part in parts]))}."


# ---- journal, sinks, acts -------------------------------------------------------------------------------------------


def _trouble(facts: Facts, clock: Clock) -> Iterator[Words]:
    trouble, sinks = facts.trouble, sorted({each.sink for each in facts.trouble.failing})
    for sink in sinks:
        stretches = [each for each in trouble.failing if each.sink == sink]
        begin, last = clock.at(stretches[0].from_ns), stretches[-1]
        times = f"was failing {len(stretches):,} times, " if len(stretches) > 1 else "was failing "
        when = f"from {begin} to {clock.at(last.to_ns)}"
        if last.goes_on:
            when = f"from {begin} on, and still was at the end of this time{_waiting(facts, sink)}"
        yield say(f"Sink {{sink}} {times}{when}.", sink=Foreign(sink))
    for rows in trouble.refused_rows or ():
        yield say(
            f"Sink {{sink}} refused {count(rows.events, 'event')} of this time for good; they are kept, see strandline "
            "refused list.",
            sink=Foreign(rows.sink),
        )
    if trouble.refused_requests:
        refused = count(trouble.refused_requests, "request was", "requests were")
        reasons = ""
        if trouble.refused_requests == sum(trouble.refusals_since_start.values()):
            reasons = f" ({', '.join(sorted(trouble.refusals_since_start))})"
        yield (f"{refused} refused whole{reasons}; nothing of that was taken, and the senders were told so.",)
    if trouble.failure is not None:
        yield say("The feed has failed and takes nothing more: {why}.", why=Foreign(trouble.failure.rstrip(".")))
    since_ns = seen_since_ns(facts)
    nothing = not (sinks or trouble.refused_rows or trouble.refused_requests or trouble.failure)
    if not facts.series.t_ns:
        return
    if since_ns is None and nothing:
        yield ("No sink was seen failing, and no request was refused.",)
    elif since_ns is not None:
        what = "no sink was failing, and no request was refused" if nothing else "nothing else of that kind is known"
        yield (f"As far as {seer(facts)} saw, since {clock.at(since_ns)}, {what}.",)


def _waiting(facts: Facts, sink: str) -> str:
    waiting = sum(each.waiting_events for each in facts.trouble.sinks if each.sink == sink)
    return f"; {count(waiting, 'event')} waited for it when this report was made" if waiting else ""


def _acts(facts: Facts, clock: Clock) -> Iterator[Words]:
    acts = facts.acts
    if not acts.listed:
        yield ("No act of an operator is recorded in this time.",)
    for act in acts.listed[:ACTS_TOLD]:
        because = say(" (reason given: {why})", why=Foreign(act.reason)) if act.reason.strip() else ()
        yield say(f"At {clock.at(act.at_ns)} {{who}} {{did}}{{why}}.", who=_who(act), did=done(act, clock), why=because)
    more = len(acts.listed) - ACTS_TOLD + acts.unlisted
    if more > 0:
        yield (f"{count(more, 'more act')} of this time: see Acts.",)


def _who(act: Act) -> Words:
    return ("somebody",) if act.who in ("", "unknown") else (Foreign(act.who),)


def done(act: Act, clock: Clock) -> Words:
    """What somebody did."""
    if act.act == "slack":
        if act.slack_ns is None:
            return ("ended the slack that had been set",)
        until = "" if act.until_ns is None else f" until {clock.at(act.until_ns)}"
        return (f"set the slack to {lasted(act.slack_ns)}{until}",)
    return say(DONE.get(act.act, "did: " + act.act.replace("{", "").replace("}", "")), subject=Foreign(act.subject))


def _delay(facts: Facts, clock: Clock) -> Iterator[Words]:
    series = facts.series
    behind, waited = worst_of(series, series.behind_ns), worst_of(series, series.waited_ns)
    if behind is None or waited is None:
        yield ("How far the output was behind is not known for this time.",)
        return
    time = "At worst in this time"
    since_ns = seen_since_ns(facts)
    if since_ns is not None:
        time = f"At worst from {clock.at(since_ns)} on, since when it is known"
    text = f"{time}, the ordered output was {lasted(behind[0])} behind the newest event (at "
    text += clock.at(behind[1]) + ")"
    if waited[0]:
        text += f"; no event was seen held longer than {lasted(waited[0])} (at {clock.at(waited[1])})"
    yield (text + ".",)
    last = series.behind_ns[-1]
    if last is not None:
        yield (f"At the end of this time ({clock.at(series.t_ns[-1])}) it was {lasted(last)} behind.",)
    undelivered = worst_of(series, series.undelivered_ns)
    if undelivered is not None and undelivered[0] >= STALL_AT_LEAST_NS:
        text = f"Released events waited at most {lasted(undelivered[0])} for a sink (at {clock.at(undelivered[1])})"
        yield (text + ".",)


def _slack(facts: Facts, clock: Clock) -> Iterator[Words]:
    slack = facts.series.slack_ns
    if not slack:
        return
    least, most, since_ns = min(slack), max(slack), seen_since_ns(facts)
    known = "" if since_ns is None else f" (known since {clock.at(since_ns)})"
    if facts.late_share_target is None:
        moved = f"was {lasted(most)}" if least == most else f"lay between {lasted(least)} and {lasted(most)}"
        yield (f"The slack {moved}{known}.",)
        return
    target = f"{100 * facts.late_share_target:g} %"
    begin, end = lasted(slack[0]), lasted(slack[-1])
    yield (
        f"The slack is steered towards {target} late: it went from {begin} to {end}, and lay between {lasted(least)} "
        f"and {lasted(most)}{known}.",
    )


def burst_words(burst: Burst) -> str:
    """A burst for the picture's title."""
    return plain(say(f"{burst.events:,} late of {{name}}", name=source_name(burst.source)))

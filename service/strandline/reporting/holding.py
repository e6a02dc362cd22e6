"""From the history of holds to stalls and totals. Pure.

A stall is one holder without a break, for whatever reasons: a gateway that is silent, then too far behind is one stall
of two phases. Waiting out the slack is no stall: it is what the feed is for. Nor is it one that a source is furthest
behind, as one always is, unless the output fell behind by it; whoever asks knows that (`judge`). But a source that was
called furthest behind was silent already since its last word, and that moment follows from the rule: a quarter of
idle_after before it was called silent.
"""

from __future__ import annotations

from bisect import bisect_right
from collections.abc import Callable, Iterable, Sequence
from itertools import pairwise
from typing import NamedTuple, TypeVar

from msgspec import structs

from ..core.holds import SILENT_PART
from .facts import Hold, Holds, Stall, Total, tenth

USUAL = frozenset({"nothing_held", "slack", "slack_set"})
FURTHEST_BEHIND = frozenset({"slow_source", "promised_source"})
# A source that reports every few seconds is now and then the one furthest behind: that is no incident. A stop is.
STALL_AT_LEAST_NS = 10_000_000_000
BRIEF_NS = 1_000_000_000  # shorter holds are not listed one by one
Kind = TypeVar("Kind")
LISTED_AT_MOST, TOTALS_AT_MOST, STALLS_AT_MOST, PHASES_AT_MOST = 300, 50, 40, 12


class Rules:
    """A feed's settings, as far as holds follow from them: `before`, how long what a hold tells had lasted already."""

    def __init__(self, idle_after_ns: int, hold_at_most_ns: int) -> None:
        self.before = {"silent_source": idle_after_ns // SILENT_PART, "hold_at_most": hold_at_most_ns}


def holds_of(
    known: Iterable[Hold],
    from_ns: int,
    to_ns: int,
    known_since_ns: int | None,
    rules: Rules,
    judge: Callable[[Stall], Stall | None],
) -> Holds:
    """All of it for a time. `known` ascend without gaps; the last one goes on as long as is known.

    `judge` is asked about stalls in which a source was merely furthest behind: what of them is one, or None.
    """
    known = [hold for each in known if (hold := _cut(each)).to_ns > hold.from_ns]
    holds = [_within(hold, from_ns, to_ns) for hold in known if hold.from_ns < to_ns and hold.to_ns > from_ns]
    stalls = _stalls(_since_heard(holds, known, rules), _since_heard(known, known, rules), (from_ns, to_ns), judge)
    chosen = _longest(stalls, [stall.lasted_ns for stall in stalls], STALLS_AT_MOST)
    joined = _joined(holds)
    brief = [hold for hold in joined if _is_brief(hold)]
    lasting = [hold for hold in joined if not _is_brief(hold)]
    listed = _longest(lasting, [hold.lasted_ns for hold in lasting], LISTED_AT_MOST)
    totals = _totals(holds)
    held_ns = _sum(hold for hold in holds if hold.why not in USUAL)
    stalls_ns = sum(stall.lasted_ns for stall in stalls)
    return Holds(
        known_since_ns=known_since_ns,
        listed=listed,
        unlisted=len(lasting) - len(listed),
        unlisted_ns=_sum(lasting) - _sum(listed),
        brief=len(brief),
        brief_ns=_sum(brief),
        totals=totals[:TOTALS_AT_MOST],
        unlisted_totals=len(totals[TOTALS_AT_MOST:]),
        unlisted_totals_ns=sum(total.lasted_ns for total in totals[TOTALS_AT_MOST:]),
        stalls=[_shortened(stall) for stall in chosen],
        unlisted_stalls=len(stalls) - len(chosen),
        stalls_ns=stalls_ns,
        besides_ns=held_ns - stalls_ns,
    )


def _cut(hold: Hold) -> Hold:
    return structs.replace(hold, from_ns=tenth(hold.from_ns), to_ns=tenth(hold.to_ns))


def _within(hold: Hold, from_ns: int, to_ns: int) -> Hold:
    return structs.replace(hold, from_ns=max(hold.from_ns, from_ns), to_ns=min(hold.to_ns, to_ns))


def _sum(holds: Iterable[Hold]) -> int:
    return sum(hold.lasted_ns for hold in holds)


class Part(NamedTuple):
    """A hold, or a part of one. `merely`: its source was furthest behind, and there is no more to it."""

    hold: Hold
    merely: bool


def _since_heard(holds: Sequence[Hold], known: Sequence[Hold], rules: Rules) -> list[Part]:
    """Holds with those who are furthest behind cut where more than that began; the rest belongs to what follows."""
    after = {(each.to_ns, each.source): other for each, other in pairwise(known) if each.source == other.source}
    parts: list[Part] = []
    for hold in holds:
        following = after.get((hold.to_ns, hold.source))
        if hold.why not in FURTHEST_BEHIND or following is None or following.why not in rules.before:
            parts.append(Part(hold, hold.why in FURTHEST_BEHIND))
            continue
        cut_ns = min(max(hold.from_ns, tenth(following.from_ns - rules.before[following.why])), hold.to_ns)
        if cut_ns > hold.from_ns:
            parts.append(Part(structs.replace(hold, to_ns=cut_ns), True))
        why = following.why if following.why == "silent_source" else hold.why
        parts.append(Part(structs.replace(hold, why=why, from_ns=cut_ns), False))
    return parts


def _holder(part: Part) -> tuple[bool, str, str | None, str | None]:
    """Who it is, for whatever reason; of no single one the reason itself."""
    hold = part.hold
    none = hold.source is None and hold.sink is None
    return part.merely, hold.why if none else "", hold.source, hold.sink


def _stalls(
    parts: Sequence[Part], known: Sequence[Part], time: tuple[int, int], judge: Callable[[Stall], Stall | None]
) -> list[Stall]:
    """Stalls, ascending; one of them is long enough when it is so beyond the ends of the time."""
    whole = _groups(known)
    begins = [group[0].hold.from_ns for group in whole]
    stalls = []
    for group in _groups(parts):
        around = whole[bisect_right(begins, group[0].hold.from_ns) - 1]
        lasted_ns = around[-1].hold.to_ns - around[0].hold.from_ns
        if lasted_ns < STALL_AT_LEAST_NS and group[0].hold.why != "stopped":
            continue
        # What is known ends now: what lasts until then goes on.
        end_ns = around[-1].hold.to_ns
        first, phases = group[0].hold, _joined([part.hold for part in group])
        stall: Stall | None = Stall(
            source=first.source,
            sink=first.sink,
            phases=phases,
            began_before=around[0].hold.from_ns < time[0],
            goes_on=end_ns > time[1] or phases[-1].to_ns == time[1] == known[-1].hold.to_ns,
        )
        if stall is not None and group[0].merely:
            stall = judge(stall)
        if stall is not None:
            stalls.append(stall)
    return stalls


def _groups(parts: Sequence[Part]) -> list[list[Part]]:
    """Neighbours of the same holder, those that are usual left out."""
    groups: list[list[Part]] = []
    for part in parts:
        if part.hold.why in USUAL:
            continue
        last = groups[-1][-1] if groups else None
        if last is not None and last.hold.to_ns == part.hold.from_ns and _holder(last) == _holder(part):
            groups[-1].append(part)
        else:
            groups.append([part])
    return groups


def _joined(holds: Sequence[Hold]) -> list[Hold]:
    """Neighbours of the same holder and reason that touch, as one."""
    phases: list[Hold] = []
    for hold in holds:
        if phases and _same(phases[-1], hold) and phases[-1].to_ns == hold.from_ns:
            phases[-1] = structs.replace(phases[-1], to_ns=hold.to_ns)
        else:
            phases.append(hold)
    return phases


def _is_brief(hold: Hold) -> bool:
    """Too short to be listed; but that the service was stopped is told however short it was."""
    return hold.lasted_ns < BRIEF_NS and hold.why != "stopped"


def _same(one: Hold, other: Hold) -> bool:
    return (one.why, one.source, one.sink) == (other.why, other.source, other.sink)


def _shortened(stall: Stall) -> Stall:
    """A stall of few phases: of those in excess each is told with the one before it, under the longer one's reason."""
    phases = list(stall.phases)
    while len(phases) > PHASES_AT_MOST:
        place = min(range(1, len(phases)), key=lambda at: phases[at - 1].lasted_ns + phases[at].lasted_ns)
        one, other = phases[place - 1 : place + 1]
        why = one.why if one.lasted_ns >= other.lasted_ns else other.why
        phases[place - 1 : place + 1] = [structs.replace(one, why=why, to_ns=other.to_ns)]
    return structs.replace(stall, phases=phases)


def _totals(holds: Iterable[Hold]) -> list[Total]:
    """By holder and reason, the longest first."""
    sums: dict[tuple[str, str | None, str | None], tuple[int, int]] = {}
    for hold in holds:
        lasted_ns, count = sums.get((hold.why, hold.source, hold.sink), (0, 0))
        sums[hold.why, hold.source, hold.sink] = lasted_ns + hold.lasted_ns, count + 1
    totals = [
        Total(why=why, source=source, sink=sink, lasted_ns=lasted_ns, holds=count)
        for (why, source, sink), (lasted_ns, count) in sums.items()
    ]
    return sorted(totals, key=lambda total: (-total.lasted_ns, total.why, total.source or "", total.sink or ""))


def _longest(things: Sequence[Kind], lengths: Sequence[int], at_most: int) -> list[Kind]:
    """The longest of them, in their order; of equally long ones the earlier."""
    places = sorted(range(len(things)), key=lambda at: -lengths[at])[:at_most]
    return [things[at] for at in sorted(places)]

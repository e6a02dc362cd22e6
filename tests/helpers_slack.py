"""What one slack does to a feed, found the slow way: request by request, event by event. No column, no cleverness.

The second opinion for the pass that does all slacks at once. No judging here.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

LONG_AGO = -(10**18)


@dataclass(frozen=True, slots=True)
class Feed:
    """A feed as plain lists: requests as (arrival, [(time, source, length), ...])."""

    requests: Sequence[tuple[int, Sequence[tuple[int, int, int]]]]


@dataclass(slots=True)
class Simulated:
    """What came of it. `lateness` in order of arrival; `holds` of the on-time events that were let go, in any order."""

    late: int = 0
    lateness: list[int] = field(default_factory=list)
    holds: list[int] = field(default_factory=list)
    held_peak: int = 0
    bytes_peak: int = 0
    held_integral: int = 0
    bytes_integral: int = 0
    open_events: int = 0


class _Rule:
    """Where the basis stands, by name of the rule."""

    def __init__(self, basis: str, idle_after: int | None) -> None:
        self.basis, self.idle_after = basis, idle_after
        self.newest: dict[int, int] = {}
        self.heard: dict[int, int] = {}
        self.reached = LONG_AGO

    def look(self, now: int) -> int:
        """The basis now; never behind where it was."""
        if self.basis == "arrival":
            found = now
        elif self.basis == "event":
            found = max(self.newest.values(), default=LONG_AGO)
        else:
            active = [s for s in self.newest if self.idle_after is None or now < self.heard[s] + self.idle_after]
            found = min((self.newest[s] for s in active), default=max(self.newest.values(), default=LONG_AGO))
        self.reached = max(self.reached, found)
        return self.reached

    def hear(self, source: int, time: int, now: int) -> None:
        self.newest[source] = max(self.newest.get(source, LONG_AGO), time)
        self.heard[source] = now

    def wakes(self, after: int, until: int, held: list[tuple[int, int, int]], slack: int) -> list[int]:
        """Instants in (after, until] at which the basis may move by itself."""
        if self.basis == "arrival":
            found = {time + slack for time, _, _ in held}
        else:
            found = set() if self.idle_after is None else {heard + self.idle_after for heard in self.heard.values()}
        return sorted(instant for instant in found if after < instant <= until)


def simulate(feed: Feed, slack: int, basis: str, idle_after: int | None = None) -> Simulated:
    """One slack over the whole feed; what is held at the end stays open."""
    rule, found = _Rule(basis, idle_after), Simulated()
    held: list[tuple[int, int, int]] = []  # time, arrival, length
    now = feed.requests[0][0]

    def let_go(at: int) -> None:
        reached = rule.look(at) - slack
        found.holds += [at - arrived for time, arrived, _ in held if time <= reached]
        held[:] = [each for each in held if each[0] > reached]

    def wait(until: int) -> None:
        nonlocal now
        found.held_integral += len(held) * (until - now)
        found.bytes_integral += sum(length for _, _, length in held) * (until - now)
        now = until

    for arrived, events in feed.requests:
        for instant in rule.wakes(now, arrived, held, slack):
            wait(instant)
            let_go(instant)
        wait(arrived)
        let_go(arrived)
        reached = rule.look(arrived)
        for time, source, length in events:
            found.lateness.append(reached - time)
            if time < reached - slack:
                found.late += 1
            else:
                held.append((time, arrived, length))
            rule.hear(source, time, arrived)
        let_go(arrived)
        found.held_peak = max(found.held_peak, len(held))
        found.bytes_peak = max(found.bytes_peak, sum(length for _, _, length in held))
    found.open_events = len(held)
    return found

"""Which sources a person must see first, and the part that each plays. Pure; reads columns, changes nothing.

First the source that holds the feed, then those that were searched for, then a fair share of each part in the order
of ROLES, then more of the same until there is no room. Costs some passes over the columns of all sources.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from itertools import islice

import numpy as np
from numpy.typing import NDArray

from ..core.columns import NO_SOURCE, TIME_MAX
from ..core.holds import SILENT_PART
from ..core.sources import NEVER, Sources

# A source is of the first of these that fits.
ROLES = ("holding", "expected", "excused", "silent", "late", "ahead", "other")
ORDER = ("expected", "silent", "late", "ahead", "excused", "other")
AHEAD_NS = 1_000_000_000  # a clock that runs ahead of the arrival clock by more than that is shown
SCAN_AT_MOST = 20_000  # names looked at for a search at a time, some 2 ms; the rest follows a moment later

Numbers = NDArray[np.intp]


class Part:
    """The part that each source plays at one instant."""

    def __init__(self, sources: Sources, holder: int, late: Sequence[int], now_ns: int, idle_after_ns: int) -> None:
        """`late`: sources with late events of late, the last one first."""
        count = len(sources.names)
        self._sources, self._count, self._holder, self._late = sources, count, holder, late
        newest, heard = sources.newest[:count], sources.heard[:count]
        unheard = (newest == NEVER) & (sources.promised[:count] == NEVER)
        self._excused = sources.excused[:count]
        self._expected = unheard & ~self._excused  # idle or not: whoever never came must not drop out of sight
        silent_since_ns = now_ns - idle_after_ns // SILENT_PART
        self._silent = (heard < silent_since_ns) & ~unheard & ~self._excused
        self._ahead = newest > now_ns + AHEAD_NS
        self._late_set = set(late)

    def role(self, number: int) -> str:
        """One of ROLES."""
        if number == self._holder:
            return "holding"
        for name in ("expected", "excused", "silent"):
            if getattr(self, f"_{name}")[number]:
                return name
        if number in self._late_set:
            return "late"
        return "ahead" if self._ahead[number] else "other"

    @property
    def silent_count(self) -> int:
        """Sources that were heard once and have been silent for a SILENT_PART of idle_after, idle or not yet."""
        return int(np.count_nonzero(self._silent))

    def group(self, role: str, at_most: int) -> list[int]:
        """Sources of one part, those first that matter most; at least `at_most` where there are so many."""
        heard, newest = self._sources.heard, self._sources.newest
        match role:
            case "expected":
                return [int(number) for number in np.flatnonzero(self._expected)[: at_most + 1]]
            case "silent":
                return _least(~heard, np.flatnonzero(self._silent), at_most)
            case "late":
                return list(self._late[: 4 * at_most])
            case "ahead":
                return _least(~newest, np.flatnonzero(self._ahead), at_most)
            case "excused":
                return _least(~heard, np.flatnonzero(self._excused), at_most)
        active = self._sources.active[: self._count] & ~self._silent & ~self._expected
        return _least(newest, np.flatnonzero(active), at_most)


def parts_turn_ns(sources: Sources, now_ns: int, idle_after_ns: int) -> int:
    """When a source's part changes next although nothing is heard or done; TIME_MAX where none does."""
    count = len(sources.names)
    heard, newest = sources.heard[:count], sources.newest[:count]
    silent_since_ns = now_ns - idle_after_ns // SILENT_PART
    silent = heard[heard >= silent_since_ns] + (now_ns - silent_since_ns + 1)
    ahead = newest[newest > now_ns + AHEAD_NS] - AHEAD_NS
    return min(int(silent.min(initial=TIME_MAX)), int(ahead.min(initial=TIME_MAX)))


def _least(values: NDArray[np.int64], numbers: Numbers, at_most: int) -> list[int]:
    """The numbers with the least values, ascending; of equal ones the lower number."""
    if len(numbers) > at_most + 1:
        numbers = numbers[np.argpartition(values[numbers], at_most)[: at_most + 1]]
    return [int(number) for number in numbers[np.lexsort((numbers, values[numbers]))]]


def choose(part: Part, holder: int, at_most: int, found: Iterable[int] = (), before: Sequence[int] = ()) -> list[int]:
    """At most so many sources, the ones that matter first.

    `found` were searched for, `before` are the ones shown a moment ago: ordinary ones among them stay, so that lanes do
    not jump about.
    """
    chosen: dict[int, None] = {} if holder == NO_SOURCE else {holder: None}
    chosen.update(dict.fromkeys(islice((number for number in found if number not in chosen), at_most - len(chosen))))
    share = max(1, at_most // len(ORDER))
    rest: list[int] = []
    for role in ORDER:
        group = part.group(role, at_most + len(chosen))
        if role == "other":
            group = [number for number in before if part.role(number) == "other"] + group
        room = max(0, min(share if role != "other" else at_most, at_most - len(chosen)))
        fresh = _fresh(part, role, group, chosen)
        chosen.update(dict.fromkeys(islice(fresh, room)))
        rest += group
    for number in rest:
        if len(chosen) >= at_most:
            break
        chosen.setdefault(number)
    return list(chosen)


def _fresh(part: Part, role: str, group: Iterable[int], chosen: dict[int, None]) -> Iterator[int]:
    """Those of a group that are of its part alone and not chosen yet."""
    return (number for number in list(dict.fromkeys(group)) if number not in chosen and part.role(number) == role)


class Search:
    """The sources whose name contains a text, whatever its case; names are looked at once, in portions."""

    def __init__(self, text: str, at_most: int) -> None:
        self._text, self._at_most = text.casefold(), at_most
        self._looked_at = 0
        self.found: list[int] = []

    def go_on(self, names: Sequence[str]) -> list[int]:
        """Look at names that were not looked at yet; all that was found so far, by number."""
        stop = min(len(names), self._looked_at + SCAN_AT_MOST)
        while self._looked_at < stop and len(self.found) < self._at_most:
            if self._text in names[self._looked_at].casefold():
                self.found.append(self._looked_at)
            self._looked_at += 1
        return self.found

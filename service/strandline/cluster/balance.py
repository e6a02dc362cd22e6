"""Which partitions an instance gives back and which it tries to take, from what it sees. Pure: sets and numbers only.

No clock, no broker, no task. Each instance decides alone; that a partition has one owner is the leases' doing.

Fair shares: of P partitions and n instances, P mod n instances are to own ceil(P/n) and the others floor(P/n). Those
that own most get the greater shares, which makes the number of partitions that must move the least there is. Let E be
the partitions that are owned beyond a share and U those that nobody owns. Giving back lowers E by one, whoever else
acts on the same view; taking below a share never raises E; so E and then U come to 0, and then nothing moves.
"""

from __future__ import annotations

from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass
from typing import NamedTuple


class Partition(NamedTuple):
    """One partition of a feed; the least number is 0."""

    feed: str
    number: int


@dataclass(frozen=True, slots=True)
class Decision:
    """What to do after one look."""

    give_back: Partition | None  # one at a look, so that whoever takes it keeps up
    take: tuple[Partition, ...]  # in the order of the tries
    take_at_most: int  # so many of them


def shares(partitions: int, owned: Mapping[str, int]) -> dict[str, int]:
    """How many of so many partitions each instance is to own, given how many it owns."""
    if not owned:
        return {}
    least, greater = divmod(partitions, len(owned))
    by_owned = sorted(owned, key=lambda name: (-owned[name], name))
    return {name: least + (place < greater) for place, name in enumerate(by_owned)}


def decide(
    me: str,
    live: Collection[str],
    owners: Mapping[Partition, str | None],
    mine: Sequence[Partition],
    unable: Collection[str] = (),
) -> Decision:
    """What instance `me` does next.

    `live` are the instances that show a heartbeat (me or not); `owners` names every partition, with its owner where it
    has one; `mine` are those that I own, without those that I am giving back, in the order in which I took them;
    `unable` are instances that failed to start a partition a short while ago.

    Those who are unable keep what they own, up to a fair share, and may try again what nobody owns; the others take the
    rest, and give nothing back for their sake.
    """
    everybody = {me, *live}
    owned = dict.fromkeys(everybody, 0)
    for owner in owners.values():
        if owner in owned:
            owned[owner] += 1
    owned[me] = len(mine)
    wanted = _wanted(len(owners), owned, everybody.intersection(unable))
    fair = shares(len(owners), owned)[me] if me in unable else wanted[me]
    own = set(mine)
    free = sorted((each for each, owner in owners.items() if owner is None and each not in own), key=_spread)
    start = _start(me, owned, wanted) % len(free) if free else 0
    room = max(0, fair - len(mine))
    return Decision(
        give_back=mine[-1] if len(mine) > fair else None,
        take=tuple(free[start:] + free[:start]) if room else (),
        take_at_most=min(room, len(free)),
    )


def _wanted(partitions: int, owned: Mapping[str, int], unable: Collection[str]) -> dict[str, int]:
    """The share of each; where some are unable, what they do not hold is shared out over the others."""
    wanted = shares(partitions, owned)
    able = {name: count for name, count in owned.items() if name not in unable}
    if not able or len(able) == len(owned):
        return wanted
    kept = {name: min(owned[name], wanted[name]) for name in owned if name not in able}
    return {**kept, **shares(partitions - sum(kept.values()), able)}


def _start(me: str, owned: Mapping[str, int], wanted: Mapping[str, int]) -> int:
    """Where my tries begin: behind all that those before me, by name, are to take."""
    return sum(max(0, wanted[name] - owned[name]) for name in owned if name < me)


def _spread(partition: Partition) -> tuple[int, str]:
    """By number first: then neighbours in the order are of different feeds, and each instance has some of each."""
    return partition.number, partition.feed

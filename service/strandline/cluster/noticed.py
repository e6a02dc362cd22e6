"""What an instance remembers beyond its last look: who is gone, what is nobody's since when, since when it is away.

The bucket forgets an instance when its lease ends, which is when people begin to ask for it. Pure: times are arguments,
seconds on the monotonic clock.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, replace
from typing import Any

from .balance import Partition
from .looks import Look
from .status import OWNED, Status, owner_in

OLD_SHARE = 0.5  # of the lease: there are some seven looks in it, so this is no hiccup, and the lease still holds
STOPPED_SHARE = 0.8  # of the lease: an entry that vanishes younger than that did not end by itself, it was given back
REMEMBERED_S = 3600.0  # so long an instance that is gone is told of
REMEMBERED_AT_MOST = 16  # the last ones; names come from the bucket, so there must be a limit


@dataclass(frozen=True, slots=True)
class Gone:
    """An instance that is not there any more. `stopped`: in good order. `owned`: when it was seen last."""

    seen_s: float
    stopped: bool
    owned: int
    listen: str


class Noticed:
    """Fed with each look; asked at any time. An instance that has not looked for a while is not in the cluster."""

    def __init__(self, partitions: Iterable[Partition], lease_s: float, now_s: float) -> None:
        self._partitions, self._lease_s, self._old_s = tuple(partitions), lease_s, OLD_SHARE * lease_s
        self._there: dict[str, Gone] = {}  # as the last look saw them, should they be gone at the next
        self._gone: dict[str, Gone] = {}  # in the order in which they went
        self._unowned: dict[Partition, float] = {}  # since when nobody was seen to own it, whoever tried to
        self._nobodys: tuple[Partition, ...] = ()  # at the last look
        self._mine: tuple[Partition, ...] = ()
        self._instances, self._looked_s = 0, -math.inf
        self._joined_s = now_s  # until it has joined once, since when it tries
        self.ever_joined = False

    def look(
        self,
        look: Look,
        statuses: Mapping[str, Status | None],
        mine: Iterable[Partition],
        me: str | None,
        starting: Iterable[Partition] = (),
    ) -> None:
        """`statuses` are the other instances', `mine` the partitions whose lease this instance holds.

        Of those, `starting` were not owned yet: a partition that cannot be started stays nobody's from try to try.

        `me` is None where this instance has no heartbeat in the bucket: then it is not in the cluster.
        """
        self._mine, self._instances = tuple(mine), len(look.instances.keys() | ({me} if me else set()))
        self._looked_s = look.at_s
        if me is not None:
            self._joined_s, self.ever_joined = look.at_s, True
        leased = {each for each, entry in look.owners.items() if owner_in(entry).instance in look.instances}
        leased |= {*self._mine}
        tried = {*starting, *_tried(statuses)}
        self._unowned = {each: at_s for each, at_s in self._unowned.items() if each in tried or each not in leased}
        self._nobodys = tuple(each for each in self._partitions if each not in leased)
        for each in self._nobodys:
            self._unowned.setdefault(each, look.at_s)
        for name in self._there.keys() - look.instances.keys():
            one, young = self._there[name], look.at_s - self._there[name].seen_s < STOPPED_SHARE * self._lease_s
            self._gone[name] = replace(one, stopped=one.stopped or young)
        for name in statuses:
            self._gone.pop(name, None)
        self._there = {name: _as_gone(look, name, status) for name, status in statuses.items()}
        self._forget(look.at_s)

    def _forget(self, now_s: float) -> None:
        self._gone = {name: one for name, one in self._gone.items() if now_s < one.seen_s + REMEMBERED_S}
        while len(self._gone) > REMEMBERED_AT_MOST:
            del self._gone[next(iter(self._gone))]

    # ---- what it tells ----------------------------------------------------------------------------------------------

    def added(self, document: dict[str, Any], now_s: float) -> dict[str, Any]:
        """`status.cluster_document` with `away_s`, `unseen_s` (since it last saw itself in the cluster), `gone`, and
        `nobodys_s` of each partition (in the order given).
        """
        away_s = self.away_s(now_s)
        for each, row in zip(self._partitions, document["partitions"], strict=True):
            since_s = self._unowned.get(each) if row["owner"] is None else None
            row["nobodys_s"] = None if since_s is None else round(max(0.0, now_s - since_s), 3)
        unseen_s = round(max(0.0, now_s - self._joined_s), 3)
        away_s = None if away_s is None else round(away_s, 3)
        return {"away_s": away_s, "unseen_s": unseen_s, **document, "gone": self.gone(now_s)}

    def away_s(self, now_s: float) -> float | None:
        """For how long this instance has not been in the cluster; None while it is."""
        since_s = max(0.0, now_s - self._joined_s)
        return None if self.ever_joined and since_s <= self._old_s else since_s

    def instances(self, now_s: float) -> int | None:
        """How many there are, with this one; None while nothing is seen."""
        return self._instances if self._sees(now_s) else None

    def nobodys(self, now_s: float) -> list[Partition] | None:
        """Partitions without an owner; None while nothing is seen."""
        return list(self._nobodys) if self._sees(now_s) else None

    def _sees(self, now_s: float) -> bool:
        return now_s - self._looked_s <= self._old_s

    def gone(self, now_s: float) -> list[dict[str, Any]]:
        """Instances that were seen by this one and are not there now, the last that went first."""
        return [
            {
                "instance": name,
                "seen_s": round(max(0.0, now_s - one.seen_s), 3),
                "stopped": one.stopped,
                "owned": one.owned,
                "listen": one.listen or None,
            }
            for name, one in reversed(self._gone.items())
        ]

    def check(self) -> None:
        """Assert what must always hold."""
        assert {*self._nobodys} <= self._unowned.keys() <= {*self._partitions}
        assert not {*self._nobodys} & {*self._mine}
        assert not self._gone.keys() & self._there.keys() and len(self._gone) <= REMEMBERED_AT_MOST
        assert not self.ever_joined or self._joined_s <= self._looked_s


def _tried(statuses: Mapping[str, Status | None]) -> Iterator[Partition]:
    """What others hold a lease of and do not own: they start it, or could not."""
    for status in statuses.values():
        for part in status.partitions if status is not None else ():
            if part.state != OWNED:
                yield Partition(part.feed, part.partition)


def _as_gone(look: Look, name: str, status: Status | None) -> Gone:
    seen_s = look.at_s - look.instances[name].age_s
    if status is None:
        return Gone(seen_s, False, 0, "")
    return Gone(seen_s, status.leaving, len(status.partitions), status.listen)

"""Members of a cluster with simple owners: who runs what, who was stopped and how. What must come of it, tests say."""

from __future__ import annotations

import asyncio
import random
import time
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

from helpers_service import DEADLINE_S, POLL_S
from strandline.broker_access import BrokerAccess
from strandline.cluster.balance import Partition
from strandline.cluster.leases import Held
from strandline.cluster.member import ClusterSettings, Member
from strandline.errors import StrandlineError
from strandline.tasks import ended

FEED = "river-gauges"
SHORT_S, LONG_S = 2.0, 30.0  # leases


class SimpleOwner:
    """An owner that does nothing but be there. `drained` holds its draining while it is clear."""

    def __init__(self, cluster: Cluster, instance: str, partition: Partition, held: Held) -> None:
        self._cluster, self.instance, self.partition, self.held = cluster, instance, partition, held
        self.ended, self.why = asyncio.Event(), "its log was taken over"
        self.fence = held.fence

    async def stop(self, *, drain: bool) -> None:
        """See strandline.cluster.holding.Owner."""
        self._cluster.stopping += 1
        self._cluster.stopping_at_most = max(self._cluster.stopping_at_most, self._cluster.stopping)
        try:
            if drain:
                await asyncio.wait_for(self._cluster.drained.wait(), DEADLINE_S)
        finally:
            self._cluster.stopping -= 1
        self._cluster.stopped.append((self.instance, self.partition.number, drain, self.held.valid(time.monotonic())))
        if self._cluster.running.get(self.partition) is self:
            del self._cluster.running[self.partition]

    def status(self) -> dict[str, object]:
        """See strandline.cluster.holding.Owner."""
        told = {"behind_messages": self.partition.number, "watermark": "2026-05-01T00:00:00Z", "watermark_age_s": 5.0}
        return {**told, "words": self._cluster.hindered.get(self.partition.number, "")}


@dataclass
class Cluster:
    """All members of a test, and what their owners did."""

    count: int
    lease_s: float
    members: dict[str, Member] = field(default_factory=dict)
    running: dict[Partition, SimpleOwner] = field(default_factory=dict)
    stopped: list[tuple[str, int, bool, bool]] = field(default_factory=list)  # instance, number, drained, while valid
    fences: dict[Partition, list[int]] = field(default_factory=dict)
    failing: set[tuple[str, int]] = field(default_factory=set)  # instance and number: cannot be started there
    hindered: dict[int, str] = field(default_factory=dict)  # numbers, and what hinders them
    hanging: set[int] = field(default_factory=set)  # numbers whose start never ends
    drained: asyncio.Event = field(default_factory=asyncio.Event)
    stopping: int = 0
    stopping_at_most: int = 0

    @property
    def partitions(self) -> list[Partition]:
        return [Partition(FEED, number) for number in range(self.count)]

    def add(
        self, instance: str, url: str, key: str | None = None, *, digest: str = "", access: BrokerAccess | None = None
    ) -> Member:
        """A member that begins; `key` where another has its name."""
        self.drained.set()
        settings = ClusterSettings("river", instance, (url,), access or BrokerAccess(), 1, self.lease_s, digest)

        async def start(partition: Partition, held: Held) -> SimpleOwner:
            if (instance, partition.number) in self.failing:
                raise StrandlineError("its disk is full")
            if partition.number in self.hanging:
                await asyncio.Event().wait()
            assert partition not in self.running, f"{partition} is owned already"
            self.fences.setdefault(partition, []).append(held.fence)
            self.running[partition] = SimpleOwner(self, key or instance, partition, held)
            return self.running[partition]

        made = Member(
            settings,
            self.partitions,
            start,
            now_ns=time.time_ns,
            listen=f"{instance}:8600",
            random_source=random.Random(7),
        )
        self.members[key or instance] = made
        made.begin()
        return made

    def owned(self) -> dict[str, int]:
        """instance -> how many run there."""
        counts = dict.fromkeys(self.members, 0)
        for owner in self.running.values():
            counts[owner.instance] += 1
        return counts

    async def kill(self, instance: str) -> None:
        """As a process that dies: nothing is stopped, nothing given back."""
        member = self.members.pop(instance)
        tasks = [task for task in (member._work, *member._holders.values()) if task is not None]
        for task in tasks:
            while not task.done():  # nats-py swallows a cancelling that comes while it flushes
                task.cancel()
                await asyncio.wait([task], timeout=POLL_S)
            await ended(task)
        self.running = {each: owner for each, owner in self.running.items() if owner.instance != instance}

    async def until(self, *shares: int) -> None:
        """Wait until all is owned, in these shares; the members are checked meanwhile."""
        await self.becomes(lambda: sorted(self.owned().values()) == sorted(shares))

    async def becomes(self, true: Any) -> None:
        """Wait until it is true; the members are checked meanwhile."""
        deadline = time.monotonic() + DEADLINE_S
        while not true():
            assert time.monotonic() < deadline, (self.owned(), {key: each.words for key, each in self.members.items()})
            for member in self.members.values():
                member.check()
            await asyncio.sleep(POLL_S)

    async def rests(self, seconds: float) -> None:
        """Nothing moves in so long."""
        before, until_s = dict(self.running), time.monotonic() + seconds
        while time.monotonic() < until_s:
            assert self.running == before
            for member in self.members.values():
                member.check()
            await asyncio.sleep(POLL_S)

    async def stop(self, instances: Sequence[str] | None = None) -> None:
        """Stop these, or all."""
        for name in [*self.members] if instances is None else instances:
            await self.members.pop(name).stop()

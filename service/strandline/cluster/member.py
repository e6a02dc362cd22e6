"""One instance in a cluster: its connection to the brokers, its heartbeat, and the partitions it takes and gives back.

What to take is decided by `balance`, what becomes of a partition that is taken by `holding`, what an owner does by the
given `start`. No ordering, no log, no HTTP.
"""

from __future__ import annotations

import asyncio
import contextlib
import logging
import random
import time
import uuid
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from typing import Any

from ..backoff import backoff_s
from ..broker_access import BrokerAccess
from ..config_cluster import partition_name
from ..errors import StrandlineError
from ..nats_client import Client, connect, disconnect
from ..tasks import ended, first_of
from .balance import Decision, Partition, decide
from .holding import RENEW_SHARE, Holding, Owner, Start
from .leases import Held, LeaseLost, Leases, Look, instance_key, owner_key
from .status import OWNED, Ownership, Status, cluster_document, encoded, feeds_of, owner_in, status_in

log = logging.getLogger(__name__)
LOOK_AT_MOST_S, LOOK_AT_LEAST_S, LOOK_SHARE = 1.0, 0.1, 1 / 15  # how often it looks: each second with a lease of 15 s
TAKES_AT_A_LOOK = 64  # taken one after the other; the heartbeat must not wait for a thousand of them
CONNECT_BASE_S, CONNECT_AT_MOST_S = 0.2, 5.0  # backoff; with a lease of 15 s there are 7 s to be connected again
START_BASE_S, START_AT_MOST_S = 1.0, 300.0  # backoff after an owner that could not be started
STEADY_S = 60.0  # an owner that ran so long is no repeat of an earlier failure
STOP_WITHIN_S = 20.0
NAMESAKE_LEASES = 1.5  # a heartbeat that is still there after so many leases is being renewed
WORDS_OF_TROUBLE_AT_MOST = 3  # partitions named in one sentence


@dataclass(frozen=True, slots=True)
class ClusterSettings:
    """What a configuration says about it."""

    name: str
    instance: str
    urls: tuple[str, ...]
    access: BrokerAccess
    replicas: int
    lease_s: float


@dataclass(frozen=True, slots=True)
class _Trouble:
    """An owner that could not be started, or that ended by itself; `until_s` (monotonic) it is not tried again."""

    attempts: int
    until_s: float
    words: str


class Member:
    """Takes its share of the partitions and runs them, from `begin` until `stop`. Lives on one event loop."""

    def __init__(
        self,
        settings: ClusterSettings,
        partitions: Iterable[Partition],
        start: Start,
        *,
        now_ns: Callable[[], int],
        listen: str = "",
        random_source: random.Random | None = None,
    ) -> None:
        """`partitions`: all of the cluster, as this instance is configured. `now_ns`: wall time.

        `start` makes an owner; it raises StrandlineError where it cannot, and cleans up where it is cancelled.
        """
        self._settings, self._partitions, self._start = settings, tuple(partitions), start
        self._now_ns, self._listen, self._random = now_ns, listen, random_source or random.Random()
        self._key, self._run, self._since_ns = instance_key(settings.instance), uuid.uuid4().hex, now_ns()
        self._look_every_s = min(LOOK_AT_MOST_S, max(LOOK_AT_LEAST_S, settings.lease_s * LOOK_SHARE))
        self._holdings: dict[Partition, Holding] = {}  # in the order in which they were taken
        self._holders: dict[Partition, asyncio.Task[None]] = {}
        self._troubles: dict[Partition, _Trouble] = {}
        self._failures = 0  # in a row, of whatever partition
        self._work: asyncio.Task[None] | None = None
        self._leaving, self._soon = asyncio.Event(), asyncio.Event()  # `soon`: look now
        self._leases: Leases | None = None
        self._look: Look | None = None
        self._others: dict[str, Status] = {}  # as they were seen
        self._heartbeat: Held | None = None
        self._beaten: tuple[Any, ...] = ()  # what the last heartbeat said that others act on
        self._beat_due_s = 0.0
        self._away = "it has not connected yet"
        self._refused_s: float | None = None  # since when the heartbeat's name is somebody else's
        self._namesake = ""
        self._parted = ""  # what was stopped because its lease could not be renewed

    # ---- what observers see -----------------------------------------------------------------------------------------

    @property
    def connected(self) -> bool:
        """Whether the brokers answer."""
        return self._leases is not None

    @property
    def words(self) -> str:
        """What is wrong and what comes of it; empty where nothing is."""
        found = [self._words_away(), self._parted, self._namesake]
        if trouble := self._words_of_trouble():
            found.append(f"not taken over: {trouble}")
        for name, status in sorted(self._others.items()):
            if status.trouble:
                found.append(f"{name} could not take over {status.trouble}")
            if status.feeds != feeds_of(self._partitions):
                found.append(f"{name} has other feeds or counts of partitions: give all instances one configuration")
        return "; ".join(filter(None, found))

    def document(self) -> dict[str, Any]:
        """GET /v1/cluster. Ages are counted on the monotonic clock, up to now."""
        settings = self._settings
        return {
            "name": settings.name,
            "instance": settings.instance,
            "lease_s": settings.lease_s,
            "connected": self.connected,
            "words": self.words,
            **cluster_document(settings.instance, self._status(), self._look, self._partitions, time.monotonic()),
        }

    def check(self) -> None:
        """Assert what must always hold."""
        assert self._holdings.keys() == self._holders.keys()
        assert set(self._holdings) <= set(self._partitions)
        for partition, holding in self._holdings.items():
            assert holding.partition == partition
            holding.check()
        assert all(trouble.attempts > 0 and trouble.words for trouble in self._troubles.values())
        assert self._heartbeat is None or self._heartbeat.key == self._key
        if self._leaving.is_set():
            assert all(holding.asked.is_set() for holding in self._holdings.values())

    # ---- beginning and ending ---------------------------------------------------------------------------------------

    def begin(self) -> None:
        """Begin to connect and to take; returns at once."""
        self._work = asyncio.create_task(self._connections(), name=f"cluster {self._settings.instance}")

    async def stop(self, within_s: float = STOP_WITHIN_S) -> None:
        """Stop all owners at the same time, drained as far as that is done in time; then let others take over at once.

        A second call does nothing.
        """
        if self._work is None:
            return
        self._leaving.set()
        self._soon.set()
        for holding in self._holdings.values():
            holding.asked.set()
        if self._holders:
            _, slow = await asyncio.wait([*self._holders.values()], timeout=within_s)
            for holding in self._holdings.values():
                holding.hurry.set()
            if slow:
                await asyncio.wait(slow)
        work, self._work = self._work, None
        await ended(work)

    # ---- the connection ---------------------------------------------------------------------------------------------

    async def _connections(self) -> None:
        """Connect, look and act until that fails, and again. What is owned goes on meanwhile: see `holding`."""
        settings, attempts = self._settings, 0
        at_most_s = min(CONNECT_AT_MOST_S, settings.lease_s / 6)
        while True:
            client: Client | None = None
            try:
                client = await connect(settings.urls, settings.access, f"strandline {settings.name}")
                self._leases = await Leases.open(client, settings.name, settings.lease_s, settings.replicas)
                while True:
                    await self._turn(self._leases)
                    attempts, self._parted = 0, ""
                    await first_of(self._soon.wait(), asyncio.sleep(self._look_every_s))
            except StrandlineError as error:
                self._lost(str(error))
            except Exception as error:
                log.exception("cluster %s: an unforeseen error", settings.name)
                self._lost(f"an unforeseen error: {error or type(error).__name__}")
            finally:
                leases, self._leases = self._leases, None
                if client is not None:
                    await self._let_go(client, leases)
            await asyncio.sleep(backoff_s(self._random, attempts, base_s=CONNECT_BASE_S, at_most_s=at_most_s))
            attempts += 1

    def _lost(self, why: str) -> None:
        if why != self._away:
            log.warning("cluster %s: %s", self._settings.name, why)
        self._away = why

    async def _let_go(self, client: Client, leases: Leases | None) -> None:
        """At a stop, the heartbeat is given back last of all."""
        if self._leaving.is_set() and not self._holders and leases is not None and self._heartbeat is not None:
            with contextlib.suppress(StrandlineError):
                await leases.give_back(self._heartbeat)
            self._heartbeat = None
        await disconnect(client)

    # ---- one turn: beat, look, decide, act --------------------------------------------------------------------------

    async def _turn(self, leases: Leases) -> None:
        self._soon.clear()
        await self._beat(leases)
        look = await leases.look()
        me = self._settings.instance
        statuses = {name: status_in(seen) for name, seen in look.instances.items() if name != me}
        self._look, self._others = look, {name: status for name, status in statuses.items() if status is not None}
        self._forget_troubles()
        if self._heartbeat is None or self._leaving.is_set():
            return
        unable = {name for name, status in self._others.items() if status.unable}
        decision = decide(
            me,
            statuses.keys() - {name for name, status in self._others.items() if status.leaving},
            {each: self._owner_of(each) for each in self._partitions},
            [each for each, holding in self._holdings.items() if not holding.ends],
            {me, *unable} if self._unable() else unable,
        )
        if decision.give_back is not None:
            self._holdings[decision.give_back].asked.set()
        await self._take(leases, decision)

    async def _beat(self, leases: Leases) -> None:
        """Renew the heartbeat when that is due, or what others act on has changed."""
        status, now_s = self._status(), time.monotonic()
        news = (status.unable, status.leaving, [(each.feed, each.partition, each.state) for each in status.partitions])
        if self._heartbeat is not None:
            if now_s < self._beat_due_s and news == self._beaten:
                return
            try:
                await leases.renew(self._heartbeat, encoded(status))
            except LeaseLost as error:
                log.warning("cluster %s: the heartbeat: %s", self._settings.name, error)
                self._heartbeat = None
        if self._heartbeat is None:
            self._heartbeat = await leases.take(self._key, encoded(status))
            self._see_namesake(now_s)
        self._beaten, self._beat_due_s = news, now_s + self._settings.lease_s * RENEW_SHARE

    def _see_namesake(self, now_s: float) -> None:
        """Nothing is taken while another heartbeat stands under this name."""
        settings = self._settings
        if self._heartbeat is not None:
            self._refused_s, self._namesake = None, ""
        elif self._refused_s is None:
            self._refused_s = now_s
            self._namesake = f"the last process called {settings.instance} is forgotten within {settings.lease_s:g} s"
        elif now_s > self._refused_s + NAMESAKE_LEASES * settings.lease_s and "another" not in self._namesake:
            self._namesake = f"another process is called {settings.instance} too: give each a cluster.instance"
            log.warning("cluster %s: %s", settings.name, self._namesake)

    async def _take(self, leases: Leases, decision: Decision) -> None:
        me, taken = self._settings.instance, 0
        for partition in decision.take:
            if taken >= min(decision.take_at_most, TAKES_AT_A_LOOK) or self._leaving.is_set():
                break
            if self._rests(partition):
                continue
            since_ns = self._now_ns()
            value = encoded(Ownership(me, since_ns))
            held = await leases.take(owner_key(partition), value)
            if held is not None and self._leaving.is_set():
                await leases.give_back(held)
            elif held is not None:
                taken += 1
                self._hold(Holding(partition, held, value, since_ns, start=self._start,
                                   leases=lambda: self._leases, lease_s=self._settings.lease_s))  # fmt: skip

    def _owner_of(self, partition: Partition) -> str | None:
        """As it was seen; what is still being given back here is not free yet."""
        if partition in self._holdings:
            return self._settings.instance
        seen = self._look.owners.get(partition) if self._look else None
        return None if seen is None else owner_in(seen).instance

    # ---- what is held -----------------------------------------------------------------------------------------------

    def _hold(self, holding: Holding) -> None:
        partition = holding.partition
        self._holdings[partition] = holding
        name = f"cluster {self._settings.instance}: {partition_name(*partition)}"
        self._holders[partition] = asyncio.create_task(self._holder(holding), name=name)

    async def _holder(self, holding: Holding) -> None:
        name = partition_name(*holding.partition)
        try:
            await holding.run()
        except Exception as error:
            log.exception("%s: an unforeseen error", name)
            holding.failure = f"an unforeseen error: {error or type(error).__name__}"
        del self._holdings[holding.partition], self._holders[holding.partition]
        if holding.lost:
            log.warning("%s: stopped: %s", name, holding.lost)
            if not self.connected:
                self._parted = ", ".join(filter(None, (self._parted or "stopped, for want of a renewed lease:", name)))
        if holding.failure:
            self._note(holding)

    def _note(self, holding: Holding) -> None:
        """Try it again later, and later still if it fails again, or others do."""
        now_s, before = time.monotonic(), self._troubles.get(holding.partition)
        attempts = max(before.attempts if before else 0, self._failures) + 1
        if holding.owned_s is not None and now_s > holding.owned_s + STEADY_S:
            attempts = 1
        self._failures = attempts
        wait_s = backoff_s(self._random, attempts, base_s=START_BASE_S, at_most_s=START_AT_MOST_S)
        self._troubles[holding.partition] = _Trouble(attempts, now_s + wait_s, holding.failure)
        log.warning("%s: %s; next try in %.1f s", partition_name(*holding.partition), holding.failure, wait_s)

    def _forget_troubles(self) -> None:
        """Of what has run for a while here, and of what others took over once it may be tried here again."""
        now_s = time.monotonic()
        for partition, holding in self._holdings.items():
            if holding.owned_s is not None and now_s > holding.owned_s + STEADY_S:
                self._troubles.pop(partition, None)
                self._failures = 0 if not self._troubles else self._failures
        for partition in list(self._troubles):
            if not self._rests(partition) and self._owner_of(partition) not in (None, self._settings.instance):
                del self._troubles[partition]

    def _rests(self, partition: Partition) -> bool:
        trouble = self._troubles.get(partition)
        return trouble is not None and time.monotonic() < trouble.until_s

    def _unable(self) -> bool:
        return any(map(self._rests, self._troubles))

    # ---- what is said -----------------------------------------------------------------------------------------------

    def _status(self) -> Status:
        return Status(
            self._run,
            self._since_ns,
            self._listen,
            feeds_of(self._partitions),
            self._unable(),
            self._leaving.is_set(),
            self._words_of_trouble(),
            tuple(holding.status() for holding in self._holdings.values()),
        )

    def _words_of_trouble(self) -> str:
        """Partitions that nobody owns, or that start here once more, with what went wrong the last time."""
        found = [
            f"{partition_name(*partition)}: {trouble.words}"
            for partition, trouble in self._troubles.items()
            if self._owner_of(partition) in (None, self._settings.instance)
            and ((holding := self._holdings.get(partition)) is None or holding.state != OWNED)
        ]
        more = len(found) - WORDS_OF_TROUBLE_AT_MOST
        return ", ".join(found[:WORDS_OF_TROUBLE_AT_MOST]) + (f" and {more} more" if more > 0 else "")

    def _words_away(self) -> str:
        if self.connected:
            return ""
        ends_s = [holding.held.valid_until_s - time.monotonic() for holding in self._holdings.values()]
        if not ends_s:
            return self._away
        return f"{self._away}; what runs here is stopped unless that ends within {max(0.0, min(ends_s)):.0f} s"


__all__ = ["ClusterSettings", "Member", "Owner", "Start"]

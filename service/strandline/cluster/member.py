"""One instance in a cluster: its connection to the brokers, its heartbeat, and the partitions it takes and gives back.

What to take is decided by `balance`, what becomes of a partition that is taken by `holding`, what an owner does by the
given `start`. No ordering, no log, no HTTP.
"""

from __future__ import annotations

import asyncio
import contextlib
import logging
import random
import re
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
from .causes import AWAY, BARRED, NAME, Cause, of_leases, of_settings, of_takeovers
from .holding import RENEW_SHARE, Holding, Owner, Start
from .leases import BucketGone, Held, LeaseLost, Leases, instance_key, owner_key
from .link import Away
from .looks import Look
from .noticed import Noticed
from .status import OWNED, Ownership, Status, cluster_document, encoded, feeds_of, owner_in, status_in
from .troubles import Troubles

log = logging.getLogger(__name__)
LOOK_AT_MOST_S, LOOK_AT_LEAST_S, LOOK_SHARE = 1.0, 0.1, 1 / 15  # how often it looks: each second with a lease of 15 s
TAKES_AT_A_LOOK = 64  # taken one after the other; the heartbeat must not wait for a thousand of them
CONNECT_BASE_S, CONNECT_AT_MOST_S = 0.2, 5.0  # backoff; with a lease of 15 s there are 10.5 s to renew again
STOP_WITHIN_S = 20.0
MISSES_AT_MOST = 3  # turns that failed in a row, before another broker is tried
CAUSES_AT_MOST = 16  # that are logged of one absence
NAMESAKE_LEASES = 1.5  # a heartbeat that is still there after so many leases is being renewed


@dataclass(frozen=True, slots=True)
class ClusterSettings:
    """What a configuration says about it."""

    name: str
    instance: str
    urls: tuple[str, ...]
    access: BrokerAccess
    replicas: int
    lease_s: float
    digest: str = ""  # of what decides how messages are read, to be compared with the others'


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
        self._troubles = Troubles(self._random)
        self._work: asyncio.Task[None] | None = None
        self._leaving, self._soon = asyncio.Event(), asyncio.Event()  # `soon`: look now
        self._over = self._bucket_seen = False
        self._misses = 0
        self._leases: Leases | None = None
        self._look: Look | None = None
        self._others: dict[str, Status] = {}  # as they were seen
        self._heartbeat: Held | None = None
        self._beaten: tuple[Any, ...] = ()  # what the last heartbeat said that others act on
        self._beat_due_s = 0.0
        self._away, self._why = "it has not connected yet", AWAY
        self._logged: set[str] = set()  # causes of this absence
        self._refused_s: float | None = None  # since when the heartbeat's name is somebody else's
        self._namesake = ""
        self._parted: list[str] = []  # what was stopped because its lease could not be renewed
        self.digest = settings.digest
        self.noticed = Noticed(self._partitions, settings.lease_s, time.monotonic())

    # ---- what observers see -----------------------------------------------------------------------------------------

    @property
    def connected(self) -> bool:
        """Whether the brokers answer."""
        return not self._away

    @property
    def words(self) -> str:
        """What is wrong and what comes of it; empty where nothing is."""
        return "; ".join(cause.words for cause in self.causes())

    def causes(self) -> list[Cause]:
        """What is wrong, one by one. Of the others nothing while the brokers do not answer: what was seen is old."""
        found = [Cause(NAME, self._namesake)] if self._namesake else []
        if not self.connected:
            ends_s = [holding.held.valid_until_s - time.monotonic() for holding in self._holdings.values()]
            away, leases = Cause(self._why, self._away), of_leases(min(ends_s, default=None), self._parted)
            return [away, *leases, *found]
        takeovers = of_takeovers(self._settings.instance, self._words_of_trouble(), self._others)
        return [*found, *takeovers, *of_settings(self._status(), self._others)]

    def document(self) -> dict[str, Any]:
        """GET /v1/cluster. Ages are counted on the monotonic clock, up to now."""
        settings, now_s = self._settings, time.monotonic()
        document = cluster_document(settings.instance, self._status(), self._look, self._partitions, now_s)
        return {
            "name": settings.name,
            "instance": settings.instance,
            "lease_s": settings.lease_s,
            "connected": self.connected,
            "words": self.words,
            "causes": [cause._asdict() for cause in self.causes()],
            **self.noticed.added(document, now_s),
        }

    def check(self) -> None:
        """Assert what must always hold."""
        assert self._holdings.keys() == self._holders.keys()
        assert set(self._holdings) <= set(self._partitions)
        for partition, holding in self._holdings.items():
            assert holding.partition == partition
            holding.check()
        self.noticed.check()
        self._troubles.check()
        assert self._heartbeat is None or self._heartbeat.key == self._key
        if self._leaving.is_set():
            assert all(holding.asked.is_set() for holding in self._holdings.values())

    # ---- beginning and ending ---------------------------------------------------------------------------------------

    def begin(self, listen: str = "") -> None:
        """Begin to connect and to take; returns at once. `listen`: where this instance is reached, if known by now."""
        self._listen = listen or self._listen
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
        self._over = True  # nats-py swallows a cancelling that comes while it flushes
        await ended(work)

    # ---- the connection ---------------------------------------------------------------------------------------------

    async def _connections(self) -> None:
        """Connect, look and act until that fails, and again. What is owned goes on meanwhile: see `holding`."""
        settings, attempts = self._settings, 0
        at_most_s = min(CONNECT_AT_MOST_S, settings.lease_s / 6)
        while not self._over:
            client: Client | None = None
            try:
                client = await connect(settings.urls, settings.access, f"strandline {settings.name}")
                if not self._bucket_seen:
                    await Leases.open(client, settings.name, settings.lease_s, settings.replicas)
                    self._bucket_seen = True
                self._leases = Leases(client, settings.name, settings.lease_s)
                attempts += 1
                while not self._over:
                    if await self._answered(client, self._leases):
                        attempts = 0
                    await first_of(self._soon.wait(), asyncio.sleep(self._look_every_s))
            except StrandlineError as error:
                self._lost(error, BARRED if client is not None and not isinstance(error, Away) else AWAY)
            except Exception as error:
                log.exception("cluster %s: an unforeseen error", settings.name)
                self._lost(error)
            finally:
                leases, self._leases = self._leases, None
                if client is not None:
                    await self._let_go(client, leases)
            await asyncio.sleep(backoff_s(self._random, attempts, base_s=CONNECT_BASE_S, at_most_s=at_most_s))
            attempts += 1

    async def _answered(self, client: Client, leases: Leases) -> bool:
        """Whether one turn went well. One or two that did not leave the connection as it is.

        Leases are being renewed over it, and it need not be at fault: a leader may be missing. Raises StrandlineError.
        """
        try:
            await self._turn(leases)
        except Away as error:
            self._lost(error)
            self._misses += 1
            if not client.is_connected or self._misses >= MISSES_AT_MOST or isinstance(error, BucketGone):
                self._misses = 0
                raise
            return False
        self._misses, self._away, self._parted = 0, "", []
        self._logged.clear()
        return True

    def _lost(self, error: Exception, about: str = AWAY) -> None:
        why = str(error) if isinstance(error, StrandlineError) else f"an unforeseen error: {error!r}"
        cause = re.sub(r"\d+", "#", why)
        if cause not in self._logged and len(self._logged) < CAUSES_AT_MOST:
            self._logged.add(cause)
            log.warning("cluster %s: %s: %s. %s", self._settings.name, self._settings.instance, why, self._advice())
        self._away, self._why = why, about
        if isinstance(error, BucketGone):
            self._bucket_seen = False

    def _advice(self) -> str:
        if self.noticed.ever_joined:
            return "It tries again by itself; look at the brokers and the way to them"
        return "It joins by itself once that is mended: look at urls and secrets of [cluster], and at the brokers"

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
        was_there = self._heartbeat is not None
        await self._beat(leases)
        look = await leases.look()
        me = self._settings.instance
        statuses = {name: status_in(seen) for name, seen in look.instances.items() if name != me}
        self._look, self._others = look, {name: status for name, status in statuses.items() if status is not None}
        starting = [each for each, holding in self._holdings.items() if holding.owned_s is None]
        self.noticed.look(look, statuses, self._holdings, me if self._heartbeat is not None else None, starting)
        self._forget_troubles()
        if not was_there or self._heartbeat is None or self._leaving.is_set():
            return  # who has just come waits for one look, so that those who come together see each other first
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
            if self._troubles.rests(partition, time.monotonic()):
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
                self._parted.append(name)
        if holding.failure:
            wait_s = self._troubles.note(
                holding.partition, holding.failure, holding.owned_s, time.monotonic(), is_passing=holding.is_passing
            )
            log.warning("%s: %s; not tried again for %.1f s", name, holding.failure, wait_s)

    def _forget_troubles(self) -> None:
        now_s, here = time.monotonic(), (None, self._settings.instance)
        for partition, holding in self._holdings.items():
            self._troubles.steady(partition, holding.owned_s, now_s)
        self._troubles.elsewhere(lambda partition: self._owner_of(partition) not in here, now_s)

    def _unable(self) -> bool:
        return self._troubles.unable(time.monotonic())

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
            self.digest,
            tuple(holding.status() for holding in self._holdings.values()),
        )

    def _words_of_trouble(self) -> str:
        return self._troubles.words(self._not_running)

    def _not_running(self, partition: Partition) -> bool:
        """Whether nobody owns it, or it is being started here."""
        if (holding := self._holdings.get(partition)) is not None:
            return holding.state != OWNED
        return self._owner_of(partition) in (None, self._settings.instance)


__all__ = ["ClusterSettings", "Member", "Owner", "Start"]

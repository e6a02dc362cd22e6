"""One partition whose lease this instance holds: its owner started, the lease renewed, all of it ended in good order.

Which partitions are taken and given back is `member`'s and `balance`'s business. Nobody is cancelled here in silence: a
task of this module that is cancelled itself gives nothing back, as a process that dies.
"""

from __future__ import annotations

import asyncio
import logging
import time
from collections.abc import Awaitable, Callable
from typing import Any, Protocol

from ..errors import StrandlineError
from ..tasks import ended
from .balance import Partition
from .leases import Held, LeaseLost, Leases
from .link import Away
from .status import GIVING_BACK, OWNED, TAKING_OVER, PartitionStatus, Progress, progress_of

log = logging.getLogger(__name__)
RENEW_SHARE = 1 / 5  # of the lease, between two renewals; see leases.MARGIN_SHARE
RETRY_SHARE = 1 / 30  # of the lease, after a renewal that was not answered: 0.5 s of 15


class Owner(Protocol):
    """What runs a partition while this instance owns it."""

    ended: asyncio.Event  # set once it ended by itself, for example because its log was taken over
    why: str  # what happened then

    async def stop(self, *, drain: bool) -> None:
        """End it: with `drain` after what it has begun is durable and delivered, else at once, leaving all as it is.

        A call with `drain` may be cancelled; another one without it follows then. One comes too after it `ended`.
        """

    def status(self) -> dict[str, object]:
        """behind_messages (int or None), watermark (RFC 3339 or None), watermark_age_s (float or None).

        And words: what hinders it now, nothing where all is well.
        """


Start = Callable[[Partition, Held], Awaitable[Owner]]


class Holding:
    """A lease with what rests on it. `run` does everything; lives on one event loop.

    Afterwards `failure` says why the owner could not be started or ended by itself, and `lost` why the lease was.
    """

    def __init__(
        self,
        partition: Partition,
        held: Held,
        value: bytes,
        since_ns: int,
        *,
        start: Start,
        leases: Callable[[], Leases | None],
        lease_s: float,
    ) -> None:
        """`leases` gives those of the present connection, None while there is none."""
        self.partition, self.held, self.since_ns = partition, held, since_ns
        self._value, self._start, self._leases, self._lease_s = value, start, leases, lease_s
        self.state = TAKING_OVER
        self.failure = self.lost = ""
        self.is_passing = False  # it failed for want of an answer of the brokers
        self.owned_s: float | None = None  # since when it is owned, on the monotonic clock
        self.asked = asyncio.Event()  # to give it back, drained
        self.hurry = asyncio.Event()  # to drain no longer
        self._owner: Owner | None = None

    def status(self) -> PartitionStatus:
        """For the heartbeat and the document."""
        progress = progress_of(self._owner.status()) if self._owner is not None else Progress()
        number = self.partition.number
        return PartitionStatus(self.partition.feed, number, self.state, self.since_ns, self.held.fence, progress)

    @property
    def ends(self) -> bool:
        """Whether it is being given back, or will be as soon as it has noticed."""
        return self.asked.is_set() or self.state == GIVING_BACK

    async def run(self) -> None:
        """Start the owner; return when it is stopped and the lease given back, whatever the reason. Raises nothing."""
        keeping, asked = asyncio.ensure_future(self._keep()), asyncio.ensure_future(self.asked.wait())
        starting = asyncio.ensure_future(self._start(self.partition, self.held))
        try:
            await _first(starting, keeping, asked)
            await ended(starting)
            self._owner = self._started(starting)
            if self._owner is not None:
                await self._own(self._owner, keeping, asked)
        finally:
            for task in (starting, keeping, asked):
                await ended(task)
        self.state = GIVING_BACK
        await self._give_back()

    def check(self) -> None:
        """Assert what must always hold."""
        assert self.state in (TAKING_OVER, OWNED, GIVING_BACK)
        assert (self.state == OWNED) <= (self._owner is not None)
        assert (self.state == TAKING_OVER) <= (self.owned_s is None)
        assert 0 < self.held.fence <= self.held.revision

    # ---- the owner --------------------------------------------------------------------------------------------------

    def _started(self, starting: asyncio.Future[Owner]) -> Owner | None:
        """The owner, None where there is none: the start was called off, or failed."""
        if starting.cancelled():
            return None
        error = starting.exception()
        if error is None:
            return starting.result()
        self.failure, self.is_passing = str(error) or type(error).__name__, isinstance(error, Away)
        if not isinstance(error, StrandlineError):
            self.failure = f"an unforeseen error: {self.failure}"
            log.error("%s-%d: it could not be taken over", *self.partition, exc_info=error)
        return None

    async def _own(self, owner: Owner, keeping: asyncio.Future[None], asked: asyncio.Future[Any]) -> None:
        """Let it run until the lease is lost, it is to be given back or it ended, then stop it."""
        if not keeping.done() and not asked.done():
            self.state, self.owned_s = OWNED, time.monotonic()
            gone = asyncio.ensure_future(owner.ended.wait())
            try:
                await _first(gone, keeping, asked)
            finally:
                await ended(gone)
            if owner.ended.is_set():
                self.failure = f"it ended by itself: {owner.why}" if owner.why else "it ended by itself"
        self.state = GIVING_BACK
        drained = False
        if self.owned_s is not None and not keeping.done() and not owner.ended.is_set():
            drained = await self._drain(owner, keeping)
        if not drained:
            await self._stop(owner, drain=False)

    async def _drain(self, owner: Owner, keeping: asyncio.Future[None]) -> bool:
        """Whether it was drained before the lease was lost, or there was no more time."""
        draining = asyncio.ensure_future(self._stop(owner, drain=True))
        hurry = asyncio.ensure_future(self.hurry.wait())
        try:
            await _first(draining, keeping, hurry)
        finally:
            await ended(hurry)
            await ended(draining)
        return not draining.cancelled() and draining.result()

    async def _stop(self, owner: Owner, *, drain: bool) -> bool:
        """Whether it stopped as asked."""
        try:
            await owner.stop(drain=drain)
        except Exception as error:
            expected = isinstance(error, StrandlineError)
            log.error("%s-%d: stopping it: %s", *self.partition, error, exc_info=None if expected else error)
            return False
        return True

    # ---- the lease --------------------------------------------------------------------------------------------------

    async def _keep(self) -> None:
        """Renew until the lease is lost; `lost` says why. While nobody answers, it lasts as long as it is valid."""
        pause_s = self._lease_s * RENEW_SHARE
        while (left_s := self.held.valid_until_s - time.monotonic()) > 0:
            await asyncio.sleep(min(pause_s, left_s))
            try:
                await self._renew()
                pause_s = self._lease_s * RENEW_SHARE
            except LeaseLost as error:
                self.lost = str(error)
                return
            except StrandlineError:
                pause_s = self._lease_s * RETRY_SHARE
        self.lost = "its lease could not be renewed in time"

    async def _renew(self) -> None:
        """Not a moment longer than the lease is valid.

        nats-py swallows a cancelling that comes while it flushes, so a request that hangs is left to its own timeout.
        """
        leases = self._leases()
        if leases is None:
            raise Away("there is no connection")
        renewing = asyncio.ensure_future(leases.renew(self.held, self._value))
        try:
            await asyncio.wait({renewing}, timeout=max(0.0, self.held.valid_until_s - time.monotonic()))
        except asyncio.CancelledError:
            await ended(renewing)  # nothing else is asked about the lease meanwhile
            raise
        if renewing.done():
            return renewing.result()
        renewing.add_done_callback(lambda done: done.cancelled() or done.exception())
        renewing.cancel()
        raise LeaseLost("its lease could not be renewed in time")

    async def _give_back(self) -> None:
        leases = self._leases()
        if leases is not None:
            try:
                await leases.give_back(self.held)
            except StrandlineError as error:
                log.warning("%s-%d: %s: it ends by itself", *self.partition, error)


async def _first(*futures: asyncio.Future[Any]) -> None:
    """Wait for the first of them; none is cancelled."""
    await asyncio.wait(futures, return_when=asyncio.FIRST_COMPLETED)

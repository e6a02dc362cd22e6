"""One intake at work: messages from a broker into the feed, each settled only once the journal's sync covers it.

It decides when to connect, how many messages may be in flight, and what is said to the broker of each. Order, lateness
and refusals are the core's; bodies are read by `reading`; what a broker can do is its own module's.

Many messages are in flight at one time, so that one sync serves many. They are handed over in portions, a task for each
portion: it decodes one message after the other and hands each over as an arrival of its own, waits for all of them and
settles them. Portions take turns in the order in which they came, so messages arrive in the broker's order. What is not
taken at once goes its own way from there.
"""

from __future__ import annotations

import asyncio
import contextlib
import logging
import random
from collections.abc import Callable, Coroutine, Sequence
from itertools import starmap
from typing import Any

from ..backoff import backoff_s
from ..config_intakes import IntakeConfig
from ..errors import REFUSALS, StrandlineError
from ..ingest.offload import Aside
from ..problems import Refused
from ..runtime import FeedRuntime
from ..tasks import ended, first_of
from .broker import Broker, BrokerLost, Message
from .counts import Counts
from .handing import Begun, Handed, Handing, forget, is_in_the_feed, portions
from .reading import Read, Reader

log = logging.getLogger(__name__)
BACKOFF_BASE_S = 0.2
BACKOFF_AT_MOST_S = 15.0
FETCH_WITHIN_S = 3.0  # a stop waits so long for a fetch that is under way; brokers answer within a second or so
CONNECT_WITHIN_S = 30.0
WAITING_EVERY_S = 2.0  # how often the broker is asked how much it still holds
CLOSE_WITHIN_S = 5.0
CHECK_EVERY_S = 1.0  # a connection that is lost while nothing is fetched is noticed so soon

Sleep = Callable[[float], Coroutine[Any, Any, None]]


class Intake:
    """Takes the messages of one broker into one feed, for ever, until `stop`. Lives on one event loop."""

    def __init__(
        self,
        config: IntakeConfig,
        runtime: FeedRuntime,
        broker: Broker,
        aside: Aside,
        *,
        random_source: random.Random,
        sleep: Sleep = asyncio.sleep,
    ) -> None:
        self._config, self._runtime, self._broker = config, runtime, broker
        self._random, self._sleep = random_source, sleep
        self.counts = Counts(config.name, config.kind, runtime.clock.now_ns())
        self._handing = Handing(Reader(config, runtime, aside), runtime, self.counts)
        self._in_flight: dict[Message, asyncio.Task[None]] = {}
        self._turn = asyncio.Lock()  # to hand messages over
        self._room = asyncio.Event()
        self._stopping = asyncio.Event()
        self._tasks: list[asyncio.Task[None]] = []
        self._attempts = 0

    def start(self) -> None:
        """Begin to connect and to take; returns at once."""
        work = [self._work(), self._look()]
        if self._broker.remind_every_s is not None:
            work.append(self._remind(self._broker.remind_every_s))
        self._tasks = [asyncio.create_task(each, name=f"intake {self._config.name}") for each in work]

    async def stop(self, within_s: float) -> None:
        """Take no new message; settle what is in flight, as far as that is done in time; let the broker go.

        What is left is the broker's to send again.
        """
        self._stopping.set()
        self._room.set()
        if self._tasks:
            await asyncio.wait(self._tasks[:1], timeout=min(within_s, FETCH_WITHIN_S))
        if self._in_flight:
            await asyncio.wait({*self._in_flight.values()}, timeout=within_s)
        for task in (*self._tasks, *dict.fromkeys(self._in_flight.values())):
            await ended(task)
        with contextlib.suppress(TimeoutError):
            async with asyncio.timeout(CLOSE_WITHIN_S):
                await self._broker.close()
        self._connected(False, "it was stopped")

    # ---- the worker -------------------------------------------------------------------------------------------------

    async def _work(self) -> None:
        while not self._stopping.is_set():
            try:
                async with asyncio.timeout(CONNECT_WITHIN_S):
                    words = await self._broker.connect()
                self._attempts = 0
                self._connected(True, words or "it takes messages")
                while not self._stopping.is_set():
                    await self._step()
            except TimeoutError:
                await self._lost(f"the broker did not answer within {CONNECT_WITHIN_S:g} s")
            except StrandlineError as error:
                await self._lost(str(error))
            except Exception as error:
                self._unforeseen()
                await self._lost(f"an unforeseen error: {error or type(error).__name__}")

    async def _step(self) -> None:
        """Wait for room and the end of a pause, then fetch once."""
        self._broker.check()
        paused_ns = (self.counts.paused_until_ns or 0) - self._runtime.clock.now_ns()
        if paused_ns > 0:
            await self._idle(min(paused_ns / 1e9, CHECK_EVERY_S))
            return
        self.counts.paused_until_ns = None
        messages = self._config.in_flight_at_most - len(self._in_flight)
        size = self._config.in_flight_bytes_at_most - self.counts.in_flight_bytes
        if messages <= 0 or size <= 0:
            self._room.clear()
            with contextlib.suppress(TimeoutError):
                async with asyncio.timeout(CHECK_EVERY_S):
                    await self._room.wait()
            return
        for portion in portions(await self._broker.fetch(messages, size)):
            self._begin(portion)

    async def _idle(self, seconds: float) -> None:
        """Wait so long, or until it is to stop."""
        await first_of(self._stopping.wait(), self._sleep(seconds))

    async def _lost(self, why: str) -> None:
        if self.counts.connected or self.counts.last_error != why:
            log.warning("%s: intake %s: %s", self._runtime.config.name, self._config.name, why)
        self.counts.losses += self.counts.connected
        self.counts.last_error = why
        self._connected(False, why)
        with contextlib.suppress(TimeoutError, StrandlineError):
            async with asyncio.timeout(CLOSE_WITHIN_S):
                await self._broker.close()
        wait_s = backoff_s(self._random, self._attempts, base_s=BACKOFF_BASE_S, at_most_s=BACKOFF_AT_MOST_S)
        self._attempts += 1
        await self._idle(wait_s)

    def _connected(self, now: bool, words: str) -> None:
        self.counts.words = words
        if now != self.counts.connected:
            self.counts.connected, self.counts.since_ns = now, self._runtime.clock.now_ns()

    async def _look(self) -> None:
        """Ask now and then how much the broker still holds."""
        while True:
            try:
                self.counts.waiting = await self._broker.waiting() if self.counts.connected else None
            except StrandlineError as error:  # the worker finds out too, and says so
                log.debug("intake %s: %s", self._config.name, error)
            except Exception:
                self._unforeseen()
            await self._sleep(WAITING_EVERY_S)

    async def _remind(self, every_s: float) -> None:
        """Tell the broker of what has been in flight for a whole round."""
        before: set[Message] = set()
        while True:
            await self._sleep(every_s)
            for message in before & self._in_flight.keys():
                try:
                    await self._broker.remind(message)
                except Exception:
                    self._unforeseen()
            before = set(self._in_flight)

    def _unforeseen(self) -> None:
        """Log the error that is being handled."""
        log.exception("%s: an unforeseen error in intake %s", self._runtime.config.name, self._config.name)

    # ---- a portion of messages --------------------------------------------------------------------------------------

    def _begin(self, portion: Sequence[Message]) -> None:
        self.counts.in_flight += len(portion)
        self.counts.in_flight_bytes += sum(len(message.body) for message in portion)
        self.counts.repeats += sum(message.is_repeat for message in portion)
        task = asyncio.create_task(self._all(portion), name=f"messages of {self._config.name}")
        self._in_flight.update(dict.fromkeys(portion, task))

    async def _all(self, portion: Sequence[Message]) -> None:
        """Hand all of them over, settle those that are taken, and take the others one by one."""
        begun: list[Begun] = []
        try:
            async with self._turn:
                await asyncio.sleep(0)  # what else waits has its turn too, the sync of the portion before first
                for message, read in zip(portion, self._handing.read(portion), strict=True):
                    begun.append(await self._begun(message, read))
                self._runtime.mark()
            others = [each for each in zip(portion, begun, strict=True) if not await self._is_settled(*each)]
            if others:
                await asyncio.gather(*starmap(self._one, others))
        finally:
            for message in portion:
                self._leave(message)
            forget(begun)

    async def _begun(self, message: Message, read: Read | None) -> Begun:
        """What becomes of a message that is not handed over here is said where it is taken by itself."""
        if not self._broker.holds(message) or (self._stopping.is_set() and self._broker.takes_back):
            return None
        try:
            return await self._handing.over(message, read, more=True)
        except Exception as error:
            return error

    async def _is_settled(self, message: Message, begun: Begun) -> bool:
        if not await is_in_the_feed(begun):
            return False
        assert isinstance(begun, Handed)
        try:
            await self._settle(message, begun)
        except Exception:  # it is tried again, and told, where the message is taken by itself
            return False
        self._leave(message)
        return True

    async def _settle(self, message: Message, handed: Handed) -> None:
        if handed.detail:
            log.warning("%s: to quarantine: %s: %s", self._runtime.config.name, message.place, handed.detail)
        await self._broker.settle(message)
        self.counts.outcomes[handed.outcome] += 1

    def _leave(self, message: Message) -> None:
        """It is in flight no longer. A second call does nothing."""
        if self._in_flight.pop(message, None) is not None:
            self.counts.in_flight -= 1
            self.counts.in_flight_bytes -= len(message.body)
            self._room.set()

    # ---- one message ------------------------------------------------------------------------------------------------

    async def _one(self, message: Message, begun: Begun) -> None:
        """Take it, or put it back; nothing that happens to one message ends the others."""
        try:
            await self._take(message, begun)
        except Exception:
            log.exception("%s: an unforeseen error with %s", self._runtime.config.name, message.place)
            self.counts.last_error = f"an unforeseen error with {message.place}; the log has the details"
            await self._put_back(message, 10.0)
        finally:
            self._leave(message)

    async def _take(self, message: Message, begun: Begun) -> None:
        while self._broker.holds(message):
            if self._stopping.is_set() and self._broker.takes_back:
                await self._put_back(message, 0.0)
                return
            refusal = await self._try(message, begun)
            if refusal is None:
                return
            begun = None
            self._refused(refusal)
            if self._broker.takes_back:
                await self._put_back(message, refusal.retry_after_s)
                return
            await self._idle(refusal.retry_after_s)
            if self._stopping.is_set():
                return

    async def _try(self, message: Message, begun: Begun) -> Refused | None:
        """Hand it to the feed, unless that is begun, and settle it; or why it was not taken now."""
        try:
            if isinstance(begun, Exception):
                raise begun
            handed = begun or await self._handing.over(message)
            await handed.told
        except Refused as refusal:
            return refusal
        await self._settle(message, handed)
        return None

    def _refused(self, refusal: Refused) -> None:
        """The feed takes nothing now: fetch nothing until it may again. A key in flight says nothing of the feed."""
        if refusal.reason == "key_in_flight":
            return
        status, title = REFUSALS[refusal.reason]
        self.counts.last_error = f"the feed refuses ({status}, {title}): {refusal.detail}"
        until_ns = self._runtime.clock.now_ns() + refusal.retry_after_s * 10**9
        self.counts.paused_until_ns = max(self.counts.paused_until_ns or 0, until_ns)

    async def _put_back(self, message: Message, after_s: float) -> None:
        self.counts.outcomes["put_back"] += 1
        with contextlib.suppress(BrokerLost):
            await self._broker.put_back(message, after_s)

    def check(self) -> None:
        """Assert that what is counted as in flight is what is in flight, and within the limit."""
        self.counts.check()
        assert self.counts.in_flight == len(self._in_flight) <= self._config.in_flight_at_most
        assert self.counts.in_flight_bytes == sum(len(message.body) for message in self._in_flight)

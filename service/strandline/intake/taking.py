"""One intake at work: messages from a broker into the feed, each settled only once the journal's sync covers it.

It decides when to connect, how many messages may be in flight, and what is said to the broker of each. Order, lateness
and refusals are the core's; bodies are read by `reading`; what a broker can do is its own module's.

Many messages are in flight at one time, so that one sync serves many. Each has a task of its own that decodes and hands
over in its first step; tasks begin in the order in which they are made, so messages arrive in the broker's order.
"""

from __future__ import annotations

import asyncio
import contextlib
import logging
import random
from collections.abc import Callable, Coroutine
from typing import Any

from ..backoff import backoff_s
from ..config_intakes import IntakeConfig
from ..core.columns import Arrival, RequestKey
from ..errors import REFUSALS, BodyError, StrandlineError, TooManyFaults
from ..ingest.offload import Aside
from ..problems import Refused
from ..runtime import FeedRuntime
from ..tasks import ended, first_of
from .broker import Broker, BrokerLost, Message
from .counts import Counts
from .reading import Reader, key_in_quarantine

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
        self._reader = Reader(config, runtime, aside)
        self.counts = Counts(config.name, config.kind, runtime.clock.now_ns())
        self._in_flight: dict[Message, asyncio.Task[None]] = {}
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
            await asyncio.wait([*self._in_flight.values()], timeout=within_s)
        for task in (*self._tasks, *self._in_flight.values()):
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
        for message in await self._broker.fetch(messages, size):
            self._begin(message)

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

    # ---- one message ------------------------------------------------------------------------------------------------

    def _begin(self, message: Message) -> None:
        self.counts.in_flight += 1
        self.counts.in_flight_bytes += len(message.body)
        self.counts.repeats += message.is_repeat
        self._in_flight[message] = asyncio.create_task(self._one(message), name=f"message of {self._config.name}")

    async def _one(self, message: Message) -> None:
        """Take it, or put it back; nothing that happens to one message ends the others."""
        try:
            await self._take(message)
        except Exception:
            log.exception("%s: an unforeseen error with %s", self._runtime.config.name, message.place)
            self.counts.last_error = f"an unforeseen error with {message.place}; the log has the details"
            await self._put_back(message, 10.0)
        finally:
            del self._in_flight[message]
            self.counts.in_flight -= 1
            self.counts.in_flight_bytes -= len(message.body)
            self._room.set()

    async def _take(self, message: Message) -> None:
        while self._broker.holds(message):
            if self._stopping.is_set() and self._broker.takes_back:
                await self._put_back(message, 0.0)
                return
            refusal = await self._try(message)
            if refusal is None:
                return
            self._refused(refusal)
            if self._broker.takes_back:
                await self._put_back(message, refusal.retry_after_s)
                return
            await self._idle(refusal.retry_after_s)
            if self._stopping.is_set():
                return

    async def _try(self, message: Message) -> Refused | None:
        """Hand it to the feed and settle it; or why it was not taken now."""
        outcome = "taken"
        try:
            # Nothing awaits between reading and the core: the numbers of new sources are still right.
            arrival, key = await self._reader.arrival(message)
            await self._arrive(message, arrival, key)
        except (BodyError, TooManyFaults) as error:
            outcome, refusal = "quarantined", await self._quarantine(message, str(error))
            if refusal is not None:
                return refusal
        except Refused as refusal:
            if refusal.reason != "key_reused":
                return refusal
            outcome = "quarantined"
            if again := await self._quarantine(message, str(refusal)):
                return again
        await self._broker.settle(message)
        self.counts.outcomes[outcome] += 1
        return None

    async def _arrive(self, message: Message, arrival: Arrival, key: RequestKey | None) -> None:
        if message.sent_ns is not None:
            self.counts.delays.note((self._runtime.clock.now_ns() - message.sent_ns) / 1e9)
        await self._runtime.arrive(arrival, key)

    async def _quarantine(self, message: Message, detail: str) -> Refused | None:
        """Keep what can never be taken, with the reason; or why that cannot be done now."""
        try:
            await self._runtime.arrive(self._reader.refused(message, detail), key_in_quarantine(message))
        except Refused as refusal:
            return refusal
        log.warning("%s: to quarantine: %s: %s", self._runtime.config.name, message.place, detail)
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

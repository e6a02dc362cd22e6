"""Taking a partition's messages into its feed, one after the other in the order of the stream.

A message that cannot be taken now (the feed is full) is tried again and those behind it wait: what a later owner reads
again must come in the same order. Nothing is acknowledged to the stream: where to go on stands in the replicated log.
What is accepted, late or refused is decided by the core.
"""

from __future__ import annotations

import asyncio
import contextlib
import logging
import random
from collections import deque
from collections.abc import Callable, Coroutine
from typing import Any

from nats.aio.msg import Msg

from ..backoff import backoff_s
from ..config_intakes import JetstreamIntake
from ..core.columns import Arrival, RequestKey
from ..core.effects import Outcome
from ..errors import BodyError, StrandlineError, TooManyFaults
from ..ingest.offload import Aside
from ..intake.counts import Counts
from ..intake.jetstream import message_of
from ..intake.reading import DETAIL_CHARACTERS_AT_MOST, key_in_quarantine
from ..intake.reading import Reader as MessageReader
from ..problems import Refused
from ..runtime import FeedRuntime
from ..tasks import Turn, ended, first_of
from .commit import ReplicatedCommit
from .entries import Origin
from .link import Away, Reader

log = logging.getLogger(__name__)
STOP_WITHIN_S = 3.0
WAIT_AT_MOST_S = 1.0  # nobody else asks for this room, so a client's seconds would be idle ones
NAMES_BYTES_AT_MOST = 256 * 1024  # of the sources that one message brings: their record stands in the log whole
AWAY_BASE_S, AWAY_AT_MOST_S = 0.2, 5.0
Sleep = Callable[[float], Coroutine[Any, Any, None]]


class Taking:
    """Takes messages from `next_message` on, for ever, until `stop`. Lives on one event loop."""

    def __init__(
        self,
        runtime: FeedRuntime,
        commit: ReplicatedCommit,
        reader: Reader,
        intake: JetstreamIntake,
        aside: Aside,
        next_message: int,
        *,
        sleep: Sleep = asyncio.sleep,
    ) -> None:
        self._runtime, self._commit, self._reader, self._intake = runtime, commit, reader, intake
        self._bodies = MessageReader(intake, runtime, aside)
        self._next = next_message
        self._sleep, self._random = sleep, random.Random()
        self._in_flight: deque[tuple[asyncio.Future[Outcome | None], int]] = deque()
        self._task: asyncio.Task[None] | None = None
        self._stopping = asyncio.Event()
        self._in_hand = 0  # messages that were fetched and not handed over
        self.counts = Counts(intake.name, intake.kind, runtime.clock.now_ns())

    def start(self) -> None:
        """Begin; returns at once."""
        self._task = asyncio.create_task(self._run(), name=f"taking for {self._runtime.config.name}")

    async def stop(self) -> None:
        """Take nothing more. What was taken goes on being made durable.

        A fetch under way is waited for: the client passes over a cancelling while it waits for a message.
        """
        self._stopping.set()
        if self._task is not None:
            await asyncio.wait([self._task], timeout=STOP_WITHIN_S)
            await ended(self._task)
        await self._reader.close()

    async def _run(self) -> None:
        attempts, begun = 0, False
        while self._going_on:
            try:
                if not begun:
                    await self._reader.begin(self._next)
                    self._connected(True, "")
                    begun, attempts = True, 0
                await self._step()
            except (Away, StrandlineError) as error:
                begun = False
                self._connected(False, str(error))
                await self._idle(backoff_s(self._random, attempts, base_s=AWAY_BASE_S, at_most_s=AWAY_AT_MOST_S))
                attempts += 1
            except Exception as error:
                # A message that is passed over is lost to the order: nothing further is taken until a person looks.
                log.exception("%s: an unforeseen error with message %d", self._runtime.config.name, self._next)
                begun, told = False, str(error) or type(error).__name__
                self._connected(False, f"an unforeseen error with message {self._next}: {told}")
                await self._idle(AWAY_AT_MOST_S)

    @property
    def _going_on(self) -> bool:
        return self._runtime.failure is None and not self._stopping.is_set()

    async def _idle(self, seconds: float) -> None:
        await first_of(self._stopping.wait(), self._sleep(seconds))

    def _connected(self, now: bool, words: str) -> None:
        counts = self.counts
        if counts.connected and not now:
            counts.losses += 1
        if counts.connected != now:
            counts.connected, counts.since_ns = now, self._runtime.clock.now_ns()
        if words and words != counts.last_error:
            log.warning("%s: %s", self._runtime.config.name, words)
        counts.words = words
        counts.last_error = words or counts.last_error

    async def _step(self) -> None:
        found = await self._reader.fetch(self._intake.fetch_at_most)
        if not found:
            await self._reader.waiting()
        turn = Turn()
        for self._in_hand, given in zip(range(len(found), 0, -1), found, strict=True):
            if given.metadata.sequence.stream >= self._next:
                await turn.give()
                await self._take(given)
                if not self._going_on:
                    return
                self._next = given.metadata.sequence.stream + 1
        self._in_hand = 0
        self.counts.waiting = self._reader.pending

    # ---- one message ------------------------------------------------------------------------------------------------

    async def _take(self, given: Msg) -> None:
        """Hand it to the feed; returns once it is handed over, which may be before it is durable."""
        message = message_of(given)
        is_named = "Nats-Msg-Id" in (given.headers or {})  # else nothing but its place tells it, which comes once
        sequence, refused = given.metadata.sequence.stream, ""
        if message.sent_ns is not None:
            self.counts.delays.note((self._runtime.clock.now_ns() - message.sent_ns) / 1e9)
        while True:
            key: RequestKey | None
            try:
                if refused:
                    arrival, key = self._bodies.refused(message, refused), key_in_quarantine(message)
                else:
                    arrival, key = await self._bodies.arrival(message)
                    _require_room(arrival)
                self._hand_over(arrival, key if is_named else None, Origin(sequence, refused), len(given.data))
                break
            except (BodyError, TooManyFaults) as error:
                refused = _reason(error)
            except Refused as refusal:
                if refusal.reason == "key_reused":
                    is_named = is_named and not refused  # another message's id is made to look like this refusal's
                    refused = _reason(refusal)
                    continue
                if self._going_on:
                    await self._wait(refusal)
                if not self._going_on:
                    return
        self.counts.outcomes["quarantined" if refused else "taken"] += 1
        if refused:
            log.warning("%s: to quarantine: %s: %s", self._runtime.config.name, message.place, refused)
        while len(self._in_flight) >= self._intake.in_flight_at_most and self._going_on:
            await asyncio.wait([self._in_flight[0][0]], timeout=1.0)

    def _hand_over(self, arrival: Arrival, key: RequestKey | None, origin: Origin, size: int) -> None:
        """Let the core have it. Raises Refused where it was not taken."""
        self._commit.origin = origin
        try:
            future = self._runtime.begin(arrival, key)
        finally:
            self._commit.origin = None
        if future.done():
            future.result()  # raises Refused
            return
        self._in_flight.append((future, size))
        self.counts.in_flight += 1
        self.counts.in_flight_bytes += size
        future.add_done_callback(self._settled)

    def _settled(self, future: asyncio.Future[Outcome | None]) -> None:
        if not future.cancelled():
            future.exception()  # the runtime's failure tells it
        while self._in_flight and self._in_flight[0][0].done():
            _, size = self._in_flight.popleft()
            self.counts.in_flight -= 1
            self.counts.in_flight_bytes -= size

    @property
    def words(self) -> str:
        """What hinders it now; nothing while all is well."""
        if not self.counts.connected and self.counts.last_error is None:
            return ""  # its first try is under way
        paused = (self.counts.paused_until_ns or 0) > self._runtime.clock.now_ns()
        return self.counts.words or (self.counts.last_error or "" if paused else "")

    async def _wait(self, refusal: Refused) -> None:
        now_ns = self._runtime.clock.now_ns()
        self.counts.last_error = f"the feed takes nothing now: {refusal.detail}"
        self.counts.paused_until_ns = now_ns + refusal.retry_after_s * 10**9
        await self._idle(min(max(0.05, float(refusal.retry_after_s)), WAIT_AT_MOST_S))
        with contextlib.suppress(Away):  # what waits grows meanwhile, and nothing else would tell
            self.counts.waiting = await self._reader.waiting() + self._in_hand

    def check(self) -> None:
        """Assert that what is in flight adds up."""
        self.counts.check()
        assert self.counts.in_flight == len(self._in_flight) <= self._intake.in_flight_at_most
        assert self.counts.in_flight_bytes == sum(size for _, size in self._in_flight)


def _reason(error: Exception) -> str:
    """Why a message goes to quarantine, as far as it is kept there; no lone surrogates, which the log cannot hold."""
    return str(error)[:DETAIL_CHARACTERS_AT_MOST].encode(errors="replace").decode()


def _require_room(arrival: Arrival) -> None:
    """Raises BodyError where the names of new sources fit in no message of the log."""
    names = sum(len(name.encode()) + 8 for name in arrival.new_sources)
    if names > NAMES_BYTES_AT_MOST:
        raise BodyError(
            413,
            "Content Too Large",
            f"the message names {len(arrival.new_sources):,} new sources, {names:,} bytes; a partition takes "
            f"{NAMES_BYTES_AT_MOST:,} in one message",
        )

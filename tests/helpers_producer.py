"""A producer for tests of the whole cluster: messages on a seeded schedule, published until they are acknowledged.

Open loop: a message is due at its time, however the earlier ones fare. Each holds 20 to 50 events of one source, some
of them delayed, a few so long that they are late. What was acknowledged is remembered exactly, for the judge. It runs
in a thread with a loop of its own, so that a test can end processes meanwhile.
"""

from __future__ import annotations

import asyncio
import random
import threading
import time
from collections.abc import Collection, Sequence
from dataclasses import dataclass, field

import numpy as np
from nats.aio.client import Client
from nats.errors import Error
from nats.js import JetStreamContext
from strandline.broker_access import BrokerAccess
from strandline.errors import StrandlineError
from strandline.nats_client import connect, disconnect
from strandline_loadgen.evidence import Digests, Rows, Sent
from strandline_loadgen.stores import digests_of
from strandline_loadgen.trace import Int64s

ANSWER_S = 2.0
AGAIN_S = 0.1  # between two tries of a message; the schedule does not wait for it
END_S = 90.0  # all that is due must be acknowledged by then
LONG_DELAY_SHARE = 0.01
MS_NS = 1_000_000
EVENTS = (20, 50)


@dataclass(slots=True)
class Message:
    """One message, and what became of it. Times of events in ns since 1970, of the message on the monotonic clock."""

    number: int
    source: int
    due_s: float  # behind the producer's start
    ids: Int64s
    delays_ns: Int64s  # of its events, against `due_s`
    times: Int64s = field(default_factory=lambda: np.empty(0, np.int64))
    digests: Digests = field(default_factory=lambda: np.empty(0, np.uint32))
    begun_ns: int = 0
    acknowledged_ns: int = 0  # 0: not yet
    tries: int = 0

    def body(self, station: str, start_ns: int) -> bytes:
        """Its events as NDJSON; sets times and digests. Times are whole ms, so that some are equal."""
        due_ns = start_ns + round(self.due_s * 1e9)
        self.times = (due_ns - self.delays_ns) // MS_NS * MS_NS
        moments = np.datetime_as_string(self.times.astype("datetime64[ns]"))
        form = '{"observed_at":"%sZ","station":"%s","id":%d,"level":%d}\n'
        rows = zip(moments.tolist(), self.ids.tolist(), strict=True)
        body = "".join(form % (moment, station, number, number % 977) for moment, number in rows).encode()
        self.digests = digests_of(body)
        return body


def course(seed: int, sources: int, messages: int, messages_per_s: float) -> list[Message]:
    """A schedule: messages at exponential distances, each of a source by chance, its events up to 1.5 s old.

    One message in a hundred comes 4 to 8 s behind: that is late wherever the slack is less.
    """
    chance = np.random.default_rng(seed)
    dues = np.cumsum(chance.exponential(1 / messages_per_s, messages))
    made, first = [], 0
    for number, (due_s, source) in enumerate(zip(dues, chance.integers(0, sources, messages), strict=True)):
        count = int(chance.integers(EVENTS[0], EVENTS[1] + 1))
        delays = chance.exponential(0.3, count).clip(max=1.5)
        if chance.random() < LONG_DELAY_SHARE:
            delays += chance.uniform(4.0, 8.0)
        ids = np.arange(first, first + count, dtype=np.int64)
        made.append(Message(number, int(source), float(due_s), ids, (delays * 1e9).astype(np.int64)))
        first += count
    return made


class _Line:
    """A connection to one of the brokers, another one after it fell silent."""

    def __init__(self, urls: Sequence[str]) -> None:
        self._urls, self._turn = urls, asyncio.Lock()
        self._client: Client | None = None
        self._stream: JetStreamContext | None = None

    async def stream(self) -> JetStreamContext:
        """What to publish with. Raises StrandlineError while nobody answers."""
        async with self._turn:
            if self._client is None or self._stream is None or not self._client.is_connected:
                await self._let_go()
                self._client = await connect(self._urls, BrokerAccess(), "producer")
                self._stream = self._client.jetstream(timeout=ANSWER_S)
            return self._stream

    async def leave(self, stream: JetStreamContext) -> None:
        """It does not answer: choose again, unless that was done since."""
        async with self._turn:
            if stream is self._stream:
                await self._let_go()

    async def close(self) -> None:
        """Let it go."""
        async with self._turn:
            await self._let_go()

    async def _let_go(self) -> None:
        client, self._client, self._stream = self._client, None, None
        if client is not None:
            await disconnect(client)


class Producer:
    """Publishes a course to `feed.SOURCE`; `with` starts it, and waits at the end until all that was due is taken."""

    def __init__(self, urls: Sequence[str], schedule: Sequence[Message], sources: int, name: str = "p") -> None:
        """`name` begins the messages' ids: unique on the stream."""
        self.names = [f"gauge-{number}" for number in range(sources)]
        self._urls, self._schedule, self._name = list(urls), list(schedule), name
        self.begun: list[Message] = []
        self._end = threading.Event()
        self._failed: BaseException | None = None
        self._thread = threading.Thread(target=self._run, name="producer", daemon=True)
        self._chance = random.Random(len(self._schedule))

    def __enter__(self) -> Producer:
        self._thread.start()
        return self

    def __exit__(self, kind: object, error: BaseException | None, trace: object) -> None:
        self._end.set()
        self._thread.join(2 * END_S)
        if error is None:
            assert not self._thread.is_alive(), "the producer does not end"
            if self._failed is not None:
                raise self._failed

    @property
    def acknowledged(self) -> int:
        """How many messages were."""
        return sum(1 for message in list(self.begun) if message.acknowledged_ns)

    def finish(self) -> None:
        """Begin nothing more, and wait until all that was begun is acknowledged."""
        self.__exit__(None, None, None)

    # ---- in the thread ----------------------------------------------------------------------------------------------

    def _run(self) -> None:
        try:
            asyncio.run(self._produce())
        except BaseException as error:
            self._failed = error

    async def _produce(self) -> None:
        line = _Line(self._urls)
        tasks: set[asyncio.Task[None]] = set()
        start, start_ns = time.monotonic(), time.time_ns()
        try:
            for message in self._schedule:
                while (left := start + message.due_s - time.monotonic()) > 0 and not self._end.is_set():
                    await asyncio.sleep(min(left, 0.1))
                if self._end.is_set():
                    break
                body = message.body(self.names[message.source], start_ns)
                self.begun.append(message)
                task = asyncio.create_task(self._publish(line, message, body))
                tasks.add(task)
                task.add_done_callback(tasks.discard)
            async with asyncio.timeout(END_S):
                await asyncio.gather(*tasks)
        finally:
            for task in list(tasks):
                task.cancel()
            await asyncio.gather(*tasks, return_exceptions=True)
            await line.close()

    async def _publish(self, line: _Line, message: Message, body: bytes) -> None:
        """Until it is acknowledged; a repeat is told by its id."""
        headers = {"Nats-Msg-Id": f"{self._name}-{message.number}", "Content-Type": "application/x-ndjson"}
        message.begun_ns = time.monotonic_ns()
        while True:
            message.tries += 1
            stream = None
            try:
                stream = await line.stream()
                await stream.publish(f"feed.{self.names[message.source]}", body, timeout=ANSWER_S, headers=headers)
                break
            except (Error, OSError, TimeoutError, StrandlineError) as error:
                if stream is not None and isinstance(error, TimeoutError):
                    await line.leave(stream)
                await asyncio.sleep(AGAIN_S * (0.5 + self._chance.random()))
        message.acknowledged_ns = time.monotonic_ns()

    # ---- for the judge ----------------------------------------------------------------------------------------------

    def sent(self, sources: Collection[str] | None = None) -> Sent:
        """What was sent of these sources (None: of all), in order of beginning, as the judge wants it."""
        chosen = [each for each in self.begun if sources is None or self.names[each.source] in sources]
        return sent_of(chosen)


def sent_of(messages: Sequence[Message]) -> Sent:
    """Messages as the judge wants them."""
    sizes = [len(each.ids) for each in messages]

    def joined(name: str, kind: type) -> np.ndarray:  # type: ignore[type-arg]
        return np.concatenate([getattr(each, name) for each in messages] or [np.empty(0, kind)])

    rows = Rows(
        joined("ids", np.int64),
        joined("times", np.int64),
        np.repeat(np.array([each.source for each in messages], np.uint32), sizes),
        joined("digests", np.uint32),
    )
    latest = time.monotonic_ns()
    return Sent(
        rows,
        np.repeat(np.arange(len(messages), dtype=np.int64), sizes),
        np.array([each.begun_ns for each in messages], np.int64),
        np.array([each.acknowledged_ns or latest for each in messages], np.int64),
        np.array([each.acknowledged_ns > 0 for each in messages], np.bool_),
    )

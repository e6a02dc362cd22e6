"""One partition's connection to the brokers: made when it is needed, made again when it was lost.

Who reads or writes over it is `log`, `rebuilding` and `taking`. The retry is theirs: here one try is made at a time.
"""

from __future__ import annotations

import asyncio
import contextlib
from collections.abc import AsyncGenerator, Sequence
from urllib.parse import urlsplit

from nats.aio.msg import Msg
from nats.js import JetStreamContext, api
from nats.js.errors import APIError, NotFoundError

from ..broker_access import BrokerAccess
from ..errors import StrandlineError
from ..nats_client import NOT_THERE, Client, connect, disconnect, words_of
from ..tasks import Turn, ended_at_last

ANSWER_WITHIN_S = 5.0
FETCH_WAITS_S = 0.5
FETCH_BYTES_AT_MOST = 64 << 20  # of one fetch, by the server's greatest payload; the client drops what is over 256 MiB
FORGOTTEN_AFTER_S = 60.0  # a reader that asks for nothing so long is forgotten by the server


class Away(StrandlineError):
    """The brokers do not answer now; the text says why. Worth another try."""


class Link:
    """A connection that is there when it is asked for. Lives on one event loop."""

    def __init__(self, urls: Sequence[str], access: BrokerAccess, name: str) -> None:
        self._urls, self._access, self._name = tuple(urls), access, name
        self._client: Client | None = None
        self._turn = asyncio.Lock()
        self._closed = False
        self._doubted = ""  # host and port of a server that did not answer; nothing where none is doubted

    async def client(self) -> Client:
        """The connection. Raises Away."""
        async with self._turn:
            if self._closed:
                raise Away("the connection was given up")
            if self._client is None or not self._client.is_connected or self._doubted:
                urls, self._doubted = self._others(), ""
                await self._let_go()
                try:
                    self._client = await connect(urls, self._access, self._name)
                except StrandlineError as error:
                    raise Away(str(error)) from error
            return self._client

    def away(self, what: str, error: BaseException) -> Away:
        """What to raise for an error of the client; `what` says what did not work.

        Where no answer came in time another server is asked next, for the one behind this may be frozen. The client
        itself notices that by its pings, after 20 s and more: longer than a lease.
        """
        used = None if self._client is None else self._client.connected_url
        if isinstance(error, TimeoutError) and used is not None:
            self._doubted = used.netloc.rpartition("@")[2]
        return Away(f"{what}: {words_of(error)}")

    async def jetstream(self) -> JetStreamContext:
        """Its JetStream. Raises Away."""
        return (await self.client()).jetstream(timeout=ANSWER_WITHIN_S)

    def _others(self) -> Sequence[str]:
        """All servers but the one that is doubted, if that leaves any."""
        return [url for url in self._urls if urlsplit(url).netloc.rpartition("@")[2] != self._doubted] or self._urls

    @property
    def is_there(self) -> bool:
        """Whether there is a connection now."""
        return self._client is not None and self._client.is_connected

    async def close(self) -> None:
        """Let it go, for good. A second call does nothing."""
        self._closed = True
        async with self._turn:
            await self._let_go()

    async def _let_go(self) -> None:
        client, self._client = self._client, None
        if client is not None:
            await disconnect(client)


class Reader:
    """Messages of one subject in the order of the stream, from a sequence on. The server keeps nothing about it."""

    def __init__(self, link: Link, stream: str, subject: str) -> None:
        self._link, self._stream, self._subject = link, stream, subject
        self._name = ""
        self._subscription: JetStreamContext.PullSubscription | None = None
        self._given = 0  # messages that came, by the consumer's own count
        self._missed = 0  # how far it counts without them, as it was told by the server
        self._at_once = 1
        self.pending = 0  # messages behind those that were read, as the server told last

    async def begin(self, sequence: int) -> None:
        """Read from this sequence on, wherever it was before. Raises Away; StrandlineError where there is no stream."""
        await self._unsubscribe()
        config = api.ConsumerConfig(
            deliver_policy=api.DeliverPolicy.BY_START_SEQUENCE,
            opt_start_seq=max(1, sequence),
            ack_policy=api.AckPolicy.NONE,
            filter_subject=self._subject,
            mem_storage=True,
            num_replicas=1,
            inactive_threshold=FORGOTTEN_AFTER_S,
        )
        try:
            client = await self._link.client()
            self._at_once = max(1, FETCH_BYTES_AT_MOST // client.max_payload)
            stream = client.jetstream(timeout=ANSWER_WITHIN_S)
            info = await stream.add_consumer(self._stream, config)
            self._name, self.pending, self._given, self._missed = info.name, info.num_pending or 0, 0, 0
            self._subscription = await stream.pull_subscribe_bind(info.name, self._stream)
        except NotFoundError as error:
            raise StrandlineError(f"there is no stream {self._stream}: make it") from error
        except (APIError, *NOT_THERE) as error:
            raise self._link.away(f"stream {self._stream} cannot be read", error) from error

    async def fetch(self, at_most: int) -> list[Msg]:
        """The next messages; none after half a second without one. Raises Away: begin anew.

        Nothing is acknowledged, so what was lost on the way never comes again by itself: the consumer counts what it
        sends, and a number that is left out tells it.
        """
        if self._subscription is None:
            raise Away(f"stream {self._stream} is not being read")
        try:
            found = await self._subscription.fetch(min(at_most, self._at_once), timeout=FETCH_WAITS_S)
        except TimeoutError:
            return []
        except (APIError, *NOT_THERE) as error:
            await self._unsubscribe()
            raise self._link.away(f"stream {self._stream} cannot be read", error) from error
        for message in found:
            if message.metadata.sequence.consumer != self._given + 1:
                await self._lost()
            self._given += 1
        self.pending = found[-1].metadata.num_pending if found else self.pending
        return found

    async def waiting(self) -> int:
        """Ask the server how many messages are left to read, and whether it still knows of the reader. Raises Away."""
        if self._subscription is None:
            raise Away(f"stream {self._stream} is not being read")
        try:
            info = await self._subscription.consumer_info()
        except (APIError, *NOT_THERE) as error:
            await self._unsubscribe()
            raise self._link.away(f"stream {self._stream} cannot be read", error) from error
        self.pending, sent = info.num_pending or 0, info.delivered.consumer_seq if info.delivered else 0
        if self._given < self._missed:
            await self._lost()
        self._missed = sent  # what is on its way now has come before this is asked again
        return self.pending

    async def close(self) -> None:
        """Have the server forget it."""
        was_reading = self._subscription is not None
        await self._unsubscribe()
        if was_reading and self._link.is_there:  # else the server forgets it by itself
            with contextlib.suppress(APIError, Away, *NOT_THERE):
                await (await self._link.jetstream()).delete_consumer(self._stream, self._name)

    async def _lost(self) -> None:
        await self._unsubscribe()
        raise Away(f"stream {self._stream}: a message was lost on its way here; it is asked for again")

    async def _unsubscribe(self) -> None:
        subscription, self._subscription = self._subscription, None
        if subscription is not None:
            with contextlib.suppress(*NOT_THERE):
                await subscription.unsubscribe()


async def everything(reader: Reader, sequence: int, at_once: int = 200) -> AsyncGenerator[Msg, None]:
    """The messages from a sequence on up to the last one that is there. Raises Away, StrandlineError.

    While some are worked on the next are on their way. The loop has its turns in between.
    """
    await reader.begin(sequence)
    coming: asyncio.Future[list[Msg]] | None = None
    turn = Turn()
    try:
        while coming is not None or reader.pending:  # a fetch that has ended may have found that nothing is left
            found = await (coming or reader.fetch(at_once))
            coming = None
            if not found:
                await reader.waiting()
            elif reader.pending:
                coming = asyncio.ensure_future(reader.fetch(at_once))
            for message in found:
                await turn.give()
                yield message
    finally:
        if coming is not None:
            await ended_at_last(coming)
        await reader.close()

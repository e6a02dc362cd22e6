"""One partition's connection to the brokers: made when it is needed, made again when it was lost.

Who reads or writes over it is `log`, `rebuilding` and `taking`. The retry is theirs: here one try is made at a time.
"""

from __future__ import annotations

import asyncio
import contextlib
from collections.abc import AsyncGenerator, Sequence

from nats.aio.msg import Msg
from nats.js import JetStreamContext, api
from nats.js.errors import APIError, NotFoundError

from ..broker_access import BrokerAccess
from ..errors import StrandlineError
from ..nats_client import NOT_THERE, Client, connect, disconnect, words_of

ANSWER_WITHIN_S = 5.0
FETCH_WAITS_S = 0.5
FORGOTTEN_AFTER_S = 60.0  # a reader that asks for nothing so long is forgotten by the server


class Away(StrandlineError):
    """The brokers do not answer now; the text says why. Worth another try."""


class Link:
    """A connection that is there when it is asked for. Lives on one event loop."""

    def __init__(self, urls: Sequence[str], access: BrokerAccess, name: str) -> None:
        self._urls, self._access, self._name = tuple(urls), access, name
        self._client: Client | None = None
        self._turn = asyncio.Lock()

    async def client(self) -> Client:
        """The connection. Raises Away."""
        async with self._turn:
            if self._client is None or not self._client.is_connected:
                await self._let_go()
                try:
                    self._client = await connect(self._urls, self._access, self._name)
                except StrandlineError as error:
                    raise Away(str(error)) from error
            return self._client

    async def jetstream(self) -> JetStreamContext:
        """Its JetStream. Raises Away."""
        return (await self.client()).jetstream(timeout=ANSWER_WITHIN_S)

    async def close(self) -> None:
        """Let it go. A second call does nothing."""
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
        self.pending = 0  # messages behind those that were read, as the server told last

    async def begin(self, sequence: int) -> None:
        """Read from this sequence on, wherever it was before. Raises Away; StrandlineError where there is no stream."""
        self._subscription = None
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
            stream = await self._link.jetstream()
            info = await stream.add_consumer(self._stream, config)
            self._name, self.pending = info.name, info.num_pending or 0
            self._subscription = await stream.pull_subscribe_bind(info.name, self._stream)
        except NotFoundError as error:
            raise StrandlineError(f"there is no stream {self._stream}: make it") from error
        except (APIError, *NOT_THERE) as error:
            raise Away(f"stream {self._stream} cannot be read: {words_of(error)}") from error

    async def fetch(self, at_most: int) -> list[Msg]:
        """The next messages; none after half a second without one. Raises Away: begin anew."""
        if self._subscription is None:
            raise Away(f"stream {self._stream} is not being read")
        try:
            found = await self._subscription.fetch(at_most, timeout=FETCH_WAITS_S)
        except TimeoutError:
            return []
        except (APIError, *NOT_THERE) as error:
            self._subscription = None
            raise Away(f"stream {self._stream} cannot be read: {words_of(error)}") from error
        self.pending = found[-1].metadata.num_pending if found else self.pending
        return found

    async def waiting(self) -> int:
        """Ask the server how many messages are left to read, and whether it still knows of the reader. Raises Away."""
        if self._subscription is None:
            raise Away(f"stream {self._stream} is not being read")
        try:
            self.pending = (await self._subscription.consumer_info()).num_pending or 0
        except (APIError, *NOT_THERE) as error:
            self._subscription = None
            raise Away(f"stream {self._stream} cannot be read: {words_of(error)}") from error
        return self.pending

    async def close(self) -> None:
        """Have the server forget it."""
        subscription, self._subscription = self._subscription, None
        if subscription is not None:
            with contextlib.suppress(APIError, Away, *NOT_THERE):
                await (await self._link.jetstream()).delete_consumer(self._stream, self._name)


async def everything(reader: Reader, sequence: int, at_once: int = 200) -> AsyncGenerator[Msg, None]:
    """The messages from a sequence on up to the last one that is there. Raises Away, StrandlineError."""
    await reader.begin(sequence)
    try:
        while reader.pending:
            found = await reader.fetch(at_once)
            if not found:
                await reader.waiting()
            for message in found:
                yield message
    finally:
        await reader.close()

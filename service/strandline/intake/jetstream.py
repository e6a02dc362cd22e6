"""JetStream: a durable pull consumer with explicit acknowledgement, as the intake's broker.

The stream must be there; the consumer is made where it is absent, and its limits are kept as the configuration says.
Acknowledgements go to the message's own reply subject, so they may be said on a later connection too.
"""

from __future__ import annotations

import asyncio
import contextlib
from typing import Any

from nats.aio.msg import Msg
from nats.js import JetStreamContext, api
from nats.js.errors import APIError, NotFoundError

from ..config_intakes import JetstreamIntake
from ..nats_client import NOT_THERE, Client, connect, disconnect, words_of
from .broker import BrokerLost, Message

FETCH_WAITS_S = 1.0
ASK_EVERY_S = 0.1  # while the messages of an earlier process are waited for
REMINDS_WITHIN_ACK_WAIT = 3
FLUSH_WITHIN_S = 2


class JetstreamBroker:
    """Messages of one stream. A repeat is told by `Nats-Msg-Id`, or by sequence and time in the stream."""

    takes_back = True

    def __init__(self, config: JetstreamIntake) -> None:
        self._config = config
        self._client: Client | None = None
        self._subscription: JetStreamContext.PullSubscription | None = None
        self._first = True

    @property
    def remind_every_s(self) -> float | None:
        """A third of the time after which the broker would send a message again."""
        return self._config.ack_wait_ns / 1e9 / REMINDS_WITHIN_ACK_WAIT

    async def connect(self) -> str:
        """Connect, find or make the consumer, and at a process's first time wait for what an earlier one had."""
        config = self._config
        self._client = await connect(config.urls, config.access(), f"strandline {config.durable}")
        stream = self._client.jetstream(timeout=5.0)
        try:
            made = await self._consumer(stream)
            self._subscription = await stream.pull_subscribe_bind(config.durable, config.stream)
            if self._first:
                await self._wait_for_repeats(made)
                self._first = False
        except NotFoundError as error:
            raise BrokerLost(f"there is no stream {config.stream} at {', '.join(config.urls)}: make it") from error
        except (APIError, *NOT_THERE) as error:
            raise BrokerLost(f"stream {config.stream}, consumer {config.durable}: {words_of(error)}") from error
        return ""

    def check(self) -> None:
        """Raise BrokerLost where the client knows that the connection is gone."""
        if self._client is None or self._subscription is None or not self._client.is_connected:
            raise BrokerLost(f"the connection to {', '.join(self._config.urls)} is gone")

    async def fetch(self, at_most: int, bytes_at_most: int) -> list[Message]:
        """Up to `fetch_at_most` messages. As many as fit whatever they weigh, by the server's greatest payload."""
        self.check()
        client, subscription = self._client, self._subscription
        assert client is not None and subscription is not None
        number = min(at_most, self._config.fetch_at_most, max(1, bytes_at_most // client.max_payload))
        try:
            found = await subscription.fetch(number, timeout=FETCH_WAITS_S)
        except TimeoutError:
            return []
        except (APIError, *NOT_THERE) as error:
            raise BrokerLost(f"consumer {self._config.durable}: {words_of(error)}") from error
        return [message_of(each) for each in found]

    async def settle(self, message: Message) -> None:
        """Acknowledge it."""
        await self._say(message, Msg.Ack.Ack)

    async def put_back(self, message: Message, after_s: float) -> None:
        """The broker sends it again after so long."""
        delay = b' {"delay": %d}' % int(after_s * 1e9) if after_s > 0 else b""
        await self._say(message, Msg.Ack.Nak + delay)

    async def remind(self, message: Message) -> None:
        """Begin its `ack_wait` anew."""
        await self._say(message, Msg.Ack.Progress)

    def holds(self, message: Message) -> bool:
        """An acknowledgement is never bound to a connection."""
        del message
        return True

    async def waiting(self) -> int | None:
        """Messages of the stream that the consumer has not got to yet."""
        if self._subscription is None:
            return None
        try:
            return (await self._subscription.consumer_info()).num_pending
        except (APIError, *NOT_THERE) as error:
            raise BrokerLost(words_of(error)) from error

    async def close(self) -> None:
        """Tell the server what was acknowledged, then let the connection go."""
        client, self._client, self._subscription = self._client, None, None
        if client is None:
            return
        with contextlib.suppress(*NOT_THERE):
            if client.is_connected:
                await client.flush(FLUSH_WITHIN_S)
        await disconnect(client)

    # ---- the consumer -----------------------------------------------------------------------------------------------

    async def _consumer(self, stream: JetStreamContext) -> api.ConsumerInfo:
        """The consumer as it must be: explicit acknowledgement, no limit to deliveries. Raises BrokerLost."""
        config = self._config
        await stream.stream_info(config.stream)
        wanted: dict[str, Any] = {"ack_wait": config.ack_wait_ns / 1e9, "max_ack_pending": config.in_flight_at_most}
        try:
            found: api.ConsumerInfo = await stream.consumer_info(config.stream, config.durable)
        except NotFoundError:
            begin = api.DeliverPolicy.ALL if config.begin == "all" else api.DeliverPolicy.NEW
            made = api.ConsumerConfig(
                durable_name=config.durable,
                ack_policy=api.AckPolicy.EXPLICIT,
                deliver_policy=begin,
                filter_subject=config.subjects[0] if len(config.subjects) == 1 else None,
                filter_subjects=list(config.subjects) if len(config.subjects) > 1 else None,
                **wanted,
            )
            info: api.ConsumerInfo = await stream.add_consumer(config.stream, made)
            return info
        if fault := _unfit(found.config, config.subjects):
            raise BrokerLost(f"consumer {config.durable} of stream {config.stream} {fault}")
        if any(getattr(found.config, key) != value for key, value in wanted.items()):
            changed: api.ConsumerInfo = await stream.add_consumer(config.stream, found.config.evolve(**wanted))
            return changed
        return found

    async def _wait_for_repeats(self, info: api.ConsumerInfo) -> None:
        """Let the time pass after which the broker sends again what an earlier process was given and did not settle.

        New messages would overtake those otherwise, and their events would come behind the watermark. Nothing is
        fetched meanwhile, so the server hands the old ones out first.
        """
        subscription = self._subscription
        loop = asyncio.get_running_loop()
        until = loop.time() + self._config.ack_wait_ns / 1e9
        while info.num_ack_pending and loop.time() < until and subscription is not None:
            await asyncio.sleep(ASK_EVERY_S)
            info = await subscription.consumer_info()

    async def _say(self, message: Message, word: bytes) -> None:
        client = self._client
        if client is not None and client.is_connected:
            with contextlib.suppress(*NOT_THERE):
                await client.publish(message.handle, word)


def _unfit(found: api.ConsumerConfig, subjects: tuple[str, ...]) -> str:
    """Why a consumer that is there already must not be used; nothing where it may."""
    if found.ack_policy != api.AckPolicy.EXPLICIT or found.deliver_subject:
        return "is no pull consumer with explicit acknowledgement: name another in `durable`"
    if found.max_deliver is not None and found.max_deliver > 0:
        return f"gives a message up after {found.max_deliver} deliveries, which loses it: set its max_deliver to -1"
    there = {*(found.filter_subjects or ()), *([found.filter_subject] if found.filter_subject else ())}
    if there != set(subjects):
        return f"takes the subjects {sorted(there) or 'all'}, not {sorted(subjects) or 'all'}: mend it or name another"
    return ""


def message_of(given: Msg) -> Message:
    """A message of a pull consumer. Its reply subject tells sequence, deliveries and time (the server's clock, ns)."""
    data, headers = given.metadata, given.headers or {}
    tokens = given.reply.split(".")
    sent_ns = int(tokens[7] if len(tokens) == 9 else tokens[9])
    sequence, named = data.sequence.stream, headers.get("Nats-Msg-Id")
    # A stream that was deleted and made anew counts from 1 again, but its messages have other times.
    told = f"id:{named}" if named else f"at:{sequence}:{sent_ns}"
    return Message(
        body=given.data,
        place=f"message {sequence} of stream {data.stream}",
        address=given.subject.split("."),
        key=f"jetstream:{data.stream}:{told}",
        is_numbered=not named,
        content_type=_header(headers, "content-type"),
        content_encoding=_header(headers, "content-encoding"),
        is_repeat=data.num_delivered > 1,
        sent_ns=sent_ns,
        handle=given.reply,
    )


def _header(headers: dict[str, str], name: str) -> str | None:
    """Names are told apart by case there (unlike HTTP's); whoever sets one of these means HTTP's."""
    return next((value for key, value in headers.items() if key.lower() == name), None)

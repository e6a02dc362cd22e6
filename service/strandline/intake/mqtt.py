"""MQTT 5 and 3.1.1: a session that the broker keeps, QoS 1, and the PUBACK only once a message is settled.

The client (paho-mqtt) reads in a thread of its own; messages cross over to the loop, acknowledgements go back. What it
cannot do, and what follows: MQTT has no way to put a message back, and the client's PUBACK carries no reason code; so a
message that the feed refuses now is held and tried again, and the broker stops sending once as many are unsettled as it
lets be. Packet numbers are a connection's own: a message that came on a lost connection is not acknowledged on the next
one, where its number may mean another; the broker sends it again.
"""

from __future__ import annotations

import asyncio
import contextlib
import threading
from collections import deque
from typing import Any
from urllib.parse import urlsplit

from paho.mqtt.client import Client, ConnectFlags, DisconnectFlags, MQTTMessage
from paho.mqtt.enums import CallbackAPIVersion, MQTTProtocolVersion
from paho.mqtt.packettypes import PacketTypes
from paho.mqtt.properties import Properties
from paho.mqtt.reasoncodes import ReasonCode
from paho.mqtt.subscribeoptions import SubscribeOptions

from ..broker_access import Secrets
from ..config_intakes import MqttIntake
from .broker import BrokerLost, Message

FETCH_WAITS_S = 1.0
CONNECT_WITHIN_S = 10.0
PORTS = {"mqtt": 1883, "mqtts": 8883}
QOS = 1
RECEIVE_AT_MOST = 65_535  # MQTT 5.0, 3.1.2.11.3
SESSION_SECONDS_AT_MOST = 2**32 - 2  # one more means "for ever" (3.1.2.11.2)


class MqttBroker:
    """Messages of a broker's topics. Nothing in MQTT tells a repeat: the DUP flag only says that there may be one."""

    takes_back = False
    remind_every_s: float | None = None

    def __init__(self, config: MqttIntake) -> None:
        self._config = config
        self._session: _Session | None = None

    async def connect(self) -> str:
        """Connect, go on with the session, subscribe."""
        access = self._config.access()
        secrets = await asyncio.to_thread(access.secrets)
        context = await asyncio.to_thread(access.context) if self._config.url.startswith("mqtts:") else None
        session = _Session(self._config, asyncio.get_running_loop())
        self._session = session
        try:
            await asyncio.to_thread(session.begin, secrets, context)
            async with asyncio.timeout(CONNECT_WITHIN_S):
                await session.ready
        except TimeoutError as error:
            raise BrokerLost(f"{self._config.url} did not answer within {CONNECT_WITHIN_S:g} s") from error
        except (OSError, ValueError) as error:
            raise BrokerLost(f"{self._config.url} cannot be reached: {error}") from error
        return ""

    def check(self) -> None:
        """Raise BrokerLost where the connection has ended."""
        lost = "there is no connection" if self._session is None else self._session.lost
        if lost is not None:
            raise BrokerLost(lost)

    async def fetch(self, at_most: int, bytes_at_most: int) -> list[Message]:
        """What has come. The thread lets no more come than may be in flight, so `bytes_at_most` is kept there."""
        del bytes_at_most
        self.check()
        session = self._session
        assert session is not None
        if not session.came:
            session.bell.clear()
            with contextlib.suppress(TimeoutError):
                async with asyncio.timeout(FETCH_WAITS_S):
                    await session.bell.wait()
        self.check()
        return [session.came.popleft() for _ in range(min(at_most, len(session.came)))]

    async def settle(self, message: Message) -> None:
        """Send the PUBACK, where the message came on the connection that there is now."""
        session, number, qos = message.handle
        session.leaves(len(message.body))
        if self.holds(message) and qos:
            session.client.ack(number, qos)

    async def put_back(self, message: Message, after_s: float) -> None:
        """End the connection: with the next one the broker sends all again that is not settled."""
        del after_s
        session: _Session = message.handle[0]
        session.end("a message could not be handled; it comes again with the next connection")

    async def remind(self, message: Message) -> None:
        """MQTT knows nothing of the kind."""

    def holds(self, message: Message) -> bool:
        """Only while the connection lasts on which it came."""
        return message.handle[0] is self._session and self._session is not None and self._session.lost is None

    async def waiting(self) -> int | None:
        """MQTT has no way to ask."""
        return None

    async def close(self) -> None:
        """Leave; the broker keeps the session."""
        session, self._session = self._session, None
        if session is not None:
            await asyncio.to_thread(session.close)


class _Session:
    """One connection: the client, its thread, and what has come over it. Its methods say where they are called."""

    def __init__(self, config: MqttIntake, loop: asyncio.AbstractEventLoop) -> None:
        self._config, self._loop = config, loop
        self.came: deque[Message] = deque()
        self.bell = asyncio.Event()
        self.ready: asyncio.Future[None] = loop.create_future()
        self.lost: str | None = None
        self._held = threading.Condition()  # guards the two counts: messages handed over and not settled
        self._messages = self._bytes = 0
        self._ended = False
        is_five = config.version == "5"
        self.client = Client(
            CallbackAPIVersion.VERSION2,
            client_id=config.client_id,
            clean_session=None if is_five else False,
            protocol=MQTTProtocolVersion.MQTTv5 if is_five else MQTTProtocolVersion.MQTTv311,
            reconnect_on_failure=False,
            manual_ack=True,
        )
        self.client.connect_timeout = CONNECT_WITHIN_S
        self.client.on_connect = self._on_connect
        self.client.on_subscribe = self._on_subscribe
        self.client.on_disconnect = self._on_disconnect
        self.client.on_message = self._on_message

    def begin(self, secrets: Secrets, context: Any) -> None:
        """In any thread but the loop's: connect and let the client's own thread run. Raises OSError, ValueError."""
        config, parts = self._config, urlsplit(self._config.url)
        if secrets.user is not None:
            self.client.username_pw_set(secrets.user, secrets.password)
        if context is not None:
            self.client.tls_set_context(context)
        more: dict[str, Any] = {}
        if config.version == "5":
            given = Properties(PacketTypes.CONNECT)  # type: ignore[no-untyped-call]
            given.SessionExpiryInterval = min(config.session_expiry_ns // 10**9, SESSION_SECONDS_AT_MOST)
            given.ReceiveMaximum = min(config.in_flight_at_most, RECEIVE_AT_MOST)
            more = {"clean_start": False, "properties": given}
        port = parts.port or PORTS[parts.scheme]
        self.client.connect(parts.hostname or "", port, config.keepalive_ns // 10**9, **more)
        self.client.loop_start()
        if self._ended:  # it was given up meanwhile
            self.client.disconnect()

    def close(self) -> None:
        """In any thread but the loop's: say goodbye after the acknowledgements, and wait for the client's thread."""
        self._stop_waiting()
        self.client.disconnect()
        self.client.loop_stop()

    def end(self, why: str) -> None:
        """In any thread: break the connection off."""
        self._tell(why)
        self._stop_waiting()
        self.client.disconnect()

    def leaves(self, size: int) -> None:
        """On the loop: a message is settled, there is room for another."""
        with self._held:
            self._messages -= 1
            self._bytes -= size
            self._held.notify()

    def _stop_waiting(self) -> None:
        with self._held:
            self._ended = True
            self._held.notify_all()

    def _tell(self, lost: str | None) -> None:
        """In any thread: let the loop know."""
        with contextlib.suppress(RuntimeError):  # the loop is closed: nobody listens any more
            self._loop.call_soon_threadsafe(self._told, lost)

    def _told(self, lost: str | None) -> None:
        if lost is not None and self.lost is None:
            self.lost = lost
        if not self.ready.done():
            if lost is None:
                self.ready.set_result(None)
            else:
                self.ready.set_exception(BrokerLost(lost))
                self.ready.exception()  # nobody may be waiting
        self.bell.set()

    # ---- in the client's thread -------------------------------------------------------------------------------------

    def _on_connect(
        self, client: Client, _: Any, flags: ConnectFlags, code: ReasonCode, properties: Properties | None
    ) -> None:
        del flags, properties
        if code.is_failure:
            self._tell(f"{self._config.url} lets nobody in under these terms: {code}")
            return
        if self._config.version == "5":
            # What is retained comes only where the subscription is new (3.8.3.1), not again with each connection.
            options = SubscribeOptions(qos=QOS, retainHandling=SubscribeOptions.RETAIN_SEND_IF_NEW_SUB)
            client.subscribe([(topic, options) for topic in self._config.topics])
        else:
            client.subscribe([(topic, QOS) for topic in self._config.topics])

    def _on_subscribe(
        self, client: Client, _: Any, number: int, codes: list[ReasonCode], properties: Properties | None
    ) -> None:
        del client, number, properties
        refused = [topic for topic, code in zip(self._config.topics, codes, strict=False) if code.is_failure]
        self._tell(f"{self._config.url} refuses to subscribe to {', '.join(refused)}" if refused else None)

    def _on_disconnect(
        self, client: Client, _: Any, flags: DisconnectFlags, code: ReasonCode, properties: Properties | None
    ) -> None:
        del client, flags, properties
        self._stop_waiting()
        self._tell(f"the connection to {self._config.url} is gone: {code}")

    def _on_message(self, client: Client, _: Any, given: MQTTMessage) -> None:
        """Hand it over; first wait for room where a broker does not bound what is unsettled (3.1.1 lets it).

        While this waits nothing else is read, so the broker is held up too. Before it would take this client for gone,
        the connection is ended.
        """
        config, size = self._config, len(given.payload)
        with self._held:
            def has_room() -> bool:
                fits = not self._messages or self._bytes + size <= config.in_flight_bytes_at_most
                return self._ended or (self._messages < config.in_flight_at_most and fits)

            room = self._held.wait_for(has_room, config.keepalive_ns / 2e9)
            if room and not self._ended:
                self._messages += 1
                self._bytes += size
        if self._ended:
            return
        if not room:
            self.end("more is unsettled than may be in flight, and the broker goes on sending; it comes again")
            return
        with contextlib.suppress(RuntimeError):
            self._loop.call_soon_threadsafe(self._come, self._message(given))

    def _message(self, given: MQTTMessage) -> Message:
        properties: Any = given.properties
        own = {key.lower(): value for key, value in getattr(properties, "UserProperty", ())}
        return Message(
            body=bytes(given.payload),
            place=f"a message of topic {given.topic[:200]!r}",
            address=given.topic.split("/"),
            content_type=getattr(properties, "ContentType", None) or own.get("content-type"),
            content_encoding=own.get("content-encoding"),
            is_repeat=given.dup,
            handle=(self, given.mid, given.qos),
        )

    def _come(self, message: Message) -> None:
        """On the loop. What a kept session holds may come before the answer to the subscription, and fill the room."""
        self.came.append(message)
        self._told(None)

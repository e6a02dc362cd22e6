"""Three real NATS servers on the loopback address as one JetStream cluster, each of which can be ended in every way.

They keep what they hold in a folder each and come back at the same ports. A message to `feed.SOURCE` is mapped to
`part.PARTITION.SOURCE`, so that all messages of a source lie in one partition. Nothing is judged here.
"""

from __future__ import annotations

import asyncio
import signal
import subprocess
import time
from collections.abc import Awaitable, Callable
from contextlib import ExitStack
from pathlib import Path
from types import TracebackType
from typing import Any, Self, TypeVar

from helpers_brokers import STREAM, Server, nats_server
from helpers_service import POLL_S
from nats.aio.client import Client
from nats.errors import Error
from nats.js import api
from strandline.nats_client import disconnect
from strandline_loadgen.child import free_port

Result = TypeVar("Result")
NODES = 3
READY_S = 60.0  # a first election takes some 5 s, on a busy machine more
CALM_S = 2.0  # the longest wait for one answer
# Partition and source of a message by its subject; the server's own hash, the same on every node.
MAPPING = 'mappings: {{ "feed.*": "part.{{{{partition({partitions},1)}}}}.{{{{wildcard(1)}}}}" }}'
CONFIGURATION = """
server_name: "{name}"
listen: "127.0.0.1:{port}"
jetstream {{ store_dir: "{folder}/store", max_file_store: 2GB }}
cluster {{ name: "river", listen: "127.0.0.1:{cluster_port}", routes: [{routes}] }}
{mapping}
"""


def stand_still(process: subprocess.Popen[bytes]) -> None:
    """SIGSTOP, and wait until no thread of it runs any more: on a busy machine some go on for several ms."""
    process.send_signal(signal.SIGSTOP)
    deadline = time.monotonic() + READY_S
    while time.monotonic() < deadline:
        threads = Path(f"/proc/{process.pid}/task").iterdir()
        # proc_pid_stat(5): the state follows the name, which stands in parentheses; T: stopped on a signal
        if {(thread / "stat").read_text().rpartition(")")[2].split()[0] for thread in threads} == {"T"}:
            return
        time.sleep(0.001)
    raise AssertionError(f"process {process.pid} goes on after SIGSTOP")


class Node(Server):
    """One of the servers."""

    def __init__(self, folder: Path, name: str, partitions: int) -> None:
        super().__init__(folder, name)
        self.name, self.cluster_port, self._partitions = name, free_port(), partitions
        self._program = nats_server()
        self.routes: list[int] = []
        self.stopped = False

    def command(self) -> list[str]:
        """See Server."""
        file = self.folder / "server.conf"
        file.write_text(
            CONFIGURATION.format(
                name=self.name,
                port=self.port,
                folder=self.folder,
                cluster_port=self.cluster_port,
                routes=", ".join(f'"nats://127.0.0.1:{port}"' for port in self.routes),
                mapping=MAPPING.format(partitions=self._partitions),
            )
        )
        return [str(self._program), "--config", str(file)]

    @property
    def url(self) -> str:
        """Its address for clients."""
        return f"nats://127.0.0.1:{self.port}"

    @property
    def running(self) -> bool:
        """Whether its process lives and is not stopped."""
        return self.process is not None and self.process.poll() is None and not self.stopped

    def kill(self) -> None:
        """SIGKILL: nothing in it runs any more."""
        self.end(signal.SIGKILL)
        self.stopped = False

    def stop(self) -> None:
        """SIGSTOP: connections stay open, and nothing answers."""
        assert self.process is not None
        stand_still(self.process)
        self.stopped = True

    def go_on(self) -> None:
        """SIGCONT."""
        assert self.process is not None
        self.process.send_signal(signal.SIGCONT)
        self.stopped = False


async def quiet(_: Exception) -> None:
    """For a client's `error_cb`: lost connections are what these tests are about."""


class Brokers:
    """The three of them; `with` starts and ends them."""

    def __init__(self, folder: Path, partitions: int) -> None:
        self.partitions = partitions
        self.nodes = [Node(folder, f"broker-{number}", partitions) for number in range(NODES)]
        for node in self.nodes:
            node.routes = [each.cluster_port for each in self.nodes]
        self._stack = ExitStack()

    def __enter__(self) -> Self:
        with ExitStack() as stack:
            for node in self.nodes:
                stack.enter_context(node)
            self._stack = stack.pop_all()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._stack.__exit__(kind, error, trace)
        if error is not None:
            for node in self.nodes:
                print(f"--- {node.name} ---\n{node.last_words()}")

    @property
    def urls(self) -> list[str]:
        """Addresses of all, whether they run or not: clients choose."""
        return [node.url for node in self.nodes]

    def node(self, name: str) -> Node:
        """By its name."""
        return next(node for node in self.nodes if node.name == name)

    # ---- asking -----------------------------------------------------------------------------------------------------

    def ask(self, question: Callable[[Client], Awaitable[Result]], within_s: float = READY_S) -> Result:
        """What a question to the cluster gives, asked again of whichever node answers until one does."""

        async def asked() -> Result:
            told: Exception | None = None
            deadline = time.monotonic() + within_s
            while time.monotonic() < deadline:
                for node in filter(lambda node: node.running, self.nodes):
                    try:
                        return await self._once(node, question)
                    except (Error, OSError, TimeoutError) as error:
                        told = error
                await asyncio.sleep(POLL_S)
            raise AssertionError(f"no broker answers as it should: {told!r}")

        return asyncio.run(asked())

    @staticmethod
    async def _once(node: Node, question: Callable[[Client], Awaitable[Result]]) -> Result:
        client = Client()
        try:
            async with asyncio.timeout(CALM_S * 2):
                await client.connect(node.url, allow_reconnect=False, max_reconnect_attempts=1, error_cb=quiet)
                return await question(client)
        finally:
            await disconnect(client)

    def make_stream(self, name: str = STREAM, **more: Any) -> None:
        """The stream that producers publish to, kept by all three."""
        config = api.StreamConfig(name=name, subjects=["part.>"], num_replicas=NODES, **more)

        async def make(client: Client) -> None:
            await client.jetstream(timeout=CALM_S).add_stream(config)

        self.ask(make)

    def info(self, name: str = STREAM, **more: Any) -> api.StreamInfo:
        """What the cluster says of a stream."""

        async def look(client: Client) -> api.StreamInfo:
            return await client.jetstream(timeout=CALM_S).stream_info(name, **more)

        return self.ask(look)

    def leader(self, name: str = STREAM) -> Node:
        """The running node that leads a stream, waited for while one is elected."""
        deadline = time.monotonic() + READY_S
        while time.monotonic() < deadline:
            cluster = self.info(name).cluster
            if cluster is not None and cluster.leader and self.node(cluster.leader).running:
                return self.node(cluster.leader)
            time.sleep(POLL_S)
        raise AssertionError(f"nobody leads stream {name}")

    def whole(self, name: str = STREAM) -> None:
        """Wait until every node has all of a stream."""
        deadline, cluster = time.monotonic() + READY_S, None
        while time.monotonic() < deadline:
            cluster = self.info(name).cluster
            others = (cluster.replicas if cluster else None) or []
            if cluster and cluster.leader and len(others) == NODES - 1 and all(each.current for each in others):
                return
            time.sleep(POLL_S)
        raise AssertionError(f"not every node has stream {name}: {cluster}")

    def partitions_by_source(self) -> dict[str, int]:
        """Which partition each source's messages lie in, by the subjects that the stream holds."""
        subjects = self.info(subjects_filter="part.>").state.subjects or {}
        found: dict[str, int] = {}
        for subject in subjects:
            _, partition, source = subject.split(".")
            assert source not in found, f"source {source} lies in two partitions"
            found[source] = int(partition)
        return found

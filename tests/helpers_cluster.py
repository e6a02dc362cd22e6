"""A whole cluster for tests: instances of `strandline serve`, what PostgreSQL holds in the end, and how long it paused.

Brokers are `helpers_broker_cluster`, the producer is `helpers_producer`. The judge is the load generator's own, asked
partition by partition.
"""

from __future__ import annotations

import asyncio
import json
import signal
import subprocess
import threading
import time
from collections.abc import Collection, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from itertools import pairwise
from pathlib import Path
from typing import Any

import asyncpg
from helpers_broker_cluster import stand_still
from helpers_brokers import STREAM
from helpers_postgres import ask
from helpers_producer import Producer
from helpers_service import DEADLINE_S, FEED, POLL_S, Process, configuration
from strandline_loadgen.checker import judge
from strandline_loadgen.evidence import Rows, Verdict
from strandline_loadgen.stores import PIECE_ROWS, Reading

LOOK_EVERY_S = 0.05
TABLES = {"ordered": "events", "late": "late"}


def partition_feed(partition: int) -> str:
    """The name of a partition's feed: in addresses, metrics and the tables' column `feed`."""
    return f"{FEED}-{partition}"


def cluster_configuration(
    folder: Path,
    urls: Sequence[str],
    dsn: str,
    schema: str,
    *,
    number: int,
    partitions: int,
    lease: str,
    top: Mapping[str, object] | None = None,
    **keys: object,
) -> str:
    """The file of instance `number`. `keys` are the feed's, `top` further ones of [cluster]."""
    chosen = {
        "name": "river",
        "instance": f"strandline-{number}",
        "urls": list(urls),
        "replicas": 3,
        "lease": lease,
        "log_at_most": "256MiB",
        **(top or {}),
    }
    cluster = "\n".join(["[cluster]", *(f"{key} = {json.dumps(value)}" for key, value in chosen.items())])
    stream = f'stream = "{STREAM}", subject = "part.{{partition}}.>", count = {partitions}'
    sink = f'[[feed.sink]]\nkind = "postgres"\ndsn = {json.dumps(dsn)}\nschema = "{schema}"\ntimeout = "10s"'
    settings: dict[str, Any] = {"slack": "2s", "idle_after": "5s", "hold_at_most": "10s", **keys}
    return configuration(folder, top=cluster, more=f"partitions = {{ {stream} }}", sinks=sink, **settings)


class Instance(Process):
    """One `strandline serve` of a cluster, in a folder of its own."""

    def __init__(self, folder: Path, text: str) -> None:
        folder.mkdir(parents=True, exist_ok=True)
        super().__init__(folder, text)
        self.stopped = False

    def begin(self) -> subprocess.Popen[bytes]:
        """See Process."""
        self.stopped = False
        return super().begin()

    @property
    def running(self) -> bool:
        """Whether its process lives and is neither stopped nor ending."""
        return self.process is not None and self.process.poll() is None and not self.stopped

    def stop(self) -> None:
        """SIGSTOP: its connections stay open, its work stands still."""
        assert self.process is not None
        stand_still(self.process)
        self.stopped = True

    def go_on(self) -> None:
        """SIGCONT."""
        self._signal(signal.SIGCONT)
        self.stopped = False

    def begin_to_end(self) -> None:
        """SIGTERM, and wait for nothing."""
        self._signal(signal.SIGTERM)
        self.stopped = True

    def cluster(self) -> Any:
        """GET /v1/cluster."""
        return self.ask("/v1/cluster").json

    def owned_here(self) -> set[int]:
        """Partitions that this instance has and works on; none while it does not answer."""
        try:
            found = self.cluster()["partitions"]
        except (OSError, ValueError, KeyError, AssertionError):
            return set()
        return {each["partition"] for each in found if each["here"] and each["state"] == "owned"}


def settled(instances: Sequence[Instance], partitions: int, within_s: float, *, balanced: bool = True) -> float:
    """Wait until the running instances have every partition between them, none twice, and evenly; how long it took."""
    running = [instance for instance in instances if instance.running]
    begun, fair = time.monotonic(), -(-partitions // max(1, len(running)))
    owned: list[set[int]] = []
    while time.monotonic() - begun < within_s:
        owned = [instance.owned_here() for instance in running]
        whole = sorted(partition for each in owned for partition in each) == [*range(partitions)]
        if whole and (not balanced or max(map(len, owned)) <= fair):
            return time.monotonic() - begun
        time.sleep(0.1)
    raise AssertionError(f"after {within_s:g} s the partitions are not all owned as they should be: {owned}")


# ---- what the store holds -------------------------------------------------------------------------------------------


def read_partition(dsn: str, schema: str, feed: str, lane: str, reading: Reading) -> Iterator[Rows]:
    """A lane of one partition, in the order of (batch, position)."""
    query = f"SELECT time_ns, source, event FROM {schema}.{TABLES[lane]} WHERE feed = $1 ORDER BY batch, position"
    found = ask(dsn, query, feed)
    for start in range(0, len(found), PIECE_ROWS):
        times, sources, events = zip(*found[start : start + PIECE_ROWS], strict=True)
        yield reading.rows("".join(f"{event}\n" for event in events).encode(), times, sources)


def judged(
    producer: Producer, by_source: Mapping[str, int], partitions: int, dsn: str, schema: str
) -> dict[int, Verdict]:
    """The judge's word on every partition: each event byte by byte, in the partition of its source and in no other.

    Raises AssertionError where the tables hold rows of a feed that is no partition.
    """
    feeds = {partition_feed(number) for number in range(partitions)}
    for table in TABLES.values():
        found = {str(row[0]) for row in ask(dsn, f"SELECT DISTINCT feed FROM {schema}.{table}")}
        assert found <= feeds, f"rows of {found - feeds}, which is no partition"
    reading = Reading(producer.names, digests=True)
    verdicts = {}
    for number in range(partitions):
        sources = {source for source, partition in by_source.items() if partition == number}
        lanes = [read_partition(dsn, schema, partition_feed(number), lane, reading) for lane in TABLES]
        verdicts[number] = judge(producer.sent(sources), *lanes, quarantined=0, duplicates=0)
    return verdicts


def stored_events(dsn: str, schema: str) -> int:
    """How many events both tables hold."""
    return sum(int(ask(dsn, f"SELECT count(*) FROM {schema}.{table}")[0][0]) for table in TABLES.values())


def until_stored(events: int, dsn: str, schema: str, within_s: float = 2 * DEADLINE_S) -> None:
    """Wait until the tables hold so many events or more."""
    deadline, found = time.monotonic() + within_s, 0
    while time.monotonic() < deadline:
        found = stored_events(dsn, schema)
        if found >= events:
            return
        time.sleep(10 * POLL_S)
    raise AssertionError(f"{found:,} events are stored, {events:,} were sent")


# ---- pauses ---------------------------------------------------------------------------------------------------------


@dataclass(slots=True)
class Pause:
    """Watches when the positions of the partitions move; `with` starts and ends it. Times on the monotonic clock, s.

    What it tells is what a user sees: from one commit of ordered events to the next, to 0.05 s.
    """

    dsn: str
    schema: str
    feeds: Collection[str]
    moves: dict[str, list[float]] = field(default_factory=dict)
    _end: threading.Event = field(default_factory=threading.Event)
    _thread: threading.Thread | None = None
    _failed: BaseException | None = None

    def __enter__(self) -> Pause:
        self.moves = {feed: [] for feed in self.feeds}
        self._thread = threading.Thread(target=self._run, name="pause", daemon=True)
        self._thread.start()
        return self

    def __exit__(self, kind: object, error: BaseException | None, trace: object) -> None:
        self._end.set()
        assert self._thread is not None
        self._thread.join(DEADLINE_S)
        if error is None and self._failed is not None:
            raise self._failed

    def longest(self, since: float, until: float) -> dict[str, float]:
        """By feed, the longest time within a span in which nothing was released, seconds."""
        found = {}
        for feed, moves in self.moves.items():
            inside = [since, *(moment for moment in moves if since < moment < until), until]
            found[feed] = max(later - earlier for earlier, later in pairwise(inside))
        return found

    def _run(self) -> None:
        try:
            asyncio.run(self._watch())
        except BaseException as error:
            self._failed = error

    async def _watch(self) -> None:
        """Look again and again; while the table or the server is not there, nothing moves."""
        connection: asyncpg.Connection[asyncpg.Record] | None = None
        stands: dict[str, int] = {}
        while not self._end.is_set():
            try:
                if connection is None or connection.is_closed():
                    connection = await asyncpg.connect(self.dsn)
                await self._look(connection, stands)
            except (asyncpg.PostgresError, asyncpg.InterfaceError, OSError):
                pass
            await asyncio.sleep(LOOK_EVERY_S)
        if connection is not None:
            await connection.close()

    async def _look(self, connection: asyncpg.Connection[asyncpg.Record], stands: dict[str, int]) -> None:
        query = f"SELECT feed, batch FROM {self.schema}.strandline_position WHERE lane = 'ordered'"
        for feed, batch in await connection.fetch(query):
            if batch > stands.get(feed, 0) and feed in self.moves:
                self.moves[feed].append(time.monotonic())
            stands[feed] = max(batch, stands.get(feed, 0))


@dataclass(frozen=True, slots=True)
class Scenario:
    """One row of the table of pauses: by feed, the longest time in seconds without a release."""

    name: str
    pauses: Mapping[str, float]
    events: int
    late: int  # of them
    messages: int
    repeated: int  # tries of messages beyond the first

    def __str__(self) -> str:
        worst, least = max(self.pauses.values()), min(self.pauses.values())
        told = f"{self.name:<54} longest {worst:4.1f} s, the luckiest partition {least:4.1f} s; {self.events:,} events"
        told += f" ({self.late / self.events:.1%} late) in {self.messages:,} messages"
        return f"{told}, tried again {self.repeated:,} times"

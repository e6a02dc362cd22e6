"""The cluster as the service runs it: one member, its partitions as feeds among the others, and GET /v1/cluster.

Here the configuration meets `member` (which partitions) and `partition` (what owning one means). Nothing is decided.
"""

from __future__ import annotations

from collections.abc import MutableMapping
from typing import Any

from ..config import Config
from ..config import Feed as FeedConfig
from ..errors import StrandlineError
from ..ingest.offload import Aside
from ..ports import Clock
from ..runtime import FeedRuntime
from ..sinks import make_shared_sink, make_sink
from ..sinks_of import MakeSink
from .balance import Partition as Numbered
from .leases import Held
from .member import ClusterSettings, Member
from .partition import Ground, Part, Partition


class Cluster:
    """What a service with [cluster] runs. Lives on one event loop: `begin`, then `stop` once."""

    def __init__(
        self, config: Config, feeds: MutableMapping[str, FeedRuntime], clock: Clock, make: MakeSink, listen: str
    ) -> None:
        """`feeds` are those at work, by name; partitions join them while they are owned. `listen` tells the others."""
        assert config.cluster is not None
        cluster = config.cluster
        self._config, self._aside = config, Aside()
        self._ground = Ground(
            cluster,
            config.data_dir,
            clock,
            make_shared_sink if make is make_sink else make,
            self._aside,
            feeds,
            config.drain_at_most_ns / 1e9,
        )
        self._owned: dict[Numbered, Partition] = {}
        self.member = Member(
            ClusterSettings(
                cluster.name, cluster.instance, cluster.urls, cluster.access(), cluster.replicas, cluster.lease_ns / 1e9
            ),
            [Numbered(feed.name, number) for feed in self._clustered for number in range(_count(feed))],
            self._start,
            now_ns=clock.now_ns,
            listen=listen,
        )

    @property
    def _clustered(self) -> list[FeedConfig]:
        return [feed for feed in self._config.feeds if feed.partitions is not None]

    def begin(self) -> None:
        """Begin to take partitions; returns at once."""
        self.member.begin()

    async def stop(self, within_s: float) -> None:
        """Give all partitions back, drained as far as that is done in time."""
        await self.member.stop(within_s)
        self._aside.close()

    def reconfigure(self, config: Config) -> None:
        """Go on with other settings of feeds; what cannot change while it runs is the same."""
        self._config = config
        self._forget_stopped()
        for numbered, partition in self._owned.items():
            partition.reconfigure(*self._configured(numbered))

    async def _start(self, numbered: Numbered, held: Held) -> Partition:
        feed, own = self._configured(numbered)
        partition = await Partition.take_over(self._ground, Part(feed, own, numbered.number, held.fence))
        self._forget_stopped()
        self._owned[numbered] = partition
        return partition

    def _forget_stopped(self) -> None:
        self._owned = {each: partition for each, partition in self._owned.items() if not partition.stopped}

    def _configured(self, numbered: Numbered) -> tuple[FeedConfig, FeedConfig]:
        """The feed as it is configured, and as it is for this partition alone."""
        feed = self._config.feed(numbered.feed)
        if feed is None or numbered.number >= _count(feed):
            raise StrandlineError(f"the configuration has no partition {numbered.number} of feed {numbered.feed}")
        return feed, feed.partition_feeds()[numbered.number]

    def document(self) -> dict[str, Any]:
        """GET /v1/cluster."""
        return self.member.document()


def _count(feed: FeedConfig) -> int:
    return 0 if feed.partitions is None else feed.partitions.count

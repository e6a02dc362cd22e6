"""The cluster as the service runs it: one member, its partitions as feeds among the others, and GET /v1/cluster.

Here the configuration meets `member` (which partitions) and `partition` (what owning one means). Nothing is decided.
"""

from __future__ import annotations

import hashlib
import time
from collections.abc import Iterable, MutableMapping
from typing import Any

import msgspec

from ..config import Config
from ..config import Feed as FeedConfig
from ..errors import StrandlineError
from ..ingest.offload import Aside
from ..ports import Clock
from ..runtime import FeedRuntime
from ..sinks import make_shared_sink, make_sink
from ..sinks_of import MakeSink
from .balance import Partition as Numbered
from .counts import Figures, Takeovers
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
        self._takeovers = {feed.name: Takeovers() for feed in self._clustered}
        self.member = Member(
            ClusterSettings(
                cluster.name,
                cluster.instance,
                cluster.urls,
                cluster.access(),
                cluster.replicas,
                cluster.lease_ns / 1e9,
                digest_of(config),
            ),
            [Numbered(feed.name, number) for feed in self._clustered for number in range(_count(feed))],
            self._start,
            now_ns=clock.now_ns,
            listen=listen,
        )

    @property
    def _clustered(self) -> list[FeedConfig]:
        return [feed for feed in self._config.feeds if feed.partitions is not None]

    def begin(self, listen: str = "") -> None:
        """Begin to take partitions; returns at once. `listen`: where this instance listens, with its port."""
        self.member.begin(str(self._ground.cluster.address or listen))

    async def stop(self, within_s: float) -> None:
        """Give all partitions back, drained as far as that is done in time."""
        await self.member.stop(within_s)
        self._aside.close()

    def without_room(self, config: Config) -> list[str]:
        """The partitions here that could not note this configuration in their journal now."""
        self._forget_stopped()
        owned = [(config.feed(partition.name), partition) for partition in self._owned.values()]
        return [partition.name for own, partition in owned if own is not None and not partition.has_headroom(own)]

    def reconfigure(self, config: Config) -> None:
        """Go on with other settings of feeds; what cannot change while it runs is the same."""
        self._config = config
        self.member.digest = digest_of(config)
        self._forget_stopped()
        for numbered, partition in self._owned.items():
            partition.reconfigure(*self._configured(numbered))

    async def _start(self, numbered: Numbered, held: Held) -> Partition:
        feed, own = self._configured(numbered)
        takeovers = self._takeovers[feed.name]
        try:
            partition = await Partition.take_over(self._ground, Part(feed, own, numbered.number, held.fence))
        except Exception:
            takeovers.failed += 1
            raise
        takeovers.note(partition.took_s)
        self._forget_stopped()
        self._owned[numbered] = partition
        if (configured := self._configured(numbered)) != (feed, own):  # read again during the takeover
            partition.reconfigure(*configured)
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

    def figures(self) -> Figures:
        """What metrics tell of it."""
        feeds, noticed, now_s = [feed.name for feed in self._clustered], self.member.noticed, time.monotonic()
        nobodys = noticed.nobodys(now_s)
        self._forget_stopped()
        return Figures(
            noticed.away_s(now_s) is None,
            noticed.instances(now_s),
            _by_feed(feeds, self._owned),
            None if nobodys is None else _by_feed(feeds, nobodys),
            self._takeovers,
            {partition.name: bool(partition.log_words) for partition in self._owned.values()},
            {partition.name: partition.is_lost for partition in self._owned.values()},
        )

    def unready(self) -> str:
        """Why it takes no part: it has not joined yet, or is away for longer than its lease; else nothing."""
        member, cluster = self.member, self._ground.cluster
        away_s, lease_s = member.noticed.away_s(time.monotonic()), cluster.lease_ns / 1e9
        if away_s is None or (member.noticed.ever_joined and away_s <= lease_s):
            return ""
        why = f": {member.words}" if member.words else ""
        if not member.noticed.ever_joined:
            return f"cluster {cluster.name}: {cluster.instance} has not joined it yet{why}"
        so = f"for {away_s:.0f} s, longer than its lease of {lease_s:g} s, so it owns nothing"
        return f"cluster {cluster.name}: {cluster.instance} has been away {so}{why}"


def digest_of(config: Config) -> str:
    """Of all that decides how the messages of partitions are read: the same at all instances, or batches differ."""
    read_by = [
        (feed.name, feed.time, feed.source, feed.id, feed.partitions, feed.body_limits())
        for feed in sorted(config.feeds, key=lambda feed: feed.name)
        if feed.partitions is not None
    ]
    return hashlib.sha256(msgspec.json.encode(read_by)).hexdigest()[:16]


def _by_feed(feeds: Iterable[str], partitions: Iterable[Numbered]) -> dict[str, int]:
    counts = dict.fromkeys(feeds, 0)
    for each in partitions:
        counts[each.feed] += 1
    return counts


def _count(feed: FeedConfig) -> int:
    return 0 if feed.partitions is None else feed.partitions.count

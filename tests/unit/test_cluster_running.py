"""The cluster as the service runs it: what a configuration that is read again does to partitions, whenever that is."""

from __future__ import annotations

import errno
import time
from collections.abc import AsyncIterator
from pathlib import Path

import pytest
from helpers_brokers import Nats
from helpers_partition import FEED, configured, make_river
from strandline.clock import SystemClock
from strandline.cluster.balance import Partition as Numbered
from strandline.cluster.leases import Held
from strandline.cluster.running import Cluster
from strandline.core.settings import SECOND_NS
from strandline.journal.disk import LocalDisk, LocalFile
from strandline.ports import Clock, Sink
from strandline.runtime import FeedRuntime
from strandline.sinks import make_sink

PARTITION = Numbered(FEED, 0)


@pytest.fixture
async def server(tmp_path: Path) -> AsyncIterator[Nats]:
    """A broker with the stream of producers."""
    with Nats(tmp_path) as found:
        await make_river(found)
        yield found


@pytest.mark.parametrize("when", ["during", "after"])
async def test_a_configuration_that_is_read_again_reaches_a_partition(server: Nats, tmp_path: Path, when: str) -> None:
    before, after = (configured(tmp_path, server, "a", feed=f'slack = "{slack}"') for slack in ("1s", "2s"))
    feeds: dict[str, FeedRuntime] = {}

    def make(kind: str, feed: str, clock: Clock, **options: object) -> Sink:
        """Asked for in the middle of a takeover."""
        if when == "during":
            cluster.reconfigure(after)
        return make_sink(kind, feed, clock, **options)

    cluster = Cluster(before, feeds, SystemClock(), make, "")
    owner = await cluster._start(PARTITION, Held("owner.gauges.0", 1, 1, time.monotonic() + 60))
    try:
        if when == "after":
            assert feeds[f"{FEED}-0"].feed.state.settings.slack_ns == SECOND_NS
            cluster.reconfigure(after)
        runtime = feeds[f"{FEED}-0"]
        assert runtime.config == after.feeds[0].partition_feeds()[0]
        assert runtime.feed.state.settings.slack_ns == 2 * SECOND_NS
    finally:
        await owner.stop(drain=False)
        await cluster.stop(0.0)


async def test_settings_that_a_partition_has_no_room_to_note_are_told_before_anything_changes(
    server: Nats, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    small = 'journal = { segment_bytes = "64KiB", at_most = "1MiB" }\n'
    small += "".join(f'{what}_bytes_at_most = "32KiB"\n' for what in ("body", "decoded", "event"))
    config = configured(tmp_path, server, "a", feed=small)
    feeds: dict[str, FeedRuntime] = {}
    cluster = Cluster(config, feeds, SystemClock(), make_sink, "")
    owner = await cluster._start(PARTITION, Held("owner.gauges.0", 1, 1, time.monotonic() + 60))
    try:
        assert cluster.without_room(config) == []

        def full(disk: LocalDisk, path: str, size: int) -> LocalFile:
            raise OSError(errno.ENOSPC, "no room", path)

        monkeypatch.setattr(LocalDisk, "create", full)
        runtime = feeds[f"{FEED}-0"]
        while runtime.has_headroom():
            runtime.carry_out(runtime.feed.promise("gw-1", 0, runtime.clock.now_ns(), 0))
        assert cluster.without_room(config) == [f"{FEED}-0"]
    finally:
        await owner.stop(drain=False)
        await cluster.stop(0.0)

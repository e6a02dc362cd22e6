"""One partition in the hands of this instance: taken over, at work, given back.

The written order of taking over: put a group of one's own into the log (from then on no former owner can write) and
read it; make the journal again; recover from it and open the sinks, as at any start; only then take further messages.
Which partitions are taken is decided by `member` and `balance`.
"""

from __future__ import annotations

import asyncio
import logging
import shutil
import time
from collections.abc import Callable, MutableMapping
from dataclasses import dataclass
from functools import partial
from pathlib import Path

from ..config import Feed as FeedConfig
from ..config_cluster import ClusterConfig
from ..config_intakes import JetstreamIntake
from ..core.columns import TIME_MIN
from ..errors import StrandlineError
from ..ingest.offload import Aside
from ..ingest.timestamps import format_rfc3339
from ..journal.disk import LocalDisk
from ..journal.journal import Journal
from ..ports import Clock
from ..runtime import FeedRuntime
from ..sinks_of import MakeSink
from ..tasks import ended_at_last, in_thread, through
from .commit import ReplicatedCommit
from .emptied import TOLD_FOR_NS, WORDS
from .link import Link, Reader
from .log import PartitionLog, Place, make_stream
from .rebuilding import Rebuilding
from .taking import Taking

log = logging.getLogger(__name__)
FAILING_NS = 5 * 10**9
STOP_GRACE_S = 5.0  # beyond the time for draining: then what is not in the log is left to the next owner


@dataclass(frozen=True, slots=True)
class Ground:
    """What all partitions of an instance stand on. `feeds` are the feeds at work, by name: observers look there."""

    cluster: ClusterConfig
    data_dir: Path
    clock: Clock
    make: MakeSink
    aside: Aside
    feeds: MutableMapping[str, FeedRuntime]
    drain_at_most_s: float


@dataclass(frozen=True, slots=True)
class Part:
    """A partition to be owned: `feed` as it is configured, `own` as it is for this partition alone."""

    feed: FeedConfig
    own: FeedConfig
    number: int
    fence: int


class Partition:
    """A partition that is owned. Made by `take_over`; `stop` in the end."""

    def __init__(self, ground: Ground, part: Part, link: Link) -> None:
        self._ground, self._part, self._link = ground, part, link
        self._log = PartitionLog(link, Place.of(ground.cluster.name, part.feed.name, part.number), part.fence)
        self._runtime: FeedRuntime | None = None
        self._commit: ReplicatedCommit | None = None
        self._taking: Taking | None = None
        self._closing: asyncio.Task[None] | None = None
        self.ended = asyncio.Event()  # it cannot go on by itself; `why` says what happened
        self.why = ""
        self.stopped = False
        self.took_s = 0.0
        self._lost_ns: int | None = None  # when its log was found to have lost its messages

    @classmethod
    async def take_over(cls, ground: Ground, part: Part) -> Partition:
        """Own it from now on. What was begun is undone where that fails or is cancelled. Raises StrandlineError."""
        cluster = ground.cluster
        link = Link(cluster.urls, cluster.access(), f"strandline {cluster.instance} {part.own.name}")
        partition = cls(ground, part, link)
        taking_over = asyncio.ensure_future(partition._take_over())
        try:
            await asyncio.shield(taking_over)
        except BaseException:
            # A cancelling may have been passed over on the way: then it was taken over all the same.
            await ended_at_last(taking_over)
            await through(asyncio.ensure_future(partition.stop(drain=False)))
            raise
        return partition

    async def _take_over(self) -> None:
        ground, own, begun_s = self._ground, self._part.own, time.monotonic()
        cluster = ground.cluster
        await make_stream(self._link, cluster.name, cluster.replicas, cluster.log_at_most_bytes)
        contents = await self._log.take_over()
        disk = LocalDisk(ground.data_dir / "scratch", synced=False)
        folder = ground.data_dir / "feeds" / own.name
        await in_thread(lambda: _prepare(self._scratch, folder))
        # Compiled decoding is compiled with the first decoder, which takes seconds.
        rebuilding = await in_thread(lambda: Rebuilding(own, self._intake, self._link, ground.aside))
        await rebuilding.run(contents, disk)
        # Opening reads the journal back, which may take a while.
        await in_thread(lambda: self._make_runtime(folder, disk, contents.next_message))
        assert self._runtime is not None and self._commit is not None
        await self._runtime.open()
        self._lost_ns = contents.lost_ns
        if contents.is_new and self._lost_ns is None and (stands := _stands_at(self._runtime)):
            self._lost_ns = await self._log.lose(f"a sink has batches of this partition up to {stands}")
        reader = Reader(self._link, self._intake.stream, self._intake.subjects[0])
        self._taking = Taking(
            self._runtime, self._commit, reader, self._intake, ground.aside, contents.next_message
        )  # fmt: skip
        self._runtime.intakes.append(self._taking.counts)
        self._taking.start()
        ground.feeds[own.name] = self._runtime
        self.took_s = time.monotonic() - begun_s
        log.info(
            "%s: taken over with fence %d in %.2f s: %d groups of the log, %d messages read again (%d bytes)",
            own.name, self._part.fence, self.took_s, len(contents.groups), rebuilding.messages,
            rebuilding.payload_bytes,
        )  # fmt: skip

    def _make_runtime(self, folder: Path, disk: LocalDisk, next_message: int) -> None:
        make_commit, ground = partial(self._made_commit, next_message), self._ground
        self._runtime = FeedRuntime(
            self._part.own, folder, disk, ground.clock, self._failed, ground.make, make_commit
        )  # fmt: skip

    def _made_commit(
        self, next_message: int, journal: Journal, on_durable: Callable[[int], None],
        on_failed: Callable[[Exception], None],
    ) -> ReplicatedCommit:  # fmt: skip
        self._commit = ReplicatedCommit(journal, on_durable, on_failed, self._log)
        self._commit.next_message = next_message
        return self._commit

    @property
    def _scratch(self) -> Path:
        return self._ground.data_dir / "scratch" / "feeds" / self._part.own.name

    @property
    def _intake(self) -> JetstreamIntake:
        """The partition's part of the stream as an intake describes it: how its messages are read."""
        partitions, cluster = self._part.feed.partitions, self._ground.cluster
        assert partitions is not None
        return JetstreamIntake(
            name="partition",
            urls=cluster.urls,
            stream=partitions.stream,
            subjects=(partitions.subject_of(self._part.number),),
            source=partitions.source,
            content_type=partitions.content_type,
            fetch_at_most=partitions.fetch_at_most,
            in_flight_at_most=partitions.in_flight_at_most,
        )

    def _failed(self, name: str, error: Exception) -> None:
        self.why = str(error) or type(error).__name__
        if not self.stopped:
            log.warning("%s: is no longer owned: %s", name, self.why)
        self.ended.set()

    async def stop(self, *, drain: bool) -> None:
        """Stop working on it. With `drain`: deliver within the limit and save, so that the next owner begins at once.

        Without: nothing more is written to the log; what was released goes on to the sinks no further. A call that was
        cancelled may be followed by another. The connection is closed whatever goes wrong before that.
        """
        self.stopped = True
        try:
            await self._stop(drain=drain)
        except Exception:
            await self._link.close()
            raise
        await self._link.close()  # not where the call was cancelled: another follows, and what is under way needs it

    async def _stop(self, *, drain: bool) -> None:
        runtime, commit = self._runtime, self._commit
        if runtime is not None and self._ground.feeds.get(self._part.own.name) is runtime:
            del self._ground.feeds[self._part.own.name]  # first: nobody ticks or asks what is being closed
        if commit is not None and not drain:
            commit.give_up("the partition is not owned any more")
        if self._taking is not None:
            await self._taking.stop()
        if runtime is not None and commit is not None:
            await self._close(runtime, commit, self._ground.drain_at_most_s if drain else 0.0)

    async def _close(self, runtime: FeedRuntime, commit: ReplicatedCommit, limit_s: float) -> None:
        if self._closing is None:
            self._closing = asyncio.create_task(runtime.close(limit_s))
        if limit_s > 0:
            await asyncio.wait([self._closing], timeout=limit_s + STOP_GRACE_S)
        commit.give_up("the log did not answer while the partition was given back")  # does nothing once it is closed
        for delivery in runtime.deliveries.values():
            delivery.hurry()
        try:
            await asyncio.shield(self._closing)
        except StrandlineError as error:
            log.warning("%s: %s", self._part.own.name, error)
        runtime.recent.close()
        runtime.journal.unmap()
        await in_thread(lambda: shutil.rmtree(self._scratch, ignore_errors=True))  # what stays goes at the next start

    def has_headroom(self, own: FeedConfig) -> bool:
        """Whether these settings could be noted in its journal now."""
        return self._runtime is None or self._runtime.has_headroom(own)

    def reconfigure(self, feed: FeedConfig, own: FeedConfig) -> None:
        """Go on with other settings and limits; what a running feed cannot change must be the same."""
        self._part = Part(feed, own, self._part.number, self._part.fence)
        if self._runtime is not None:
            self._runtime.reconfigure(own)

    def status(self) -> dict[str, object]:
        """What the other instances are told of it."""
        runtime, taking = self._runtime, self._taking
        if runtime is None or taking is None:
            return {"behind_messages": None, "watermark": None, "watermark_age_s": None, "words": self.words}
        watermark_ns = runtime.feed.state.watermark_ns
        known = watermark_ns != TIME_MIN
        return {
            "behind_messages": taking.counts.waiting,
            "watermark": format_rfc3339(watermark_ns) if known else None,
            "watermark_age_s": round((self._ground.clock.now_ns() - watermark_ns) / 1e9, 3) if known else None,
            "words": self.words,
        }

    @property
    def name(self) -> str:
        """As a feed."""
        return self._part.own.name

    @property
    def log_words(self) -> str:
        """What its log said last, while that hinders it; nothing while all is well."""
        return self._log.words

    @property
    def is_lost(self) -> bool:
        """Whether its log was found to have lost its messages, less than a day ago."""
        return self._lost_ns is not None and self._ground.clock.now_ns() - self._lost_ns < TOLD_FOR_NS

    @property
    def words(self) -> str:
        """What hinders it now; nothing while all is well."""
        taking, runtime = self._taking, self._runtime
        if self._log.words or taking is None or runtime is None:
            return self._log.words
        others = taking.words or failing_words(runtime)
        return "; ".join(filter(None, (WORDS if self.is_lost else "", others)))


def failing_words(runtime: FeedRuntime) -> str:
    """The first sink that has been failing for longer than a retry or two takes; nothing where none has."""
    for name, delivery in runtime.deliveries.items():
        if delivery.failing:
            state = delivery.state()
            since_ns = state.failing_since_ns
            if since_ns is not None and runtime.clock.now_ns() - since_ns > FAILING_NS:
                return f"sink {name} fails: {state.last_error}"
    return ""


def _stands_at(runtime: FeedRuntime) -> int:
    """The last batch that sinks had when a feed with a new journal was opened (see NumbersRecord); 0: none."""
    return max(runtime.feed.state.outbox.next_number.values()) - 1


def _prepare(scratch: Path, folder: Path) -> None:
    """Throw away what an earlier owner's process left of the journal; the lanes' folder is kept.

    Raises StrandlineError.
    """
    try:
        if scratch.exists():
            shutil.rmtree(scratch)
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise StrandlineError(f"{error}: check the disk and the rights on data_dir") from error

"""One feed at work: carries out what the core decides. Journal, group commit, sinks and waiting requests meet here.

No decision about order, lateness or the watermark is taken here, and no state spans an await except who waits for what.
The written order of a stop is in `close`.
"""

from __future__ import annotations

import asyncio
import logging
import random
from collections.abc import Awaitable, Callable, Mapping, Sequence
from functools import partial
from pathlib import Path

from .bell import Bell
from .config import Feed as FeedConfig
from .core.columns import TIME_MIN, Arrival, Batch, Lane, RequestKey
from .core.effects import Answer, Append, Deliver, Effect, Outcome, Pause, Refuse, Sync
from .core.feed import Feed
from .core.records import arrival_body_bytes
from .core.view import View
from .decoding import copier_of, decoder_of
from .errors import JournalFailed, JournalFull, StrandlineError
from .hops import Bodies, Hop, watermark_words
from .housekeeping import Housekeeper
from .intake.counts import Counts
from .journal.commit import GroupCommit
from .journal.journal import Journal
from .lines import JournalLines
from .ports import Clock, Disk, Sink
from .problems import Refused
from .recent import Recent
from .repairing import Repairer
from .sinks import make_sink
from .sinks.delivery import Delivery
from .sinks.lanes import LaneStore
from .sinks_of import FeedSinks, MakeSink, Positions
from .tasks import in_thread
from .waiters import Told, Waiters

log = logging.getLogger(__name__)
MakeCommit = Callable[[Journal, Callable[[int], None], Callable[[Exception], None]], GroupCommit]
SMALL_RECORD_BYTES = 4096  # more than any record that is not an arrival's


def settings_bytes(config: FeedConfig) -> list[int]:
    """Sizes at most of the records that settings become; both name the sources that are expected."""
    names = sum(len(name.encode()) + 8 for name in config.expect_sources)
    return [SMALL_RECORD_BYTES + names] * 2


class FeedRuntime:
    """The shell of one feed. Lives on one event loop; `open` first, then everything else, `close` last."""

    def __init__(
        self,
        config: FeedConfig,
        folder: Path,
        disk: Disk,
        clock: Clock,
        on_failed: Callable[[str, Exception], None],
        make: MakeSink = make_sink,
        make_commit: MakeCommit = GroupCommit,
    ) -> None:
        self.config, self.clock, self._make = config, clock, make
        self.journal = Journal.open(
            disk,
            f"feeds/{config.name}",
            segment_bytes=config.journal.segment_bytes,
            journal_bytes_at_most=config.journal.at_most_bytes,
        )
        self.feed = Feed(config.settings())
        self.recent = Recent()
        self.lines = JournalLines(self.journal, self.feed, copier_of(config))
        self.commit = make_commit(self.journal, self._durable, self.fail)
        self.decoder = decoder_of(config)
        self.lanes_file = folder / "lanes.db"
        self.lane_store = LaneStore(self.lanes_file)
        self.deliveries: dict[str, Delivery] = {}
        self.accepting = self._started = False
        self.failure: str | None = None
        self._positions = Positions(config.name)
        self.repairers: dict[str, Repairer] = {}
        self._on_failed = on_failed
        self.reading, self.decoding = Bodies(), Bodies()
        self._synced = Bell()  # rung at each sync, and at a failure
        self._synced_ns: int | None = None
        self._delivered_ns: int | None = None
        self._taken_ns: int | None = None
        self._waiters = Waiters()
        self._untold: dict[tuple[str, Lane], int] = {}  # positions of sinks that the core was not told yet
        self._house = Housekeeper(self.journal, self.feed, self.commit, self._settle, clock, config.journal.retain_ns)
        self._housekeeping: asyncio.Task[None] | None = None
        self.recording = False  # whether a capture is being made of it
        self.intakes: list[Counts] = []  # what is known of each, for observers
        self.watchers: list[Callable[[Batch], None]] = []  # called with each batch that leaves; they may not fail

    # ---- start and stop -------------------------------------------------------------------------------------------

    async def open(self) -> None:
        """Recover, connect the sinks and begin to work."""
        folded = await in_thread(self._house.recover)
        self.lines.watch(self.feed)
        self.recent.begin(self.feed.state.outbox.next_number["ordered"] - 1)
        made = FeedSinks.made(self.config, self.lane_store, self.lanes_file, self.clock, self._make)
        sinks, self.repairers = made.sinks, made.repairers
        remembered = self.feed.state.outbox.positions
        for name, sink_object in sinks.items():
            self.deliveries[name] = self._delivery(name, sink_object, remembered.get(name, {}))
            self.deliveries[name].start()
        # A new journal remembers no sink yet.
        positions = await self._positions.wait(set(sinks), for_all=not remembered)
        served = {name: sink_object.lanes for name, sink_object in sinks.items()}
        self.journal.reserve([SMALL_RECORD_BYTES] * 2 + settings_bytes(self.config), of_headroom=True)
        self.carry_out(self.feed.start(self.clock.now_ns(), served, positions, self.config.settings()))
        self._started = self.accepting = True
        for repairer in self.repairers.values():
            repairer.start()
        held, told = self.feed.state.runs.held, watermark_words(self.feed.state.watermark_ns)
        log.info("%s: %d records folded, %d events held, %s", self.config.name, folded, held, told)

    def _delivery(self, name: str, sink: Sink, remembered: Mapping[Lane, int]) -> Delivery:
        return Delivery(
            name,
            sink,
            self.lines,
            clock=self.clock, random_source=random.Random(),
            on_taken=self._taken,
            on_refused=self._refused,
            on_opened=self._opened,
            remembered=remembered,
            moves=self.config.partitions is not None,
        )  # fmt: skip

    def _opened(self, name: str, positions: Mapping[Lane, int]) -> None:
        self._positions.told(name, positions, self.feed.state.outbox.next_number if self._started else None)

    async def close(self, drain_at_most_s: float) -> None:
        """Stop in this order: take nothing more; answer who waits on a sync; deliver within the limit; save; close.

        A write that fails on the way is told as any other, and the rest is done all the same.
        """
        self.accepting = False
        await self._at_last(self._settle)
        await asyncio.gather(*(repairer.close() for repairer in self.repairers.values()))
        await asyncio.gather(*(delivery.drain(drain_at_most_s) for delivery in self.deliveries.values()))
        if self._housekeeping:
            await self._housekeeping
        # From here on no sink reports anything, so nothing is appended behind the snapshot.
        await asyncio.gather(*(delivery.close() for delivery in self.deliveries.values()))
        await self._at_last(self._house.save)
        await self.commit.close()
        self._waiters.refuse_all("stopping", "the service is stopping")
        try:
            self.journal.close()
        except JournalFailed as error:
            self.fail(error)

    async def _at_last(self, work: Callable[[], Awaitable[None]]) -> None:
        if not self._started or self.failure is not None:
            return
        try:
            await work()
        except JournalFull as error:
            log.warning("%s: no snapshot was written at the stop: %s", self.config.name, error)
        except JournalFailed as error:
            self.fail(error)

    # ---- inputs ---------------------------------------------------------------------------------------------------

    async def arrive(self, arrival: Arrival, key: RequestKey | None = None) -> Outcome:
        """Hand one request to the core and wait until it is durable. Raises Refused."""
        outcome = await self.begin(arrival, key)
        assert outcome is not None
        return outcome

    def begin(self, arrival: Arrival, key: RequestKey | None = None, *, more: bool = False) -> Told:
        """Hand one request to the core, now; told once durable. `more`: others follow, then `mark`. Raises Refused."""
        self._check_open()
        self._check_lanes()
        names, now_ns = sum(len(name.encode()) + 8 for name in arrival.new_sources), self.clock.now_ns()
        self._reserve([arrival_body_bytes(arrival), SMALL_RECORD_BYTES, SMALL_RECORD_BYTES, names])
        return self._ask(partial(self.feed.arrive, arrival, now_ns, key=key, more=more), now_ns, arrival.received)

    def mark(self) -> None:
        """The last of some requests that were begun with `more` has come."""
        if self.failure is None and self.has_headroom():
            self._do(lambda: self.feed.mark(self.clock.now_ns()))

    async def act(self, act: Callable[[int, int], list[Effect]], text_bytes: int = 0) -> None:
        """Carry out an act, `act(now_ns, token)`, that keeps so many bytes of text; wait until it is durable."""
        self._check_open()
        self._reserve([SMALL_RECORD_BYTES + text_bytes, SMALL_RECORD_BYTES, SMALL_RECORD_BYTES], of_headroom=True)
        now_ns = self.clock.now_ns()
        await self._ask(lambda token: act(now_ns, token), now_ns, 0)

    def reconfigure(self, config: FeedConfig) -> None:
        """Go on with other settings and limits; what cannot change while it runs must be the same."""
        self.config = config
        self.decoder = decoder_of(config)
        served = {name: delivery.lanes for name, delivery in self.deliveries.items()}
        if self.has_headroom(config):
            self._do(lambda: self.feed.start(self.clock.now_ns(), served, settings=config.settings()))

    def tick(self) -> None:
        """Time has gone on."""
        if self.accepting:
            self._tell_positions()
        if self.accepting and self.failure is None and self.has_headroom():
            self._do(lambda: self.feed.tick(self.clock.now_ns()))
            self._keep_house()

    def _taken(self, sink: str, lane: Lane, number: int) -> None:
        self._taken_ns = self.clock.now_ns()
        self._untold[sink, lane] = number
        self._tell_positions()

    def _tell_positions(self) -> None:
        """Tell the core how far sinks are; what finds no room in the journal waits for the next tick.

        Never before the start: a mark would release behind batches that were not delivered again yet, and a sink that
        is offered the newer one first takes the older one for a repeat.
        """
        while self._started and self._untold and self.failure is None and self.has_headroom():
            (sink, lane), number = self._untold.popitem()
            self._do(partial(self.feed.taken, sink, lane, number, self.clock.now_ns()))

    async def _refused(self, sink: str, batches: Sequence[Batch], detail: str) -> None:
        await self.lane_store.keep_refused(sink, batches, detail, self.lines, self.config.lanes_at_most_bytes)

    def _ask(self, ask: Callable[[int], list[Effect]], now_ns: int, events: int) -> Told:
        token, future = self._waiters.begin(now_ns, events)
        try:
            self._do(partial(ask, token))
        except (ValueError, LookupError):
            self._waiters.forget(token)
            raise
        return future

    def _do(self, ask: Callable[[], list[Effect]]) -> None:
        """Let the core decide, and carry it out. An error on the way is final: state and journal may differ by then.

        Raises ValueError or LookupError, nothing having changed, for an input that contradicts itself.
        """
        before = self.feed.next_lsn
        try:
            self.carry_out(ask())
        except Exception as error:
            if isinstance(error, (ValueError, LookupError)) and self.feed.next_lsn == before == self.journal.next_lsn:
                raise
            log.exception("%s: an unforeseen error", self.config.name)
            self.fail(error)

    def _check_open(self) -> None:
        if self.failure is not None:
            raise Refused("failed", f"feed {self.config.name}: {self.failure}", 10)
        if not self.accepting:
            raise Refused("stopping", "the service is stopping or still starting; try again", 5)

    def _lanes_full(self) -> bool:
        return self.lane_store.size.file_bytes > self.config.lanes_at_most_bytes

    def _check_lanes(self) -> None:
        if self._lanes_full():
            detail = (
                f"the late lane and the quarantine of {self.config.name} take {self.lane_store.size.file_bytes:,} "
                f"bytes and lanes_at_most is {self.config.lanes_at_most_bytes:,}: export what is settled and remove it "
                "with `strandline late forget` or `strandline quarantine forget`, or raise the limit"
            )
            self.feed.note_refusal("lanes_full")
            raise Refused("lanes_full", detail, 60)

    def _reserve(self, sizes: Sequence[int], *, of_headroom: bool = False) -> None:
        try:
            self.journal.reserve(sizes, of_headroom=of_headroom)
        except JournalFull as error:
            self.feed.note_refusal(error.reason)
            raise Refused(error.reason, str(error), 5) from error
        except JournalFailed as error:
            self.fail(error)
            raise Refused("failed", str(error), 10) from error

    def has_headroom(self, config: FeedConfig | None = None) -> bool:
        """Whether the journal has room for a mark or another small record, or for these settings."""
        try:
            sizes = [SMALL_RECORD_BYTES] * 2 if config is None else settings_bytes(config)
            self.journal.reserve(sizes, of_headroom=True)
        except JournalFull as error:
            log.debug("%s: no room for a mark now: %s", self.config.name, error)
            return False
        except JournalFailed as error:
            self.fail(error)  # a reservation failed, here or in the journal's thread: nobody else would say so
            return False
        return True

    # ---- effects --------------------------------------------------------------------------------------------------

    def carry_out(self, effects: list[Effect]) -> None:
        """Do what the core asks for, in its order."""
        for effect in effects:
            match effect:
                case Append():
                    self.commit.append(effect.lsn, effect.kind, effect.parts)
                case Sync():
                    self.commit.kick()
                case Deliver():
                    self._deliver(effect.batch)
                case Answer():
                    self._waiters.answer(effect.token, effect.outcome)
                case Refuse():
                    self._waiters.refuse(effect.token, Refused(effect.reason, effect.detail, effect.retry_after_s))
                case Pause():
                    self._pause(effect)

    def _pause(self, effect: Pause) -> None:
        for worker in (self.deliveries.get(effect.sink), self.repairers.get(effect.sink)):
            if worker is not None:
                (worker.pause if effect.on else worker.resume)()

    def _deliver(self, batch: Batch) -> None:
        self._delivered_ns = self.clock.now_ns()
        for delivery in self.deliveries.values():
            delivery.offer(batch)
        for watch in self.watchers:
            watch(batch)
        if batch.lane == "ordered":
            self.recent.add(batch)

    async def _settle(self) -> None:
        """Wait until everything that was appended so far is durable. Raises JournalFailed."""
        lsn = self.feed.next_lsn
        while self.commit.durable_lsn < lsn:
            if self.failure is not None:
                raise JournalFailed(self.failure)
            bell = self._synced.next
            self.commit.kick()
            await bell.wait()

    def _durable(self, lsn: int) -> None:
        self._synced.ring()
        self._synced_ns = self.clock.now_ns()
        self._do(partial(self.feed.synced, lsn))

    def fail(self, error: Exception) -> None:
        """Take nothing more, for good: state and journal may differ, or somebody else goes on with them."""
        if self.failure is not None:
            return
        self.failure = str(error) or type(error).__name__
        self._synced.ring()
        self._waiters.refuse_all("failed", f"nothing more is accepted until a restart: {self.failure}")
        self._on_failed(self.config.name, error)

    # ---- housekeeping ---------------------------------------------------------------------------------------------

    def _keep_house(self) -> None:
        if self._housekeeping and self._housekeeping.done():
            self._housekeeping = None
        if self._housekeeping is None and (self._house.due(self.config.journal.segment_bytes) or self._lanes_full()):
            self._housekeeping = asyncio.create_task(self._keep_house_now())

    async def _keep_house_now(self) -> None:
        try:
            await self._house.run(self.config.journal.segment_bytes)
            self.recent.forget_before(self.journal.first_lsn)
            if self._lanes_full():
                await self.lane_store.measure()  # somebody may have removed what is settled
        except JournalFailed as error:
            self.fail(error)
        except StrandlineError as error:
            log.warning("%s: %s", self.config.name, error)
        except Exception as error:
            log.exception("%s: an unforeseen error while keeping house", self.config.name)
            self.fail(error)

    # ---- observers ------------------------------------------------------------------------------------------------

    @property
    def source_numbers(self) -> Mapping[str, int]:
        """The numbers of the sources that are known so far."""
        return self.feed.state.sources.numbers

    def view(self) -> View:
        """The feed as observers see it."""
        return self.feed.snapshot(self.clock.now_ns())

    def hops(self) -> dict[str, Hop]:
        """The six hops, by name, in the order in which events pass them."""
        state, (unsynced, unsynced_ns) = self.feed.state, self.feed.unsynced()
        lanes = [lane for delivery in self.deliveries.values() for lane in delivery.state().lanes.values()]
        waiting = [lane.oldest_instant_ns for lane in lanes if lane.oldest_instant_ns is not None]
        marked_ns = None if state.marked_ns == TIME_MIN else state.marked_ns
        return {
            "ingest": self.reading.hop(),
            "decode": self.decoding.hop(),
            "journal": Hop(self._waiters.events, self._waiters.oldest_ns, self._synced_ns),
            "runs": Hop(state.runs.held, state.arrivals.oldest_ns, marked_ns),
            "release": Hop(unsynced, unsynced_ns, self._delivered_ns),
            "sinks": Hop(sum(lane.events for lane in lanes), min(waiting, default=None), self._taken_ns),
        }

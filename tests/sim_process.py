"""One life of the service in a simulated world: the real runtime on a loop and a disk that the world drives.

Nothing of the shell is written anew: runtime, group commit, delivery, housekeeping and sinks are the service's own;
their threads are jobs of the loop, their time is the world's. What is watched on the way goes to the history.
"""

from __future__ import annotations

import asyncio
import logging
import random
from collections.abc import Callable, Iterator
from contextlib import ExitStack, contextmanager, suppress
from pathlib import Path
from typing import Any

from sim_clients import NDJSON
from sim_history import History
from sim_loop import SimLoop, SimWorker, beside, swapped
from sim_stores import Stores
from sim_weather import Weather
from simdisk import SimDisk
from strandline import runtime as runtime_module
from strandline.config_model import Feed as FeedConfig
from strandline.core.columns import Arrival, RequestKey
from strandline.core.effects import Outcome
from strandline.errors import JournalError, JournalFailed, JournalFull
from strandline.journal import commit
from strandline.problems import Refused
from strandline.runtime import FeedRuntime

SMALL_RECORD_BYTES = 256  # what the runtime reckons for a small record; 4096 would make every tiny segment a large one


@contextmanager
def seams(seed: str) -> Iterator[None]:
    """What the runtime takes from elsewhere without being given it: threads, jitter, the size of a small record."""
    jitter = random.Random(seed)
    levels = {name: logging.getLogger(name).level for name in ("strandline", "asyncio")}
    with ExitStack() as stack:
        stack.enter_context(swapped(commit, "ThreadPoolExecutor", SimWorker))
        stack.enter_context(swapped(runtime_module, "SMALL_RECORD_BYTES", SMALL_RECORD_BYTES))
        chance = beside(random, Random=lambda: random.Random(jitter.random()))
        stack.enter_context(swapped(runtime_module, "random", chance))
        try:
            for name in levels:
                logging.getLogger(name).setLevel(logging.CRITICAL + 1)
            yield
        finally:
            for name, level in levels.items():
                logging.getLogger(name).setLevel(level)


class SimClock:
    """What `clock.SystemClock` is, on the world's time: steps forwards are followed, steps back are not."""

    def __init__(self, monotonic_ns: Callable[[], int], wall_ns: Callable[[], int]) -> None:
        self._monotonic_ns, self._wall_ns = monotonic_ns, wall_ns
        self._offset_ns = wall_ns() - monotonic_ns()

    def now_ns(self) -> int:
        self._offset_ns = max(self._offset_ns, self._wall_ns() - self._monotonic_ns())
        return self._offset_ns + self._monotonic_ns()


class Process:
    """One life, from the opening of the journal to its end. Raises PowerCut where it dies."""

    def __init__(
        self,
        config: FeedConfig,
        folder: Path,
        disk: SimDisk,
        weather: Weather,
        stores: Stores,
        history: History,
        loop: SimLoop,
        clock: SimClock,
    ) -> None:
        self.weather, self.history, self.loop = weather, history, loop
        self.failure: Exception | None = None
        self.ended: str | None = None
        disk.faults = weather
        stores.weather = weather
        self.runtime = FeedRuntime(config, folder, disk, clock, self._failed, stores.make)
        self._instrument()
        self._opening: asyncio.Task[None] = loop.create_task(self.runtime.open())
        self._acts: list[asyncio.Task[None]] = []

    def _instrument(self) -> None:
        runtime, history, journal = self.runtime, self.history, self.runtime.journal
        append, deliver, recover = journal.append, runtime._deliver, runtime._house.recover

        def appended(lsn: int, kind: int, parts: Any, *more: Any) -> None:
            append(lsn, kind, parts, *more)
            history.appended(lsn, kind, list(parts))

        def delivered(batch: Any) -> None:
            history.durable(journal.durable_lsn)
            history.delivered(batch, journal.durable_lsn)
            deliver(batch)

        def recovered() -> int:
            folded = recover()
            history.recovered(journal, runtime.feed)
            return folded

        holder: Any = journal
        holder.append = appended
        holder = runtime
        holder._deliver = delivered
        holder = runtime._house
        holder.recover = recovered

    def _failed(self, feed: str, error: Exception) -> None:
        self.failure = error

    # ---- what senders see -------------------------------------------------------------------------------------------

    def decode(self, payload: bytes) -> Arrival:
        return self.runtime.decoder.decode(payload, NDJSON, self.runtime.feed.state.sources.numbers)

    async def arrive(self, arrival: Arrival, key: RequestKey | None) -> Outcome:
        return await self.runtime.arrive(arrival, key)

    @property
    def up(self) -> bool:
        """Whether it has started and works."""
        return self.runtime.accepting and self.failure is None

    def stop_opening(self) -> None:
        """A stop that comes while it still starts ends the starting first, as `app` does it."""
        self._opening.cancel()

    def act(self, name: str, *given: Any) -> None:
        """promise(source, time_ns), excuse(source, reason), drain(), ... as the endpoint does it."""
        self._acts.append(self.loop.create_task(self._act(name, given)))

    async def _act(self, name: str, given: tuple[Any, ...]) -> None:
        feed = self.runtime.feed
        if name == "excuse" and given[0] not in feed.state.sources.numbers:
            return
        who = {} if name == "promise" else {"who": "night shift"}
        with suppress(Refused):
            await self.runtime.act(lambda now_ns, token: getattr(feed, name)(*given, now_ns, token, **who), 64)

    # ---- judging ----------------------------------------------------------------------------------------------------

    def check(self) -> None:
        """Assert every invariant; note whether it has ended by itself, and that it may."""
        runtime = self.runtime
        assert not self.loop.complaints, self.loop.complaints
        self._look_at_acts()
        if self._opening.cancelled():
            return
        if self._opening.done() and self._opening.exception() is not None:
            error = self._opening.exception()
            self.ended = f"did not start: {error!r}"
            self._require_fault(error, (JournalError, JournalFailed, JournalFull, OSError))
            return
        if self.failure is not None:
            self.ended = f"failed: {self.failure!r}"
            self._require_fault(self.failure, (JournalFailed,))
            return
        if self._opening.done():
            self.history.durable(runtime.journal.durable_lsn)
            runtime.feed.check()
            runtime.journal.check()
            for delivery in runtime.deliveries.values():
                delivery.check()
            self._check_pauses()

    def _check_pauses(self) -> None:
        """What the records say once all of them are durable."""
        feed = self.runtime.feed
        if self.runtime.accepting and feed.durable_lsn == feed.next_lsn:
            paused = {name for name, delivery in self.runtime.deliveries.items() if delivery.state().paused}
            told = set(feed.state.acts.paused)
            assert paused == told, f"paused are {paused}, by the records {told}"

    def _look_at_acts(self) -> None:
        for task in [task for task in self._acts if task.done()]:
            self._acts.remove(task)
            task.result()

    def _require_fault(self, error: BaseException | None, kinds: tuple[type[Exception], ...]) -> None:
        """What ended the process must be what a fault of the disk can do, and there must have been one."""
        if not isinstance(error, kinds) or not (self.weather.errors or self.weather.starved):
            assert error is not None
            raise error

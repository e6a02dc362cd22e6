"""The stores of a simulated world: the service's own sinks on real files, a receiver, and what goes wrong with them.

`Flaky` stands before each sink and refuses, hangs or loses answers as its mood is. Stores outlive the process; what a
process held open is released when it dies, as the system would do. No journal and no judging here.
"""

from __future__ import annotations

import asyncio
import os
import sqlite3
import tempfile
from collections.abc import Awaitable, Callable, Iterator, Sequence
from contextlib import ExitStack, contextmanager, suppress
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, ClassVar, TypeVar

from sim_loop import beside, swapped
from sim_weather import Weather
from strandline.config_model import SinkConfig
from strandline.core.columns import Batch, Lane
from strandline.errors import SinkRefused, SinkRetry
from strandline.ports import Clock, Lines, Sink
from strandline.sinks import database, make_sink, rolling

Result = TypeVar("Result")
MOODS = ("well", "refuses", "refuses for good", "hangs", "hangs late", "loses answers", "fails within")
Taken = tuple[list[bytes], list[int], list[str]]  # lines, event times, source names of one batch


@contextmanager
def a_folder() -> Iterator[Path]:
    """A folder for stores: in memory where there is such a place, for it need not outlive anything."""
    memory = Path("/dev/shm")
    with tempfile.TemporaryDirectory(prefix="strandline-sim", dir=memory if memory.is_dir() else None) as name:
        yield Path(name)


class ReceiverConfig(SinkConfig, frozen=True):
    """A store over the network that keeps every batch it is sent under its number, and knows no position."""

    kind: ClassVar[str] = "receiver"


class Receiver:
    """The store itself: what it was sent, in order of coming; a repeat must be what it repeats."""

    def __init__(self) -> None:
        self.batches: dict[Lane, dict[int, Taken]] = {"ordered": {}, "late": {}}
        self.repeats = 0

    def put(self, batch: Batch, lines: Lines) -> None:
        """Keep one batch."""
        names = lines.source_names()
        sources = [names[number] for number in batch.refs["source"].tolist()]
        taken = (lines.lines(batch), batch.times.tolist(), sources)
        known = self.batches[batch.lane].setdefault(batch.number, taken)
        if known is not taken:
            self.repeats += 1
            assert known == taken, f"batch {batch.number} of lane {batch.lane} came again as something else"


class ReceiverSink:
    """Sends to a receiver, batch by batch; an error between two leaves the first of them there."""

    lanes: tuple[Lane, ...] = ("ordered", "late")
    flush_after_s = 0.0

    def __init__(self, receiver: Receiver, meet: Callable[[], None]) -> None:
        self._receiver, self._meet = receiver, meet

    async def open(self) -> dict[Lane, int]:
        return {}

    async def take(self, batches: Sequence[Batch], lines: Lines) -> dict[Lane, int]:
        for batch in batches:
            self._meet()
            self._receiver.put(batch, lines)
        return {batches[-1].lane: batches[-1].number}

    async def flush(self, lines: Lines) -> dict[Lane, int]:
        return {}

    async def close(self) -> None:
        pass


class Flaky:
    """A sink whose store has moods. A call that hangs waits until the world lets it go, or breaks it off."""

    def __init__(self, name: str, inner: Sink, stores: Stores) -> None:
        self._name, self._inner, self._stores = name, inner, stores

    @property
    def lanes(self) -> tuple[Lane, ...]:
        return self._inner.lanes

    @property
    def flush_after_s(self) -> float:
        return self._inner.flush_after_s

    async def open(self) -> dict[Lane, int]:
        return await self._call(self._inner.open)

    async def take(self, batches: Sequence[Batch], lines: Lines) -> dict[Lane, int]:
        refused = self._stores.refused_for_good(self._name, batches)
        if refused:
            raise SinkRefused("the store has no place for these", refused)
        return await self._call(lambda: self._take(batches, lines))

    async def _take(self, batches: Sequence[Batch], lines: Lines) -> dict[Lane, int]:
        self._stores.has.update((self._name, batch.lane, batch.number) for batch in batches)
        return await self._inner.take(batches, lines)

    async def flush(self, lines: Lines) -> dict[Lane, int]:
        return await self._call(lambda: self._inner.flush(lines))

    async def close(self) -> None:
        await self._inner.close()

    async def _call(self, call: Callable[[], Awaitable[Result]]) -> Result:
        mood = self._stores.moods.get(self._name, "well")
        self._stores.met[mood] = self._stores.met.get(mood, 0) + 1
        if mood == "refuses":
            raise SinkRetry("the store takes nothing now", retry_after_s=0.5)
        if mood == "hangs":
            await self._stores.hang()
        if mood == "fails within":
            self._stores.fail_soon()
        result = await call()
        if mood == "hangs late":
            await self._stores.hang()
        if mood == "loses answers":
            raise ConnectionError("the answer was lost")
        return result


@dataclass
class Stores:
    """All stores of one world, in a folder of their own."""

    folder: Path
    receiver: Receiver = field(default_factory=Receiver)
    moods: dict[str, str] = field(default_factory=dict)
    met: dict[str, int] = field(default_factory=dict)
    hanging: list[asyncio.Future[None]] = field(default_factory=list)
    has: set[tuple[str, Lane, int]] = field(default_factory=set)
    fetched: dict[str, int] = field(default_factory=dict)
    never: set[tuple[str, Lane, int]] = field(default_factory=set)
    weather: Weather | None = None
    _connections: list[sqlite3.Connection] = field(default_factory=list)
    _file_sinks: list[rolling.RollingSink] = field(default_factory=list)

    def make(self, kind: str, feed: str, clock: Clock, **options: Any) -> Sink:
        """What the service calls instead of `sinks.make_sink`."""
        name = {"sqlite": "store", "ndjson": "files"}.get(kind, kind)
        if kind == "receiver":
            return Flaky(name, ReceiverSink(self.receiver, self._meet), self)
        sink = make_sink(kind, feed, clock, **options)
        if isinstance(sink, rolling.RollingSink):
            self._file_sinks.append(sink)
        return Flaky(name, sink, self)

    async def hang(self) -> None:
        """Wait until the world goes on."""
        future: asyncio.Future[None] = asyncio.get_running_loop().create_future()
        self.hanging.append(future)
        await future

    def let_go(self, choose: Callable[[int], int]) -> None:
        """One call that hangs goes on, or breaks off."""
        self.hanging = [future for future in self.hanging if not future.done()]
        if not self.hanging:
            return
        future = self.hanging.pop(choose(len(self.hanging)))
        if choose(2):
            future.set_result(None)
        else:
            future.set_exception(ConnectionResetError("the connection broke off"))

    def refused_for_good(self, name: str, batches: Sequence[Batch]) -> list[int]:
        """Numbers of those that a store will never take: for ever what it refused once, never what it may have."""
        for batch in batches if self.moods.get(name) == "refuses for good" else ():
            assert self.weather is not None
            if (name, batch.lane, batch.number) not in self.has and self.weather.chance.random() < 0.3:
                self.never.add((name, batch.lane, batch.number))
        found = [batch.number for batch in batches if (name, batch.lane, batch.number) in self.never]
        self.met["refuses for good"] = self.met.get("refuses for good", 0) + bool(found)
        return found

    def fail_soon(self) -> None:
        """Some step of what the stores do next fails."""
        assert self.weather is not None
        self.weather.store_fails_in = 1 + self.weather.chance.randrange(8)
        kind = self.weather.chance.choice((sqlite3.OperationalError, ConnectionError))
        self.weather.store_error = lambda: kind("simulated")

    def collect(self) -> None:
        """Somebody fetches the complete files, and throws away those whose batches were all fetched before."""
        fetched = self.folder / "fetched"
        fetched.mkdir(exist_ok=True)
        for path in sorted((self.folder / "files").glob("*.ndjson")):
            lane, first, last = path.stem.rsplit("-", 2)
            reached = self.fetched.get(lane, 0)
            if int(last) <= reached:
                path.unlink()
                continue
            assert int(first) > reached, f"{path.name} holds repeats and more: fetched up to {reached}"
            self.fetched[lane] = int(last)
            path.rename(fetched / path.name)

    def died(self) -> None:
        """The process is gone: the system closes what it held open, and open transactions are void."""
        self.hanging.clear()
        connections, self._connections = self._connections, []
        for connection in connections:
            connection.close()
        sinks, self._file_sinks = self._file_sinks, []
        for sink in sinks:
            for part in sink._parts.values():
                with suppress(OSError):
                    os.close(part.descriptor)

    def _meet(self) -> None:
        if self.weather is not None:
            self.weather.meet_store()

    # ---- the seams that the sinks do not offer ----------------------------------------------------------------------

    @contextmanager
    def watched(self) -> Iterator[None]:
        """While it lasts, every statement and every sync of the sinks' files is a point at which to fail or to die."""
        world = self

        class Watched(sqlite3.Connection):
            def execute(self, *given: Any) -> sqlite3.Cursor:
                world._meet()
                return super().execute(*given)

            def executemany(self, *given: Any) -> sqlite3.Cursor:
                world._meet()
                return super().executemany(*given)

        def connect(*given: Any, **options: Any) -> sqlite3.Connection:
            connection = sqlite3.connect(*given, factory=Watched, **options)
            world._connections.append(connection)
            return connection

        def sync(*_given: Any) -> None:
            world._meet()  # what the system keeps of a file whose process dies needs no sync

        with ExitStack() as stack:
            stack.enter_context(swapped(database, "sqlite3", beside(sqlite3, connect=connect)))
            stack.enter_context(swapped(rolling, "sync_data", sync))
            stack.enter_context(swapped(rolling, "sync_directory", sync))
            yield

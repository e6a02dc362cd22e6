"""Load on a real service process, with ends of every kind in the middle, and what the judge is asked afterwards.

Two kinds of senders. `send_with_keys` is the load generator's own driver: four connections, a retry carries the key of
its first try. `Stubborn` is the plainest sender there is: no key, no id; it sends a body again until it is answered and
counts its tries, for between client and service a retry whose first try was taken is a true repeat (at least once).
"""

from __future__ import annotations

import asyncio
import http.client
import threading
import time
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from helpers_service import BEGIN_S, DEADLINE_S, FEED, NDJSON, POLL_S, Process, configuration, store_in
from strandline_loadgen.bodies import Body, bodies, cut_by_count
from strandline_loadgen.checker import judge
from strandline_loadgen.child import free_port
from strandline_loadgen.driver import Delivery, Target, send
from strandline_loadgen.evidence import Digests, Rows, Verdict
from strandline_loadgen.shapes import shape
from strandline_loadgen.stores import Reading, digests_of, read_sqlite, with_digests
from strandline_loadgen.trace import Int64s, Trace

CONNECTIONS = 4
SECONDS_A_BODY = 0.5  # at most, restarts included


@dataclass(slots=True)
class Load:
    """A trace cut into bodies; `begun` counts the bodies that senders have taken up."""

    trace: Trace
    bounds: Int64s
    begun: int = 0
    digests: list[Digests] = field(default_factory=list)

    @classmethod
    def of(cls, name: str, events: int, body_events: int, seed: int = 1, **parameters: object) -> Load:
        """One of the load generator's shapes, its times in the past whatever the machine's clock says."""
        trace = shape(name, events, seed, start_ns=BEGIN_S * 10**9, **parameters)
        return cls(trace, cut_by_count(trace, body_events))

    def bodies(self) -> Iterator[Body]:
        """The bodies, in order; each counts as begun when it is asked for."""
        for body in bodies(self.trace, self.bounds):
            self.begun += 1
            self.digests.append(digests_of(body.payload))
            yield body

    @property
    def count(self) -> int:
        """How many bodies there are."""
        return len(self.bounds) - 1


def fixed_port(folder: Path, **keys: object) -> str:
    """A configuration with a port that stays the same over restarts, for senders that do not ask where it is now."""
    return configuration(folder, **keys).replace("127.0.0.1:0", f"127.0.0.1:{free_port()}")  # type: ignore[arg-type]


async def send_with_keys(
    process: Process,
    load: Load,
    ends: Sequence[tuple[float, Callable[[], object]]] = (),
    encodings: Sequence[str] = ("identity",),
) -> Delivery:
    """Send all of it; when each share of the bodies has been begun, do what is to be done then, and start it again."""

    async def interrupt() -> None:
        for share, end in ends:
            while load.begun < share * load.count:
                await asyncio.sleep(POLL_S)
            await asyncio.to_thread(end)
            await asyncio.to_thread(process.start)

    target = Target(
        process.url,
        FEED,
        connections=CONNECTIONS,
        encodings=tuple(encodings),
        seconds_at_most=2 * DEADLINE_S,
        tries_at_most=1000,
        wait_s_at_most=0.2,
    )
    interrupting = asyncio.create_task(interrupt())
    done = await send(load.bodies(), target)
    await interrupting
    assert bool(done.answered.all()), done.failures[:3]
    return done


def verdict_of(load: Load, done: Delivery, folder: Path) -> Verdict:
    """The judge's word on the SQLite store, event by event and byte by byte."""
    reading = Reading(load.trace.source_names, digests=True)
    lanes = {lane: read_sqlite(store_in(folder), FEED, lane, reading) for lane in ("ordered", "late")}
    return judge(
        with_digests(done.evidence(load.trace, load.bounds), np.concatenate(load.digests)),
        lanes["ordered"],
        lanes["late"],
        quarantined=0,
        duplicates=done.sums["duplicate"],
        told={"accepted": done.sums["accepted"], "late": done.sums["late"]},
    )


class Stubborn:
    """Senders in threads that send each body again until it is answered with success. `tries` counts, by body."""

    def __init__(self, process: Process, load: Load) -> None:
        self._process, self._load = process, load
        self._bodies = load.bodies()
        self._lock = threading.Lock()
        self._stop_at = time.monotonic() + 2 * DEADLINE_S + load.count * SECONDS_A_BODY
        self.tries = np.zeros(load.count, dtype=np.int64)
        self.answered = np.zeros(load.count, dtype=np.bool_)
        self._threads = [threading.Thread(target=self._work, name=f"sender-{n}") for n in range(CONNECTIONS)]

    def __enter__(self) -> Stubborn:
        for thread in self._threads:
            thread.start()
        return self

    def __exit__(self, kind: object, error: BaseException | None, trace: object) -> None:
        if error is not None:
            self._stop_at = 0.0
        self.join()

    def join(self) -> None:
        """Wait until every body is answered, or time is over."""
        for thread in self._threads:
            thread.join()

    def until(self, share: float) -> None:
        """Wait until this share of the bodies has been answered."""
        while self.answered.mean() < share:
            assert time.monotonic() < self._stop_at, f"only {self.answered.sum()} bodies were answered"
            time.sleep(POLL_S)

    def _work(self) -> None:
        while True:
            with self._lock:
                body = next(self._bodies, None)
            if body is None:
                return
            while time.monotonic() < self._stop_at:
                self.tries[body.number] += 1
                if self._try(body):
                    self.answered[body.number] = True
                    break
                time.sleep(POLL_S)

    def _try(self, body: Body) -> bool:
        address = self._process.url.removeprefix("http://")
        connection = http.client.HTTPConnection(address, timeout=DEADLINE_S)
        try:
            path = f"/v1/feeds/{FEED}/events"
            connection.request("POST", path, body=body.payload, headers={"Content-Type": NDJSON})
            answer = connection.getresponse()
            return answer.status == 200 and len(answer.read()) > 0
        except (OSError, http.client.HTTPException):
            return False
        finally:
            connection.close()


def stored_rows(load: Load, folder: Path, lane: str) -> Rows:
    """A lane of the SQLite store as one block of rows."""
    reading = Reading(load.trace.source_names, digests=True)
    pieces = list(read_sqlite(store_in(folder), FEED, lane, reading))
    none = np.empty(0, dtype=np.int64)
    if not pieces:
        return Rows(none, none, none.astype(np.uint32), none.astype(np.uint32))
    columns = ("ids", "times", "sources", "digests")
    return Rows(*(np.concatenate([getattr(piece, column) for piece in pieces]) for column in columns))


@dataclass(frozen=True, slots=True)
class Killed:
    """What was found after kills under load: events `lost`, `surplus` copies beyond a body's tries, bodies `met`."""

    events: int
    lost: int
    surplus: int
    met: int
    in_order: bool
    balanced: bool


def kill_rounds(folder: Path, kills: int, events: int) -> Killed:
    """Send under SIGKILL after SIGKILL, spread over the load; then drain, stop and look into the store."""
    load = Load.of("bursty_gateways", events, 100)
    with Process(folder, configuration(folder, slack="30s")) as process:
        with Stubborn(process, load) as senders:
            for kill in range(1, kills + 1):
                senders.until(kill / (kills + 1))
                process.kill()
                process.start()
        assert senders.answered.all()
        process.drain()
        ledger = process.document()["ledger"]
        assert process.terminate() == 0
    ordered, late = stored_rows(load, folder, "ordered"), stored_rows(load, folder, "late")
    tries = np.repeat(senders.tries, np.diff(load.bounds))
    first = int(load.trace.ids.min())
    copies = np.bincount(np.concatenate([ordered.ids, late.ids]) - first, minlength=len(tries))
    order = np.argsort(load.trace.ids)
    copies = copies[load.trace.ids[order] - first]
    return Killed(
        events=len(load.trace),
        lost=int((copies < 1).sum()),
        surplus=int(np.maximum(copies - tries[order], 0).sum()),
        met=int((senders.tries > 1).sum()),
        in_order=bool(np.all(np.diff(ordered.times) >= 0)),
        balanced=ledger["balanced"] and ledger["received"] == len(ordered) + len(late) == int(copies.sum()),
    )

"""An open-loop sender: bodies leave on a fixed schedule, whether or not earlier ones have been answered.

A latency is counted from the time at which the body was due, so a service that falls behind cannot hide it by slowing
the sender down. Refusals (429, 503) wait as Retry-After says; a broken connection is answered by sending the same body
again under the same Idempotency-Key. Everything is bounded: bodies, seconds, tries, connections. Targets are loopback
addresses unless the caller says otherwise. No generating, no rendering and no judging lives here.
"""

from __future__ import annotations

import asyncio
import gzip
import ipaddress
import time
from collections.abc import Callable, Iterable
from dataclasses import dataclass, field
from datetime import UTC, datetime
from email.utils import parsedate_to_datetime
from itertools import islice
from typing import Any

import aiohttp
import msgspec
import numpy as np
import zstandard
from numpy.typing import NDArray
from strandline.client_access import Caller
from yarl import URL

from .bodies import Body
from .evidence import Rows, Sent
from .formats import FORMATS
from .progress import Standing
from .trace import Int64s, Trace

Schedule = Callable[[Body], float]  # seconds after the start at which a body is due
Watch = Callable[[Standing], None]
WATCH_EVERY_S = 0.25

SUMS = ("received", "accepted", "late", "duplicate", "quarantined")
NEVER_NS = 2**63 - 1
BACK_OFF_S = 0.1  # after a broken connection: this, doubled with each try up to BACK_OFF_S_AT_MOST
BACK_OFF_S_AT_MOST = 2.0
KEPT_AT_MOST = 10_000  # faults and failures that are kept by name
COMPRESSIONS: dict[str, Callable[[bytes], bytes]] = {
    "identity": lambda payload: payload,
    "gzip": lambda payload: gzip.compress(payload, compresslevel=1),
    "zstd": lambda payload: zstandard.compress(payload, level=1),
}


class Answered(msgspec.Struct):
    """What the service says of one body, as far as it is read here."""

    received: int
    accepted: int
    late: int
    duplicate: int
    quarantined: int
    faults: list[dict[str, Any]] = msgspec.field(default_factory=list)


def at_once(body: Body) -> float:
    """Every body is due at the start: as fast as the service takes them."""
    return 0.0


def every(interval_s: float) -> Schedule:
    """A body each interval_s seconds."""
    return lambda body: body.number * interval_s


def at_rate(events_per_s: float) -> Schedule:
    """So many events a second, however the bodies are cut."""
    return lambda body: body.start / events_per_s


def as_arrived(trace: Trace, speed: float = 1.0, begin_ns: int | None = None) -> Schedule:
    """Each body when its last event arrived in the trace, `speed` times as fast.

    The sending begins at `begin_ns` of the trace's arrival clock (None: with its first arrival).
    """
    first = begin_ns if begin_ns is not None else int(trace.arrivals[0]) if len(trace) else 0
    return lambda body: (body.due_ns - first) / 1e9 / speed


@dataclass(frozen=True, slots=True)
class Target:
    """Where bodies go and what bounds the sending. `encodings` are taken in turn, body by body.

    Raises ValueError when the address is not a loopback one (unless `anywhere`) or a bound makes no sense.
    """

    url: str  # of the service: http://127.0.0.1:8600
    feed: str
    connections: int = 4
    encodings: tuple[str, ...] = ("identity",)
    format: str = "ndjson"  # one of `formats.FORMATS`
    bodies_at_most: int = 1_000_000
    seconds_at_most: float = 600.0
    tries_at_most: int = 50
    request_s_at_most: float = 30.0
    wait_s_at_most: float = 10.0  # a longer Retry-After is cut to this
    keys: str = "load"  # Idempotency-Keys begin with this; two senders to one feed need two
    anywhere: bool = False
    caller: Caller = Caller()  # noqa: RUF009 - frozen; a token, and whom to trust

    def __post_init__(self) -> None:
        unknown = [encoding for encoding in self.encodings if encoding not in COMPRESSIONS]
        if unknown or not self.encodings:
            raise ValueError(f"encodings are {', '.join(COMPRESSIONS)}; {', '.join(unknown) or 'none'} was given")
        if self.format not in FORMATS:
            raise ValueError(f"formats are {', '.join(FORMATS)}; {self.format} was given")
        if min(self.connections, self.bodies_at_most, self.tries_at_most) < 1 or self.connections > 1000:
            raise ValueError("bodies and tries must be at least 1, connections 1 to 1,000")
        if not (self.anywhere or is_loopback(self.url)):
            raise ValueError(f"{self.url} is not an address of this machine; load is sent to loopback addresses only")

    @property
    def events_url(self) -> URL:
        """Where the feed takes events."""
        return URL(self.url) / "v1" / "feeds" / self.feed / "events"


def is_loopback(url: str) -> bool:
    """Is the host `localhost` or a literal loopback address?"""
    host = URL(url).host
    if host == "localhost":
        return True
    try:
        return host is not None and ipaddress.ip_address(host).is_loopback
    except ValueError:
        return False


@dataclass(slots=True)
class Delivery:
    """What became of the bodies. Arrays have one item for each body that was begun, by its number.

    `latencies_s` from the due time to the answer (nan: no success); `begins_ns` and `ends_ns` on the monotonic clock,
    from the first try to the answer (NEVER_NS: none). `sums`: the successful answers' counts, added up. `faults`:
    (body, line, reason). `failures`: sentences on bodies that got no success.
    """

    latencies_s: NDArray[np.float64]
    begins_ns: Int64s
    ends_ns: Int64s
    sums: dict[str, int] = field(default_factory=lambda: dict.fromkeys(SUMS, 0))
    faults: list[tuple[int, int, str]] = field(default_factory=list)
    failures: list[str] = field(default_factory=list)
    refused: int = 0  # answers 429 and 503
    resent: int = 0  # after a broken connection or a time-out
    seconds: float = 0.0

    @property
    def answered(self) -> NDArray[np.bool_]:
        """Per body: was success answered?"""
        return ~np.isnan(self.latencies_s)

    def evidence(self, trace: Trace, bounds: Int64s) -> Sent:
        """For the judge: what was sent of the trace that the bodies were cut from."""
        begun = len(self.latencies_s)
        sizes = np.diff(bounds[: begun + 1])
        part = trace.part(0, int(bounds[begun]))
        requests = np.repeat(np.arange(begun, dtype=np.int64), sizes)
        rows = Rows(part.ids, part.times, part.sources)
        return Sent(rows, requests, self.begins_ns, self.ends_ns, self.answered)


async def send(
    bodies: Iterable[Body], target: Target, schedule: Schedule = at_once, watch: Watch | None = None
) -> Delivery:
    """Send the bodies and wait for all answers, within the target's bounds. Bodies are rendered as they fall due.

    `watch` is told a few times a second how it stands.
    """
    sender = _Sender(target, schedule)
    return await sender.run(islice(bodies, target.bodies_at_most), watch)


class _Sender:
    """One sending: a feeder that keeps the schedule and workers, one for each connection."""

    def __init__(self, target: Target, schedule: Schedule) -> None:
        self._target, self._schedule = target, schedule
        none = np.empty(0, dtype=np.int64)
        self._delivery = Delivery(np.empty(0), none, none)
        self._begins: dict[int, int] = {}
        self._ends: dict[int, tuple[int, float]] = {}  # body -> when it was answered, latency
        # Short on purpose: a body that cannot leave yet is not rendered either, while its due time stands.
        self._due: asyncio.Queue[tuple[Body, float] | None] = asyncio.Queue(target.connections)
        self._start = time.monotonic()
        self._stop = self._start + target.seconds_at_most
        self._behind_s = self._longest_s = 0.0

    async def run(self, bodies: Iterable[Body], watch: Watch | None = None) -> Delivery:
        """Everything, from the first body to the last answer."""
        caller = self._target.caller
        limits = aiohttp.TCPConnector(limit=self._target.connections, ssl=caller.context or True)
        async with (
            aiohttp.ClientSession(connector=limits, headers=caller.headers) as session,
            asyncio.TaskGroup() as tasks,
        ):
            watching = tasks.create_task(self._tell(watch)) if watch else None
            work = [tasks.create_task(self._work(session)) for _ in range(self._target.connections)]
            await self._feed(bodies)
            await asyncio.wait(work)
            if watching:
                watching.cancel()
        done = self._delivery
        begun = max(self._begins, default=-1) + 1
        done.begins_ns = np.array([self._begins[body] for body in range(begun)], dtype=np.int64)
        ends = [self._ends.get(body, (NEVER_NS, np.nan)) for body in range(begun)]
        done.ends_ns = np.array([end for end, _ in ends], dtype=np.int64)
        done.latencies_s = np.array([latency for _, latency in ends], dtype=np.float64)
        done.seconds = time.monotonic() - self._start
        return done

    async def _feed(self, bodies: Iterable[Body]) -> None:
        for body in bodies:
            due = self._start + self._schedule(body)
            if max(due, time.monotonic()) >= self._stop:
                break
            await asyncio.sleep(max(0.0, due - time.monotonic()))
            await self._due.put((body, due))
        for _ in range(self._target.connections):
            await self._due.put(None)

    async def _tell(self, watch: Watch) -> None:
        while True:
            await asyncio.sleep(WATCH_EVERY_S)
            done, (longest, self._longest_s) = self._delivery, (self._longest_s, 0.0)
            seconds = time.monotonic() - self._start
            counts = len(self._begins), len(self._ends), done.sums["received"], done.refused, done.resent
            watch(Standing(*counts, self._behind_s, seconds, longest))

    async def _work(self, session: aiohttp.ClientSession) -> None:
        while (job := await self._due.get()) is not None:
            body, due = job
            self._begins[body.number] = time.monotonic_ns()
            self._behind_s = time.monotonic() - due
            failure = await self._deliver(session, body, due)
            if failure and len(self._delivery.failures) < KEPT_AT_MOST:
                self._delivery.failures.append(f"body {body.number}: {failure}")

    async def _deliver(self, session: aiohttp.ClientSession, body: Body, due: float) -> str:
        """Send one body until it is answered for good. Returns why it got no success, or nothing."""
        encoding = self._target.encodings[body.number % len(self._target.encodings)]
        form, payload = FORMATS[self._target.format], body.payload
        if self._target.format != "ndjson":
            payload = await asyncio.to_thread(form.encode, payload)
        if encoding != "identity":
            payload = await asyncio.to_thread(COMPRESSIONS[encoding], payload)
        headers = {"Content-Type": form.media_type, "Idempotency-Key": f'"{self._target.keys}-{body.number}"'}
        if encoding != "identity":
            headers["Content-Encoding"] = encoding
        wait, failure = BACK_OFF_S, "there was no time left to send it"
        for _ in range(self._target.tries_at_most):
            left = self._stop - time.monotonic()
            if left <= 0:
                break
            timeout = aiohttp.ClientTimeout(total=min(left, self._target.request_s_at_most))
            try:
                async with session.post(
                    self._target.events_url, data=payload, headers=headers, timeout=timeout
                ) as answer:
                    content = await answer.read()
            except (aiohttp.ClientConnectionError, aiohttp.ClientPayloadError, TimeoutError) as error:
                self._delivery.resent += 1
                failure = f"no answer ({type(error).__name__}: {error})"
                pause, wait = wait, min(2 * wait, BACK_OFF_S_AT_MOST)
            else:
                if answer.status == 200:
                    return self._enter(body, content, due)
                failure = f"{answer.status} {content[:300].decode(errors='replace')}"
                if answer.status not in (409, 429, 500, 502, 503, 504):
                    break
                self._delivery.refused += answer.status in (429, 503)
                pause = retry_after_s(answer.headers.get("Retry-After"), BACK_OFF_S, time.time())
            await asyncio.sleep(min(pause, self._target.wait_s_at_most, max(0.0, self._stop - time.monotonic())))
        return failure

    def _enter(self, body: Body, content: bytes, due: float) -> str:
        """Enter a successful answer."""
        try:
            answered = msgspec.json.decode(content, type=Answered)
        except msgspec.MsgspecError as error:
            return f"the answer cannot be read ({error}): {content[:300].decode(errors='replace')}"
        self._ends[body.number] = time.monotonic_ns(), time.monotonic() - due
        self._longest_s = max(self._longest_s, time.monotonic() - due)
        for name in SUMS:
            self._delivery.sums[name] += getattr(answered, name)
        for fault in answered.faults[: KEPT_AT_MOST - len(self._delivery.faults)]:
            self._delivery.faults.append((body.number, int(fault.get("line", 0)), str(fault.get("reason", ""))))
        return ""


def retry_after_s(header: str | None, default_s: float, now_s: float) -> float:
    """Seconds to wait: whole seconds or an HTTP date (RFC 9110, 10.2.3); what is neither counts as absent."""
    if header is None:
        return default_s
    if header.isascii() and header.isdigit():
        return float(header)
    try:
        moment = parsedate_to_datetime(header)
    except ValueError:
        return default_s
    if moment.tzinfo is None:
        moment = moment.replace(tzinfo=UTC)
    return max(0.0, (moment - datetime.fromtimestamp(now_s, UTC)).total_seconds())

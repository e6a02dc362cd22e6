"""The senders of a simulated world: a trace cut into requests, sent, repeated where no answer came, and what was told.

A sender knows only what it was answered. `sent` gives the judge's view of it. No faults are decided here.
"""

from __future__ import annotations

import asyncio
import random
import re
from collections import Counter
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from typing import Protocol

import google_crc32c
import numpy as np
from strandline.core.columns import Arrival, RequestKey
from strandline.core.effects import Outcome
from strandline.ingest.endpoint import request_key
from strandline.problems import Refused
from strandline_loadgen.bodies import Renderer, Style
from strandline_loadgen.evidence import Rows, Sent
from strandline_loadgen.trace import Trace

NDJSON = "application/x-ndjson"
FIRST_FAULTY_ID = 5_000_000_000
ID = re.compile(rb'"id":\s*(\d+)')
# Refusals after which nothing may have been taken; after any other end of a request it may or may not have been.
CLEAN = {"held_full", "journal_full", "disk_full", "sources_full", "lanes_full", "key_in_flight"}
FINAL = {"sources_full"}  # no repeating helps


def ids_in(lines: Sequence[bytes]) -> list[int]:
    """The id that each line carries, a faulty one too."""
    return [int(found[1]) if (found := ID.search(line)) else -1 for line in lines]


class Service(Protocol):
    """What a sender sees of the service."""

    def decode(self, payload: bytes) -> Arrival: ...

    async def arrive(self, arrival: Arrival, key: RequestKey | None) -> Outcome: ...


@dataclass(frozen=True, slots=True)
class Habits:
    """How the senders behave, by shares of their requests; `events_a_request` None: 1 to 5.

    `keys_last`: the service keeps every key for as long as anybody may send its request again.
    """

    storm_share: float = 0.05
    faulty_share: float = 0.1
    keyed_share: float = 0.0
    keys_last: bool = True
    events_a_request: int | None = None


@dataclass(slots=True, eq=False)
class Request:
    """One body: its lines with their ids, event times and sources (0 and 0 for a faulty one)."""

    lines: list[bytes]
    ids: list[int]
    times: list[int]
    sources: list[int]
    due_ns: int
    repeats: bool  # whether it is sent again when no answer came
    storms: bool  # whether it is sent again although it was answered
    key: str | None = None
    tries: int = 0
    answer: Outcome | None = None

    @property
    def payload(self) -> bytes:
        return b"".join(line + b"\n" for line in self.lines)

    def add_faulty(self, at: int, number: int) -> None:
        """A line that is no event, with an id of its own."""
        self.lines.insert(at, b'{"id":%d, "observed_at"' % number)
        for column, value in ((self.ids, number), (self.times, 0), (self.sources, 0)):
            column.insert(at, value)


@dataclass(slots=True, eq=False)
class Attempt:
    """One sending of a request. `state`: waiting, answered, refused (nothing was taken) or lost (nobody knows)."""

    request: Request
    state: str = "waiting"
    reason: str = ""
    outcome: Outcome | None = None


@dataclass
class Crowd:
    """All senders. `attempts` are in the order in which the service was given them."""

    chance: random.Random
    habits: Habits
    requests: list[Request]
    attempts: list[Attempt] = field(default_factory=list)
    waiting: dict[Attempt, asyncio.Task[None]] = field(default_factory=dict)
    again: list[Request] = field(default_factory=list)
    given_up: int = 0
    calm: bool = False
    _next: int = 0

    @classmethod
    def of(cls, trace: Trace, chance: random.Random, habits: Habits) -> Crowd:
        """Cut a trace into requests, in order of arrival, some with a faulty line among their events."""
        renderer = Renderer(trace, Style("ns", chance.choice((1, 1, 120))))
        lines = renderer.lines(0, len(trace)).split(b"\n")[:-1]
        requests: list[Request] = []
        start = 0
        while start < len(trace):
            stop = min(len(trace), start + (habits.events_a_request or chance.choice((1, 1, 2, 3, 5))))
            request = Request(
                lines[start:stop],
                trace.ids[start:stop].tolist(),
                trace.times[start:stop].tolist(),
                trace.sources[start:stop].tolist(),
                int(trace.arrivals[stop - 1]),
                repeats=chance.random() < 0.9,
                storms=chance.random() < habits.storm_share,
                key=f"request {start}" if chance.random() < habits.keyed_share else None,
            )
            if chance.random() < habits.faulty_share:
                request.add_faulty(chance.randrange(len(request.lines) + 1), FIRST_FAULTY_ID + start)
            requests.append(request)
            start = stop
        return cls(chance, habits, requests)

    # ---- sending ----------------------------------------------------------------------------------------------------

    def next_request(self) -> Request | None:
        """What is sent next: something anew, or the next one of the trace; None when nothing is left."""
        if self.again and (self._next == len(self.requests) or self.chance.random() < 0.5):
            return self.again.pop(self.chance.randrange(len(self.again)))
        if self._next == len(self.requests):
            return None
        self._next += 1
        return self.requests[self._next - 1]

    def send(self, request: Request, service: Service, start: Callable[[object], asyncio.Task[None]]) -> None:
        """Send it; `start` makes a task of a coroutine."""
        request.tries += 1
        attempt = Attempt(request)
        self.waiting[attempt] = start(self._post(attempt, service))

    async def _post(self, attempt: Attempt, service: Service) -> None:
        try:
            arrival = service.decode(attempt.request.payload)
            self.attempts.append(attempt)
            key = attempt.request.key
            fingerprint = None if key is None else request_key([f'"{key}"'], NDJSON, attempt.request.payload)
            outcome = await service.arrive(arrival, fingerprint)
        except Refused as refusal:
            if attempt.state == "waiting":
                self._refused(attempt, refusal.reason)
        except asyncio.CancelledError:
            self._lost(attempt)
        else:
            if attempt.state == "waiting":
                self._answered(attempt, outcome)

    def _answered(self, attempt: Attempt, outcome: Outcome) -> None:
        parts = outcome.accepted + outcome.late + outcome.duplicate + outcome.quarantined
        assert outcome.received == parts == len(attempt.request.ids), outcome
        self._ended(attempt, "answered", outcome=outcome)
        if self._is_one(attempt.request):
            assert attempt.request.answer in (None, outcome), "one key, two answers"
            attempt.request.answer = outcome
        if attempt.request.storms and attempt.request.tries < 4 and not self.calm:
            self.again.append(attempt.request)

    def _refused(self, attempt: Attempt, reason: str) -> None:
        self._ended(attempt, "refused" if reason in CLEAN else "lost", reason=reason)
        if reason in FINAL and attempt.request.tries > 3:
            self.given_up += 1
        else:
            self.again.append(attempt.request)

    def _lost(self, attempt: Attempt) -> None:
        if attempt.state != "waiting":
            return
        self._ended(attempt, "lost")
        if attempt.request.repeats:
            self.again.append(attempt.request)
        else:
            self.given_up += 1

    def _ended(self, attempt: Attempt, state: str, *, reason: str = "", outcome: Outcome | None = None) -> None:
        attempt.state, attempt.reason, attempt.outcome = state, reason, outcome
        self.waiting.pop(attempt, None)

    def leave(self) -> Request | None:
        """One sender leaves without waiting for its answer; what it sends again at once, if it does."""
        if not self.waiting:
            return None
        attempt = self.chance.choice(list(self.waiting))
        task = self.waiting[attempt]
        self._lost(attempt)
        task.cancel()
        if attempt.request in self.again and self.chance.random() < 0.5:
            self.again.remove(attempt.request)
            return attempt.request
        return None

    def check(self) -> None:
        """Raise what a sender has met and did not expect."""
        for task in self.waiting.values():
            if task.done() and not task.cancelled():
                task.result()

    def connections_lost(self) -> None:
        """The process is gone: nobody gets an answer any more."""
        for attempt in list(self.waiting):
            self._lost(attempt)

    @property
    def left(self) -> int:
        """Requests that are yet to be answered."""
        return len(self.requests) - self._next + len(self.again) + len(self.waiting)

    @property
    def finished(self) -> bool:
        """Everything was sent, and nothing is to be sent again or waited for."""
        return self.left == 0

    # ---- for the judge ----------------------------------------------------------------------------------------------

    def _is_one(self, request: Request) -> bool:
        """Whether all attempts at it are one request for the service."""
        return request.key is not None and self.habits.keys_last

    def sent(self) -> Sent:
        """What was sent and may have been taken, in order of arrival, and whether it was answered.

        Attempts under one key that lasts are one request, which arrived at one of them.
        """
        spans: list[tuple[Request, list[int], list[bool]]] = []
        known: dict[str, int] = {}
        for number, attempt in enumerate(self.attempts):
            if attempt.state == "refused":
                continue
            request = attempt.request
            if not self._is_one(request) or known.setdefault(request.key or "", len(spans)) == len(spans):
                spans.append((request, [], []))
            place = known[request.key or ""] if self._is_one(request) else -1
            spans[place][1].append(number)
            spans[place][2].append(attempt.state == "answered")
        rows = [request for request, _, _ in spans]
        events = Rows(
            np.array([each for request in rows for each in request.ids], dtype=np.int64),
            np.array([each for request in rows for each in request.times], dtype=np.int64),
            np.array([each for request in rows for each in request.sources], dtype=np.uint32),
            np.array([google_crc32c.value(line) for request in rows for line in request.lines], dtype=np.uint32),
        )
        return Sent(
            events,
            np.repeat(np.arange(len(rows), dtype=np.int64), [len(request.ids) for request in rows]),
            begins=np.array([min(numbers) for _, numbers, _ in spans], dtype=np.int64),
            ends=np.array([max(numbers) for _, numbers, _ in spans], dtype=np.int64),
            answered=np.array([any(answered) for _, _, answered in spans], dtype=bool),
        )

    def told(self) -> dict[str, int]:
        """Sums over the answers; those under one key that lasts count once."""
        outcomes = [each.outcome for each in self.attempts if each.outcome and not self._is_one(each.request)]
        outcomes += [request.answer for request in self.requests if request.answer is not None]
        return {name: sum(getattr(each, name) for each in outcomes) for name in ("accepted", "late", "quarantined")}

    def check_answers(self, lanes: dict[str, list[int]]) -> None:
        """Each answer tells what became of its events: where they were sent only once, this can be counted."""
        copies = Counter(each for a in self.attempts if a.state != "refused" for each in a.request.ids)
        where = {name: Counter(ids) for name, ids in lanes.items()}
        for attempt in self.attempts:
            ids = attempt.request.ids
            if attempt.outcome is None or any(copies[each] > 1 for each in ids):
                continue
            for name, number in (("ordered", attempt.outcome.accepted), ("late", attempt.outcome.late)):
                found = sum(where[name][each] for each in ids)
                assert found == number, f"{number} of {ids} were answered as {name}, {found} are there"

"""A feed with everything around it in memory: a journal of records, sinks that take or do not, answers, batches.

No ordering and no judging here: it carries out effects as a shell would, keeps what came out, and checks the feed's
invariants after each step. The journal's bytes are kept as they would lie on disk, so that a batch's places can be
read: a place that points to the wrong line is seen.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from strandline.core.columns import Arrival, Batch, Fault, Lane, RequestKey
from strandline.core.effects import Answer, Append, Deliver, Effect, Outcome, Pause, Refuse, Sync
from strandline.core.feed import Feed
from strandline.core.records import (
    FRAME_HEADER_BYTES,
    VERSION,
    Kind,
    decode_arrival,
    decode_mark,
    decode_small,
    frame_bytes,
)
from strandline.core.settings import Settings
from strandline.core.state import State

LANES: tuple[Lane, ...] = ("ordered", "late", "quarantine")
FOR_EVER_NS = 2**61  # far longer than any test's clock runs


def patient(**given: object) -> Settings:
    """Settings under which only what a test names has an effect: no idleness, no bound on holding, no quarantine."""
    chosen = {
        "name": "river-gauges",
        "slack_ns": 0,
        "idle_after_ns": FOR_EVER_NS,
        "hold_at_most_ns": FOR_EVER_NS,
        "ahead_limit_ns": FOR_EVER_NS,
        **given,
    }
    return Settings(**chosen)  # type: ignore[arg-type]


def arrival(
    times: Sequence[int] | np.ndarray,
    sources: Sequence[int] | int = 0,
    *,
    lines: Sequence[bytes] | None = None,
    new_sources: Sequence[str] = (),
    line_numbers: Sequence[int] | None = None,
    faults: Sequence[Fault] = (),
    identities: Sequence[int] | None = None,
) -> Arrival:
    """An arrival from plain lists; without lines, event i's line is the text of i."""
    count = len(times)
    numbers = [sources] * count if isinstance(sources, int) else sources
    texts = [str(index).encode() for index in range(count)] if lines is None else list(lines)
    return Arrival(
        times=np.array(times, dtype=np.int64),
        sources=np.array(numbers, dtype=np.uint32),
        lengths=np.array([len(text) for text in texts], dtype=np.uint32),
        payload=b"".join(text + b"\n" for text in texts),
        new_sources=new_sources,
        line_numbers=None if line_numbers is None else np.array(line_numbers, dtype=np.int64),
        faults=faults,
        identities=None if identities is None else np.array(identities, dtype=np.uint64),
    )


@dataclass(frozen=True, slots=True)
class Written:
    """One record of the journal."""

    lsn: int
    kind: int
    body: bytes


@dataclass(slots=True)
class Shell:
    """Drives one feed. `synchronous`: the journal is durable at once; otherwise when `sync()` is called."""

    settings: Settings
    sinks: Mapping[str, Sequence[Lane]] = field(default_factory=dict)
    start_ns: int = 0
    synchronous: bool = True
    more: bool = False  # whether requests are said to be followed by others at once: then `mark` sets what they put off
    feed: Feed = field(init=False)
    records: list[Written] = field(default_factory=list)
    journal: bytearray = field(default_factory=bytearray)
    batches: dict[Lane, list[Batch]] = field(default_factory=lambda: {lane: [] for lane in LANES})
    answers: dict[int, Outcome | None] = field(default_factory=dict)
    refusals: dict[int, Refuse] = field(default_factory=dict)
    requests: dict[int, Arrival] = field(default_factory=dict)
    sync_asked: int = 0
    tokens: int = 0

    def __post_init__(self) -> None:
        self.feed = Feed(self.settings)
        self.do(self.feed.start(self.start_ns, self.sinks))

    # ---- inputs ---------------------------------------------------------------------------------------------------

    def send(self, given: Arrival, now_ns: int, key: RequestKey | None = None) -> Outcome | None:
        """One request; its answer's counts if it was answered at once, None if it waits or was refused."""
        self.tokens += 1
        before = len(self.records)
        effects = self.feed.arrive(given, now_ns, self.tokens, key, more=self.more)
        self.do(effects)
        # Without a record it was refused, or answered from memory.
        if any(record.kind == Kind.ARRIVAL for record in self.records[before:]):
            self.requests[self.tokens] = given
        return self.answers.get(self.tokens)

    def events(
        self,
        times: Sequence[int],
        now_ns: int,
        source: str | Sequence[str] = "gw-0",
        faults: Sequence[Fault] = (),
        *,
        identities: Sequence[int] | None = None,
        key: RequestKey | None = None,
    ) -> Outcome | None:
        """Events of named sources; event i of the request gets a line that no other event has."""
        named = [source] * len(times) if isinstance(source, str) else list(source)
        known = self.feed.state.sources.numbers
        new = [name for name in dict.fromkeys(named) if name not in known]
        numbers = [known[name] if name in known else len(known) + new.index(name) for name in named]
        lines = [f"{self.tokens + 1}.{index}".encode() for index in range(len(times))]
        made = arrival(times, numbers, lines=lines, new_sources=new, faults=faults, identities=identities)
        return self.send(made, now_ns, key)

    def act(self, name: str, *arguments: object, now_ns: int, **more: str) -> int:
        """promise(source, time_ns), excuse(source, reason), drain(), set_slack(...) or pause(...); its token."""
        self.tokens += 1
        self.do(getattr(self.feed, name)(*arguments, now_ns, self.tokens, **more))
        return self.tokens

    def step(self, step: tuple[Any, ...], now_ns: int, **more: str) -> None:
        """A step that every history has: a tick, a promise, an excuse (of a source that is known) or a drain."""
        match step:
            case ("tick",):
                self.tick(now_ns)
            case ("promise", name, time_ns):
                self.act("promise", name, time_ns, now_ns=now_ns)
            case ("excuse", name):
                if name in self.feed.state.sources.numbers:
                    self.act("excuse", name, "why", now_ns=now_ns, **more)
            case ("drain",):
                self.act("drain", now_ns=now_ns, **more)
            case _:
                raise AssertionError(step)

    def tick(self, now_ns: int) -> None:
        self.do(self.feed.tick(now_ns))

    def taken(self, sink: str, lane: Lane, number: int, now_ns: int) -> None:
        self.do(self.feed.taken(sink, lane, number, now_ns))

    def sync(self) -> None:
        """The journal becomes durable as far as that was asked for."""
        self.do(self.feed.synced(self.sync_asked))

    # ---- effects --------------------------------------------------------------------------------------------------

    def do(self, effects: Sequence[Effect]) -> None:
        """Carry out effects in their order, then check the feed."""
        for effect in effects:
            match effect:
                case Append():
                    self._append(effect)
                case Sync():
                    assert effect.lsn == len(self.journal)
                    self.sync_asked = effect.lsn
                case Answer():
                    assert effect.token not in self.answers, "answered twice"
                    self.answers[effect.token] = effect.outcome
                case Refuse():
                    self.refusals[effect.token] = effect
                case Deliver():
                    assert effect.batch.ready_lsn <= self.feed.durable_lsn, "left before it was durable"
                    self.batches[effect.batch.lane].append(effect.batch)
                case Pause():
                    assert self._has_act(effect), "a pause left before it was durable"
        self.feed.check()
        if self.synchronous and self.feed.durable_lsn < self.sync_asked:
            self.sync()

    def _has_act(self, pause: Pause) -> bool:
        """Whether an act of this kind on this sink is durable."""
        durable = [record for record in self.records if record.kind == Kind.ACT and record.lsn < self.feed.durable_lsn]
        acts: list[Any] = [decode_small(Kind.ACT, record.body) for record in durable]
        return any((act.act == "pause", act.subject) == (pause.on, pause.sink) for act in acts)

    def _append(self, effect: Append) -> None:
        assert effect.lsn == len(self.journal), "the journal has no gaps"
        body = b"".join(bytes(part) for part in effect.parts)
        self.records.append(Written(effect.lsn, effect.kind, body))
        self.journal += bytes(FRAME_HEADER_BYTES) + body
        self.journal += bytes(frame_bytes(len(body)) - FRAME_HEADER_BYTES - len(body))

    # ---- what came out --------------------------------------------------------------------------------------------

    def lines(self, batch: Batch) -> list[bytes]:
        """The batch's lines, read from the journal's bytes."""
        if batch.lane == "quarantine":
            rows = [(entry.place, entry.length) for entry in batch.entries]
        else:
            rows = list(zip(batch.refs["place"].tolist(), batch.refs["length"].tolist(), strict=True))
        return [bytes(self.journal[place : place + length]) for place, length in rows]

    def out(self, lane: Lane) -> list[bytes]:
        """Every line that left by a lane, in order."""
        return [line for batch in self.batches[lane] for line in self.lines(batch)]

    def out_times(self, lane: Lane) -> list[int]:
        """Every event time that left by a lane, in order."""
        return [time for batch in self.batches[lane] for time in batch.times.tolist()]

    def taken_in(self) -> list[tuple[int, bytes]]:
        """(event time, line) of every event that was journaled, in order of arrival."""
        rows = []
        for given in self.requests.values():
            rows += zip(given.times.tolist(), bytes(given.payload).split(b"\n")[:-1], strict=True)
        return rows

    # ---- folding again --------------------------------------------------------------------------------------------

    def folded(self, saved: bytes | None = None, lsn: int = 0, upto: int | None = None) -> Feed:
        """A new feed that has folded the journal from the start, or from a saved state that stands at `lsn`."""
        feed = Feed(self.settings)
        if saved is not None:
            feed.restore(saved, lsn)
        for record in self.records[:upto]:
            if record.lsn >= lsn:
                feed.fold(record.kind, VERSION, record.body, record.lsn)
        feed.check()
        return feed


def held_no_longer(
    shell: Shell,
    history: Sequence[tuple[tuple[Any, ...], int]],
    carry_out: Callable[[Shell, tuple[Any, ...], int], None],
    hold_at_most_ns: int,
) -> None:
    """Assert that, with a tick at every instant of a history of (step, time since the last), nothing is held longer."""
    now_ns = 0
    for step, passed in history:
        for _ in range(max(1, passed)):
            now_ns += passed > 0
            shell.tick(now_ns)
            oldest = shell.feed.state.arrivals.oldest_ns
            assert oldest is None or oldest > now_ns - hold_at_most_ns
        carry_out(shell, step, now_ns)


def saved_bytes(feed: Feed) -> bytes:
    """The feed's state as one body."""
    return b"".join(bytes(part) for part in feed.save())


def batches_of(records: Sequence[Written], settings: Settings) -> list[Batch]:
    """Every batch that a journal's records determine, in the order in which they become final."""
    feed = Feed(settings)
    found: list[Batch] = []

    class Watched(State):
        def fold_arrival(self, body, end_lsn):  # type: ignore[no-untyped-def]
            outcome, batches = super().fold_arrival(body, end_lsn)
            found.extend(batches)
            return outcome, batches

        def fold_mark(self, mark, end_lsn):  # type: ignore[no-untyped-def]
            batches = super().fold_mark(mark, end_lsn)
            found.extend(batches)
            return batches

    feed.state = Watched(settings)
    for record in records:
        feed.fold(record.kind, VERSION, record.body, record.lsn)
    return found


def same_batch(one: Batch, other: Batch) -> bool:
    """Whether two batches are equal to the byte."""
    return (
        (one.lane, one.number, one.instant_ns, one.ready_lsn, one.behind_ns, list(one.entries))
        == (other.lane, other.number, other.instant_ns, other.ready_lsn, other.behind_ns, list(other.entries))
        and one.times.tobytes() == other.times.tobytes()
        and one.refs.tobytes() == other.refs.tobytes()
    )


def marks(records: Sequence[Written]) -> list[int]:
    """The watermarks of the marks, in order."""
    return [decode_mark(record.body).watermark_ns for record in records if record.kind == Kind.MARK]


def arrived(records: Sequence[Written]) -> list[int]:
    """The arrival clock of each arrival record, in order."""
    return [decode_arrival(record.body, record.lsn).arrived_ns for record in records if record.kind == Kind.ARRIVAL]

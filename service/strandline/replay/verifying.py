"""Does the same journal give the same releases? Folds a capture, decides it anew beside that, and compares (P8).

The captured records tell what came in and when. Each input is given to a feed in the same state; what it decides must
be the records that were captured, position by position, and its batches must have the digests of the folded ones.
Starts are folded, and so are the few records before one, since the crash may have cut what was decided with them.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Iterator
from itertools import islice, takewhile
from typing import NamedTuple

from strandline.core.columns import Batch, RequestKey
from strandline.core.effects import Append, Deliver, Effect
from strandline.core.feed import Feed
from strandline.core.records import (
    ActRecord,
    Cause,
    ExcuseRecord,
    KeyRecord,
    Kind,
    PromiseRecord,
    SettingsRecord,
    SourcesRecord,
    TakenRecord,
    decode_mark,
    decode_small,
    frame_bytes,
    instant_of,
)
from strandline.core.settings import Settings
from strandline.core.state import State

from .blocks import Block, Record
from .capture import Capture
from .figures import Digests
from .replaying import Folding, Progress, _quiet, act_again, fold_into

# An input leaves at most 8 records (names, a key, the arrival, twice idle and mark, and what a start writes).
LOOK_AHEAD = 16
UNMATCHED_AT_MOST = 100_000
STARTS = (Kind.SETTINGS, Kind.NUMBERS)


class Placed(NamedTuple):
    """A record with its block."""

    block: Block
    record: Record

    @property
    def kind(self) -> int:
        """The record's kind."""
        return self.record.kind

    @property
    def instant_ns(self) -> int | None:
        """The record's arrival clock; None for names of sources."""
        if self.record.kind == Kind.ARRIVAL:
            return int(self.block.arrived[self.record.request])
        return instant_of(self.record.kind, self.record.body)

    @property
    def end_lsn(self) -> int:
        """Position behind the record."""
        record = self.record
        size = self.block.record_bytes(record.request) if record.kind == Kind.ARRIVAL else len(record.body)
        return record.lsn + frame_bytes(size)


class Unlike(Exception):
    """What was decided is not what was captured; str() says where and what."""


class Verifying:
    """One pass of both. Afterwards `unlike` says in a sentence where they differ first, or is None."""

    def __init__(self, capture: Capture) -> None:
        self.told = Folding(capture)
        self.figures = self.told.figures
        self.unlike: str | None = None
        self.folded_only = 0  # records that were not decided anew
        lines = self.told.lines if capture.meta.lines else None
        self.digests = Digests(lines)
        self._again = Digests(lines)
        self._feed = Feed(Settings(capture.meta.feed))
        self._feed.state = capture.state() or State(Settings(capture.meta.feed))
        self._feed.next_lsn = self._feed.durable_lsn = capture.meta.start_lsn
        self._unmatched: dict[tuple[str, int], bytes] = {}
        self._window: deque[Placed] = deque()
        self._zeros = memoryview(b"")

    def batches(self, progress: Progress = _quiet) -> Iterator[Batch]:
        """The folded batches, each compared with what is decided anew. Ends early where something is unlike."""
        source = self._records(progress)
        self._window.extend(islice(source, LOOK_AHEAD))
        while self._window:
            try:
                consumed, decided = self._next_input()
                for _ in range(consumed):
                    placed = self._window.popleft()
                    for batch in self.told.fold(placed.block, placed.record):
                        self._match(batch, self.digests.add(batch))
                        yield batch
                for batch in decided:
                    self._match(batch, self._again.of(batch))
            except Unlike as error:
                self.unlike = str(error)
                break
            self._window.extend(islice(source, LOOK_AHEAD - len(self._window)))
        if self._unmatched and self.unlike is None:
            (lane, number), _ = next(iter(self._unmatched.items()))
            self.unlike = f"batch {number} of lane {lane} came out on one side only"
        self.told.finish()
        self.figures.digest, self.figures.verified = self.digests.hexdigest(), self.unlike is None
        self.figures.unlike = self.unlike

    def _records(self, progress: Progress) -> Iterator[Placed]:
        done = 0
        for block in self.told.capture.blocks():
            for record in block.records():
                yield Placed(block, record)
            done += len(block.times)
            self.told.forget()
            progress(done)

    def _match(self, batch: Batch, digest: bytes) -> None:
        key = batch.lane, batch.number
        other = self._unmatched.pop(key, None)
        if other is None:
            self._unmatched[key] = digest
            if len(self._unmatched) > UNMATCHED_AT_MOST:
                raise Unlike(f"more than {UNMATCHED_AT_MOST:,} batches came out on one side only")
        elif other != digest:
            raise Unlike(f"batch {batch.number} of lane {batch.lane} has other bytes when it is decided anew")

    # ---- one input ------------------------------------------------------------------------------------------------

    def _next_input(self) -> tuple[int, list[Batch]]:
        """Let the feed decide what comes next: how many captured records that accounts for, and its batches."""
        if self._before_a_start():
            return 1, self._fold(self._window[0])
        effects = self._decided()
        appended = [effect for effect in effects if isinstance(effect, Append)]
        for number, effect in enumerate(appended):
            self._compare(effect, self._window[number])
        if not appended:
            placed = self._window[0]
            raise Unlike(
                f"the record at position {placed.record.lsn} ({Kind(placed.kind).name}) is not decided when its input "
                "is given again"
            )
        found = self._feed.synced(self._feed.next_lsn)
        return len(appended), [effect.batch for effect in found if isinstance(effect, Deliver)]

    def _before_a_start(self) -> bool:
        """Whether a start, or the capture's end, is so near that what was decided with these records may be cut off."""
        return len(self._window) < LOOK_AHEAD or any(placed.kind in STARTS for placed in self._window)

    def _fold(self, placed: Placed) -> list[Batch]:
        self.folded_only += 1
        batches = fold_into(self._feed.state, placed.block, placed.record)
        self._feed.next_lsn = self._feed.durable_lsn = placed.end_lsn
        return batches

    def _compare(self, effect: Append, placed: Placed) -> None:
        record = placed.record
        same = effect.kind == record.kind and effect.lsn == record.lsn
        if same and record.kind != Kind.ARRIVAL:
            same = b"".join(bytes(part) for part in effect.parts) == record.body
        if not same:
            raise Unlike(
                f"at position {record.lsn} the capture has {_told(record.kind, record.body)}, deciding anew gives "
                f"{_told(effect.kind, b''.join(bytes(part) for part in effect.parts[:1]))} at {effect.lsn}"
            )

    def _decided(self) -> list[Effect]:
        first = self._window[0]
        if first.kind == Kind.MARK:
            mark = decode_mark(first.record.body)
            if mark.cause == Cause.DRAIN:
                return self._feed.drain(mark.decided_ns, 0)
        elif first.kind not in (Kind.IDLE, Kind.SOURCES, Kind.KEY, Kind.ARRIVAL):
            return self._act(decode_small(Kind(first.kind), first.record.body))
        arrival = self._arrival_ahead()
        if arrival is not None:
            return self._arrive(arrival)
        following = self._window[1]
        if first.kind == Kind.SOURCES and following.kind == Kind.PROMISE:
            names = decode_small(Kind.SOURCES, first.record.body)
            assert isinstance(names, SourcesRecord)
            return self._act(decode_small(Kind.PROMISE, following.record.body), names.names[0])
        return self._time_goes_on(first)

    def _time_goes_on(self, first: Placed) -> list[Effect]:
        """A tick; or a drain with nothing to let go, which alone can move the watermark then."""
        instant = first.instant_ns
        if instant is None:
            return []
        own = takewhile(lambda placed: placed.kind in (Kind.IDLE, Kind.MARK), self._window)
        marked = any(placed.kind == Kind.MARK and placed.instant_ns == instant for placed in own)
        if marked and not self._feed.state.runs.held:
            return self._feed.drain(instant, 0)
        return self._feed.tick(instant)

    def _act(self, record: object, source: str | None = None) -> list[Effect]:
        names = self._feed.state.sources.names
        match record:
            case TakenRecord(now_ns=now_ns, sink=sink, lane=lane, number=number):
                return self._feed.taken(sink, lane, number, now_ns)
            case PromiseRecord(now_ns=now_ns, source=number, time_ns=time_ns):
                return self._feed.promise(source or names[number], time_ns, now_ns, 0)
            case ExcuseRecord(now_ns=now_ns, source=number, reason=reason, who=who):
                return self._feed.excuse(names[number], reason, now_ns, 0, who)
            case ActRecord():
                return act_again(self._feed, record)
            case SettingsRecord():
                raise AssertionError("starts are folded")
        return []

    def _arrival_ahead(self) -> int | None:
        """Number of the arrival in the window that these records belong to: of one instant, and one input's kinds."""
        instant: int | None = None
        for number, placed in enumerate(self._window):
            now = placed.instant_ns
            if instant is not None and now is not None and now != instant:
                return None
            instant = instant if now is None else now
            if placed.kind == Kind.ARRIVAL:
                return number
            if placed.kind not in (Kind.IDLE, Kind.MARK, Kind.SOURCES, Kind.KEY):
                return None
            if placed.kind == Kind.MARK and decode_mark(placed.record.body).cause == Cause.DRAIN:
                return None
        return None

    def _arrive(self, number: int) -> list[Effect]:
        placed = self._window[number]
        names: list[str] = []
        key: RequestKey | None = None
        for before in (self._window[index] for index in range(number)):
            if before.kind == Kind.SOURCES:
                found = decode_small(Kind.SOURCES, before.record.body)
                assert isinstance(found, SourcesRecord)
                names += found.names
            elif before.kind == Kind.KEY:
                told = decode_small(Kind.KEY, before.record.body)
                assert isinstance(told, KeyRecord)
                key = RequestKey(told.key, told.fingerprint)
        request = placed.record.request
        size = int(placed.block.payload_bytes[request])
        if size > len(self._zeros):
            self._zeros = memoryview(bytes(2 * size))
        arrival = placed.block.arrival(request, self._zeros[:size], tuple(names))
        return self._feed.arrive(arrival, int(placed.block.arrived[request]), 0, key)


def _told(kind: int, body: bytes | memoryview) -> str:
    """A record in words."""
    if kind == Kind.MARK:
        mark = decode_mark(body)
        return f"a mark at {mark.watermark_ns} ({mark.cause.name.lower()}, decided at {mark.decided_ns})"
    return f"a record {Kind(kind).name}"

"""Replaying a capture through the core: folding what was decided, or deciding anew under a virtual clock.

Two ways, both yielding batches as they become final. `Folding` takes the captured marks: the same records, the same
releases. `WhatIf` takes only what came from outside (arrivals, promises, excuses, drains, restarts), lets the core
decide with other settings, and makes the ticks that the service would have made. Neither reads a clock or writes
anything; a pass over a capture holds one block, the feed's state and the places of what is held.
"""

from __future__ import annotations

import struct
from collections.abc import Callable, Iterator
from dataclasses import asdict, replace

import msgspec
import numpy as np
from numpy.typing import NDArray

from strandline.core.columns import Batch
from strandline.core.effects import Append, Deliver, Effect, Refuse
from strandline.core.feed import Feed
from strandline.core.records import (
    VERSION,
    ActRecord,
    Cause,
    ExcuseRecord,
    Kind,
    PromiseRecord,
    SettingsRecord,
    SourcesRecord,
    decode_mark,
    decode_small,
    encode_small,
    frame_bytes,
)
from strandline.core.settings import Settings
from strandline.core.state import State
from strandline.errors import CaptureError

from .blocks import Block, Record
from .capture import Capture, held_lines
from .figures import Figures, Holds, sum_up
from .lines import CapturedLines

TICK_NS = 250_000_000  # the service's own (app.TICK_S)
NOT_FOLLOWING = (AssertionError, ValueError, LookupError, struct.error, msgspec.MsgspecError)
Progress = Callable[[int], object]  # told the events done so far


def _quiet(done: int) -> None:
    del done


class Folding:
    """The captured records, folded: what the feed decided. Its batches are those that the service released."""

    def __init__(self, capture: Capture) -> None:
        if not capture.meta.decided:
            raise CaptureError(
                f"{capture.path}: it was made from a file and holds no decisions of a feed: name a configuration with "
                "--config to see what would have been"
            )
        self.capture = capture
        self.state = capture.state() or State(Settings(capture.meta.feed))
        self.lines = CapturedLines(capture, self.state.sources.names)
        self.lines.begin(held_lines(self.state))
        self.figures = Figures(capture.meta.feed, capture.first_ns, capture.last_ns)
        self.holds = Holds()
        self.state.figures.hold = self.holds
        self._before = asdict(self.state.ledger)

    def batches(self, progress: Progress = _quiet) -> Iterator[Batch]:
        """Every batch, in the order in which they became final."""
        done = 0
        for block in self.capture.blocks():
            for record in block.records():
                yield from self.fold(block, record)
            done += len(block.times)
            self.forget()
            progress(done)
        self.finish()

    def fold(self, block: Block, record: Record) -> list[Batch]:
        """Take over the next record. Raises CaptureError where it cannot follow what came before."""
        batches = fold_into(self.state, block, record)
        if record.kind == Kind.ARRIVAL:
            note_places(self.lines, block, record, block.payload_place(record.request, record.lsn))
            self.figures.requests += 1
            self.figures.peak_held = max(self.figures.peak_held, self.state.runs.held)
        self.figures.batches += sum(batch.lane == "ordered" for batch in batches)
        return batches

    def forget(self) -> None:
        """Lines before what is held, and before what was yielded and is still kept, are asked for no more."""
        self.lines.forget_before(self.state.arrivals.oldest_place)

    def finish(self) -> None:
        """All has been folded: sum up."""
        sum_up(self.figures, self.state, self.holds, self._before)


def fold_into(state: State, block: Block, record: Record) -> list[Batch]:
    """What `Feed.fold` does with a record, and the batches that it made final."""
    try:
        match Kind(record.kind):
            case Kind.ARRIVAL:
                end = record.lsn + frame_bytes(block.record_bytes(record.request))
                return state.fold_arrival(block.arrival_body(record.request, record.lsn), end)[1]
            case Kind.MARK:
                return state.fold_mark(decode_mark(record.body), record.lsn + frame_bytes(len(record.body)))
            case small:
                state.fold_small(decode_small(small, record.body))
                return []
    except NOT_FOLLOWING as error:
        raise _does_not_follow(record, error) from error


def _does_not_follow(record: Record, error: Exception) -> CaptureError:
    return CaptureError(
        f"the record at position {record.lsn} does not follow from those before it ({type(error).__name__}: {error}): "
        "the capture was put together by another program, or this is a fault of this one"
    )


def act_again(feed: Feed, act: ActRecord) -> list[Effect]:
    """Have a feed do again what an operator did, at the same instant."""
    match act.act:
        case "drain":
            return feed.drain(act.now_ns, 0, act.who, act.reason)
        case "slack":
            for_ns = 0 if act.until_ns is None else act.until_ns - act.now_ns
            return feed.set_slack(act.slack_ns, for_ns, act.reason, act.now_ns, 0, act.who)
        case "pause" | "resume":
            return feed.pause(act.subject, act.act == "pause", act.reason, act.now_ns, 0, act.who)
        case "excuse":
            raise ValueError("an excuse has a record of its own")


def note_places(lines: CapturedLines, block: Block, record: Record, place: int) -> None:
    """The lines of a request stand at `place` for the feed that is replayed."""
    first = block.first_line[record.request : record.request + 1]
    lines.places.note(np.array([place], np.int64), first)


class WhatIf:
    """The same arrivals, decided with other settings, from an empty feed that knows the sources' names.

    Sinks are taken to keep up, so pauses mean nothing. Acts of operators (a slack set for a time too) and promises of
    sources happen again; what a restart of the service meant for silent sources, too. Decoding is not done again: time,
    source and id are what they were.
    """

    def __init__(self, capture: Capture, settings: Settings) -> None:
        self.capture = capture
        self.feed = Feed(settings)
        self.figures = Figures(settings.name, capture.first_ns, capture.last_ns)
        names = capture.source_names()
        if names:
            self._take_over(Kind.SOURCES, SourcesRecord(0, names))
        self.feed.start(capture.first_ns, {})
        self.holds = Holds()
        self.feed.state.figures.hold = self.holds
        self.lines = CapturedLines(capture, self.feed.state.sources.names)
        self._numbers = list(range(len(names)))  # of the captured sources here
        self._mapping: NDArray[np.uint32] | None = None  # the same as a column, once they differ
        self._ticked_ns = capture.first_ns
        self._zeros = memoryview(b"")

    def _take_over(self, kind: Kind, record: SourcesRecord | SettingsRecord) -> None:
        found, body = encode_small(record)
        assert found == kind
        self.feed.fold(kind, VERSION, body, self.feed.next_lsn)
        self.feed.durable_lsn = self.feed.next_lsn

    def batches(self, progress: Progress = _quiet) -> Iterator[Batch]:
        """Every batch, in the order in which they would have become final."""
        done = 0
        for block in self.capture.blocks():
            for record in block.records():
                try:
                    batches = list(self._next(block, record))
                except NOT_FOLLOWING as error:
                    raise _does_not_follow(record, error) from error
                yield from batches
            done += len(block.times)
            self.lines.forget_before(self.feed.state.arrivals.oldest_place)
            progress(done)
        yield from self._pass(self.capture.last_ns)
        sum_up(self.figures, self.feed.state, self.holds, {})

    # ---- inputs ---------------------------------------------------------------------------------------------------

    def _next(self, block: Block, record: Record) -> Iterator[Batch]:
        if record.kind == Kind.ARRIVAL:
            yield from self._pass(int(block.arrived[record.request]))
            yield from self._arrive(block, record)
        else:
            yield from self._other(record)

    def _arrive(self, block: Block, record: Record) -> list[Batch]:
        size = int(block.payload_bytes[record.request])
        if size > len(self._zeros):
            self._zeros = memoryview(bytes(2 * size))
        arrival = block.arrival(record.request, self._zeros[:size])
        if self._mapping is not None:
            arrival = replace(arrival, sources=self._mapping[arrival.sources])
        now_ns = int(block.arrived[record.request])
        effects = self.feed.arrive(arrival, now_ns, 0)
        self.figures.requests += 1
        refusal = next((effect for effect in effects if isinstance(effect, Refuse)), None)
        if refusal is not None:
            self.figures.refused += arrival.received
            return []
        lsn = next(effect.lsn for effect in effects if isinstance(effect, Append) and effect.kind == Kind.ARRIVAL)
        note_places(self.lines, block, record, block.payload_place(record.request, lsn))
        batches, end = self._final(), lsn + frame_bytes(block.record_bytes(record.request))
        # What its own mark let go was held for a moment, with all the rest of it.
        after = sum(len(batch) for batch in batches if batch.lane == "ordered" and batch.ready_lsn > end)
        self.figures.peak_held = max(self.figures.peak_held, self.feed.state.runs.held + after)
        return batches

    def _other(self, record: Record) -> Iterator[Batch]:
        """A record that is no arrival's: what came from outside happens again, decisions are left out."""
        if record.kind == Kind.MARK:
            mark = decode_mark(record.body)
            if mark.cause == Cause.DRAIN:
                yield from self._pass(mark.decided_ns)
                self.feed.drain(mark.decided_ns, 0)
                yield from self._final()
            return
        match decode_small(Kind(record.kind), record.body):
            case SourcesRecord(names=names):
                self._name(names)
            case PromiseRecord(now_ns=now_ns, source=source, time_ns=time_ns):
                yield from self._pass(now_ns)
                self.feed.promise(self._source(source), time_ns, now_ns, 0)
                yield from self._final()
            case ExcuseRecord(now_ns=now_ns, source=source, reason=reason, who=who):
                yield from self._pass(now_ns)
                self.feed.excuse(self._source(source), reason, now_ns, 0, who)
                yield from self._final()
            case ActRecord(now_ns=now_ns, act="slack" | "drain") as act:
                yield from self._pass(now_ns)
                act_again(self.feed, act)
                yield from self._final()
            case SettingsRecord(now_ns=now_ns, resumed=True):
                self._take_over(Kind.SETTINGS, SettingsRecord(now_ns, self.feed.state.settings, {}, True))
            case _:
                pass

    def _name(self, names: list[str]) -> None:
        """Give captured names numbers here: an expected source may have one already."""
        known = self.feed.state.sources.numbers
        new = [name for name in names if name not in known]
        if new:
            self._take_over(Kind.SOURCES, SourcesRecord(len(known), new))
        first = len(self._numbers)
        self._numbers += [known[name] for name in names]
        if self._mapping is not None or self._numbers[first:] != list(range(first, len(self._numbers))):
            self._mapping = np.array(self._numbers, dtype=np.uint32)

    def _source(self, number: int) -> str:
        return self.feed.state.sources.names[self._numbers[number]]

    # ---- time -----------------------------------------------------------------------------------------------------

    def _pass(self, until_ns: int) -> Iterator[Batch]:
        """Let time go on to just before an instant: the ticks of the service that can release something."""
        while (due_ns := self._due_ns()) is not None:
            tick_ns = max(-(-due_ns // TICK_NS) * TICK_NS, self._ticked_ns + 1)
            if tick_ns >= until_ns:
                return
            self._ticked_ns = tick_ns
            self.feed.tick(tick_ns)
            yield from self._final()

    def _due_ns(self) -> int | None:
        """The first instant at which a tick can do something; None while nothing is held."""
        state, settings = self.feed.state, self.feed.state.settings
        if not state.runs.held:
            return None
        due = [state.hold.pairs[0][0] + settings.hold_at_most_ns] if state.hold.pairs else []
        if state.own is not None and state.arrivals.oldest_ns is not None:
            due.append(state.arrivals.oldest_ns + settings.hold_at_most_ns)
        idle = state.sources.next_idle()
        if idle is not None:
            due.append(idle[0] + settings.idle_after_ns)
        if settings.clock == "arrival":
            head_ns = state.runs.head_ns
            assert head_ns is not None
            due.append(head_ns + state.slack_ns)
        if state.acts.slack_set is not None and state.acts.slack_set.until_ns is not None:
            due.append(state.acts.slack_set.until_ns)
        return min(due, default=None)

    def _final(self) -> list[Batch]:
        """What has become final; nothing is written, so all of it is durable."""
        batches = [e.batch for e in self.feed.synced(self.feed.next_lsn) if isinstance(e, Deliver)]
        self.figures.batches += sum(batch.lane == "ordered" for batch in batches)
        return batches

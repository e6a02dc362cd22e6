"""What became of single events: a journal folded again, while some of its lines are followed through the state.

Pure: which records are folded, and from which state on, is chosen by who reads the journal (`strandline.tracing`). The
fold is that of `state`, so what is said here is what the feed decided; nothing is judged a second time.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from .columns import NO_SOURCE, Batch, as_refs
from .effects import Buffer
from .outbox import LANES
from .records import (
    Cause,
    KeyRecord,
    Kind,
    Mark,
    SettingsRecord,
    arrival_column,
    decode_arrival,
    decode_mark,
    decode_small,
    frame_bytes,
    require_readable,
)
from .runs import Run
from .state import State

Values = NDArray[Any]  # int64 or uint64


@dataclass(frozen=True, slots=True)
class Target:
    """One line of a request: the position of the request's record, where the line starts, its number from 1.

    `time_ns` is None for a line that is no event. `passing`: only what it was taken for at its arrival is of interest.
    """

    lsn: int
    place: int
    line: int
    time_ns: int | None
    passing: bool = False


@dataclass(frozen=True, slots=True)
class Stood:
    """A watermark, the instant at which it came to stand there, and why. TIME_MIN: there was none yet.

    `lsn` is the position of its mark, None where that was set before the first record that was folded; `source` is
    NO_SOURCE then, and for causes that have none.
    """

    watermark_ns: int
    since_ns: int
    cause: Cause
    source: int = NO_SOURCE
    lsn: int | None = None


@dataclass(frozen=True, slots=True)
class Held:
    """In a run of `state.runs.runs`: its number from 1, the oldest first, of how many; events before it; its length."""

    run: int
    runs: int
    before: int
    run_events: int


@dataclass(frozen=True, slots=True)
class Released:
    """In an ordered batch at a position from 0, at an instant; by a mark, None where that was not folded."""

    batch: int
    position: int
    events: int
    at_ns: int
    mark: Stood | None


@dataclass(frozen=True, slots=True)
class Late:
    """In a late batch at a position from 0."""

    batch: int
    position: int
    behind_ns: int


@dataclass(frozen=True, slots=True)
class Quarantined:
    """In a batch of the quarantine at a position from 0, and why."""

    batch: int
    position: int
    reason: str
    detail: str


@dataclass(frozen=True, slots=True)
class Duplicate:
    """A repeat: its identity was in the window of those seen."""


Fate = Held | Released | Late | Quarantined | Duplicate


@dataclass(slots=True)
class Followed:
    """A target on its way. `fate` None: held, and what came of it was not seen (yet).

    `stood` is the watermark when its request arrived, `key` that request's idempotency key; both None where folding
    began later.
    """

    target: Target
    stood: Stood | None
    key: str | None = None
    fate: Fate | None = None


class Follower:
    """Folds records in order and notes what becomes of the targets that they bring."""

    def __init__(self, state: State) -> None:
        self.state = state
        self.open: list[Followed] = []  # held so far
        self._stood = Stood(state.watermark_ns, state.marked_ns, state.cause)
        self._key: str | None = None

    def fold(
        self, kind: int, version: int, body: Buffer, lsn: int, targets: Sequence[Target] = ()
    ) -> Sequence[Followed]:
        """Take over the next record, and the targets in it. Raises ValueError for one that this code cannot read."""
        require_readable(version, lsn)
        end_lsn = lsn + frame_bytes(len(body))
        match Kind(kind):
            case Kind.ARRIVAL:
                return self._arrival(body, lsn, end_lsn, targets)
            case Kind.MARK:
                self._mark(decode_mark(body), lsn, end_lsn)
            case small:
                record = decode_small(small, body)
                if isinstance(record, KeyRecord):
                    self._key = record.key
                elif isinstance(record, SettingsRecord):
                    self._key = None  # a crash may have cut off the arrival that it announced
                self.state.fold_small(record)
        return ()

    def _arrival(self, body: Buffer, lsn: int, end_lsn: int, targets: Sequence[Target]) -> Sequence[Followed]:
        decoded = decode_arrival(body, lsn)
        _, batches = self.state.fold_arrival(decoded, end_lsn)
        key, self._key = self._key, None
        fates = self._taken_for(targets, batches)
        found = [Followed(target, self._stood, key, fate) for target, fate in zip(targets, fates, strict=True)]
        self.open += [each for each in found if each.fate is None and not each.target.passing]
        return found

    def _taken_for(self, targets: Sequence[Target], batches: Sequence[Batch]) -> list[Fate | None]:
        """What each was at its arrival; None where it is held now."""
        fates: list[Fate | None] = [_fate_among(batches, target) for target in targets]
        inside = [row for row, fate in enumerate(fates) if fate is None]
        runs = self.state.runs.runs if inside else []  # made for who looks, at the cost of a sort: once for all
        for row in inside:
            time_ns = targets[row].time_ns
            assert time_ns is not None, "a line that is no event is in quarantine"
            if held_at(runs, time_ns, targets[row].place) is None:
                fates[row] = Duplicate()
        return fates

    def _mark(self, mark: Mark, lsn: int, end_lsn: int) -> None:
        stands_ns = self.state.watermark_ns
        batches = self.state.fold_mark(mark, end_lsn)
        step = Stood(mark.watermark_ns, mark.decided_ns, mark.cause, mark.source, lsn)
        if mark.watermark_ns > stands_ns:
            self._stood = step
        for followed in self.open:
            target = followed.target
            # Where each source has its own watermark, the mark does not tell which rows it releases.
            if target.time_ns is None or (target.time_ns > mark.watermark_ns and self.state.own is None):
                continue
            for batch in batches:
                if (row := _row_of(batch, target)) is not None:
                    followed.fate = Released(batch.number, row, len(batch), mark.decided_ns, step)
        self.open = [followed for followed in self.open if followed.fate is None]

    def adopt(self, target: Target) -> Followed | None:
        """Follow a line from before the state was saved, if it still is there: held, or in a batch not delivered."""
        outbox = self.state.outbox
        fate = _fate_among((batch for lane in LANES for batch in outbox.undelivered(lane)), target)
        found = Followed(target, None, None, fate)
        if fate is not None:
            return found
        if target.time_ns is None or held_at(self.state.runs.runs, target.time_ns, target.place) is None:
            return None
        self.open.append(found)
        return found

    def still_held(self) -> None:
        """Nothing more will be folded: say where those stand that are held."""
        runs = self.state.runs.runs if self.open else []
        for followed in self.open:
            assert followed.target.time_ns is not None
            followed.fate = held_at(runs, followed.target.time_ns, followed.target.place)
        self.open = []


def _fate_among(batches: Iterable[Batch], target: Target) -> Released | Late | Quarantined | None:
    """What the first batch that a line is in says of it."""
    return next((fate for batch in batches if (fate := _fate_in(batch, target)) is not None), None)


def _fate_in(batch: Batch, target: Target) -> Released | Late | Quarantined | None:
    """What a batch says of a line that may be in it."""
    if batch.lane == "quarantine":
        for position, entry in enumerate(batch.entries):
            if (entry.line, entry.place) == (target.line, target.place):
                return Quarantined(batch.number, position, entry.reason, entry.detail)
        return None
    row = _row_of(batch, target)
    if row is None:
        return None
    if batch.lane == "late":
        return Late(batch.number, row, int(batch.behind[row]))
    return Released(batch.number, row, len(batch), batch.instant_ns, None)


def _row_of(batch: Batch, target: Target) -> int | None:
    rows = np.flatnonzero(batch.refs["place"] == target.place)
    return int(rows[0]) if len(rows) else None


def held_at(runs: Sequence[Run], time_ns: int, place: int) -> Held | None:
    """Where in these runs the event with this time and line stands; None where it is in none."""
    for number, run in enumerate(runs, 1):
        if int(run.chunks[0].times[0]) > time_ns or int(run.chunks[-1].times[-1]) < time_ns:
            continue
        before = 0
        for chunk in run.chunks:
            if int(chunk.times[0]) > time_ns:
                break
            if int(chunk.times[-1]) >= time_ns:
                start, stop = (int(chunk.times.searchsorted(time_ns, side)) for side in ("left", "right"))
                rows = np.flatnonzero(as_refs(chunk.refs)["place"][start:stop] == place)
                if len(rows):
                    return Held(number, len(runs), before + start + int(rows[0]), run.length)
            before += len(chunk.times)
    return None


class Finder:
    """Finds rows of arrival records by a column: one event time, or any of some identities; `source`: a number."""

    def __init__(
        self, *, time_ns: int | None = None, identities: Sequence[int] = (), source: int | None = None
    ) -> None:
        self._column: Literal["times", "identities"] = "identities" if time_ns is None else "times"
        self._source = source
        self._wanted: Values = (
            np.array([time_ns], np.int64) if time_ns is not None else np.array(sorted(set(identities)), np.uint64)
        )
        self.without_identities = 0  # records whose events have none although some are wanted
        self._only = self._wanted.tobytes() if len(self._wanted) == 1 else None

    def rows(self, body: Buffer) -> tuple[list[int], bool]:
        """Numbers of the rows that match, and whether the record holds lines that are no events. Raises struct.error.

        Most records hold nothing that is wanted: for one value a search through the column's bytes tells so in 0.5 us,
        a comparison of columns in 2 us, decoding the record in 6 us.
        """
        column, faults = arrival_column(body, self._column)
        if column is None:
            self.without_identities += 1
            return [], faults > 0
        if not len(column) or not len(self._wanted):
            return [], faults > 0
        if self._only is not None and self._only not in bytes(column):
            return [], faults > 0
        values: Values = np.frombuffer(column, self._wanted.dtype)
        if len(self._wanted) == 1:
            found = values == self._wanted[0]
        else:
            places = np.minimum(np.searchsorted(self._wanted, values), len(self._wanted) - 1)
            found = self._wanted[places] == values
        return np.flatnonzero(found).tolist(), faults > 0

    def is_source(self, number: int) -> bool:
        """Whether an event of this source is wanted."""
        return self._source is None or number == self._source

"""A state as bytes and back: what a snapshot of the core holds. After restoring it, only later records need folding.

Columns go as they are, everything else as one MessagePack map in front. A snapshot is an aid: it may always be thrown
away as long as the journal is whole, so its layout carries a version and no promise beyond it.
"""

from __future__ import annotations

from typing import Any

import msgspec
import numpy as np
from numpy.typing import NDArray

from .columns import REF, TIME_MIN, Batch, QuarantineEntry, as_rows, empty_refs, empty_times
from .effects import Buffer, Outcome
from .held_by_source import HeldBySource
from .keys import Kept
from .outbox import LANES
from .records import Cause
from .runs import Strand, joined
from .settings import Settings
from .slack import SteeredSlack
from .slack_by_source import SteeredBySource
from .state import State
from .within import is_reordered

SAVED_VERSION = 1
_FIGURES = ("lateness", "hold", "run_length")


class _Columns:
    """Collects columns behind a header, or hands them out again in the same order."""

    def __init__(self, body: memoryview | None = None) -> None:
        self.parts: list[Buffer] = []
        self.lengths: list[int] = []
        self._body, self._offset = body, 0

    def put(self, column: NDArray[Any]) -> None:
        """A column that never changes any more: it is not copied."""
        self.lengths.append(len(column))
        if len(column):
            self.parts.append(np.ascontiguousarray(column).view(np.uint8).data)

    def get(self, dtype: Any) -> NDArray[Any]:
        assert self._body is not None
        count = self.lengths.pop(0)
        if count * np.dtype(dtype).itemsize > len(self._body) - self._offset:
            raise ValueError("cut short")
        column = np.frombuffer(self._body, dtype=dtype, count=count, offset=self._offset)
        self._offset += column.nbytes
        return column.copy()

    def require_end(self) -> None:
        assert self._body is not None
        if self.lengths or self._offset != len(self._body):
            raise ValueError("there is more in it than it says")


def save(state: State) -> list[Buffer]:
    """The state as parts of one body. They do not change with the state: it may go on while they are written."""
    columns = _Columns()
    count = len(state.sources.names)
    sources = state.sources
    for column in (
        *(sources.newest, sources.heard, sources.active, sources.excused),
        *(sources.vouched, sources.promised, sources.broken),
    ):
        columns.put(column[:count].copy())
    for column in state.arrivals.columns():
        columns.put(column.copy())
    for identities in state.seen.columns():
        columns.put(identities)
    held = _held_strands(state, columns)
    batches = [_save_batch(batch, columns) for lane in LANES for batch in state.outbox.undelivered(lane)]
    if isinstance(state.slack, SteeredBySource):
        for column in state.slack.columns(count):
            columns.put(column)
    header = {
        "version": SAVED_VERSION,
        "settings": state.settings,
        "clock": [state.now_ns, state.watermark_ns, state.marked_ns, int(state.cause)],
        "slack": state.slack.saved() if isinstance(state.slack, SteeredSlack | SteeredBySource) else None,
        "lateness": state.lateness.saved(),
        "names": state.sources.names,
        "newest_ns": state.sources.newest_ns,
        **held,
        "hold": list(state.hold.pairs),
        "holds": state.holds.saved(),
        "acts": state.acts.saved(),
        "ledger": state.ledger,
        "next_number": state.outbox.next_number,
        "positions": state.outbox.positions,
        "batches": batches,
        "keys": [[key, k.fingerprint, k.outcome, k.arrived_ns, k.end_lsn] for key, k in state.keys.kept.items()],
        "figures": [
            [getattr(state.figures, name).counts.tolist(), getattr(state.figures, name).total] for name in _FIGURES
        ],
        "counts": [state.figures.arrivals, state.figures.marks, state.figures.marks_by_cause],
        "lengths": columns.lengths,
    }
    packed = msgspec.msgpack.encode(header)
    return [len(packed).to_bytes(8, "little"), packed, *columns.parts]


def _held_strands(state: State, columns: _Columns) -> dict[str, Any]:
    """Put what is held, and where order is kept within sources their watermarks; what the header says of it."""
    held = state.runs
    if isinstance(held, HeldBySource):
        assert state.own is not None
        strands, said = [held.copied()], dict[str, Any](own=True)
        columns.put(state.own.at.copy())
    else:
        runs, (sides, near) = [joined(list(run.chunks)) for run in held.open.runs], held.saved()
        strands, said = [*runs, *sides], {"runs": len(runs), "opened": held.open.opened, "near": near}
    for strand in strands:
        columns.put(strand.times)
        columns.put(strand.refs)
    return said


def _save_batch(batch: Batch, columns: _Columns) -> list[Any]:
    columns.put(batch.times)
    columns.put(batch.refs)
    entries = [[e.line, e.reason, e.detail, e.place, e.length] for e in batch.entries]
    saved = [batch.lane, batch.number, batch.instant_ns, batch.ready_lsn, batch.behind_ns, entries]
    if batch.own_behind is None:
        return saved
    columns.put(batch.own_behind)
    return [*saved, True]


def restore(body: Buffer) -> State:
    """The state behind a saved body. Raises ValueError if it is of another version or cut short."""
    view = memoryview(body)
    size = int.from_bytes(view[:8], "little")
    try:
        header = msgspec.msgpack.decode(view[8 : 8 + size])
        if header["version"] != SAVED_VERSION:
            raise ValueError(f"version {header['version']}, this program reads {SAVED_VERSION}")
        return _restored(header, _Columns(view[8 + size :]))
    except Exception as error:  # a header that another program wrote can lead anywhere: then the journal is folded
        raise ValueError(f"the snapshot cannot be read: {error}") from error


def _restored(header: dict[str, Any], columns: _Columns) -> State:
    columns.lengths = header["lengths"]
    state = State(msgspec.convert(header["settings"], Settings))
    state.now_ns, state.watermark_ns, state.marked_ns, cause = header["clock"]
    state.cause = Cause(cause)
    if isinstance(state.slack, SteeredSlack):
        state.slack.restore(header["slack"])
    if "lateness" in header:  # not in snapshots of before it was kept: the memory then begins anew
        state.lateness.restore(header["lateness"])
    if "holds" in header:  # likewise, and the acts
        state.holds.restore(header["holds"])
        state.acts.restore(header["acts"])
    newest, heard = columns.get(np.int64), columns.get(np.int64)
    active, excused = columns.get(np.bool_), columns.get(np.bool_)
    vouched, promised, broken = (columns.get(np.int64) for _ in range(3))
    state.sources.restore(
        header["names"], newest, heard, active, excused, vouched, promised, broken, header["newest_ns"]
    )
    state.arrivals.restore(columns.get(np.int64), columns.get(np.int64), columns.get(np.int64))
    state.seen.restore(columns.get(np.uint64), columns.get(np.uint64))
    for key, fingerprint, outcome, arrived_ns, end_lsn in header["keys"]:
        kept = Kept(fingerprint, msgspec.convert(outcome, Outcome), arrived_ns, end_lsn)
        state.keys.keep(key, kept, len(header["keys"]), TIME_MIN)
    _restore_held(state, header, columns)
    state.hold.pairs.extend((arrived, newest) for arrived, newest in header["hold"])
    state.ledger = msgspec.convert(header["ledger"], type(state.ledger))
    _restore_outbox(state, header, columns)
    for name, (counts, total) in zip(_FIGURES, header["figures"], strict=True):
        figure = getattr(state.figures, name)
        figure.counts[:] = counts
        figure.total = total
    state.figures.arrivals, state.figures.marks, state.figures.marks_by_cause = header["counts"]
    if isinstance(state.slack, SteeredBySource):
        own = [columns.get(dtype) for dtype in (np.float64, np.float64, np.int64, np.float32)]
        state.slack.restore(header["slack"], own)
    columns.require_end()
    return state


def _restore_held(state: State, header: dict[str, Any], columns: _Columns) -> None:
    def strand() -> Strand:
        return Strand(columns.get(np.int64), as_rows(columns.get(REF)))

    held = state.runs
    if isinstance(held, HeldBySource):
        assert state.own is not None and header["own"]
        at = columns.get(np.int64)
        if len((rows := strand()).times):
            held.hold(*rows)
        state.own.restore(at, held)
        return
    for _ in range(header["runs"]):
        held.open.reopen(strand())
    held.open.opened = header["opened"]
    if "near" in header:
        held.restore([strand() for _ in range(header["near"][0] + 2)], header["near"])
    elif "fresh_sorted" in header:  # a snapshot of before there was a near side: what is fresh is younger than the runs
        held.restore([strand()], None)
    else:  # of before rows were fresh: all that is held stood in open runs
        held.restore([], None)
    state.reordered = is_reordered(state)


def _restore_outbox(state: State, header: dict[str, Any], columns: _Columns) -> None:
    outbox = state.outbox
    outbox.positions = header["positions"]
    for lane, number, instant_ns, ready_lsn, behind_ns, entries, *own in header["batches"]:
        times, refs = columns.get(np.int64), columns.get(REF)
        outbox.next_number[lane] = number
        rows = [QuarantineEntry(*entry) for entry in entries]
        if lane == "quarantine":
            times, refs = empty_times(), empty_refs()
        own_behind = columns.get(np.int64) if own else None
        outbox.add(Batch(lane, number, times, refs, instant_ns, ready_lsn, behind_ns, rows, own_behind))
    outbox.next_number.update(header["next_number"])

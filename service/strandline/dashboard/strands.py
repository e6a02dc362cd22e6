"""Where the held events of a source lie: a bounded look into the open runs. Pure; changes nothing.

All of the runs are looked at where that is at most PIECES_AT_MOST chunks and ROWS_AT_MOST rows; else a sample that is
spaced evenly over runs, chunks and rows, in which each row stands for as many as it was taken from.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from ..core.columns import as_refs
from ..core.held import Held
from ..core.held_by_source import HeldBySource
from ..core.runs import Run, Strand
from .history import starts_of

PIECES_AT_MOST = 512  # chunks: some 1.5 us each
ROWS_AT_MOST = 16_384

Row = tuple[int, int, int]  # head_ns, tail_ns, events


@dataclass(frozen=True, slots=True)
class Look:
    """Rows of the open runs: event time, source, index of the run, and how many held events each row stands for."""

    times: NDArray[np.int64]
    sources: NDArray[np.int64]
    runs: NDArray[np.int64]
    weights: NDArray[np.float64]
    sampled: bool


@dataclass(slots=True)
class OfSource:
    """What is held of one source. `strands`: its stretch in each run that has events of it, by head."""

    events: int = 0
    strands: list[Row] = field(default_factory=list)


def look_into(events: Held | HeldBySource) -> Look:
    """Rows of the runs that are held, within the bounds."""
    if isinstance(events, HeldBySource):
        return _look_by_source(events)
    runs, held = events.runs, events.held
    if not runs:
        empty = np.empty(0, dtype=np.int64)
        return Look(empty, empty, empty, np.empty(0), False)
    picked = _spaced(len(runs), PIECES_AT_MOST)
    share = max(1, PIECES_AT_MOST // len(picked))
    rows_each = max(1, ROWS_AT_MOST // (len(picked) * share))
    whole = held <= ROWS_AT_MOST and len(picked) == len(runs) and sum(len(run.chunks) for run in runs) <= PIECES_AT_MOST
    times, sources, counts, weights = [], [], [], []
    for index in picked:
        run = runs[index]
        pieces = list(run.chunks) if whole else _pieces(run, share, rows_each)
        rows = sum(len(piece.times) for piece in pieces)
        times += [piece.times for piece in pieces]
        sources += [as_refs(piece.refs)["source"] for piece in pieces]
        counts.append(rows)
        weights.append(run.length / rows)
    joined = np.concatenate(times)
    # So that the rows of the runs that were picked stand for those that were not, too.
    scale = held / sum(runs[index].length for index in picked)
    return Look(
        joined,
        np.concatenate(sources).astype(np.int64),
        np.repeat(picked, counts),
        np.repeat(np.array(weights) * scale, counts),
        len(joined) < held,
    )


def _look_by_source(events: HeldBySource) -> Look:
    """There are no runs then: all rows are of one, in ascending time."""
    strand, held = events.sample(ROWS_AT_MOST), events.held
    rows = len(strand.times)
    sources = as_refs(strand.refs)["source"].astype(np.int64)
    weights = np.full(rows, held / rows if rows else 0.0)
    return Look(strand.times, sources, np.zeros(rows, dtype=np.int64), weights, rows < held)


def _spaced(count: int, at_most: int) -> list[int]:
    """Indices spread evenly over a count, the first and the last among them."""
    if count <= at_most:
        return list(range(count))
    return [index * (count - 1) // max(at_most - 1, 1) for index in range(at_most)]


def _pieces(run: Run, chunks: int, rows: int) -> list[Strand]:
    pieces = []
    for index in _spaced(len(run.chunks), chunks):
        chunk = run.chunks[index]
        step = -(-len(chunk.times) // rows)
        if step > 1:  # views, in which the last row is: 0.5 us, where picking by number takes 10
            start = (len(chunk.times) - 1) % step
            chunk = Strand(chunk.times[start::step], chunk.refs[start::step])
        pieces.append(chunk)
    return pieces


def held_of(look: Look, wanted: Sequence[int], sources: int, strands_at_most: int) -> dict[int, OfSource]:
    """What is held of these sources (numbers below `sources`); of each the strands with most events, by head."""
    held = {number: OfSource() for number in wanted}
    lane_of = np.full(sources, -1, dtype=np.int64)
    lane_of[list(wanted)] = np.arange(len(wanted))
    lanes = lane_of[look.sources]
    kept = np.flatnonzero(lanes >= 0)
    if not len(kept):
        return held
    keys = lanes[kept] * (int(look.runs[-1]) + 1) + look.runs[kept]
    kept = kept[np.argsort(keys, kind="stable")]  # within a run times ascend already
    keys.sort()
    starts = starts_of(keys)
    stops = np.concatenate((starts[1:], [len(keys)]))
    events = np.rint(np.add.reduceat(look.weights[kept], starts)).astype(np.int64)
    heads, tails = look.times[kept[starts]], look.times[kept[stops - 1]]
    for lane, row in zip(
        lanes[kept[starts]].tolist(), zip(heads.tolist(), tails.tolist(), events.tolist(), strict=True), strict=True
    ):
        one = held[wanted[lane]]
        one.events += row[2]
        one.strands.append(row)
    for one in held.values():
        one.strands = sorted(sorted(one.strands, key=lambda row: -row[2])[:strands_at_most])
    return held

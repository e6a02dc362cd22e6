"""Sequence numbers of captured events: read out of their lines, and summed up as what was lost and what came late.

Here live the reading (a JSON Pointer into each line) and the choice of what is told. How gaps are found is in `gaps`,
how reordering is counted in `reordering`. What ended in quarantine is not read: its numbers look lost, so its lines are
counted beside. Bounded: the first so many events, and lists of the longest.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import msgspec
import numpy as np
from numpy.typing import NDArray

from strandline.errors import CaptureError, ConfigError
from strandline.ingest.pointer import Fields, PointerError

from .blocks import Block
from .capture import Capture
from .gaps import Gaps, Lost, SourceCounts, lifted, lost_ranges, sequence_gaps
from .lines import CapturedLines
from .reordering import KEY_GREATEST, KEY_LEAST, Reordering

Int64s = NDArray[np.int64]

EVENTS_AT_MOST = 2_000_000  # as for the figures by event time
RANGES_AT_MOST = 20
DOUBTFUL_SHARE = 0.1  # of what a source sent: repeats and numbers below its first; more is no accident of a link
LOST_TIMES = 10  # so many times as many lost as received: hardly a count


@dataclass(frozen=True, slots=True)
class Numbers:
    """Sequence numbers as columns, in order of arrival; what was not read is counted."""

    numbers: Int64s
    sources: NDArray[np.uint32]
    arrivals: Int64s
    events: int  # looked at
    unnumbered: int  # of them without a whole number at the pointer
    quarantined_lines: int


class _Reader:
    """Reads what stands at one pointer."""

    def __init__(self, pointer: str) -> None:
        """Raises ConfigError for a text that is no pointer to something within an event."""
        try:
            self._fields = Fields(pointer, int)
        except PointerError as error:
            raise ConfigError([f"--sequence: {error}"]) from error

    def at_once(self, payload: memoryview, count: int) -> Sequence[Any] | None:
        """The numbers of lines that all have one; None where some do not, or cannot be read this way."""
        if self._fields.decoder is None:
            return None
        try:
            records = self._fields.decoder.decode_lines(payload)
        except (msgspec.MsgspecError, RecursionError):
            return None
        return self._fields.times(records) if len(records) == count else None

    def one(self, line: bytes) -> Any:
        """What stands there in one line."""
        try:
            return self._fields.read(line).time
        except (msgspec.MsgspecError, RecursionError):
            return None


def read_numbers(capture: Capture, pointer: str, tell: Callable[[int], object] = lambda done: None) -> Numbers:
    """The sequence numbers of the first EVENTS_AT_MOST events. Costs some 0.6 us an event, 2 us where one has none.

    Raises ConfigError for a bad pointer or where no event has a number there; CaptureError for a capture without lines.
    """
    reader = _Reader(pointer)
    if not capture.meta.lines:
        raise CaptureError(f"{capture.path}: it was made --without-events: there is no {pointer} to read in it")
    lines = CapturedLines(capture, ())
    columns: list[tuple[Int64s, NDArray[np.uint32], Int64s]] = []
    events = quarantined = numbered = 0
    for block in capture.blocks():
        room = EVENTS_AT_MOST - events
        if room <= 0:
            break
        found, there = _numbers_of(block, lines, reader)
        kept = np.flatnonzero(there[:room])
        columns.append((found[kept], block.sources[kept], block.event_arrivals()[kept]))
        numbered += len(kept)
        events += min(len(found), room)
        quarantined += int(block.fault_counts.sum())
        tell(events)
    if not numbered:
        raise ConfigError([f"--sequence {pointer}: none of {events:,} events has a whole number there"])
    joined = [np.concatenate(parts) for parts in zip(*columns, strict=True)]
    arrivals = np.maximum.accumulate(joined[2])  # a clock that steps back counts as standing still
    return Numbers(joined[0], joined[1], arrivals, events, events - numbered, quarantined)


def _numbers_of(block: Block, lines: CapturedLines, reader: _Reader) -> tuple[Int64s, NDArray[np.bool_]]:
    """What stands at the pointer in each event of a block, and whether it is a number that counts."""
    raws = int(block.raw_bytes.sum())
    if not len(block.times):
        return np.empty(0, np.int64), np.empty(0, np.bool_)
    found: list[Any] = []
    if not raws:
        whole = lines.payload(int(block.first_line[0]), int(block.payload_bytes.sum()))
        found.extend(reader.at_once(whole, len(block.times)) or ())
    if not found:
        for request in np.flatnonzero(block.counts).tolist():
            found.extend(_of_request(block, request, lines, reader))
    there = [type(each) is int and KEY_LEAST < each <= KEY_GREATEST for each in found]
    values = [each if good else 0 for each, good in zip(found, there, strict=True)]
    return np.array(values, dtype=np.int64), np.array(there, dtype=np.bool_)


def _of_request(block: Block, request: int, lines: CapturedLines, reader: _Reader) -> Sequence[Any]:
    payload = lines.payload(int(block.first_line[request]), int(block.payload_bytes[request]))
    count, begin = int(block.counts[request]), int(block.first_event[request])
    found = reader.at_once(payload, count)
    if found is not None:
        return found
    lengths = block.lengths[begin : begin + count].astype(np.int64)
    starts = (np.cumsum(lengths + 1) - lengths - 1).tolist()
    return [
        reader.one(bytes(payload[start : start + size])) for start, size in zip(starts, lengths.tolist(), strict=True)
    ]


# ---- what is told ---------------------------------------------------------------------------------------------------


def sequence_figures(found: Numbers, names: Sequence[str], sources_at_most: int) -> dict[str, Any]:
    """What was lost upstream and what came late, by source, as plain values. Times in ns, arrival clock.

    `lost_ranges` (the longest, those that may come yet last) and `filled_gaps` (the slowest) are RANGES_AT_MOST each;
    `sources` are those that lost most, then those that were late most. A gap is filled when all of it came;
    `may_fill_yet` are lost numbers that had been missing for no longer, when the capture ended, than the latest of
    their source took.
    """
    gaps, counts = sequence_gaps(found.numbers, found.sources)
    lost = lost_ranges(found.numbers, found.sources)
    whole = lifted(found.numbers, found.sources)
    disorder = Reordering(whole.keys, found.arrivals[whole.rows], numbered=False)
    late_times, late_rows = disorder.late_times_ns, whole.rows[disorder.reordered]
    longest = np.zeros(len(counts.received), dtype=np.int64)  # by source
    np.maximum.at(longest, found.sources[late_rows], late_times)
    missing_for = int(found.arrivals[-1]) - found.arrivals[lost.opened]
    young = missing_for <= longest[lost.source]
    sizes = lost.last - lost.first + 1
    young_lost = np.zeros(len(counts.received), dtype=np.int64)  # by source
    np.add.at(young_lost, lost.source[young], sizes[young])
    total = {name: sum(getattr(counts, name).tolist()) for name in SourceCounts.__slots__}
    different = total["received"] - total["duplicates"]
    return {
        "events": found.events,
        "unnumbered": found.unnumbered,
        "quarantined_lines": found.quarantined_lines,
        **total,
        "reordered_ratio": disorder.ratio,
        "gaps_filled": int(np.count_nonzero(gaps.lost == 0)),
        "may_fill_yet": sum(young_lost.tolist()),
        "lost_share": total["lost"] / (different + total["lost"]),
        "extent_mean": _mean(disorder.extents),
        "extent_max": int(disorder.extents.max(initial=0)),
        "late_time_ns_mean": _mean(late_times),
        "late_time_ns_p50": _quantile(late_times, 0.5),
        "late_time_ns_p99": _quantile(late_times, 0.99),
        "late_time_ns_max": int(late_times.max()) if len(late_times) else None,
        "n_reordering_greatest": disorder.n_reordering.greatest,
        "sorting_slots": int(disorder.overtakers.max(initial=0)),
        "sources": _sources(counts, young_lost, late_times, found.sources[late_rows], names, sources_at_most),
        "sources_known": int(np.count_nonzero(counts.received)),
        "doubtful_sources": int(np.count_nonzero(_again(counts) | _no_count(counts))),
        "lost_ranges": _lost(lost, sizes, found.arrivals, missing_for, young, names),
        "lost_ranges_known": len(lost),
        "filled_gaps": _filled(gaps, found.arrivals, names),
    }


def _again(counts: SourceCounts) -> NDArray[np.bool_]:
    """Sources whose count seems to have begun again."""
    behind: NDArray[np.bool_] = counts.duplicates + counts.before_first > DOUBTFUL_SHARE * np.maximum(
        counts.received, 1
    )
    return behind


def _no_count(counts: SourceCounts) -> NDArray[np.bool_]:
    """Sources whose numbers are hardly a count."""
    sparse: NDArray[np.bool_] = counts.lost // LOST_TIMES > counts.received
    return sparse


def _sources(
    counts: SourceCounts,
    young_lost: Int64s,
    late_times: Int64s,
    late_sources: NDArray[np.uint32],
    names: Sequence[str],
    at_most: int,
) -> list[dict[str, Any]]:
    heard = np.flatnonzero(counts.received)
    order = heard[np.lexsort((-(counts.late + counts.before_first)[heard], -counts.lost[heard]))][:at_most]
    again, no_count = _again(counts), _no_count(counts)
    rows = []
    for number in order.tolist():
        own = late_times[late_sources == number]
        doubt = "it may have begun to count anew" if again[number] else None
        doubt = "its numbers are hardly a count" if no_count[number] else doubt
        rows.append(
            {"source": name_of(names, number)}
            | {name: int(getattr(counts, name)[number]) for name in SourceCounts.__slots__}
            | {"may_fill_yet": int(young_lost[number])}
            | {"late_time_ns_p50": _quantile(own, 0.5), "late_time_ns_max": int(own.max()) if len(own) else None}
            | {"doubt": doubt}
        )
    return rows


def _lost(
    lost: Lost, sizes: Int64s, arrivals: Int64s, missing_for: Int64s, young: NDArray[np.bool_], names: Sequence[str]
) -> list[dict[str, Any]]:
    order = np.lexsort((lost.opened, -sizes, young))[:RANGES_AT_MOST].tolist()
    return [
        {
            "source": name_of(names, int(lost.source[row])),
            "first": int(lost.first[row]),
            "last": int(lost.last[row]),
            "lost": int(sizes[row]),
            "missed_at_ns": int(arrivals[lost.opened[row]]),
            "missing_for_ns": int(missing_for[row]),
            "may_fill_yet": bool(young[row]),
        }
        for row in order
    ]


def _filled(gaps: Gaps, arrivals: Int64s, names: Sequence[str]) -> list[dict[str, Any]]:
    whole = np.flatnonzero(gaps.lost == 0)
    took = arrivals[gaps.filled_by[whole]] - arrivals[gaps.opened[whole]]
    order = whole[np.lexsort((whole, -took))][:RANGES_AT_MOST].tolist()
    return [
        {
            "source": name_of(names, int(gaps.source[row])),
            "first": int(gaps.first[row]),
            "last": int(gaps.last[row]),
            "late": int(gaps.filled[row]),
            "missed_at_ns": int(arrivals[gaps.opened[row]]),
            "filled_after_ns": int(arrivals[gaps.filled_by[row]] - arrivals[gaps.opened[row]]),
        }
        for row in order
    ]


def name_of(names: Sequence[str], number: int) -> str:
    """The source's name; its number where the capture does not tell it."""
    return names[number] if number < len(names) else f"number {number}"


def _mean(column: Int64s) -> float | None:
    return float(column.mean()) if len(column) else None


def _quantile(column: Int64s, q: float) -> int | None:
    """The least value that a share q does not exceed."""
    return int(np.quantile(column, q, method="inverted_cdf")) if len(column) else None

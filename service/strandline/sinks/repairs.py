"""Repair batches: late events for stores that want them by partition, sorted by source and time, now and then.

Cutting and wording only. When repairs are sent, and what is remembered of them, is `strandline.repairing`.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from itertools import groupby
from typing import Protocol, runtime_checkable

import msgspec


@dataclass(frozen=True, slots=True)
class RepairRow:
    """One event to be repaired into a store. Times in ns since 1970 UTC; `number` is its number in the lane store."""

    number: int
    time_ns: int
    source: str | None
    arrived_ns: int
    late_by_ns: int
    event: bytes


@dataclass(frozen=True, slots=True)
class Repair:
    """One repair batch: rows of one partition, sorted by source and time. A repeat has the same number."""

    number: int
    partition_ns: int  # where the partition begins, ns since 1970 UTC
    rows: Sequence[RepairRow]

    def ndjson(self) -> bytes:
        """The rows as lines {"time_ns":…,"source":…,"arrived_ns":…,"late_by_ns":…,"event":…}, events as they came."""
        encode = msgspec.json.encode
        return b"".join(
            b'{"time_ns":%d,"source":%b,"arrived_ns":%d,"late_by_ns":%d,"event":%b}\n'
            % (row.time_ns, encode(row.source), row.arrived_ns, row.late_by_ns, row.event)
            for row in self.rows
        )


@runtime_checkable
class TakesRepairs(Protocol):
    """A sink that takes repair batches. Errors as for Sink.take; a repeat is told by its number."""

    async def repair(self, repair: Repair) -> None:
        """Take one repair batch durably."""


def cut(rows: Iterable[RepairRow], partition_ns: int, first_number: int) -> list[Repair]:
    """Rows as repair batches: partitions ascending; within one by source, time, and order of arrival."""
    ordered = sorted(rows, key=lambda row: (row.time_ns // partition_ns, row.source or "", row.time_ns, row.number))
    parts = groupby(ordered, key=lambda row: row.time_ns // partition_ns)
    return [
        Repair(first_number + index, partition * partition_ns, tuple(part))
        for index, (partition, part) in enumerate(parts)
    ]

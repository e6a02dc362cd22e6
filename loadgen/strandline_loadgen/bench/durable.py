"""Rows on the journal against raw writes: the same bytes in the same groups, each group synced before the next.

Yardstick: one pwritev and one fdatasync for each group into a file whose room was reserved beforehand, which is the
least that durability costs. Subject: `Journal.append` of every record and one `flush` a group (frames, checksums,
segments, what is remembered for readers), its segments begun on the way. Both lie in the same folder; they take turns
group by group, so that a disk that is slow for a while is slow for both.
"""

from __future__ import annotations

import os
import statistics
import tempfile
import time
from collections.abc import Sequence
from functools import partial
from pathlib import Path

from strandline.journal.disk import LocalDisk, write_all
from strandline.journal.journal import Journal

from strandline_loadgen.bodies import Style, bodies, cut_by_count
from strandline_loadgen.shapes import shape

from .harness import Measure, Row, Sample, Scale

GOAL = 0.8
RECORD_KIND = 3  # any: the journal does not look into what it keeps
GROUPS = {500: (16, 120), 5_000: (8, 60)}  # events a record: records a group, groups
AT_MOST_BYTES = 16 << 30


class RawFile:
    """The yardstick: a file with its room reserved."""

    def __init__(self, path: Path, size: int) -> None:
        self._file, self._at = os.open(path, os.O_RDWR | os.O_CREAT, 0o600), 0
        os.posix_fallocate(self._file, 0, size)
        os.fsync(self._file)

    def write(self, group: Sequence[bytes]) -> None:
        """One group, durable when this returns."""
        write_all(self._file, list(group), self._at)
        os.fdatasync(self._file)
        self._at += sum(map(len, group))

    def close(self) -> None:
        """Let it go."""
        os.close(self._file)


class OurJournal:
    """The subject."""

    def __init__(self, folder: Path) -> None:
        self._journal = Journal.open(LocalDisk(folder), "feeds/bench", journal_bytes_at_most=AT_MOST_BYTES)
        self._journal.replenish()

    def write(self, group: Sequence[bytes]) -> None:
        """One group, durable when this returns; the spare segment is made behind it, as the service does."""
        journal = self._journal
        for record in group:
            journal.append(journal.next_lsn, RECORD_KIND, [record])
        if journal.flush() != journal.next_lsn:
            raise RuntimeError("the journal did not make durable what it was given: no figure would mean anything")

    def replenish(self) -> None:
        """Behind the answers, not counted."""
        if self._journal.lacks_spare:
            self._journal.replenish()

    @property
    def syncs(self) -> int:
        """So far."""
        return self._journal.counters.syncs

    def close(self) -> None:
        """Let it go."""
        self._journal.close()


def _visit(groups: Sequence[Sequence[bytes]]) -> Sample:
    total = sum(len(record) for group in groups for record in group)
    with tempfile.TemporaryDirectory(prefix="strandline-bench-") as name:
        raw, ours = RawFile(Path(name) / "raw", total), OurJournal(Path(name))
        raw_s, our_s = [], []
        for group in groups:
            begin = time.perf_counter()
            raw.write(group)
            between = time.perf_counter()
            ours.write(group)
            our_s.append(time.perf_counter() - between)
            raw_s.append(between - begin)
            ours.replenish()
        beside = {
            "MB/s": total / sum(our_s) / 1e6,
            "raw MB/s": total / sum(raw_s) / 1e6,
            "ms a group": 1000 * statistics.median(our_s),
            "raw ms a group": 1000 * statistics.median(raw_s),
            "syncs": float(ours.syncs),
            "groups": float(len(groups)),
        }
        raw.close()
        ours.close()
    return Sample(sum(raw_s) / sum(our_s), beside)


def groups_of(record_events: int, scale: Scale) -> list[list[bytes]]:
    """Groups of records, each as long as a body of so many events."""
    records, groups = GROUPS[record_events]
    groups = max(2, groups // (10 if scale.is_quick else 1))
    trace = shape("exponential", record_events * records, scale.seed)
    cut = [bytes(body.payload) for body in bodies(trace, cut_by_count(trace, record_events), Style("ns"))]
    return [cut] * groups


def _prepare(record_events: int, scale: Scale) -> Measure:
    groups = groups_of(record_events, scale)
    return lambda: _visit(groups)


def rows(scale: Scale) -> list[Row]:
    """A row for each size of record."""
    del scale
    return [
        Row(
            f"journal against write and fdatasync, {records} records of {events:,} events a group", "x",
            partial(_prepare, events), GOAL, "at least",
        )
        for events, (records, _) in GROUPS.items()
    ]  # fmt: skip

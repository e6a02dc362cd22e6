"""Events as samples of series: which series a feed's events feed, and their values as a receiver takes them.

Reads the journal's lines, so it runs in the sink's own thread. No HTTP and no position lives here; the fate of a sample
is decided in `remote_write_settling`.
"""

from __future__ import annotations

from bisect import bisect_left, bisect_right
from collections.abc import Sequence
from dataclasses import dataclass, field
from operator import itemgetter
from typing import Any, NamedTuple

import numpy as np

from ..core.columns import Batch, Times
from ..errors import StrandlineError
from ..ports import Lines
from .event_fields import EventFields
from .remote_write_series import LABEL_BYTES_AT_MOST, Pairs, SeriesRule
from .remote_write_wire import labels_bytes
from .repairs import Repair

SERIES_KNOWN_AT_MOST = 200_000  # some 0.5 KiB each; beyond it they are forgotten, and met again as new ones
MS_NS = 1_000_000
Place = tuple[int, int]  # number of a batch, and how many of its rows


@dataclass(slots=True, eq=False)
class Series:
    """One series: its labels as they are sent, and the last sample that the receiver is known to hold of it."""

    labels: bytes
    last_ms: int | None = None
    last_value: float = 0.0


class Sample(NamedTuple):
    """One sample, and the row of the event that it came from, counted from the start of its group of batches."""

    row: int
    series: Series
    time_ms: int
    value: float


@dataclass(frozen=True, slots=True)
class Group:
    """Batches of one lane, one after the other, as samples in order of row; rows count from 0 through all of them.

    `faults` are (row, reason) of samples that cannot be sent. A place is a batch's number and how many of its rows.
    """

    numbers: list[int]  # of the batches
    ends: list[int]  # row after the last of each batch
    samples: list[Sample] = field(default_factory=list)
    faults: list[tuple[int, str]] = field(default_factory=list)

    @property
    def rows(self) -> int:
        """Events of all batches."""
        return self.ends[-1] if self.ends else 0

    def row(self, place: Place) -> int:
        """How many rows stand before a place, as far as its batch is one of these."""
        index = bisect_left(self.numbers, place[0])
        before = self.ends[index - 1] if index else 0
        inside = index < len(self.numbers) and self.numbers[index] == place[0]
        return before + place[1] if inside else before

    def place(self, row: int) -> Place:
        """The place behind so many rows, at least one."""
        index = bisect_left(self.ends, row)
        return self.numbers[index], row - (self.ends[index - 1] if index else 0)

    def whole(self, row: int) -> int | None:
        """Number of the last batch that so many rows hold as a whole, if there is one."""
        index = bisect_right(self.ends, row)
        return self.numbers[index - 1] if index else None

    def between(self, row: int, end: int) -> tuple[list[Sample], list[tuple[int, str]]]:
        """Samples and faults of some of the rows."""
        samples = self.samples[bisect_left(self.samples, (row,)) : bisect_left(self.samples, (end,))]
        return samples, [fault for fault in self.faults if row <= fault[0] < end]


class SampleMaker:
    """Makes samples of one feed's batches and remembers the series it met."""

    def __init__(
        self,
        rules: Sequence[SeriesRule],
        external_labels: Pairs,
        *,
        series_known_at_most: int = SERIES_KNOWN_AT_MOST,
    ) -> None:
        """Raises ingest.pointer.PointerError."""
        named = (at for rule in rules for at in (rule.value, *(label_at for _, label_at in rule.labels)))
        pointers = list(dict.fromkeys(named))
        self._fields = EventFields(pointers)
        self._columns = {pointer: index for index, pointer in enumerate(pointers)}
        self._rules, self._external = rules, dict(external_labels)
        self._known: dict[tuple[int | str | None, ...], Series] = {}  # by number of the rule and values of its labels
        self._by_labels: dict[bytes, Series] = {}  # two rules may feed one series
        self._known_at_most = series_known_at_most

    def group(self, batches: Sequence[Batch], lines: Lines) -> Group:
        """The samples of batches of one lane. Raises StrandlineError where the journal gives other lines."""
        if len(self._known) > self._known_at_most:
            self._known.clear()
            self._by_labels.clear()
        ends = np.cumsum([len(batch) for batch in batches], dtype=np.int64).tolist()
        group = Group([batch.number for batch in batches], ends)
        for batch, end in zip(batches, ends, strict=True):
            if len(batch):
                self._add(group, end - len(batch), batch.times, lines.ndjson(batch))
        return self._sorted(group)

    def repair(self, repair: Repair) -> Group:
        """The samples of a repair batch."""
        group = Group([repair.number], [len(repair.rows)])
        times = np.array([row.time_ns for row in repair.rows], dtype=np.int64)
        self._add(group, 0, times, b"".join(row.event + b"\n" for row in repair.rows))
        return self._sorted(group)

    def _sorted(self, group: Group) -> Group:
        if len(self._rules) > 1:
            group.samples.sort(key=itemgetter(0))
        return group

    def _add(self, group: Group, first_row: int, times: Times, block: bytes) -> None:
        found = self._fields.columns(block, len(times))
        if len(found[0]) != len(times):
            raise StrandlineError(f"{len(times)} events were asked for, but the journal gave {len(found[0])} lines")
        times_ms = (times // MS_NS).tolist()  # rounded down, before 1970 too
        for number in range(len(self._rules)):
            self._add_rule(group, number, first_row, times_ms, found)

    def _add_rule(self, group: Group, number: int, row: int, times_ms: list[int], found: list[list[Any]]) -> None:
        rule = self._rules[number]
        columns = [list(map(label_text, found[self._columns[at]])) for _, at in rule.labels]
        keys: Any = zip(*columns, strict=True) if columns else ((),) * len(times_ms)
        known, samples, faults = self._known, group.samples, group.faults
        for key, value, time_ms in zip(keys, found[self._columns[rule.value]], times_ms, strict=True):
            measured = value if value.__class__ is float else _number(value)
            if measured is None:
                faults.append((row, "value_missing"))
            elif None in key:
                faults.append((row, "label_invalid"))
            else:
                series = known.get((number, *key)) or self._new(number, key)
                samples.append(Sample(row, series, time_ms, measured))
            row += 1

    def _new(self, number: int, key: tuple[str, ...]) -> Series:
        rule = self._rules[number]
        labels = self._external | {name: text for (name, _), text in zip(rule.labels, key, strict=True) if text}
        sent = labels_bytes([*labels.items(), ("__name__", rule.name)])
        series = self._by_labels.setdefault(sent, Series(sent))
        self._known[number, *key] = series
        return series


def label_text(value: Any) -> str | None:
    """A label's value as text; "" where there is none, which to a receiver is no label; None for what cannot be one."""
    if value.__class__ is str:
        return value if len(value) <= LABEL_BYTES_AT_MOST // 4 or len(value.encode()) <= LABEL_BYTES_AT_MOST else None
    if value is None:
        return ""
    if value is True or value is False:
        return "true" if value else "false"
    if value.__class__ is int and -(10**300) < value < 10**300:
        return str(value)
    return None


def _number(value: Any) -> float | None:
    """A number other than a float as a double, rounded where it must be; None for what is no number, or too large."""
    if value.__class__ is not int:
        return None
    try:
        return float(value)
    except OverflowError:
        return None

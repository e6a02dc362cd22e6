"""Events as samples of series: which series a feed's events feed, and their values as a receiver takes them.

Reads the journal's lines, so it runs in the sink's own thread. No HTTP and no position lives here; the fate of a sample
is decided in `remote_write_settling`.
"""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from operator import itemgetter
from typing import Any, NamedTuple

import msgspec
import numpy as np

from ..core.columns import Batch
from ..errors import StrandlineError
from ..ports import Lines
from .event_fields import EventFields
from .remote_write_wire import labels_bytes

# "Data model" of the Prometheus documentation: metric names, label names; two underscores lead names of its own.
METRIC_NAME = re.compile("[a-zA-Z_:][a-zA-Z0-9_:]*")
LABEL_NAME = re.compile("(?!__)[a-zA-Z_][a-zA-Z0-9_]*")
LABEL_BYTES_AT_MOST = 1024  # of a value that comes from an event
SERIES_KNOWN_AT_MOST = 200_000  # some 0.5 KiB each; beyond it they are forgotten, and met again as new ones
MS_NS = 1_000_000

# Why a sample is not sent, or not taken -> what it means (shown in the documentation). The counts of the sink.
REASONS: dict[str, str] = {
    "value_missing": "the event has no number at the series' `value`; the sample is not sent",
    "label_invalid": "a label is no string, integer or boolean, or is longer than 1,024 bytes; the sample is not sent",
    "equal_time": "the series has another value at the same millisecond: within a request the last to come is sent, "
    "one that follows in a later request is not",
    "future": "the time lies further than `ahead_at_most` beyond the receiver's clock; the event is kept as refused",
    "out_of_order": "the receiver has a later sample of the series already; the event is kept as refused",
    "duplicate_timestamp": "the receiver has another value at this time; the event is kept as refused",
    "out_of_bounds": "the receiver takes nothing so old any more; the event is kept as refused",
    "too_old": "the time lies before the receiver's own out-of-order window; the event is kept as refused",
    "already_there": "an answer was lost, and the receiver had taken the sample; nothing is missing",
}


class SeriesRule(msgspec.Struct, frozen=True):
    """One series name that events feed: pointers to its value and to those of its labels."""

    name: str
    value: str
    labels: Mapping[str, str] = {}


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
    """Batches of one lane, one after the other, as samples in order of row.

    `faults` are (row, reason) of samples that cannot be sent.
    """

    numbers: list[int]  # of the batches
    ends: list[int]  # row after the last of each batch
    samples: list[Sample] = field(default_factory=list)
    faults: list[tuple[int, str]] = field(default_factory=list)

    @property
    def rows(self) -> int:
        return self.ends[-1] if self.ends else 0


class SampleMaker:
    """Makes samples of one feed's batches and remembers the series it met."""

    def __init__(
        self,
        rules: Sequence[SeriesRule],
        external_labels: Mapping[str, str],
        *,
        series_known_at_most: int = SERIES_KNOWN_AT_MOST,
    ) -> None:
        """Raises ingest.pointer.PointerError."""
        pointers = list(dict.fromkeys(at for rule in rules for at in (rule.value, *rule.labels.values())))
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
                self._add(group, batch, end - len(batch), lines)
        if len(self._rules) > 1:
            group.samples.sort(key=itemgetter(0))
        return group

    def _add(self, group: Group, batch: Batch, first_row: int, lines: Lines) -> None:
        rows = len(batch)
        found = self._fields.columns(lines.ndjson(batch), rows)
        if len(found[0]) != rows:
            raise StrandlineError(f"batch {batch.number} has {rows} events, but the journal gave {len(found[0])} lines")
        times_ms = (batch.times // MS_NS).tolist()  # rounded down, before 1970 too
        for number in range(len(self._rules)):
            self._add_rule(group, number, first_row, times_ms, found)

    def _add_rule(
        self, group: Group, number: int, row: int, times_ms: list[int], found: list[list[Any]]
    ) -> None:
        rule = self._rules[number]
        columns = [list(map(label_text, found[self._columns[at]])) for at in rule.labels.values()]
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
        labels = self._external | {name: text for name, text in zip(rule.labels, key, strict=True) if text}
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

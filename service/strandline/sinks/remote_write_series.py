"""The series that a remote-write sink feeds, as a user asks for them, and what may become of a sample.

Data and rules only, light enough for the configuration to import: no codec, no numpy and no values live here.
"""

from __future__ import annotations

import re
from dataclasses import dataclass

# "Data model" in the Prometheus documentation; names that begin with two underscores are the receiver's own.
METRIC_NAME = re.compile("[a-zA-Z_:][a-zA-Z0-9_:]{0,199}")
LABEL_NAME = re.compile("(?!__)[a-zA-Z_][a-zA-Z0-9_]{0,199}")
LABELS_AT_MOST = 32  # of a series that come from the event, and as many that are fixed
LABEL_BYTES_AT_MOST = 1024  # of a label's value

Pairs = tuple[tuple[str, str], ...]

# Why a sample is not sent, or is not taken -> what that means (shown in the documentation). The sink counts by these.
REASONS: dict[str, str] = {
    "value_missing": "no number stands at the series' `value`: the sample is not sent",
    "label_invalid": "a label is no string, integer or boolean, or is longer than 1,024 bytes: the sample is not sent",
    "equal_time": "the series has another value in the same millisecond: of one request the last to come is sent, and "
    "one that follows in a later request is not",
    "future": "the time lies further than `ahead_at_most` beyond the receiver's clock: the event is kept as refused",
    "out_of_order": "the receiver has a later sample of the series already: the event is kept as refused",
    "duplicate_timestamp": "the receiver has another value at that time already: the event is kept as refused",
    "out_of_bounds": "the receiver takes nothing as old as that any more: the event is kept as refused",
    "too_old": "the time lies before the receiver's own out-of-order window: the event is kept as refused",
    "already_there": "an answer was lost, and the receiver turned out to hold the sample: nothing is missing",
}


@dataclass(frozen=True, slots=True)
class SeriesRule:
    """One series name that events feed: JSON Pointers to its value and to each of its labels (name, pointer)."""

    name: str
    value: str
    labels: Pairs = ()

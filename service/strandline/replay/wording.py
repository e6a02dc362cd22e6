"""How figures of an advice read: durations, counts, shares, and the names of reordering figures. Values in, words out.

Text output and report take their words from here, so that they say the same. No figure is worked out here.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from typing import Any, NamedTuple

import numpy as np

from strandline.config_units import duration_text

SECOND_NS = 1_000_000_000
UNKNOWN = "unknown"
NO_LINES = "no lines to paste: the verdict does not support this slack"
# In the order of the answers; the text, and the section of the RFC that says how it is counted ("": of our own).
REORDERING = {
    "events": ("events looked at", ""),
    "reordered": ("reordered: behind a newer one", "RFC 4737, 3.3"),
    "reordered_ratio": ("reordered, share of all", "RFC 4737, 4.1"),
    "extent_mean": ("extent, mean (positions too late)", "RFC 4737, 4.2"),
    "extent_max": ("extent, greatest", "RFC 4737, 4.2"),
    "late_time_mean_ns": ("late time, mean", "RFC 4737, 4.3"),
    "late_time_max_ns": ("late time, longest", "RFC 4737, 4.3"),
    "discontinuities": ("reordering discontinuities", "RFC 4737, 4.5"),
    "gap_mean": ("gap between them, mean (positions)", "RFC 4737, 4.5"),
    "free_runs": ("runs free of reordering", "RFC 4737, 4.6"),
    "free_run_mean": ("such a run, mean length", "RFC 4737, 4.6"),
    "n_reordering_greatest": ("n-reordering, greatest n", "RFC 4737, 5.3"),
    "three_reordered_share": ("3-reordered, share of all", "RFC 4737, 5.3"),
    "sorting_slots": ("slots that a sorting buffer needs", ""),
    "threshold": ("threshold of displacement", "RFC 5236, 4"),
    "density": ("reorder density at displacement", "RFC 5236, 4"),
    "density_beyond_threshold": ("displaced by more than the threshold", "RFC 5236, 4"),
    "buffer_occupancy_mean": ("buffer occupancy, mean", "RFC 5236, 5"),
    "buffer_occupancy_max": ("buffer occupancy, greatest", "RFC 5236, 5"),
}
SEQUENCE = {
    "events": ("events looked at", ""),
    "unnumbered": ("of them without a whole number there", ""),
    "quarantined_lines": ("lines in quarantine, whose numbers look lost", ""),
    "received": ("numbers received, repeats too", ""),
    "duplicates": ("repeats of a number", "RFC 4737, 3.6"),
    "in_order": ("in order", "RFC 4737, 3.3"),
    "late": ("late: filled a gap", ""),
    "before_first": ("below the first number heard of their source", ""),
    "reordered_ratio": ("reordered (the two above), share of all", "RFC 4737, 4.1"),
    "gaps": ("gaps that opened", "RFC 4737, 3.4"),
    "gaps_filled": ("gaps that filled altogether", ""),
    "lost": ("numbers that never came: lost upstream", ""),
    "may_fill_yet": ("of them may come yet: missing no longer than the latest took", ""),
    "lost_share": ("lost, share of those that were sent", ""),
    "extent_mean": ("extent, mean (positions too late)", "RFC 4737, 4.2"),
    "extent_max": ("extent, greatest", "RFC 4737, 4.2"),
    "late_time_ns_mean": ("late time, mean", "RFC 4737, 4.3"),
    "late_time_ns_p50": ("late time, median", "RFC 4737, 4.3"),
    "late_time_ns_p99": ("late time, 99 in 100 at most", "RFC 4737, 4.3"),
    "late_time_ns_max": ("late time, longest", "RFC 4737, 4.3"),
    "n_reordering_greatest": ("n-reordering, greatest n", "RFC 4737, 5.3"),
    "sorting_slots": ("slots that a sorting buffer needs", ""),
}


class Row(NamedTuple):
    """A figure to be shown: what it is, its value, the value in words, and where its definition stands."""

    name: str
    value: Any
    text: str
    defined_in: str


def decimal(share: float) -> str:
    """A share as a configuration takes it, without an exponent."""
    return np.format_float_positional(share, trim="0")


def spelled(ns: int) -> str:
    """A duration as a configuration takes it, exactly: in seconds from one second up, such as 19.1s."""
    if ns < SECOND_NS:
        return duration_text(ns)
    whole, rest = divmod(ns, SECOND_NS)
    return f"{whole}.{rest:09d}".rstrip("0").rstrip(".") + "s"


def slack_text(ns: int) -> str:
    """A slack among others, exactly, all in seconds: 0.0466s, 12.1s."""
    return np.format_float_positional(ns / SECOND_NS, trim="-") + "s"


def time_text(ns: float | None) -> str:
    """A duration to read: in seconds to the millisecond."""
    return UNKNOWN if ns is None or math.isnan(ns) else f"{ns / 1e9:.3f}s"


def value_text(value: float | None) -> str:
    """A count or another number."""
    if value is None:
        return UNKNOWN
    return f"{value:,}" if isinstance(value, int) else f"{value:,.4g}" if value < 1000 else f"{value:,.0f}"


def share_text(share: float | None) -> str:
    """A share between 0 and 1."""
    if share is None:
        return UNKNOWN
    # Three digits, and never an exponent: 0.0000499, not 4.99e-05.
    return np.format_float_positional(share, precision=3, fractional=False, trim="-")


def rows_of(figures: Mapping[str, Any], names: Mapping[str, tuple[str, str]]) -> Iterator[Row]:
    """The figures that have a name, in the order of the names; those by displacement one row each."""
    for key, (name, defined_in) in names.items():
        value = figures[key]
        for part, each in value.items() if isinstance(value, dict) else (("", value),):
            text = time_text(each) if "_ns" in key else value_text(each)
            yield Row(f"{name} {part}".strip(), each, text, defined_in)


def gap_text(answer: Mapping[str, Any]) -> str | None:
    """A sentence where one part of an advice is nearly empty, from the answer as plain values; else None."""
    part = answer["nearly_empty"]
    if part is None:
        return None
    events, both = answer[part]["events"], answer["first"]["events"] + answer["second"]["events"]
    return (
        f"the {part} part of the time is nearly empty: it holds {events:,} of {both:,} events. Look for a gap in the "
        "capture; choose another part with --learn, or capture a stretch without the gap"
    )


def range_text(first: int, last: int) -> str:
    """Sequence numbers from first to last."""
    return str(first) if first == last else f"{first} to {last}"

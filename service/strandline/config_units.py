"""Durations and sizes as people write them, to whole nanoseconds and bytes and back, exactly.

Only the notation lives here: which key takes which unit is `config_model`. No floats anywhere: "1.1s" is 1,100,000,000
ns, not the nearest double. One number and one unit, without a space: "250ms", "5s", "1.5m"; "64MiB", "1GB".
"""

from __future__ import annotations

import re
from collections.abc import Mapping

WHOLE_AT_MOST = 2**63 - 1  # results are carried as int64

DURATION_UNITS: dict[str, int] = {
    "ns": 1,
    "us": 1_000,
    "ms": 1_000_000,
    "s": 1_000_000_000,
    "m": 60 * 1_000_000_000,
    "h": 3_600 * 1_000_000_000,
    "d": 86_400 * 1_000_000_000,
}

SIZE_UNITS: dict[str, int] = {
    "B": 1,
    "kB": 10**3,
    "KiB": 2**10,
    "MB": 10**6,
    "MiB": 2**20,
    "GB": 10**9,
    "GiB": 2**30,
    "TB": 10**12,
    "TiB": 2**40,
}

# Other spellings of a unit, to suggest the right one; they are not accepted.
CUSTOMARY: dict[str, tuple[str, ...]] = {
    "ns": ("nsec", "nanos", "nanosecond", "nanoseconds"),
    "us": ("\u00b5s", "\u03bcs", "usec", "micros", "microsecond", "microseconds"),
    "ms": ("msec", "millis", "millisecond", "milliseconds"),
    "s": ("sec", "secs", "second", "seconds"),
    "m": ("min", "mins", "minute", "minutes"),
    "h": ("hr", "hrs", "hour", "hours"),
    "d": ("day", "days"),
}

# 40 digits before and after the point are far more than int64 needs, and bound the work on hostile text.
_AMOUNT = re.compile(r"([0-9]{1,40})(?:\.([0-9]{1,40}))?([A-Za-z\u00b5\u03bc]*)", re.ASCII)


def duration_ns(text: str) -> int:
    """Nanoseconds of a duration such as "250ms". Raises ValueError with a sentence for a person."""
    return _whole(text, DURATION_UNITS, "duration", "5s", "nanosecond")


def size_bytes(text: str) -> int:
    """Bytes of a size such as "64MiB". Raises ValueError with a sentence for a person."""
    return _whole(text, SIZE_UNITS, "size", "64MiB", "byte")


def duration_text(ns: int) -> str:
    """The spelling in the largest unit that needs no point; duration_ns gives the same number back."""
    return _spelled(ns, DURATION_UNITS, "0s")


def size_text(size: int) -> str:
    """The spelling in the largest unit that needs no point; size_bytes gives the same number back."""
    return _spelled(size, SIZE_UNITS, "0B")


def _whole(text: str, units: Mapping[str, int], noun: str, sample: str, smallest: str) -> int:
    """The amount in the smallest unit."""
    match = _AMOUNT.fullmatch(text)
    if match is None:
        parts = text[:100].split()
        closed = "".join(parts) if parts[1:] and parts[1] in units else ""
        meant = f'; did you mean "{closed}"?' if _AMOUNT.fullmatch(closed) else ""
        raise ValueError(f'is no {noun}: write one number and one unit, such as "{sample}"{meant}')
    whole, fraction, unit = match[1], match[2] or "", match[3]
    if unit not in units:
        raise ValueError(_unit_fault(unit, units, noun, sample))
    amount, remainder = divmod(int(whole + fraction) * units[unit], int("1" + "0" * len(fraction)))
    if remainder:
        raise ValueError(f"is no whole number of {smallest}s: the smallest {noun} is one {smallest}")
    if amount > WHOLE_AT_MOST:
        largest = list(units)[-1]
        raise ValueError(f'is too large: at most "{WHOLE_AT_MOST // units[largest]}{largest}" can be held')
    return amount


def _unit_fault(unit: str, units: Mapping[str, int], noun: str, sample: str) -> str:
    """The sentence for a unit that is missing or unknown, with the unit that was likely meant."""
    known = ", ".join(units)
    if not unit:
        return f'has no unit: write text such as "{sample}" (units: {known})'
    spelled = unit.lower()
    meant = [name for name in units if name.lower() == spelled or spelled in CUSTOMARY.get(name, ())]
    # Near misses by letters alone would turn "min" into "ms": only spellings that can mean one thing are suggested.
    meant = meant or [name for name in units if name[0].lower() == spelled and name.endswith("B")]
    question = f"; did you mean {' or '.join(meant)}?" if meant else ""
    return f'has an unknown unit: "{unit[:16]}" is none of {known}{question}'


def _spelled(amount: int, units: Mapping[str, int], zero: str) -> str:
    """The amount in the largest unit that leaves a whole number."""
    if amount == 0:
        return zero
    spellings = [f"{amount // unit}{name}" for name, unit in units.items() if amount % unit == 0]
    return spellings[-1]

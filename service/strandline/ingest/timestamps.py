"""Event times: RFC 3339 text or an integer in a stated unit, to int64 nanoseconds since 1970 UTC.

Here live the parser for one text, the same law for a whole column, the way back to text, and units. No JSON, no clock.
`datetime.datetime` is not used: it holds microseconds, rounds what is finer, refuses leap seconds and accepts forms
that RFC 3339 forbids.

What is decided here, where the standard leaves room:

* Digits beyond nanoseconds are cut off, so a time moves at most 1 ns towards the past, also before 1970. A fraction
  never rolls into the next second.
* Second 60 stands only where UTC had a leap second (RFC 3339 appendix D, and the five since), shifted by the offset.
  POSIX time cannot hold it: it becomes the second that follows, 1990-12-31T23:59:60.5Z the same instant as
  1991-01-01T00:00:00.5Z. A leap second announced later than this table is refused until the table knows it.
* `-00:00` is the instant of `Z`. A suffix in brackets (RFC 9557) is refused.
"""

from __future__ import annotations

import datetime
import re
from collections.abc import Callable, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..core.columns import TIME_MAX, TIME_MIN, Times

Texts = Sequence[str] | Sequence[bytes]

UNIT_NS = {"s": 1_000_000_000, "ms": 1_000_000, "us": 1_000, "ns": 1}

_SECOND_NS = 1_000_000_000
_ORDINAL_1970 = 719_163  # datetime.date's own number of 1970-01-01
_MONTH_LENGTHS = (31, 28, 31, 30, 31, 30, 31, 31, 30, 31, 30, 31)
_FORM = re.compile(
    r"([0-9]{4})-([0-9]{2})-([0-9]{2})[Tt]([0-9]{2}):([0-9]{2}):([0-9]{2})(?:\.([0-9]+))?"
    r"(?:[Zz]|([+-])([0-9]{2}):([0-9]{2}))"
)
# Years in which every instant, at any offset, fits int64 nanoseconds; at the edges the scalar parser decides.
_SAFE_YEARS = (1678, 2261)
# Below this many rows of one form the set-up of the columns costs more than the scalar parser (measured: even at 12).
_ROWS_AT_LEAST = 12

# Leap seconds at the end of the last minute of these UTC dates: RFC 3339 appendix D up to 1998, then the tz database.
_LEAP_SECOND_DATES = (
    *((year, 6, 30) for year in (1972, 1981, 1982, 1983, 1985, 1992, 1993, 1994, 1997, 2012, 2015)),
    *((year, 12, 31) for year in (*range(1972, 1980), 1987, 1989, 1990, 1995, 1998, 2005, 2008, 2016)),
)


class TimestampError(ValueError):
    """A text or number that is no event time. `reason` is "time_invalid" or "time_out_of_range"."""

    def __init__(self, reason: str, detail: str) -> None:
        super().__init__(detail)
        self.reason = reason


def parse_rfc3339(text: str | bytes) -> int:
    """Nanoseconds since 1970 UTC of one RFC 3339 date-time. Raises TimestampError."""
    if isinstance(text, bytes):
        text = text.decode("latin-1")  # whatever is not ASCII fails the form below, as it must
    match = _FORM.fullmatch(text)
    if match is None:
        raise TimestampError("time_invalid", "not an RFC 3339 time such as 2026-01-31T12:34:56.789Z")
    year, month, day, hour, minute, second = (int(part) for part in match.group(1, 2, 3, 4, 5, 6))
    _check_date(year, month, day)
    if hour > 23 or minute > 59 or second > 60:
        raise TimestampError("time_invalid", f"there is no time {hour:02}:{minute:02}:{second:02}")
    minutes = _days_since_1970(year, month, day) * 1440 + hour * 60 + minute - _offset_minutes(match)
    if second == 60 and minutes not in _LEAP_MINUTES:
        raise TimestampError("time_invalid", "second 60, but UTC had no leap second there")
    fraction = (match[7] or "")[:9].ljust(9, "0")
    time = (minutes * 60 + second) * _SECOND_NS + int(fraction)
    if not TIME_MIN <= time <= TIME_MAX:
        raise TimestampError("time_out_of_range", "int64 nanoseconds reach from 1677-09-21 to 2262-04-11 only")
    return time


def _check_date(year: int, month: int, day: int) -> None:
    if not 1 <= month <= 12 or not 1 <= day <= _month_length(year, month):
        raise TimestampError("time_invalid", f"there is no date {year:04}-{month:02}-{day:02}")


def _offset_minutes(match: re.Match[str]) -> int:
    if match[8] is None:
        return 0
    hours, minutes = int(match[9]), int(match[10])
    if hours > 23 or minutes > 59:
        raise TimestampError("time_invalid", f"there is no offset {match[8]}{hours:02}:{minutes:02}")
    return (hours * 60 + minutes) * (-1 if match[8] == "-" else 1)


def _is_leap(year: int) -> bool:
    return year % 4 == 0 and (year % 100 != 0 or year % 400 == 0)  # RFC 3339 appendix C


def _month_length(year: int, month: int) -> int:
    return _MONTH_LENGTHS[month - 1] + (month == 2 and _is_leap(year))


def _days_since_1970(year: int, month: int, day: int) -> int:
    """Days from 1970-01-01 to a date of the Gregorian calendar, extended backwards to year 0."""
    before = year - 1
    january = year * 365 + before // 4 - before // 100 + before // 400 - 719_527
    return january + sum(_month_length(year, earlier) for earlier in range(1, month)) + day - 1


_LEAP_MINUTES = frozenset(_days_since_1970(*date) * 1440 + 1439 for date in _LEAP_SECOND_DATES)


def format_rfc3339(time_ns: int) -> str:
    """The time in UTC, upper case, with the shortest of 0, 3, 6 or 9 fraction digits that loses nothing."""
    seconds, fraction = divmod(time_ns, _SECOND_NS)
    days, second = divmod(seconds, 86_400)
    date = datetime.date.fromordinal(_ORDINAL_1970 + days).isoformat()
    digits = f"{fraction:09}"
    while digits.endswith("000"):
        digits = digits[:-3]
    clock = f"{second // 3600:02}:{second // 60 % 60:02}:{second % 60:02}"
    return f"{date}T{clock}{'.' if digits else ''}{digits}Z"


def from_unit(value: int, unit: str) -> int:
    """Nanoseconds since 1970 UTC of an integer in `unit` (s, ms, us, ns). Raises TimestampError."""
    time = value * UNIT_NS[unit]
    if not TIME_MIN <= time <= TIME_MAX:
        raise TimestampError("time_out_of_range", f"{unit} since 1970 that int64 nanoseconds cannot hold")
    return time


def unit_bounds(unit: str) -> tuple[int, int]:
    """The least and the greatest integer in `unit` that int64 nanoseconds can hold."""
    factor = UNIT_NS[unit]
    return -(-TIME_MIN // factor), TIME_MAX // factor


def from_unit_column(values: NDArray[np.int64], unit: str) -> tuple[Times, NDArray[np.bool_] | None]:
    """`from_unit` for a column: the times, and which rows are out of range (None: no row is; their times are 0)."""
    if unit == "ns" or not len(values):
        return values, None
    least, greatest = unit_bounds(unit)
    factor = np.int64(UNIT_NS[unit])
    if least <= values.min() and values.max() <= greatest:
        return values * factor, None
    outside = (values < least) | (values > greatest)
    return np.where(outside, 0, values) * factor, outside


# --- a column of texts -------------------------------------------------------------------------------------------
#
# Two neighbouring digits are one 16-bit word, and a table of 65,536 entries turns the word into its share of the time
# or into _BAD. A `take` costs 0.8 ns a row; int64 arithmetic on single digits came to five times as much (measured).

_BAD = -(2**31)  # outweighs every sum of good shares (below 10^9), and 10^8 times of it still fit int64


def _pair_table(share: Callable[[int], int]) -> NDArray[np.int64]:
    """Two ASCII digits, read as one little-endian word, to share(0..99); everything else to _BAD."""
    table = np.full(65_536, _BAD, np.int64)
    for number in range(100):
        table[(48 + number // 10) | (48 + number % 10) << 8] = share(number)
    return table


def _share(least: int, greatest: int, factor: int) -> NDArray[np.int64]:
    return _pair_table(lambda number: number * factor if least <= number <= greatest else _BAD)


def _month_days() -> NDArray[np.int64]:
    """[leap year * 512 + month * 32 + day] to days since January 1st, _BAD where there is no such date."""
    table = np.full(1024, _BAD, np.int64)
    for leap, year in ((0, 2001), (1, 2000)):
        for month in range(1, 13):
            for day in range(1, _month_length(year, month) + 1):
                place = leap * 512 + month * 32 + day
                table[place] = _days_since_1970(year, month, day) - _days_since_1970(year, 1, 1)
    return table


_NUMBER, _CENTURY = _share(0, 99, 1), _share(0, 99, 100)
_MONTH, _DAY = _share(1, 12, 32), _share(1, 31, 1)
_HOUR, _MINUTE, _SECOND = _share(0, 23, 3600), _share(0, 59, 60), _share(0, 59, 1)
_DIGIT = np.array([byte - 48 if 48 <= byte <= 57 else _BAD for byte in range(256)], np.int64)
_MONTH_DAYS = _month_days()
_YEAR_DAYS = np.array(
    [_days_since_1970(year, 1, 1) if _SAFE_YEARS[0] <= year <= _SAFE_YEARS[1] else _BAD for year in range(10_000)]
)
_YEAR_LEAPS = np.array([_is_leap(year) * 512 for year in range(10_000)], np.int64)


def parse_rfc3339_column(texts: Texts) -> tuple[Times, dict[int, TimestampError]]:
    """`parse_rfc3339` for many texts: int64[n], and the rows that are no times (their time is 0) with the reason.

    Texts of one length and one kind of offset are taken apart together; whatever the columns do not cover (years at
    the edge of int64, leap seconds, more than nine digits, faults) goes through the scalar parser, row by row.
    """
    times = np.zeros(len(texts), np.int64)
    left: list[int] = []
    for rows, length, characters in _groups(texts):
        if characters is None:
            left.extend(rows.tolist())
        else:
            left.extend(_parse_group(rows, length, characters, times).tolist())
    errors: dict[int, TimestampError] = {}
    for row in sorted(left):
        try:
            times[row] = parse_rfc3339(texts[row])
        except TimestampError as error:
            errors[row] = error
    return times, errors


def parse_rfc3339_fixed(table: NDArray[np.uint8]) -> tuple[Times, NDArray[np.bool_]]:
    """`parse_rfc3339` for texts of one length, one a row, with a column more than they are long (its bytes count for
    nothing): int64[n], and which rows are no times (their time is 0)."""
    length = table.shape[1] - 1
    times, bad = np.zeros(len(table), np.int64), np.zeros(len(table), np.bool_)
    for row in _parse_group(np.arange(len(table)), length, np.ascontiguousarray(table).tobytes(), times).tolist():
        try:
            times[row] = parse_rfc3339(table[row, :length].tobytes())
        except TimestampError:
            bad[row] = True
    return times, bad


_Group = tuple[NDArray[np.int64], int, bytes | None]


def _groups(texts: Texts) -> list[_Group]:
    """Rows of one length, that length, and their characters one after the other with a byte between (None: too few).

    Equal lengths are the rule, and asking every text for its length costs as much as half the parsing: so first it is
    assumed, and proved by the line feeds put between the texts. n - 1 of them are in the column where they belong,
    and there is no other; so every text has the length of the first.
    """
    count = len(texts)
    if count < _ROWS_AT_LEAST:
        return [(np.arange(count), 0, None)]
    length = len(texts[0])
    joined = _joined(texts)
    if len(joined) == count * (length + 1):
        feeds = np.frombuffer(joined, np.uint8) == 10
        if feeds[length :: length + 1].all() and np.count_nonzero(feeds) == count:
            return [(np.arange(count), length, joined)]
    lengths = np.fromiter(map(len, texts), np.int64, count)
    order = np.argsort(lengths, kind="stable")
    cuts = np.flatnonzero(np.diff(lengths[order])) + 1
    groups: list[_Group] = []
    for rows in np.split(order, cuts):
        some: Any = [texts[row] for row in rows.tolist()] if len(rows) >= _ROWS_AT_LEAST else None
        groups.append((rows, int(lengths[rows[0]]), _joined(some) if some else None))
    return groups


def _joined(texts: Texts) -> bytes:
    """All texts, each followed by a line feed, one byte a character; what is not ASCII becomes `?`."""
    if isinstance(texts[0], bytes):
        return b"\n".join(texts) + b"\n"  # type: ignore[arg-type]
    return ("\n".join(texts) + "\n").encode("ascii", "replace")  # type: ignore[arg-type]


def _parse_group(rows: NDArray[np.int64], length: int, characters: bytes, times: Times) -> NDArray[np.int64]:
    """Fill in the times of texts of one length; return the rows that are left to the scalar parser."""
    if not 20 <= length <= 35:
        return rows
    matrix = np.frombuffer(characters, np.uint8).reshape(len(rows), length + 1)
    zulu = (matrix[:, length - 1] & 0xDF) == 0x5A  # z, Z
    left = np.ones(len(rows), np.bool_)
    for kind, suffix in ((zulu, 1), (~zulu, 6)):
        digits = length - suffix - 20
        if not kind.any() or not -1 <= digits <= 9 or digits == 0:
            continue
        found, good = _parse_matrix(matrix, length - suffix, suffix)
        good &= kind
        if good.all() and len(rows) == len(times):
            times[rows] = found
            return rows[:0]
        times[rows[good]] = found[good]
        left[good] = False
    return rows[left]


def _parse_matrix(matrix: NDArray[np.uint8], end: int, suffix: int) -> tuple[Times, NDArray[np.bool_]]:
    """Times of rows `YYYY-MM-DDTHH:MM:SS[.digits]`, `end` characters, then Z or +HH:MM; which rows are sound."""
    pairs = [_words(matrix, at) for at in (0, 2, 5, 8, 11, 14, 17)]
    year = _CENTURY.take(pairs[0], mode="clip") + _NUMBER.take(pairs[1], mode="clip")
    date = _MONTH.take(pairs[2], mode="clip") + _DAY.take(pairs[3], mode="clip")
    # A bad year or date is far below 0 and clipped to entry 0, which is bad in both tables.
    date += _YEAR_LEAPS.take(year, mode="clip")
    days = _YEAR_DAYS.take(year, mode="clip") + _MONTH_DAYS.take(date, mode="clip")
    second = _HOUR.take(pairs[4], mode="clip") + _MINUTE.take(pairs[5], mode="clip")
    second += _SECOND.take(pairs[6], mode="clip")
    good = (days > _BAD // 2) & (second >= 0)
    for at, mark in ((4, 0x2D), (7, 0x2D), (13, 0x3A), (16, 0x3A)):
        good &= matrix[:, at] == mark
    good &= (matrix[:, 10] & 0xDF) == 0x54  # t, T
    second += days * 86_400
    if suffix == 6:
        offset, sound = _offsets(matrix, end)
        second -= offset
        good &= sound
    second *= np.where(good, _SECOND_NS, 0)
    if end > 19:
        fraction = _fractions(matrix, end)
        good &= (matrix[:, 19] == 0x2E) & (fraction >= 0)
        second += fraction
    return second, good


def _words(matrix: NDArray[np.uint8], at: int) -> NDArray[np.uint16]:
    """Characters `at` and `at` + 1 of every row as little-endian words, in place (no copy)."""
    return np.ndarray((len(matrix),), "<u2", matrix.data, at, (matrix.shape[1],))


def _offsets(matrix: NDArray[np.uint8], at: int) -> tuple[NDArray[np.int64], NDArray[np.bool_]]:
    """Seconds of the offsets +HH:MM at character `at`, and which rows hold one."""
    offset = _HOUR.take(_words(matrix, at + 1), mode="clip") + _MINUTE.take(_words(matrix, at + 4), mode="clip")
    behind = matrix[:, at] == 0x2D
    sound = (behind | (matrix[:, at] == 0x2B)) & (matrix[:, at + 3] == 0x3A) & (offset >= 0)
    return np.where(behind, -offset, offset), sound


def _fractions(matrix: NDArray[np.uint8], end: int) -> NDArray[np.int64]:
    """Nanoseconds of the 1 to 9 digits from character 20 up to `end`; negative where not all are digits."""
    total: NDArray[np.int64] = np.zeros(len(matrix), np.int64)
    for at in range(20, end - 1, 2):
        total = total * 100 + _NUMBER.take(_words(matrix, at), mode="clip")
    if (end - 20) % 2:
        total = total * 10 + _DIGIT.take(matrix[:, end - 1], mode="clip")
    total *= 10 ** (29 - end)
    return total

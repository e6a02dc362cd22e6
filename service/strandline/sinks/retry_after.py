"""Retry-After: how long a server asks to be left alone (RFC 9110, 10.2.3 and 5.6.7). Text and time in, seconds out."""

from __future__ import annotations

import re
from datetime import UTC, datetime

SECOND_NS = 1_000_000_000
_SECONDS = re.compile("[0-9]{1,18}")
_DAYS = ("Mon", "Tue", "Wed", "Thu", "Fri", "Sat", "Sun")
_LONG_DAYS = ("Monday", "Tuesday", "Wednesday", "Thursday", "Friday", "Saturday", "Sunday")
_MONTHS = ("Jan", "Feb", "Mar", "Apr", "May", "Jun", "Jul", "Aug", "Sep", "Oct", "Nov", "Dec")
_MONTH, _TIME = f"(?P<month>{'|'.join(_MONTHS)})", "(?P<hour>[0-9]{2}):(?P<minute>[0-9]{2}):(?P<second>[0-9]{2})"
# Senders must write the first form; recipients must take all three. Letters count as they are written.
_FORMS = (
    re.compile(rf"(?:{'|'.join(_DAYS)}), (?P<day>[0-9]{{2}}) {_MONTH} (?P<year>[0-9]{{4}}) {_TIME} GMT"),
    re.compile(rf"(?:{'|'.join(_LONG_DAYS)}), (?P<day>[0-9]{{2}})-{_MONTH}-(?P<year>[0-9]{{2}}) {_TIME} GMT"),
    re.compile(rf"(?:{'|'.join(_DAYS)}) {_MONTH} (?P<day>[0-9]{{2}}| [0-9]) {_TIME} (?P<year>[0-9]{{4}})"),
)


def retry_after_s(text: str | None, now_ns: int) -> float | None:
    """Seconds from now on, at least 0; None where nothing is asked for or what stands there cannot be read."""
    if text is None:
        return None
    if _SECONDS.fullmatch(text):
        return float(text)
    instant_ns = http_date_ns(text, now_ns)
    return None if instant_ns is None else max(0.0, (instant_ns - now_ns) / SECOND_NS)


def http_date_ns(text: str, now_ns: int) -> int | None:
    """Nanoseconds since 1970 UTC of an HTTP-date in any of its three forms; None for what is none."""
    match = next(filter(None, (form.fullmatch(text) for form in _FORMS)), None)
    if match is None:
        return None
    year = int(match["year"])
    if len(match["year"]) == 2:
        year = _full_year(year, datetime.fromtimestamp(now_ns // SECOND_NS, UTC).year)
    second = int(match["second"])
    try:
        moment = datetime(
            year,
            _MONTHS.index(match["month"]) + 1,
            int(match["day"]),
            int(match["hour"]),
            int(match["minute"]),
            min(second, 59),
            tzinfo=UTC,
        )
    except ValueError:
        return None
    if second > 60:
        return None
    return (int(moment.timestamp()) + (second == 60)) * SECOND_NS


def _full_year(two_digits: int, this_year: int) -> int:
    """A year that would lie more than 50 years ahead is the most recent one in the past with the same digits."""
    year = this_year - this_year % 100 + two_digits
    return year - 100 if year > this_year + 50 else year

"""How a report says instants, durations, counts and foreign names. Values in, words out; pure.

Words are parts: texts of our own, and foreign ones (names of sources, reasons, a store's message), which each way of
writing makes harmless in its own way.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from string import Formatter

from ..cli_answers import harmless
from .facts import TENTH_NS

FOREIGN_AT_MOST = 200  # characters
SECOND_NS = 1_000_000_000
DAY_NS = 86_400 * SECOND_NS


@dataclass(frozen=True, slots=True)
class Foreign:
    """A text that came from outside."""

    text: str

    @property
    def shown(self) -> str:
        """As it may be shown on a screen: nothing unprintable, and not without end."""
        text = harmless(self.text)
        return text if len(text) <= FOREIGN_AT_MOST else text[: FOREIGN_AT_MOST - 1] + "…"


Part = str | Foreign
Words = tuple[Part, ...]


def say(template: str, **values: Part | Words) -> Words:
    """A sentence: `{name}` in the template stands for a part, or several."""
    parts: list[Part] = []
    for literal, name, _, _ in Formatter().parse(template):
        parts.append(literal)
        if name is not None:
            value = values[name]
            parts += value if isinstance(value, tuple) else (value,)
    return tuple(part for part in parts if part != "")


def joined(several: Sequence[Words], between: str = ", ", last: str = " and ") -> Words:
    """One, two and three."""
    parts: list[Part] = []
    for place, words in enumerate(several):
        if place:
            parts.append(last if place == len(several) - 1 else between)
        parts += words
    return tuple(parts)


def plain(words: Iterable[Part]) -> str:
    """As plain text."""
    return "".join(part.shown if isinstance(part, Foreign) else part for part in words)


def lasted(ns: int) -> str:
    """A duration to the tenth of a second: 0.4 s, 2 min 35 s, 1 h 5 min 3.2 s."""
    tenths = ns // TENTH_NS
    if not tenths:
        return "0 s" if not ns else "less than 0.1 s"
    hours, tenths = divmod(tenths, 36_000)
    minutes, tenths = divmod(tenths, 600)
    seconds = f"{tenths // 10}.{tenths % 10}".removesuffix(".0")
    parts = [f"{hours:,} h"] * bool(hours) + [f"{minutes} min"] * bool(minutes) + [f"{seconds} s"] * bool(tenths)
    return " ".join(parts)


def count(number: int, one: str, several: str | None = None) -> str:
    """A number with its noun: 1 event, 1,204 events, no events."""
    noun = one if number == 1 else several or f"{one}s"
    return f"{number:,} {noun}" if number else f"no {noun}"


def share(part: int, whole: int) -> str:
    """A share in percent: 94 %, 0.3 %."""
    percent = 100 * part / whole
    if part and percent < 0.01:
        return "less than 0.01 %"
    return f"{percent:.0f} %" if percent >= 10 or not part else f"{percent:.2g} %"


class Clock:
    """How instants read in one report: without the date where the whole time lies on one day (UTC)."""

    def __init__(self, from_ns: int, to_ns: int) -> None:
        self._day = from_ns // DAY_NS if from_ns // DAY_NS == (max(to_ns - 1, from_ns)) // DAY_NS else None

    def at(self, time_ns: int) -> str:
        """03:12:05.3, or 2026-05-01 03:12:05.3 where the date is needed."""
        text = full(time_ns)
        return text.partition(" ")[2] if time_ns // DAY_NS == self._day else text


def span(from_ns: int, to_ns: int) -> str:
    """2026-05-01 03:00:00 to 04:00:00 UTC."""
    return f"{full(from_ns)} to {Clock(from_ns, to_ns).at(to_ns)} UTC"


def full(time_ns: int) -> str:
    """2026-05-01 03:12:05.3, to the tenth of a second; what a calendar has no year for stays a number."""
    seconds, rest = divmod(time_ns, SECOND_NS)
    try:
        text = datetime.fromtimestamp(seconds, UTC).strftime("%Y-%m-%d %H:%M:%S")
    except (ValueError, OverflowError, OSError):
        return f"{time_ns} ns"
    return text + (f".{rest // TENTH_NS}" if rest >= TENTH_NS else "")

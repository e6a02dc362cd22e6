"""Values of options, as argparse reads them: durations, amounts, paces. Light: `--help` imports this."""

from __future__ import annotations

import argparse
import contextlib
import time

from .config_units import duration_ns
from .errors import ConfigError
from .hold_limits import HOLDS_AT_MOST


def hold(text: str) -> float:
    """A duration such as 5s, in ns."""
    try:
        return float(duration_ns(text))
    except ValueError as error:
        raise argparse.ArgumentTypeError(f"{text!a} {error}") from None


def duration(text: str) -> str:
    """A duration, as it was written: the service reads it."""
    hold(text)
    return text


def instant_ns(option: str, text: str, now_ns: int) -> int:
    """The instant that an option names: so long ago, or an RFC 3339 time. Raises ConfigError."""
    from .ingest.timestamps import parse_rfc3339  # noqa: PLC0415 - --help needs none of it

    with contextlib.suppress(ValueError):
        return now_ns - duration_ns(text)
    with contextlib.suppress(ValueError):
        return parse_rfc3339(text)
    says = f"{option} {text!a} is neither a duration such as 1h nor a time such as 2026-01-31T03:00:00Z"
    raise ConfigError([says])


def stretch(options: argparse.Namespace) -> dict[str, str]:
    """What --from and --to say, as a service takes it. Raises ConfigError."""
    from .ingest.timestamps import format_rfc3339  # noqa: PLC0415

    given = (("from", options.from_time), ("to", options.to_time))
    now_ns = time.time_ns()
    return {name: format_rfc3339(instant_ns(f"--{name}", text, now_ns)) for name, text in given if text is not None}


def amount(text: str) -> float:
    """A number that is not negative, such as 0.001 or 2e6."""
    try:
        given = float(text)
    except ValueError:
        given = -1.0
    if not 0 <= given < float("inf"):
        raise argparse.ArgumentTypeError(f"{text!a} is no number from 0 up")
    return given


def pace(text: str) -> float:
    """`recorded` (1), so many times as fast (`10x`), or `max` (0): the speed."""
    if text in ("max", "recorded"):
        return float(text == "recorded")
    try:
        speed = float(text.removesuffix("x"))
    except ValueError:
        speed = -1.0
    if not 0.001 <= speed <= 1_000_000:
        raise argparse.ArgumentTypeError(f"{text!a} is none of recorded, max, or 0.001x to 1000000x")
    return speed


def demo_seconds(text: str) -> int:
    """How long the demonstration runs."""
    return _whole(text, 8, 3_600)


def rows(text: str) -> int:
    """How many rows."""
    return _whole(text, 1, 10_000)


def holds(text: str) -> int:
    """How many holds."""
    return _whole(text, 1, HOLDS_AT_MOST)


def connections(text: str) -> int:
    """How many connections."""
    return _whole(text, 1, 64)


def recorded_seconds(text: str) -> int:
    """How long a recording lasts."""
    return _whole(text, 1, 86_400)


def _whole(text: str, least: int, greatest: int) -> int:
    given = int(text) if text.isascii() and text.isdecimal() and len(text) < 10 else -1
    if not least <= given <= greatest:
        raise argparse.ArgumentTypeError(f"{text!a} is outside of {least:,} to {greatest:,}")
    return given

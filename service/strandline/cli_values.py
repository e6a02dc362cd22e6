"""Values of options, as argparse reads them: durations, amounts, paces. Light: `--help` imports this."""

from __future__ import annotations

import argparse

from .config_units import duration_ns


def hold(text: str) -> float:
    """A duration such as 5s, in ns."""
    try:
        return float(duration_ns(text))
    except ValueError as error:
        raise argparse.ArgumentTypeError(f"{text!a} {error}") from None


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

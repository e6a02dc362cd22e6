"""Values of options, as argparse reads them: durations, amounts, paces. Light: `--help` imports this."""

from __future__ import annotations

import argparse
from pathlib import Path

from .config_units import duration_ns


def add_access(command: argparse.ArgumentParser) -> None:
    """Options of a command that calls a service which may ask for a token, or speak TLS."""
    command.add_argument("--token-file", type=Path, metavar="FILE", help="the token for it (default: STRANDLINE_TOKEN)")
    command.add_argument("--ca", type=Path, metavar="FILE", help="for https: the certificates to trust (PEM)")


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

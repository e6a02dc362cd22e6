"""What a sending shows while it lasts: a bar on a terminal, on stderr; a line now and then where there is none."""

from __future__ import annotations

import sys
import time
from types import TracebackType
from typing import NamedTuple

from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn

PLAIN_EVERY_S = 5.0


class Standing(NamedTuple):
    """How a sending stands. `behind_s`: how far the newest body left behind its time; the service is too slow then."""

    begun: int
    answered: int
    events: int  # that were answered with success
    refused: int
    resent: int
    behind_s: float
    seconds: float
    latency_s: float  # the longest since the last look, from due to answered


class Shown:
    """Shows a sending of so many bodies. `with` begins and ends it."""

    def __init__(self, bodies: int) -> None:
        self._bodies, self._console = bodies, Console(stderr=True)
        self._said = time.monotonic()
        columns = (BarColumn(), MofNCompleteColumn(), TextColumn("{task.description}"), TimeRemainingColumn())
        self._bar = Progress(*columns, console=self._console, transient=True)
        self._task = self._bar.add_task("", total=bodies)

    def __enter__(self) -> Shown:
        if self._console.is_terminal:
            self._bar.start()
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, at: TracebackType | None) -> None:
        if self._console.is_terminal:
            self._bar.stop()

    def show(self, now: Standing) -> None:
        """How it stands now."""
        if self._console.is_terminal:
            self._bar.update(self._task, completed=now.answered, description=said(now))
        elif time.monotonic() - self._said >= PLAIN_EVERY_S:
            self._said = time.monotonic()
            print(f"{now.answered:,} of {self._bodies:,} bodies answered; {said(now)}", file=sys.stderr)


def said(now: Standing) -> str:
    """A standing as words."""
    parts = [f"{now.events / max(now.seconds, 1e-9):,.0f} events/s", f"latency up to {now.latency_s * 1000:,.0f} ms"]
    if now.behind_s > 0.1:
        parts.append(f"{now.behind_s:.1f} s behind its schedule")
    if now.refused or now.resent:
        parts.append(f"refused {now.refused:,}, resent {now.resent:,}")
    return ", ".join(parts)

"""A bar on stderr for long work, where a person watches: how far, how fast, how long still."""

from __future__ import annotations

import contextlib
import sys
import time
from collections.abc import Callable, Iterator

SHOW_EVERY_S = 0.1


@contextlib.contextmanager
def bar(title: str, unit: str, total: int) -> Iterator[Callable[[int], None]]:
    """Yields what is to be told how much is done so far; it does nothing where stderr is no terminal."""
    if not sys.stderr.isatty():
        yield lambda done: None
        return
    from rich.console import Console  # noqa: PLC0415 - 60 ms, only where there is a terminal
    from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn  # noqa: PLC0415

    columns = TextColumn("{task.description}"), BarColumn(), TextColumn("{task.fields[speed]}"), TimeRemainingColumn()
    with Progress(*columns, console=Console(stderr=True)) as shown:
        task = shown.add_task(title, total=total, speed="")
        begin = before = time.monotonic()

        def tell(done: int) -> None:
            nonlocal before
            now = time.monotonic()
            if now - before >= SHOW_EVERY_S or done >= total:
                before = now
                shown.update(task, completed=done, speed=f"{done / max(now - begin, 1e-9):,.0f} {unit}/s")

        yield tell

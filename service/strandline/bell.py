"""A bell for those who wait for the next thing to come: each of them is woken once, and none misses one."""

from __future__ import annotations

import asyncio


class Bell:
    """Rung again and again; `next` is set when it rings next. Take it before looking, wait on it after."""

    def __init__(self) -> None:
        self.next = asyncio.Event()

    def ring(self) -> None:
        """Wake everyone who waits."""
        rung, self.next = self.next, asyncio.Event()
        rung.set()

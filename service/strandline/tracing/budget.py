"""How much of a journal one trace may read, and whether it is still wanted."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass

from ..journal.frame import Frame

PAUSE_AFTER_S = 0.001


class Spent(Exception):
    """The trace has read as much as it may."""


class Abandoned(Exception):
    """Nobody waits for the answer any more."""


@dataclass(slots=True)
class Budget:
    """Bytes of frames that may be read; `abandoned` is asked now and then, and `tell` is told the bytes read."""

    bytes_at_most: int
    abandoned: Callable[[], bool]
    tell: Callable[[int], object] | None = None
    read: int = 0
    _since_s: float = 0.0

    def spend(self, frame: Frame) -> None:
        """A frame is about to be looked at. Raises Spent, Abandoned."""
        size = frame.end_lsn - frame.lsn
        if self.read + size > self.bytes_at_most:
            raise Spent
        self.read += size
        if time.perf_counter() - self._since_s >= PAUSE_AFTER_S:
            if self.abandoned():
                raise Abandoned
            if self.tell is not None:
                self.tell(self.read)
            time.sleep(0)  # lets the service's loop have the interpreter at once, not after 5 ms
            self._since_s = time.perf_counter()

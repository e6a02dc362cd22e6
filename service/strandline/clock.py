"""The arrival clock of a real service: wall time that does not go back."""

from __future__ import annotations

import time


class SystemClock:
    """Wall time carried on by the monotonic clock.

    A step of the wall clock forwards (a machine that finds its time server late) is followed at once; a step backwards
    is not: time then goes on at its usual pace from where it stood.
    """

    def __init__(self) -> None:
        self._offset_ns = time.time_ns() - time.monotonic_ns()

    def now_ns(self) -> int:
        """Nanoseconds since 1970 UTC."""
        monotonic_ns, wall_ns = time.monotonic_ns(), time.time_ns()
        self._offset_ns = max(self._offset_ns, wall_ns - monotonic_ns)
        return self._offset_ns + monotonic_ns

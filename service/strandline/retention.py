"""How long segments stay that nothing needs any more, so that a replay can begin before what is held now.

Positions and instants only: what is needed is told by the housekeeper, and it alone deletes. A segment is known by its
end, the position at which the next one starts.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable


class Retention:
    """Since when each segment is free to go, by the arrival clock. `retain_ns` 0: none stays."""

    def __init__(self, retain_ns: int) -> None:
        self.retain_ns = retain_ns
        self._free_since: dict[int, int] = {}

    def note(self, ends: Iterable[int], free_lsn: int, since_ns: Callable[[int], int]) -> None:
        """Nothing before `free_lsn` is needed: the segments that end there or before are free, unless they were so.

        `since_ns(end)` is asked once for each that is new. Segments that are gone are forgotten.
        """
        known = self._free_since
        self._free_since = {end: known[end] if end in known else since_ns(end) for end in ends if end <= free_lsn}

    def through(self, now_ns: int) -> int:
        """Position up to which every segment has stayed for long enough; 0 where the oldest has not."""
        reached = 0
        for end, since_ns in sorted(self._free_since.items()):
            if now_ns - since_ns < self.retain_ns:
                break
            reached = end
        return reached

    @property
    def ends(self) -> list[int]:
        """Ends of the segments that are free, the oldest first."""
        return sorted(self._free_since)

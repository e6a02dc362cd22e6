"""How late a feed's events have been, of late: the memory from which "what would another slack give?" is answered.

One sketch a feed, whatever its slack is, filled by the fold, so a replay remembers the same. Lateness here is how far
an event stood behind what the watermark follows (its basis), before the slack: with slack S it is late where that
exceeds S. Older events fade: at the first arrival of an hour of the arrival clock all that is remembered weighs half,
if it weighs more than KEPT_EVENTS. So a busy feed remembers some two hours, a quiet one its last 50,000 events or more.
Nothing is chosen here; a steered slack has a sketch of its own, whose memory fits its target.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from .columns import TIME_MIN, Times, least_of
from .sketch import Sketch
from .tallies import behind

FADE_EVERY_NS = 3600 * 1_000_000_000
KEPT_EVENTS = 100_000


class Behind(NamedTuple):
    """Lateness that is not reckoned yet: how far times stand behind a basis."""

    basis_ns: int
    times: Times  # at least one

    @property
    def is_none(self) -> bool:
        """Whether none stands behind it at all."""
        return least_of(self.times) >= self.basis_ns


class Lateness:
    """A sketch of the lateness of events that fades with the arrival clock.

    Cost: 5 ns an event in batches of 5,000 (7 with the column of lateness itself), 1 us for a request of one event.
    """

    def __init__(self) -> None:
        self._sketch = Sketch()
        self._waiting = behind(self._sketch.add)
        self.fades = 0
        self.since_ns = TIME_MIN  # arrival clock of the first event that was counted
        self._hour = 0  # full hours of the arrival clock since 1970 at the last look

    @property
    def sketch(self) -> Sketch:
        """All that was counted."""
        self._waiting.settle()
        return self._sketch

    def note(self, now_ns: int, events: int, lateness_ns: NDArray[np.int64] | Behind | None) -> None:
        """One arrival's events. `lateness_ns` is None where none stood behind the basis at all; else at or above 0.

        What was not reckoned yet is counted when somebody looks.
        """
        self._fade(now_ns)
        if lateness_ns is None or (isinstance(lateness_ns, Behind) and lateness_ns.is_none):
            self._sketch.add_same(0, events)
        elif isinstance(lateness_ns, Behind):
            self._waiting.add(*lateness_ns)
        else:
            self._sketch.add(lateness_ns)

    def _fade(self, now_ns: int) -> None:
        if self.since_ns == TIME_MIN:
            self.since_ns = now_ns
        hour = now_ns // FADE_EVERY_NS
        if hour != self._hour:
            self._hour = hour
            if self.sketch.total > KEPT_EVENTS:
                self.sketch.fade()
                self.fades += 1

    def saved(self) -> list[Any]:
        """All of it as plain values; of the counts only those that are not 0."""
        places = np.flatnonzero(self.sketch.counts)
        counts = self.sketch.counts[places].tolist()
        return [
            *(self.fades, self.since_ns, self.sketch.greatest_ns, self._hour),
            self.sketch.total,  # not the sum of the counts to the last bit, once they have faded often
            *(places.tolist(), counts),
        ]

    def restore(self, values: list[Any]) -> None:
        """Take over saved values. Raises LookupError, TypeError, ValueError where they are none."""
        self.fades, self.since_ns, greatest_ns, self._hour, self.sketch.total, places, counts = values
        self.sketch.greatest_ns = greatest_ns
        self.sketch.counts[np.array(places, dtype=np.int64)] = counts

    def check(self) -> None:
        """Assert that the counts add up and none lies above the greatest."""
        self.sketch.check()

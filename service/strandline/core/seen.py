"""Which identities were seen before: a window over the last events, as columns. Knows nothing of sources, ids or time.

Method: open addressing with linear probing (Knuth, The Art of Computer Programming vol. 3, 6.4), all values of a batch
probing at once; two generations, of which the older one goes when the younger is full, so that at least `window` and at
most twice as many identities are known. Twice 8 bytes an identity, where a set of Python integers takes some 90.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Identities = NDArray[np.uint64]
_SLOTS_AT_FIRST = 1024
_MIX = np.uint64(0x9E3779B97F4A7C15)  # 2^64 divided by the golden ratio (Fibonacci hashing, Knuth vol. 3, 6.4)


class _Generation:
    """A table of identities; 0 marks an empty slot."""

    def __init__(self) -> None:
        self.slots = np.zeros(_SLOTS_AT_FIRST, dtype=np.uint64)
        self.count = 0

    def _first_slots(self, identities: Identities) -> NDArray[np.intp]:
        shift = np.uint64(64 - (len(self.slots).bit_length() - 1))
        return ((identities * _MIX) >> shift).astype(np.intp)

    def has(self, identities: Identities) -> NDArray[np.bool_]:
        """Which of these are in the table."""
        found = np.zeros(len(identities), dtype=np.bool_)
        if not self.count:
            return found
        rows = np.arange(len(identities))
        slots = self._first_slots(identities)
        while len(rows):
            held = self.slots[slots]
            found[rows[held == identities[rows]]] = True
            going_on = (held != 0) & (held != identities[rows])
            rows, slots = rows[going_on], (slots[going_on] + 1) & (len(self.slots) - 1)
        return found

    def add(self, identities: Identities) -> None:
        """Put in identities that are not in the table, none twice."""
        while 2 * (self.count + len(identities)) > len(self.slots):
            old = self.values()
            self.slots = np.zeros(2 * len(self.slots), dtype=np.uint64)
            self._place(old)
        self._place(identities)
        self.count += len(identities)

    def _place(self, identities: Identities) -> None:
        slots = self._first_slots(identities)
        while len(identities):
            empty = self.slots[slots] == 0
            self.slots[slots[empty]] = identities[empty]  # of several that want one slot, one gets it
            going_on = self.slots[slots] != identities
            identities, slots = identities[going_on], (slots[going_on] + 1) & (len(self.slots) - 1)

    def values(self) -> Identities:
        """All identities, in the order of their slots."""
        values: Identities = self.slots[self.slots != 0]
        return values


class Seen:
    """The window. `window` identities at least are known, once so many have come."""

    def __init__(self, window: int) -> None:
        self.window = window
        self._younger, self._older = _Generation(), _Generation()

    def first_time(self, identities: Identities) -> NDArray[np.bool_]:
        """Which rows carry an identity that is not in the window nor in a row before them; all are known afterwards.

        An identity of 0 is taken as 1, so two in 2^64 are confused.
        """
        wanted = np.maximum(identities, np.uint64(1))
        order = np.argsort(wanted, kind="stable")
        repeats = wanted[order[1:]] == wanted[order[:-1]]
        first = np.ones(len(wanted), dtype=np.bool_)
        first[order[1:][repeats]] = False
        first &= ~self._younger.has(wanted) & ~self._older.has(wanted)
        for start in range(0, len(wanted), max(self.window, 1)):  # a request may bring more than a window
            part = wanted[start : start + self.window][first[start : start + self.window]]
            if self._younger.count + len(part) > self.window:
                self._older, self._younger = self._younger, _Generation()
            self._younger.add(part)
        return first

    @property
    def known(self) -> int:
        """Identities in the window now."""
        return self._younger.count + self._older.count

    def columns(self) -> tuple[Identities, Identities]:
        """Both generations, younger first, each ascending (for saving)."""
        return np.sort(self._younger.values()), np.sort(self._older.values())

    def restore(self, younger: Identities, older: Identities) -> None:
        """Take over saved columns."""
        self._younger, self._older = _Generation(), _Generation()
        self._younger.add(younger)
        self._older.add(older)

    def check(self) -> None:
        """Assert counts and that every identity is found."""
        for generation in (self._younger, self._older):
            values = generation.values()
            assert len(values) == generation.count == len(np.unique(values))
            assert 2 * generation.count <= len(generation.slots) and bool(np.all(generation.has(values)))

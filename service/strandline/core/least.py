"""A tournament over columns: the least of many values that change a few at a time, and which of them lie below a bound.

Method: a tournament tree (Knuth, The Art of Computer Programming vol. 3, 5.4.1) with 64 children a node, levels as
columns. An update costs the values that changed and their few ancestors, never the ones that did not: 5,000 changed of
10,000 take some 60 us (12 ns each), where an ordered set with removals and additions took 5 to 10 us for each one.
Nothing about sources or time is known here.
"""

from __future__ import annotations

import itertools

import numpy as np
from numpy.typing import NDArray

WIDTH = 64
NONE = 2**63 - 1  # the value of a place that takes no part


class Least:
    """Places 0 to n-1 with int64 values; a place of value NONE takes no part."""

    def __init__(self) -> None:
        self._levels: list[NDArray[np.int64]] = [np.full(WIDTH, NONE, dtype=np.int64)]
        self._least: tuple[int, int] | None = (NONE, -1)  # None: to be looked for

    def grow(self, places: int) -> None:
        """Make room for at least `places` places; new ones take no part."""
        old = self._levels[0]
        if places <= len(old):
            return
        size = len(old)
        while size < places:
            size *= 2
        self.rebuild(np.concatenate((old, np.full(size - len(old), NONE, dtype=np.int64))))

    def rebuild(self, values: NDArray[np.int64]) -> None:
        """Take these values for all places at once."""
        self._least = None
        self._levels = [_padded(values)]
        while len(self._levels[-1]) > WIDTH:
            self._levels.append(_padded(self._levels[-1].reshape(-1, WIDTH).min(axis=1)))

    def update(self, places: NDArray[np.intp], values: NDArray[np.int64] | int) -> None:
        """Set values, or one for all; where a place is named twice, both times with the same value."""
        self._least = None
        self._levels[0][places] = values
        for below, above in itertools.pairwise(self._levels):
            places = _parents(places, len(above))
            above[places] = below.reshape(-1, WIDTH)[places].min(axis=1)

    def set(self, place: int, value: int) -> None:
        """Set one value: the same as `update` for one place, at a tenth of its cost where the least stays the least."""
        self._levels[0][place] = value
        if self._least is not None:
            least, at = self._least
            if place == at or at < 0:
                self._least = None
            elif (value, place) < (least, at):
                self._least = (value, place)
        for below, above in itertools.pairwise(self._levels):
            place >>= 6
            above[place] = below[place * WIDTH : (place + 1) * WIDTH].min()

    def least(self) -> tuple[int, int]:
        """(value, place) of the least value; (NONE, -1) if none takes part. Of equal ones the lowest place."""
        if self._least is None:
            self._least = self._found()
        return self._least

    def _found(self) -> tuple[int, int]:
        place = 0
        for level in reversed(self._levels):
            block = level[place * WIDTH : (place + 1) * WIDTH]
            place = place * WIDTH + int(block.argmin())
        value = int(self._levels[0][place])
        return (value, place) if value != NONE else (NONE, -1)

    def below(self, bound: int) -> NDArray[np.intp]:
        """Places whose value is below the bound, ascending; costs what it finds."""
        places = np.flatnonzero(self._levels[-1] < bound)
        for level in reversed(self._levels[:-1]):
            blocks = level.reshape(-1, WIDTH)[places]
            rows, columns = np.nonzero(blocks < bound)
            places = places[rows] * WIDTH + columns
        return places

    def values(self) -> NDArray[np.int64]:
        """All values, by place (a view; places beyond the last one in use hold NONE)."""
        return self._levels[0]

    def check(self) -> None:
        """Assert that every node is the least of its children."""
        for below, above in itertools.pairwise(self._levels):
            least = below.reshape(-1, WIDTH).min(axis=1)
            assert np.array_equal(above[: len(least)], least) and np.all(above[len(least) :] == NONE)
        assert self.least() == self._found()


def _padded(values: NDArray[np.int64]) -> NDArray[np.int64]:
    short = -len(values) % WIDTH
    return np.concatenate((values, np.full(short, NONE, dtype=np.int64))) if short else values.copy()


def _parents(places: NDArray[np.intp], count: int) -> NDArray[np.intp]:
    parents = places >> 6
    if len(parents) == 1:
        return parents
    touched = np.zeros(count, dtype=np.bool_)  # a flag a node: np.unique would sort, at 65 ns a place
    touched[parents] = True
    return np.flatnonzero(touched)

"""Event lines read back out of mapped segments: many places and lengths at once, the fastest way for each shape.

Pure functions on views; no files and no locks. A line is followed by one line feed wherever it stands in a payload, so
neighbours in a payload are one stretch and need one copy. What remains is k stretches in any order, and three ways to
copy them (ns a line, 143-byte lines scattered over ten times their bytes, n = 1,000 / 50,000, one run):

* slices, joined: 105 / 317. Few stretches, or long ones, where the copying itself counts.
* one window, if all stretches are of one size: 9 / 25. An array of void items as wide as the stretch, at stride 1 over
  the segment, indexed by the offsets: one C loop of memcpy, and the result is the block already.
* two windows a class, otherwise: 39 / 73. Sizes with the same power of two w at or below them are one class; each
  stretch is copied as its first w and its last w bytes (they overlap, and together they are all of it), so that at most
  some ten classes serve any mixture of sizes. One window a distinct size instead: 30 / 42 where there is one size, but
  124 / 102 with 33 sizes and 1,574 / 360 with 960, where two windows take 37 / 70 and 152 / 335.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .frame import Octets, octets

LINE_FEED = 10
Positions = NDArray[np.int64]

# From this mean size on a slice copies as well: at 520 bytes two windows cost 217 against 169 ns (n = 5,000) and 269
# against 272 (n = 50,000), at 250 bytes 132 against 145 and 170 against 235.
LONG_STRETCH_BYTES = 400
# One window beats slices from 8 stretches on (50: 34 against 132 ns a line); two windows have some 10 us to earn back
# in each class: at 100 stretches in one class 125 against 116 ns, at 200 90 against 104; three classes: 400.
ONE_WINDOW_FROM = 8
TWO_WINDOWS_FROM = 160
# Rows copied at a time by two windows: the intermediate array stays in the second-level cache (51 against 56 ns).
ROWS_AT_ONCE = 1024
# Lines that must share a length, in the mean, before single lines come out of a window for each length (33 lengths:
# at 30 a length 109 against 105 ns a line, at 151 75 against 134).
SHARED_LENGTH_FROM = 40


@dataclass(frozen=True, slots=True)
class Source:
    """A mapped segment: position p stands at `view[p - shift]`; only bytes before `end` may be read."""

    view: memoryview
    shift: int
    end: int


# Another way to do what `block` does, such as `compiled_copies.copied`; None where it cannot.
Copier = Callable[[Sequence[Source], NDArray[np.intp] | None, Positions, Positions], bytes | None]


@dataclass(frozen=True, slots=True)
class Stretches:
    """k stretches of n lines: offsets in their sources' views, bytes with the line feeds, sources by number."""

    offsets: Positions  # int64[k]
    sizes: Positions  # int64[k]
    owners: NDArray[np.intp] | None  # intp[k]; None where there is one source

    def __len__(self) -> int:
        return len(self.offsets)


def block(
    sources: Sequence[Source],
    owners: NDArray[np.intp] | None,
    offsets: Positions,
    lengths: Positions,
    copier: Copier | None = None,
) -> bytes:
    """The lines one after the other, each followed by one line feed.

    `offsets` int64[n] within the views, `lengths` int64[n], `owners` the numbers of their sources (None: all in the
    first). Every line must lie before its source's `end`; the caller has made sure of that. `copier` is asked first.
    """
    if not len(offsets):
        return b""
    found = None if copier is None else copier(sources, owners, offsets, lengths)
    if found is not None:
        return found
    if not _room_behind(sources, owners, offsets, lengths):
        return _one_by_one(sources, owners, offsets, lengths)
    found = _copied(sources, stretches(owners, offsets, lengths))
    # Lines in quarantine stand without a line feed: what was taken for one is another line's first byte.
    if (_last_bytes(octets(found), lengths) != LINE_FEED).any():
        return _one_by_one(sources, owners, offsets, lengths)
    return found


def _last_bytes(found: Octets, lengths: Positions) -> Octets:
    """The byte behind each line; where all are of one length without their sum (5 against 16 ns a line)."""
    width = int(lengths[0]) + 1
    if len(found) == width * len(lengths) and (lengths == width - 1).all():
        return found[width - 1 :: width]
    return found[np.cumsum(lengths + 1) - 1]


def lines(
    sources: Sequence[Source], owners: NDArray[np.intp] | None, offsets: Positions, lengths: Positions
) -> list[bytes]:
    """The lines as bytes objects, without line feeds; arguments as for `block`.

    Lines of one length come out of one window as a list (19-46 ns a line), few lengths out of a window each (44-100),
    the rest out of slices (100-300). Splitting a block at its line feeds was slower than slices (127 against 100).
    """
    count = len(offsets)
    if not count:
        return []
    if owners is None:
        return _by_length(sources[0].view, offsets, lengths)
    found = np.empty(count, object)
    for number, source in enumerate(sources):
        mine = np.flatnonzero(owners == number)
        found[mine] = _by_length(source.view, offsets[mine], lengths[mine])
    return list(found.tolist())


def stretches(owners: NDArray[np.intp] | None, offsets: Positions, lengths: Positions) -> Stretches:
    """Neighbours joined: lines that stand one behind the other, one byte apart, in one source."""
    ends = offsets + lengths
    ends += 1
    apart = offsets[1:] != ends[:-1]
    if owners is not None:
        apart |= owners[1:] != owners[:-1]
    firsts = np.flatnonzero(apart)
    firsts += 1
    if len(firsts) == len(offsets) - 1:
        return Stretches(offsets, lengths + 1, owners)
    lasts = np.append(firsts, len(offsets)) - 1
    firsts = np.append(0, firsts)
    begins = offsets[firsts]
    return Stretches(begins, ends[lasts] - begins, None if owners is None else owners[firsts])


def _room_behind(
    sources: Sequence[Source], owners: NDArray[np.intp] | None, offsets: Positions, lengths: Positions
) -> bool:
    """Whether the byte behind each line may be read too."""
    ends = offsets + lengths
    if owners is None:
        return int(ends.max()) < sources[0].end
    limits = np.array([source.end for source in sources], np.int64)
    return bool((ends < limits[owners]).all())


def _copied(sources: Sequence[Source], pieces: Stretches) -> bytes:
    count, total = len(pieces), int(pieces.sizes.sum())
    if count < ONE_WINDOW_FROM or total >= LONG_STRETCH_BYTES * count:
        return _joined(sources, pieces)
    width = int(pieces.sizes[0])
    if pieces.owners is None and (pieces.sizes == width).all():
        return window(sources[0].view, width)[pieces.offsets].tobytes()
    classes = _class_of(pieces.sizes)
    if count < TWO_WINDOWS_FROM * np.count_nonzero(np.bincount(classes)) * len(sources):
        return _joined(sources, pieces)
    return _two_windows(sources, pieces, classes, total)


def _joined(sources: Sequence[Source], pieces: Stretches) -> bytes:
    begins, ends = pieces.offsets.tolist(), (pieces.offsets + pieces.sizes).tolist()
    if pieces.owners is None:
        view = sources[0].view
        return b"".join([view[begin:end] for begin, end in zip(begins, ends, strict=True)])
    views = [source.view for source in sources]
    numbers = pieces.owners.tolist()
    return b"".join([views[number][begin:end] for number, begin, end in zip(numbers, begins, ends, strict=True)])


def _class_of(sizes: Positions) -> NDArray[np.int32]:
    """Exponent of the highest power of two at or below each size."""
    return np.frexp(sizes.astype(np.float64))[1] - 1


def _two_windows(sources: Sequence[Source], pieces: Stretches, classes: NDArray[np.int32], total: int) -> bytes:
    out = np.empty(total, np.uint8)
    starts = np.cumsum(pieces.sizes) - pieces.sizes
    for number, source in enumerate(sources):
        mine = None if pieces.owners is None else np.flatnonzero(pieces.owners == number)
        for exponent in np.flatnonzero(np.bincount(classes if mine is None else classes[mine])).tolist():
            rows = np.flatnonzero(classes == exponent) if mine is None else mine[classes[mine] == exponent]
            into, out_of = window(out, 1 << exponent), window(source.view, 1 << exponent)
            for first in range(0, len(rows), ROWS_AT_ONCE):
                some = rows[first : first + ROWS_AT_ONCE]
                begin, start = pieces.offsets[some], starts[some]
                into[start] = out_of[begin]
                rest = pieces.sizes[some] - (1 << exponent)
                into[start + rest] = out_of[begin + rest]
    return out.tobytes()


def window(buffer: memoryview | Octets, width: int) -> NDArray[Any]:
    """An array of void items of `width` bytes, one starting at each byte of the buffer that has so many behind it."""
    return np.ndarray((len(buffer) - width + 1,), dtype=f"V{width}", buffer=buffer, strides=(1,))


def _by_length(view: memoryview, offsets: Positions, lengths: Positions) -> list[bytes]:
    """Single lines of one source: out of a window for each length where many lines share one, else out of slices."""
    count, longest = len(offsets), int(lengths.max(initial=0))
    if not longest or longest > count * SHARED_LENGTH_FROM:
        return _slices(view, offsets, lengths)
    if (lengths == longest).all():
        return list(window(view, longest)[offsets].tolist())
    numbers = np.bincount(lengths)
    if count < SHARED_LENGTH_FROM * np.count_nonzero(numbers):
        return _slices(view, offsets, lengths)
    order = np.argsort(lengths, kind="stable")
    sorted_offsets, found, first = offsets[order], [], int(numbers[0])
    found += [b""] * first
    for width in (np.flatnonzero(numbers[1:]) + 1).tolist():
        last = first + int(numbers[width])
        found += window(view, width)[sorted_offsets[first:last]].tolist()
        first = last
    placed = np.empty(count, object)
    placed[order] = found
    return list(placed.tolist())


def _slices(view: memoryview, offsets: Positions, lengths: Positions) -> list[bytes]:
    begins, ends = offsets.tolist(), (offsets + lengths).tolist()
    return [view[begin:end].tobytes() for begin, end in zip(begins, ends, strict=True)]


def _one_by_one(
    sources: Sequence[Source], owners: NDArray[np.intp] | None, offsets: Positions, lengths: Positions
) -> bytes:
    """What `block` must be equal to, straight from its definition."""
    numbers = [0] * len(offsets) if owners is None else owners.tolist()
    rows = zip(numbers, offsets.tolist(), lengths.tolist(), strict=True)
    return b"".join([sources[number].view[begin : begin + length].tobytes() + b"\n" for number, begin, length in rows])

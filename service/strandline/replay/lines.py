"""Reads the lines of batches back out of a capture, in bounded memory: `ports.Lines` over its sections of lines.

Batches name places in the journal; here lives where those stand in the capture. Sections are decompressed when they are
asked for, and the last ones kept.
"""

from __future__ import annotations

from bisect import bisect_left
from collections import OrderedDict
from collections.abc import Sequence
from threading import Lock

import numpy as np
from numpy.typing import NDArray

from strandline.core.columns import Batch
from strandline.errors import CaptureError
from strandline.journal.gather import Source, block, lines
from strandline.ports import Lines

from .capture import Capture, HeldLine

Int64s = NDArray[np.int64]

SECTIONS_KEPT = 24  # of 8 MiB, a request more at most: some 200 MiB
PLACES_AT_FIRST = 4096


class Places:
    """Where stretches of the journal stand in a capture: columns of places and positions of lines, both ascending."""

    def __init__(self) -> None:
        self._places = np.empty(PLACES_AT_FIRST, np.int64)
        self._positions = np.empty(PLACES_AT_FIRST, np.int64)
        self._start = self._stop = 0

    def __len__(self) -> int:
        return self._stop - self._start

    def note(self, places: Int64s, positions: Int64s) -> None:
        """Lines from places[i] on stand from positions[i] on."""
        if self._stop + len(places) > len(self._places):
            self._make_room(len(places))
        self._places[self._stop : self._stop + len(places)] = places
        self._positions[self._stop : self._stop + len(places)] = positions
        self._stop += len(places)

    def _make_room(self, more: int) -> None:
        size = max(PLACES_AT_FIRST, 2 * (len(self) + more))
        for name in ("_places", "_positions"):
            column = np.empty(size, np.int64)
            column[: len(self)] = getattr(self, name)[self._start : self._stop]
            setattr(self, name, column)
        self._start, self._stop = 0, len(self)

    def forget_before(self, place: int) -> None:
        """Nothing before this place is asked for any more."""
        known = self._places[self._start : self._stop]
        self._start += max(0, bisect_left(known, place + 1) - 1)

    def positions(self, places: Int64s) -> Int64s:
        """Where these places stand."""
        known = self._places[self._start : self._stop]
        index = np.searchsorted(known, places, side="right") - 1 + self._start
        found: Int64s = self._positions[index] + (places - self._places[index])
        return found


class CapturedLines(Lines):
    """Lines of a capture. `places` and `names` are whose replay notes them; any thread may ask for lines."""

    def __init__(self, capture: Capture, names: Sequence[str]) -> None:
        self._capture, self.names = capture, names
        self.places = Places()
        self.kept_place: int | None = None  # whoever keeps batches for a while says here from where on they need lines
        found = capture.line_sections()
        self._firsts = np.array([first for first, _ in found], np.int64)
        self._ends = np.array([first + size for first, size in found], np.int64)
        self._kept: OrderedDict[int, memoryview] = OrderedDict()
        self._lock = Lock()

    def begin(self, held: HeldLine) -> None:
        """The capture begins with the lines of these events, in this order."""
        if len(held.places):
            steps = held.lengths + 1
            self.places.note(held.places, np.cumsum(steps) - steps)

    def forget_before(self, place: int | None) -> None:
        """Nothing before this place is held (None: nothing is known to be needed, so nothing is forgotten)."""
        needed = [each for each in (place, self.kept_place) if each is not None]
        if needed:
            self.places.forget_before(min(needed))

    def lines(self, batch: Batch) -> list[bytes]:
        """The batch's lines, or the raw lines of its entries in quarantine. Raises CaptureError."""
        if batch.lane == "quarantine":
            places = np.array([entry.place for entry in batch.entries], dtype=np.int64)
            return self._lines(places, np.array([entry.length for entry in batch.entries], dtype=np.int64))
        return self._lines(batch.refs["place"].astype(np.int64), batch.refs["length"].astype(np.int64))

    def ndjson(self, batch: Batch) -> bytes:
        """The batch's lines, each followed by a line feed. Raises CaptureError."""
        lengths = batch.refs["length"].astype(np.int64)
        positions, owners, present = self._located(batch.refs["place"].astype(np.int64), lengths)
        if len(present) > SECTIONS_KEPT:
            return b"".join(line + b"\n" for line in self._lines(batch.refs["place"].astype(np.int64), lengths))
        sources = [self._source(number) for number in present]
        if len(sources) == 1:
            return block(sources, None, positions - sources[0].shift, lengths)
        shifts = np.array([source.shift for source in sources], np.int64)
        return block(sources, owners, positions - shifts[owners], lengths)

    def source_names(self) -> Sequence[str]:
        """Names of the sources by number."""
        return self.names

    def payload(self, position: int, size: int) -> memoryview:
        """Bytes of one request's lines, which lie in one section. Raises CaptureError."""
        number = int(np.searchsorted(self._firsts, position, side="right")) - 1
        self._require_there(number, position + size)
        begin = position - int(self._firsts[number])
        return self._section(number)[begin : begin + size]

    def _lines(self, places: Int64s, lengths: Int64s) -> list[bytes]:
        if not int(lengths.max(initial=0)):  # faulty lines may be empty, and stand where no section is
            return [b""] * len(lengths)
        positions, owners, present = self._located(places, lengths)
        found = np.empty(len(places), object)
        for index, number in enumerate(present):  # one section at a time, however scattered they lie
            mine = np.flatnonzero(owners == index)
            source = self._source(number)
            found[mine] = lines([source], None, positions[mine] - source.shift, lengths[mine])
        return list(found.tolist())

    def _located(self, places: Int64s, lengths: Int64s) -> tuple[Int64s, NDArray[np.intp], list[int]]:
        """Positions, the number of each line's section among those present, and the sections present."""
        positions = self.places.positions(places)
        numbers = np.searchsorted(self._firsts, positions, side="right") - 1
        if len(numbers):
            last = int(np.argmax(positions))
            self._require_there(int(numbers.min()), int(positions[last] + lengths[last]))
        present, owners = np.unique(numbers, return_inverse=True)
        return positions, owners.astype(np.intp), present.tolist()

    def _require_there(self, number: int, end: int) -> None:
        if number < 0 or end > int(self._ends[-1] if len(self._ends) else 0):
            raise CaptureError(
                f"{self._capture.path}: lines were asked for that it does not hold: it was made --without-events, or "
                "the feed held them when it began and their segments were gone"
            )

    def _source(self, number: int) -> Source:
        view = self._section(number)
        return Source(view, int(self._firsts[number]), len(view))

    def _section(self, number: int) -> memoryview:
        with self._lock:
            view = self._kept.get(number)
            if view is not None:
                self._kept.move_to_end(number)
                return view
        view = self._capture.line_section(number)
        with self._lock:
            self._kept[number] = view
            while len(self._kept) > SECTIONS_KEPT:
                self._kept.popitem(last=False)
        return view

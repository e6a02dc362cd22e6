"""Lines: every event's bytes in one payload, each followed by one line feed, and where each begins and ends.

Here live the columns that every format of bodies (`formats`) is brought to, and the splitting of JSON lines. Whether a
line is an event is not decided here; a body that holds too many lines is refused as a whole. Empty lines (blanks and
tabs only) are passed over, as the NDJSON specification allows; they keep their line numbers.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace

import msgspec
import numpy as np
from numpy.typing import NDArray

from ..core.columns import Fault
from ..errors import BodyError
from .limits import BodyLimits

Places = NDArray[np.int64]

_BLANK = b" \t\r"
_TO_SPACES = bytes.maketrans(b"\r\n", b"  ")
_UTF8_STEP = 1024 * 1024
# A body whose lines, empty ones included, are more than this many times the limit is refused unsplit.
_EMPTY_LINES_FACTOR = 4


@dataclass(frozen=True, slots=True)
class Lines:
    """The lines of a body. `ends[i]` is the place of line i's line feed in `payload`, `starts[i]` its first byte."""

    payload: bytes
    starts: Places  # int64[n]
    ends: Places  # int64[n]
    numbers: Places | None = None  # int64[n], counting from 1; None: line i has number i + 1
    faults: tuple[Fault, ...] = ()  # items that no line was made of
    is_regular: bool = False  # see _is_regular
    are_cloudevents: bool = False  # each must keep the rules of CloudEvents too

    def __iter__(self) -> Iterator[bytes]:
        return iter(self.payload.split(b"\n")[:-1])

    def number(self, index: int) -> int:
        """The line's number in the body, for a person."""
        return index + 1 if self.numbers is None else int(self.numbers[index])

    def select(self, keep: NDArray[np.bool_]) -> Lines:
        """Only the lines that `keep` marks, closed up."""
        starts, ends = _places((self.ends - self.starts)[keep])
        numbers = np.flatnonzero(keep) + 1 if self.numbers is None else self.numbers[keep]
        payload = self._stretches(keep)
        return replace(self, payload=payload, starts=starts, ends=ends, numbers=numbers, is_regular=False)

    def _stretches(self, keep: NDArray[np.bool_]) -> bytes:
        """The bytes of the marked lines; one slice for each stretch of neighbours."""
        edges = np.flatnonzero(np.diff(np.concatenate(([False], keep, [False]))))
        first, last = self.starts[edges[::2]].tolist(), self.ends[edges[1::2] - 1].tolist()
        return b"".join([self.payload[start : end + 1] for start, end in zip(first, last, strict=True)])


def no_lines(faults: tuple[Fault, ...] = ()) -> Lines:
    """Nothing, or nothing but faults."""
    return Lines(b"", *_places(np.empty(0, np.int64)), None, faults)


def lines_of(items: Sequence[bytes | msgspec.Raw], limits: BodyLimits) -> Lines:
    """Items as lines, one each. They are free of line breaks."""
    return split_lines(b"\n".join(items) + b"\n" if items else b"", limits)


def without_breaks(text: bytes) -> bytes:
    """A JSON text on one line. Line breaks in JSON stand only between tokens (in strings they are escaped): spaces."""
    return text.translate(_TO_SPACES)


def has_breaks(text: bytes) -> bool:
    """Whether a text takes more than one line."""
    return b"\n" in text or b"\r" in text


def _places(lengths: Places) -> tuple[Places, Places]:
    """Starts and ends of lines of these lengths, each followed by a line feed."""
    ends = np.cumsum(lengths + 1) - 1
    return ends - lengths, ends


def check_count(count: int, limits: BodyLimits, what: str = "events") -> None:
    """Raise BodyError 413 where a body has more events (or what stands for them, `what`) than are allowed."""
    if count > limits.events_at_most:
        raise _too_many(what, count, limits)


def check_parts(count: int, limits: BodyLimits, what: str) -> None:
    """Raise BodyError 413 where a body has more parts than even many empty ones among its events could explain."""
    if count > limits.events_at_most * _EMPTY_LINES_FACTOR:
        raise _too_many(f"{what} (empty ones included)", count, limits)


def _too_many(what: str, count: int, limits: BodyLimits) -> BodyError:
    detail = f"the body has {count} {what}, {limits.events_at_most} events are allowed: send it in smaller parts"
    return BodyError(413, "Content Too Large", detail)


def is_utf8(body: bytes) -> bool:
    """Whether the body is UTF-8; msgspec does not look inside the members that it skips."""
    return utf8_fault(body) is None


def utf8_fault(body: bytes) -> str | None:
    """What is wrong with the text as UTF-8, and at which byte. Long texts go in steps, so that memory is bounded."""
    place = len(body) if body.isascii() else 0
    while place < len(body):
        end = min(len(body), place + _UTF8_STEP)
        while end < len(body) and end > place and body[end] & 0xC0 == 0x80 and end > place + _UTF8_STEP - 4:
            end -= 1  # do not cut a character
        try:
            str(memoryview(body)[place:end], "utf-8")
        except UnicodeDecodeError as error:
            return f"{error.reason} at byte {place + error.start}"
        place = end
    return None


# --- JSON lines --------------------------------------------------------------------------------------------------


def split_lines(body: bytes, limits: BodyLimits) -> Lines:
    """JSON lines, as NDJSON and JSON Lines have them. Raises BodyError 413."""
    if not body:
        return no_lines()
    payload = body if body.endswith(b"\n") else body + b"\n"
    starts, ends, is_regular = _cut(payload, limits)
    if not is_regular and b"\r" in payload:  # before a line feed it would make the line irregular: 7 ns a line saved
        payload = _without_carriage_returns(payload)
        starts, ends, is_regular = _cut(payload, limits)
    if is_regular:
        return Lines(payload, starts, ends, is_regular=True)
    # An empty line begins with its own line feed or with a blank; an event's line hardly ever does.
    suspects = np.flatnonzero(np.frombuffer(payload, np.uint8)[starts] <= 0x20).tolist()
    empty = [index for index in suspects if not payload[starts[index] : ends[index]].strip(_BLANK)]
    keep = np.ones(len(ends), np.bool_)
    keep[empty] = False
    lines = Lines(payload, starts, ends)
    if empty:
        lines = lines.select(keep)
        lines = replace(lines, is_regular=_is_regular(lines.payload, lines.starts, lines.ends))
    return lines


def _cut(payload: bytes, limits: BodyLimits) -> tuple[Places, Places, bool]:
    """Starts and ends of the lines, and whether they are regular. Raises BodyError 413."""
    ends = _line_feeds(payload, limits)
    starts = np.empty_like(ends)
    starts[0], starts[1:] = 0, ends[:-1] + 1
    return starts, ends, _is_regular(payload, starts, ends)


def _is_regular(payload: bytes, starts: Places, ends: Places) -> bool:
    """Whether every line begins with `{` and ends with `}`.

    Within JSON nothing can stand between a `}` and the `{` that follows it but a comma. So when such a payload decodes
    as JSON texts one after the other, every line feed lies between two of them, every line holds at least one, and as
    many texts as lines means one text on each line. Equal counts alone would not prove it: an empty line and a line
    with two texts make up for each other.
    """
    characters = np.frombuffer(payload, np.uint8)
    return bool((characters[starts] == 0x7B).all() and (characters[ends - 1] == 0x7D).all())


def _without_carriage_returns(payload: bytes) -> bytes:
    """Each carriage return before a line feed taken away: where all are such, in half the time of bytes.replace."""
    places = places_of(payload, 0x0D)
    if (np.frombuffer(payload, np.uint8)[places + 1] == 0x0A).all():  # the payload ends with a line feed
        return payload.translate(None, b"\r")
    return payload.replace(b"\r\n", b"\n")


def _line_feeds(payload: bytes, limits: BodyLimits) -> Places:
    """Places of all line feeds. Raises BodyError when there are more than empty lines could explain."""
    if len(payload) > limits.events_at_most * _EMPTY_LINES_FACTOR * 8:  # else their places take little room
        check_parts(int(np.count_nonzero(np.frombuffer(payload, np.uint8) == 0x0A)), limits, "lines")
    ends = places_of(payload, 0x0A)
    check_parts(len(ends), limits, "lines")
    return ends


def places_of(payload: bytes, byte: int) -> Places:
    """Places of a byte that is rare: 16 ns for a line of 143 bytes, where np.flatnonzero over all bytes takes 24.

    Looks for eight bytes at a time that hold one, then for the place among the eight. Where two stand that close, the
    plain way.
    """
    hits = np.frombuffer(payload, np.uint8) == byte
    whole = len(hits) // 8 * 8
    words = hits[:whole].view("<u8")
    places = np.flatnonzero(words != 0)
    found = words[places]
    if (found & (found - np.uint64(1))).any():
        return np.flatnonzero(hits)
    # One byte of `found` is 1: as a float64 its exponent says which.
    exponents = found.astype(np.float64).view(np.int64) >> 52
    places = places * 8 + ((exponents - 1023) >> 3)
    rest = np.flatnonzero(hits[whole:]) + whole
    return np.concatenate((places, rest)) if len(rest) else places

"""Bodies to lines: every event's bytes in one payload, each followed by one line feed, and where each begins and ends.

Here live the formats of bodies: JSON lines, and JSON (one object, or an array whose items count as lines). Whether a
line is an event is not decided here; a body that is no JSON at all, or holds too many lines, is refused as a whole.
Empty lines (blanks and tabs only) are passed over, as the NDJSON specification allows; they keep their line numbers.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from typing import Any

import msgspec
import numpy as np
from numpy.typing import NDArray

from ..core.columns import Fault
from ..errors import BodyError
from .limits import BodyLimits
from .nesting import deep_items

Places = NDArray[np.int64]

LINES = ("application/x-ndjson", "application/jsonl")
JSON = "application/json"
MEDIA_TYPES = (*LINES, JSON)

_ITEMS = msgspec.json.Decoder(list[msgspec.Raw])
_ANYTHING = msgspec.json.Decoder(msgspec.Raw)
_BLANK = b" \t\r"
_TO_SPACES = bytes.maketrans(b"\r\n", b"  ")
_BYTE = re.compile(r" \(byte (\d+)\)$")
_UTF8_STEP = 1024 * 1024
# A body whose lines, empty ones included, are more than this many times the limit is refused unsplit.
_EMPTY_LINES_FACTOR = 4
# An item that msgspec splits off costs some 80 bytes: with more commas than this in a body the items are counted first.
_COMMAS_AT_MOST = 1_000_000


@dataclass(frozen=True, slots=True)
class Lines:
    """The lines of a body. `ends[i]` is the place of line i's line feed in `payload`, `starts[i]` its first byte."""

    payload: bytes
    starts: Places  # int64[n]
    ends: Places  # int64[n]
    numbers: Places | None = None  # int64[n], counting from 1; None: line i has number i + 1
    faults: tuple[Fault, ...] = ()  # array items that no line was made of
    is_regular: bool = False  # see _is_regular

    def __iter__(self) -> Iterator[bytes]:
        return iter(self.payload.split(b"\n")[:-1])

    def number(self, index: int) -> int:
        """The line's number in the body, for a person."""
        return index + 1 if self.numbers is None else int(self.numbers[index])

    def select(self, keep: NDArray[np.bool_]) -> Lines:
        """Only the lines that `keep` marks, closed up."""
        return Lines(
            self._stretches(keep),
            *_places((self.ends - self.starts)[keep]),
            np.flatnonzero(keep) + 1 if self.numbers is None else self.numbers[keep],
            self.faults,
        )

    def _stretches(self, keep: NDArray[np.bool_]) -> bytes:
        """The bytes of the marked lines; one slice for each stretch of neighbours."""
        edges = np.flatnonzero(np.diff(np.concatenate(([False], keep, [False]))))
        first, last = self.starts[edges[::2]].tolist(), self.ends[edges[1::2] - 1].tolist()
        return b"".join([self.payload[start : end + 1] for start, end in zip(first, last, strict=True)])


def _places(lengths: Places) -> tuple[Places, Places]:
    """Starts and ends of lines of these lengths, each followed by a line feed."""
    ends = np.cumsum(lengths + 1) - 1
    return ends - lengths, ends


def split_body(body: bytes, media_type: str, limits: BodyLimits) -> Lines:
    """The lines of a body of one of MEDIA_TYPES. Raises BodyError (413, 422)."""
    lines = _split_json(body, limits) if media_type == JSON else _split_lines(body, limits)
    count = len(lines.ends) + len(lines.faults)
    if count > limits.events_at_most:
        raise _too_many("events", count, limits)
    return lines


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


def _split_lines(body: bytes, limits: BodyLimits) -> Lines:
    if not body:
        return Lines(b"", *_places(np.empty(0, np.int64)))
    payload = body if body.endswith(b"\n") else body + b"\n"
    if b"\r" in payload:
        payload = _without_carriage_returns(payload)
    ends = _line_feeds(payload, limits)
    starts = np.empty_like(ends)
    starts[0], starts[1:] = 0, ends[:-1] + 1
    if _is_regular(payload, starts, ends):
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
    places = _places_of(payload, 0x0D)
    if (np.frombuffer(payload, np.uint8)[places + 1] == 0x0A).all():  # the payload ends with a line feed
        return payload.translate(None, b"\r")
    return payload.replace(b"\r\n", b"\n")


def _line_feeds(payload: bytes, limits: BodyLimits) -> Places:
    """Places of all line feeds. Raises BodyError when there are more than empty lines could explain."""
    if len(payload) > limits.events_at_most * _EMPTY_LINES_FACTOR * 8:  # else their places take little room
        _check_line_count(int(np.count_nonzero(np.frombuffer(payload, np.uint8) == 0x0A)), limits)
    ends = _places_of(payload, 0x0A)
    _check_line_count(len(ends), limits)
    return ends


def _check_line_count(count: int, limits: BodyLimits) -> None:
    if count > limits.events_at_most * _EMPTY_LINES_FACTOR:
        raise _too_many("lines (empty ones included)", count, limits)


def _places_of(payload: bytes, byte: int) -> Places:
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


# --- JSON --------------------------------------------------------------------------------------------------------


def _split_json(body: bytes, limits: BodyLimits) -> Lines:
    text = body.strip(b" \t\r\n")
    if not text:
        return _split_lines(b"", limits)
    fault = utf8_fault(body)
    if fault is not None:
        raise _not_json(f"it is not UTF-8: {fault}")
    if text[:1] == b"[":
        return _split_array(body, text, limits)
    if text[:1] != b"{":
        raise _not_json("it begins neither an object nor an array", len(body) - len(body.lstrip(b" \t\r\n")))
    try:
        _decoded(_ANYTHING, body)
    except RecursionError:
        return Lines(b"", *_places(np.empty(0, np.int64)), None, (_too_deep(1, text, limits),))
    return _of_items([text], _has_breaks(text), limits)


def _split_array(body: bytes, text: bytes, limits: BodyLimits) -> Lines:
    if len(body) > _COMMAS_AT_MOST and body.count(b",") > _COMMAS_AT_MOST:
        _deep_items(body, limits)
    try:
        items, deep = _decoded(_ITEMS, body), []
    except RecursionError:
        deep = _deep_items(body, limits)
        items = _without(body, deep)
    if len(items) > limits.events_at_most:
        raise _too_many("items", len(items), limits)
    if not deep:
        return _of_items(items, _has_breaks(text), limits)
    faults = tuple(_too_deep(number, body[start:end].strip(), limits) for number, start, end in deep)
    keep = np.ones(len(items), np.bool_)
    keep[[number - 1 for number, _, _ in deep]] = False
    kept = np.flatnonzero(keep)
    lines = _of_items([items[index] for index in kept], _has_breaks(text), limits)
    return replace(lines, numbers=kept + 1, faults=faults)


def _deep_items(body: bytes, limits: BodyLimits) -> list[tuple[int, int, int]]:
    count, deep = deep_items(body, limits.nesting_at_most, limits.events_at_most)
    if count > limits.events_at_most:
        raise _too_many("items or more", count, limits)
    return deep


def _without(body: bytes, deep: Sequence[tuple[int, int, int]]) -> list[msgspec.Raw]:
    """The items, those that are too deep replaced by zeros of the same width, so that places in messages stay true."""
    shallow = bytearray(body)
    for _, start, end in deep:
        shallow[start:end] = b"0".ljust(end - start)
    try:
        return _decoded(_ITEMS, bytes(shallow))  # type: ignore[no-any-return]
    except RecursionError:
        raise _not_json("it is nested too deep to be read") from None


def _decoded(decoder: msgspec.json.Decoder[Any], body: bytes) -> Any:
    try:
        return decoder.decode(body)
    except msgspec.DecodeError as error:
        raise _not_json(*json_fault(error, len(body))) from None


def json_fault(error: msgspec.DecodeError, size: int) -> tuple[str, int]:
    """What msgspec says is wrong with a JSON text of `size` bytes, and at which byte, counting from 0."""
    text = str(error).removeprefix("JSON is malformed: ")
    place = _BYTE.search(text)
    if place is None:
        return f"{text[0].lower()}{text[1:]}", size
    text = _BYTE.sub("", text)
    return text, int(place[1]) - (text == "trailing characters")  # for these it counts from 1


def _not_json(why: str, place: int | None = None) -> BodyError:
    where = "" if place is None else f" at byte {place}"
    return BodyError(422, "Unprocessable Content", f"the body is not one JSON object or array{where}: {why}")


def _too_deep(number: int, raw: bytes, limits: BodyLimits) -> Fault:
    detail = f"nested deeper than {limits.nesting_at_most} levels"
    return Fault(number, "too_deep", detail, raw[: limits.event_bytes_at_most].translate(_TO_SPACES))


def _has_breaks(text: bytes) -> bool:
    return b"\n" in text or b"\r" in text


def _of_items(items: Sequence[bytes | msgspec.Raw], breaks: bool, limits: BodyLimits) -> Lines:
    """Items as lines. Line breaks in JSON stand only between tokens (in strings they are escaped): spaces, then."""
    if breaks:
        items = [bytes(item).translate(_TO_SPACES) for item in items]
    payload = b"\n".join(items)
    return _split_lines(payload + b"\n" if items else b"", limits)

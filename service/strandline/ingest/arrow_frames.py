"""The frames of an Arrow IPC stream, read for their sizes only, before anything is made of what they claim.

Here lives a walk over the messages of a stream (Arrow columnar format, "Encapsulated message format" and Message.fbs;
FlatBuffers binary format) that adds up rows, columns and decoded bytes. A buffer of some bytes can claim any decoded
length, and the library makes room for it first: so the sums are judged here. The contents are the library's business.
"""

from __future__ import annotations

import struct
from dataclasses import dataclass, field
from typing import NoReturn

import numpy as np

from ..errors import BodyError
from .limits import BodyLimits
from .lines import check_count

# Columns of record batches and dictionaries, taken together: each costs some microseconds, whatever it holds.
PARTS_AT_MOST = 200_000
# A dictionary is checked again for each record batch that may use it: bytes so read, against the limit on decoded ones.
DICTIONARY_FACTOR = 16

_CONTINUATION = 0xFFFFFFFF
_SCHEMA, _DICTIONARY, _RECORDS = 1, 2, 3  # Message.fbs: the members of MessageHeader, in their order
_FORMS = {1: "<B", 2: "<H", 4: "<i", 8: "<q"}


@dataclass(slots=True)
class Sums:
    """What the messages of a stream claim together."""

    rows: int = 0
    batches: int = 0
    parts: int = 0
    decoded_bytes: int = 0
    dictionary_bytes: int = 0
    dictionary_work: int = field(default=0, repr=False)


def refused(why: str) -> NoReturn:
    """Raise the BodyError (422) for a body that is no sound stream."""
    text = "".join(each if each.isprintable() else " " for each in why[:200])
    raise BodyError(422, "Unprocessable Content", f"the body is not one Arrow IPC stream: {text}")


def walk(body: bytes, limits: BodyLimits) -> Sums:
    """The sums of all messages. Raises BodyError: 422 where they cannot be read, 413 where they are beyond a limit."""
    sums, place, ended = Sums(), 0, False
    try:
        while place < len(body):
            if ended:
                refused(f"{len(body) - place} bytes follow its end at byte {place}")
            mark, size = struct.unpack_from("<Ii", body, place)
            if mark != _CONTINUATION:
                refused(f"no message begins at byte {place}")
            place += 8
            ended = size == 0
            if not ended:
                place = _message(body, place, size, sums, limits)
    except (struct.error, IndexError):
        refused(f"the message at byte {place} is cut off, or points outside itself")
    if not sums.parts:
        refused("it has no schema")
    return sums


def _message(body: bytes, place: int, size: int, sums: Sums, limits: BodyLimits) -> int:
    """Add what one message claims; the place behind its body."""
    end = place + size
    if size < 0 or end > len(body):
        refused(f"the message at byte {place} is cut off")
    table = _Table.root(body, place, end)
    kind, header, length = table.number(1, 1), table.inner(2), table.number(3, 8)
    if length < 0 or length > len(body) - end:
        refused(f"the body of the message at byte {place} is cut off")
    if header is None or kind not in (_SCHEMA, _DICTIONARY, _RECORDS):
        refused(f"the message at byte {place} is neither schema, dictionary nor record batch")
    if (kind == _SCHEMA) != (sums.parts == 0):
        refused(f"a schema is expected first and only there, at byte {place}")
    sums.parts += 1
    if kind != _SCHEMA:
        records = header if kind == _RECORDS else header.inner(1)
        if records is None:
            refused(f"the dictionary at byte {place} holds nothing")
        _add(records, memoryview(body)[end : end + length], kind, sums, limits)
    return end + length


def _add(records: _Table, content: memoryview, kind: int, sums: Sums, limits: BodyLimits) -> None:
    nodes, buffers = records.pairs(1), records.pairs(2)
    rows, decoded = records.number(0, 8), _decoded_bytes(buffers, content, records.inner(3) is not None)
    # What a column of nothing but nulls claims takes no bytes, so its rows are judged too.
    if rows < 0 or (len(nodes) and (nodes[:, 0].min() < 0 or nodes[:, 0].max() > limits.decoded_bytes_at_most)):
        refused(f"a column has {rows if rows < 0 else int(nodes[:, 0].max())} rows")
    sums.parts += len(nodes)
    sums.decoded_bytes += decoded
    if kind == _DICTIONARY:
        sums.dictionary_bytes += decoded
    else:
        sums.batches += 1
        sums.rows += rows
        sums.dictionary_work += sums.dictionary_bytes
        check_count(sums.rows, limits)
    _check(sums, limits)


def _check(sums: Sums, limits: BodyLimits) -> None:
    at_most = limits.decoded_bytes_at_most
    why = None
    if sums.decoded_bytes > at_most:
        why = f"its columns take more than {at_most:,} bytes when decoded"
    elif sums.parts > PARTS_AT_MOST:
        why = f"it has more than {PARTS_AT_MOST:,} columns, those of all record batches counted"
    elif sums.dictionary_work > at_most * DICTIONARY_FACTOR:
        why = "its dictionaries are too large for so many record batches"
    if why:
        raise BodyError(413, "Content Too Large", f"{why}: send less at once, in fewer and larger record batches")


def _decoded_bytes(buffers: np.ndarray[tuple[int, int], np.dtype[np.int64]], content: memoryview, packed: bool) -> int:
    """Bytes that the buffers of a message take when decoded; each lies within the message's body."""
    total = 0
    for offset, length in buffers.tolist():
        if offset < 0 or length < 0 or offset + length > len(content):
            refused("a buffer lies outside its message")
        if packed and length:
            # A packed buffer begins with its decoded length, or -1 where it is stored as it is.
            if length < 8:
                refused("a compressed buffer is shorter than its own length")
            (claimed,) = struct.unpack_from("<q", content, offset)
            if claimed < -1:
                refused("a compressed buffer claims a negative length")
            total += length if claimed == -1 else claimed
        else:
            total += length
    return total


class _Table:
    """A FlatBuffers table; every read stays within the message. Raises struct.error and IndexError."""

    def __init__(self, text: bytes, place: int) -> None:
        self._text, self._place = text, place
        fields = place - self._read("<i", place)
        size = self._read("<H", fields)
        self._fields = struct.unpack(f"<{max(0, size // 2 - 2)}H", self._slice(fields + 4, max(0, size // 2 - 2) * 2))

    @classmethod
    def root(cls, body: bytes, start: int, end: int) -> _Table:
        """The table that the message between two places begins with."""
        text = body[start:end]
        return cls(text, struct.unpack_from("<I", text, 0)[0])

    def _slice(self, place: int, size: int) -> bytes:
        if place < 0 or place + size > len(self._text):
            raise IndexError(place)
        return self._text[place : place + size]

    def _read(self, form: str, place: int) -> int:
        number: int = struct.unpack(form, self._slice(place, struct.calcsize(form)))[0]
        return number

    def _at(self, index: int) -> int:
        """Where a field stands; 0: it is absent."""
        offset = self._fields[index] if index < len(self._fields) else 0
        return self._place + offset if offset else 0

    def number(self, index: int, size: int) -> int:
        """An integer of `size` bytes; 0 where it is absent."""
        place = self._at(index)
        return self._read(_FORMS[size], place) if place else 0

    def inner(self, index: int) -> _Table | None:
        """The table that a field points at."""
        place = self._at(index)
        return _Table(self._text, place + self._read("<I", place)) if place else None

    def pairs(self, index: int) -> np.ndarray[tuple[int, int], np.dtype[np.int64]]:
        """A vector of structs of two int64 each, as int64[n, 2]."""
        place = self._at(index)
        if not place:
            return np.empty((0, 2), np.int64)
        place += self._read("<I", place)
        count = self._read("<I", place)
        return np.frombuffer(self._slice(place + 4, count * 16), "<i8").reshape(count, 2).astype(np.int64)

"""Texts of columns, and how they are joined into lines: the fewer pieces a line has, the cheaper it is.

Here lives the joining, and the room that texts may take. What a value looks like is `arrow_json`'s business. Joining
costs some 10 ns a piece and row whatever the piece holds (measured), so what stands between two columns is put into the
words of a dictionary, or into texts of one length, where it is written once or in one stroke. Needs pyarrow; imported
only once a body has come.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from ..errors import BodyError
from .arrow_types import values_of

Array = Any  # a pyarrow.Array


@dataclass(slots=True)
class Room:
    """Bytes that the texts of a body may take in all."""

    bytes_at_most: int
    taken: int = 0

    def take(self, size: int) -> None:
        """Room for so many bytes more. Raises BodyError 413."""
        self.taken += size
        self.check(self.taken)

    def check(self, size: int) -> None:
        """Raise BodyError 413 where one text alone, that is yet to be made, has no room."""
        if size > self.bytes_at_most:
            detail = f"the body takes more than {self.bytes_at_most:,} bytes as JSON: send less at once"
            raise BodyError(413, "Content Too Large", detail)


@dataclass(frozen=True, slots=True)
class Words:
    """A column as distinct words and which of them each row has. A row without one is null."""

    words: Array  # string
    indices: Array  # integers

    def quoted(self, in_marks: bool) -> Words:
        """The same without nulls: the words in quotation marks if wanted, and one word more for null."""
        words, indices = (self.affixed('"', '"').words if in_marks else self.words), self.indices
        if indices.null_count:
            words = pa.concat_arrays([words, pa.array(["null"])])
            numbers, valid = values_of(indices)
            indices = pa.array(np.where(valid, numbers, len(words) - 1))
        return Words(words, indices)

    def affixed(self, before: str, after: str) -> Words:
        """Something before and after each word."""
        return replace(self, words=pc.binary_join_element_wise(before, self.words, after, ""))

    def texts(self, room: Room) -> Array:
        """One text for each row; a word may stand in every row, so the texts are sized first."""
        lengths = np.diff(offsets_of(self.words)).astype(np.int64)
        room.take(int(lengths[values_of(self.indices)[0]].sum()))
        return pc.take(self.words, self.indices)


@dataclass(frozen=True, slots=True)
class Even:
    """A column without nulls whose texts have one length: a table of characters, one row each."""

    table: NDArray[np.uint8]

    @classmethod
    def of(cls, text: Array) -> Even | None:
        """None where the texts are of several lengths, or longer than any number or time."""
        offsets = offsets_of(text)
        width = int(offsets[1]) - int(offsets[0])
        if text.null_count or not 0 < width <= 40 or (np.diff(offsets) != width).any():
            return None
        return cls(characters_of(text).reshape(len(text), width))

    def affixed(self, before: str, after: str, room: Room) -> Array:
        """The texts with something before and after each."""
        rows, width = self.table.shape
        start, end = np.frombuffer(before.encode(), np.uint8), np.frombuffer(after.encode(), np.uint8)
        size = len(start) + width + len(end)
        room.take(rows * size)
        table = np.empty((rows, size), np.uint8)
        table[:, : len(start)], table[:, len(start) + width :] = start, end
        table[:, len(start) : len(start) + width] = self.table
        return text_array(np.arange(rows + 1) * size, table)


Piece = Any  # a literal (str), a string array, Words or Even


def joined(pieces: Sequence[Piece], count: int, room: Room) -> Array:
    """One text for each of `count` rows: the pieces one after the other, `null` where an array has none."""
    parts = _folded(pieces, room)
    literals = sum(len(part.encode()) for part in parts if isinstance(part, str))
    room.take(count * literals)
    if all(isinstance(part, str) for part in parts):
        return pa.array(["".join(parts)] * count, pa.string())
    if len(parts) == 1:
        return pc.fill_null(parts[0], "null")
    return pc.binary_join_element_wise(*parts, "", null_handling="replace", null_replacement="null")


def _folded(pieces: Sequence[Piece], room: Room) -> list[Any]:
    """Literals and arrays: literals are put into a neighbour where that is cheap, the one behind them first."""
    merged: list[Piece] = []
    for piece in pieces:
        if isinstance(piece, str) and merged and isinstance(merged[-1], str):
            merged[-1] += piece
        else:
            merged.append(piece if isinstance(piece, str | Words) else Even.of(piece) or piece)
    parts: list[Any] = []
    waiting = ""
    for place, piece in enumerate(merged):
        if isinstance(piece, str):
            waiting += piece
            continue
        if not isinstance(piece, Words | Even):
            room.take(text_bytes(piece))
            parts += [waiting, piece] if waiting else [piece]
            waiting = ""
            continue
        after = merged[place + 1] if place + 1 < len(merged) and isinstance(merged[place + 1], str) else ""
        # What follows is taken only where the next piece could not take it itself.
        if after and place + 2 < len(merged) and isinstance(merged[place + 2], Words | Even):
            after = ""
        elif after:
            merged[place + 1] = ""
        if isinstance(piece, Words):
            parts.append(piece.affixed(waiting, after).texts(room))
        else:
            parts.append(piece.affixed(waiting, after, room))
        waiting = ""
    return [*parts, waiting] if waiting else parts


def text_bytes(text: Array) -> int:
    """Bytes of a string array's texts."""
    offsets = offsets_of(text)
    return int(offsets[-1]) - int(offsets[0])


def offsets_of(text: Array) -> NDArray[Any]:
    """The offsets of a string or binary array, large or not: n + 1."""
    is_large = pa.types.is_large_string(text.type) or pa.types.is_large_binary(text.type)
    kind = np.dtype(np.int64 if is_large else np.int32)
    buffer = text.buffers()[1]
    if not len(text) or buffer is None or not buffer.size:
        return np.zeros(1, kind)
    return np.frombuffer(buffer, kind, len(text) + 1, text.offset * kind.itemsize)


def characters_of(text: Array) -> NDArray[np.uint8]:
    """The bytes of all texts, one after the other (those below a null too)."""
    offsets = offsets_of(text)
    size = int(offsets[-1]) - int(offsets[0])
    return np.frombuffer(text.buffers()[2], np.uint8, size, int(offsets[0])) if size else np.empty(0, np.uint8)


def text_array(offsets: NDArray[Any], characters: NDArray[np.uint8], like: Array = None) -> Array:
    """A string array of these texts, null where `like` is."""
    buffers = [None, pa.py_buffer(offsets.astype(np.int32)), pa.py_buffer(np.ascontiguousarray(characters))]
    text = pa.Array.from_buffers(pa.string(), len(offsets) - 1, buffers)
    if like is None or not like.null_count:
        return text
    return pc.if_else(like.is_valid(), text, pa.scalar(None, pa.string()))

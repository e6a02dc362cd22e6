"""How deep JSON text is nested, told from its brackets alone, without recursion and in bounded memory.

msgspec refuses what is thousands of levels deep with a RecursionError and accepts everything above; the limit of a
feed lies between. Here live the cheap proof that no line of a body can be that deep, the exact depth of a text, and
the walk over a JSON array that finds its items when msgspec cannot.
"""

from __future__ import annotations

import re
from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

_STRINGS = re.compile(rb'"[^"\\]*+(?:\\.[^"\\]*+)*+"?', re.DOTALL)
_NO_BRACKETS = bytes(byte for byte in range(256) if byte not in b"[]{}")
_STEP = np.zeros(256, np.int8)
_STEP[list(b"[{")] = 1
_STEP[list(b"]}")] = -1
_STRUCTURE = _STEP != 0
_STRUCTURE[ord(",")] = True
_CHUNK_BYTES = 1024 * 1024


def deepest(text: bytes) -> int:
    """The deepest level of nesting in JSON texts that stand one after the other (0: no bracket outside strings)."""
    brackets = _STRINGS.sub(b"", text).translate(None, _NO_BRACKETS)
    if not brackets:
        return 0
    levels = np.cumsum(_STEP[np.frombuffer(brackets, np.uint8)], dtype=np.int64)
    return max(0, int(levels.max()))


def deep_suspects(payload: bytes, starts: NDArray[np.int64], limit: int) -> NDArray[np.int64]:
    """Indices of lines that may be deeper than `limit`: those with more opening brackets than that, in strings or not.

    `starts` are the places of the lines' first bytes, ascending from 0. Two steps (measured for events of 143 bytes):
    the brackets of the whole payload, 10 ns an event, settle it for flat events; else they are counted line by line,
    20 ns more, as 16-bit sums (int64 would take 90), which hold for lines shorter than 64 KiB; longer ones are suspect.
    """
    characters = np.frombuffer(payload, np.uint8)
    opening = characters == 0x7B
    if b"[" in payload:
        opening |= characters == 0x5B
    leading = np.count_nonzero(opening[starts])
    # A line deeper than the limit has more than `limit` of them, and each of the `leading` others at least one.
    if not len(starts) or np.count_nonzero(opening) < leading + limit:
        return np.empty(0, np.int64)
    counts = np.add.reduceat(opening.view(np.uint8), starts, dtype=np.uint16)
    long = np.diff(starts, append=len(payload)) > 0xFFFF
    return np.flatnonzero((counts > limit) | long)


def too_short_to_be_deep(payload: bytes, longest: int, limit: int) -> bool:
    """Whether no line can be deeper than `limit`, for lines that are JSON objects of at most `longest` bytes.

    A level costs two bytes at least, or five where it is an object (`{"":}`): the innermost alone may be empty. So
    feeds without arrays need no count of brackets up to 321 bytes a line with the usual limit of 64.
    """
    return longest < 5 + 2 * limit or (longest < 5 * limit + 2 and b"[" not in payload)


def deep_items(body: bytes, limit: int, items_at_most: int) -> tuple[int, list[tuple[int, int, int]]]:
    """The number of items of a JSON array, and (item number, start, end) of those nested deeper than `limit`.

    Numbers count from 1. The count stops soon after `items_at_most`. Text that is no array gives what its brackets
    look like; whoever calls lets msgspec judge the rest.
    """
    number, start, deep, found = 1, body.find(b"[") + 1, 0, []
    for places, levels in _structure(body):
        # An item ends at a comma on level 1 and at the array's own closing bracket (level 0).
        commas = np.frombuffer(body, np.uint8)[places] == 0x2C
        stops = np.flatnonzero((commas & (levels == 1)) | (levels == 0)).tolist()
        before = 0
        for stop in [*stops, len(levels)]:
            if stop > before:
                deep = max(deep, int(levels[before:stop].max()) - 1)
            if stop == len(levels):
                break
            if deep > limit:
                found.append((number, start, int(places[stop])))
            start, deep, before, number = int(places[stop]) + 1, 0, stop, number + 1
            if levels[stop] == 0:
                return number - 1, found
            if number > items_at_most:
                return number, found
    if deep > limit:
        found.append((number, start, len(body)))
    return number, found


def _structure(body: bytes) -> Iterator[tuple[NDArray[np.int64], NDArray[np.int64]]]:
    """Places of the brackets and commas outside strings, and the level after each, a chunk at a time."""
    place, level, inside = 0, 0, 0
    while place < len(body):
        chunk = body[place : place + _CHUNK_BYTES]
        if (len(chunk) - len(chunk.rstrip(b"\\"))) % 2:  # the next byte is escaped: it belongs to this chunk
            chunk = body[place : place + len(chunk) + 1]
        characters = np.frombuffer(chunk, np.uint8)
        quotes = _quotes(characters, chunk)
        marks = np.flatnonzero(_STRUCTURE[characters])
        marks = marks[(np.searchsorted(quotes, marks) + inside) % 2 == 0]
        levels = level + np.cumsum(_STEP[characters[marks]], dtype=np.int64)
        if len(marks):
            yield marks + place, levels
            level = int(levels[-1])
        inside = (inside + len(quotes)) % 2
        place += len(chunk)


def _quotes(characters: NDArray[np.uint8], chunk: bytes) -> NDArray[np.int64]:
    """Places of the quotation marks that open or close a string."""
    quotes = np.flatnonzero(characters == 0x22)
    if b"\\" not in chunk or not len(quotes):
        return quotes
    # A quotation mark is escaped when the run of backslashes that ends before it has an odd length.
    others = np.flatnonzero(characters != 0x5C)
    rank = np.searchsorted(others, quotes)
    before = np.where(rank > 0, others[rank - 1], -1)
    real: NDArray[np.int64] = quotes[(quotes - before) % 2 == 1]
    return real

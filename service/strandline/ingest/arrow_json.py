"""Rows of Arrow columns as lines of compact JSON, column by column: one object a row, in the order of the schema.

Here lives the rule for every type (deploy/formats.md states it) and the joining of the columns' texts into lines. What
a column means to the feed is not decided here. A value that JSON cannot hold (NaN, a date beyond year 9999) is written
as a string, and its row is named: such a row goes to quarantine with that line. The law is held against the standard
library's json, row by row, in tests/property/test_arrow_json.py. Needs pyarrow; imported only once a body has come.

Everything is sized before it is made: a view, a dictionary or an escape can stand for far more than its own bytes.
"""

from __future__ import annotations

import json
from binascii import b2a_base64
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from typing import Any, NamedTuple

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from .arrow_texts import Array, Piece, Room, Words, characters_of, joined, offsets_of, text_array, text_bytes
from .arrow_types import is_binary, is_text, values_of
from .timestamps import UNIT_NS
from .values import shown

Bools = NDArray[np.bool_]
Path = tuple[str, ...]

_A_SECOND = {unit: UNIT_NS["s"] // length_ns for unit, length_ns in UNIT_NS.items()}  # how many of a unit it has
_YEARS = {unit: (-62_167_219_200 * parts, 253_402_300_800 * parts - 1) for unit, parts in _A_SECOND.items()}
_DAYS = (-719_528, 2_932_896)  # 0000-01-01 and 9999-12-31, in days since 1970
_DAY_S = 86_400
_ESCAPES = {0x22: '\\"', 0x5C: "\\\\", 0x08: "\\b", 0x09: "\\t", 0x0A: "\\n", 0x0C: "\\f", 0x0D: "\\r"}
_ESCAPED = np.zeros(256, np.uint8)  # how many bytes more a byte takes in a JSON string
_ESCAPED[:32] = 5
_ESCAPED[list(_ESCAPES)] = 1
# Floats of measurements repeat: finding the distinct ones takes 15 ns a row, writing one 55 to 70 (measured). So a
# quarter of the rows is looked at first, and the distinct ones are written where that promises half the work or less.
_REPEATING_ROWS_AT_LEAST, _LOOKED_AT, _DISTINCT_AT_MOST = 256, 4, 0.6


class Unheld(NamedTuple):
    """Rows that JSON cannot hold, because of one column."""

    rows: Bools
    reason: str  # a key of errors.FAULT_REASONS
    why: str


@dataclass(slots=True)
class Writer:
    """Writes columns of equal length. `replaced` are columns, by path, whose text was made already."""

    count: int
    room: Room
    replaced: dict[Path, tuple[Array, bool]] = field(default_factory=dict)
    unheld: list[Unheld] = field(default_factory=list)
    made: int = 0  # bytes of the texts so far: looked at after each column, not when all of them are there
    _pieces: list[Piece] = field(default_factory=list)

    def lines(self, names: Sequence[str], columns: Sequence[Array]) -> Array:
        """A string array with one line for each row, its line feed included."""
        self._object((), names, columns)
        self._add("\n")
        return joined(self._pieces, self.count, self.room)

    def _add(self, *pieces: Piece) -> None:
        for piece in pieces:
            if isinstance(piece, str):
                self.made += self.count * len(piece)
            elif not isinstance(piece, Words):
                self.made += text_bytes(piece)
            self._pieces.append(piece)
        self.room.check(self.made)

    def _object(self, path: Path, names: Sequence[str], columns: Sequence[Array]) -> None:
        for number, (name, column) in enumerate(zip(names, columns, strict=True)):
            self._add(("," if number else "{") + json.dumps(name, ensure_ascii=False) + ":")
            self._value((*path, name), column)
        self._add("}" if columns else "{}")

    def _value(self, path: Path, column: Array) -> None:
        if pa.types.is_struct(column.type) and path not in self.replaced:
            self._struct(path, column)
            return
        text, quoted = self.replaced[path] if path in self.replaced else self._text(path, column)
        if isinstance(text, Words):
            self._add(text.quoted(quoted))
        elif text is None:
            self._add("null")
        elif quoted and text.null_count:
            self._add(pc.binary_join_element_wise('"', text, '"', ""))
        elif quoted:
            self._add('"', text, '"')
        else:
            self._add(text)

    def _struct(self, path: Path, column: Array) -> None:
        names = [column.type.field(number).name for number in range(column.type.num_fields)]
        if not column.null_count:
            self._object(path, names, column.flatten())
            return
        inner = Writer(self.count, self.room, self.replaced, self.unheld, self.made)
        inner._object(path, names, column.flatten())
        text = joined(inner._pieces, self.count, self.room)
        self._add(pc.if_else(column.is_valid(), text, pa.scalar(None, pa.string())))

    # --- the text of a column: and whether it stands in quotation marks --------------------------------------------

    def _text(self, path: Path, column: Array) -> tuple[Array | Words | None, bool]:
        kind = column.type
        if pa.types.is_null(kind) or column.null_count == len(column):
            return None, False
        if pa.types.is_dictionary(kind):
            return _dictionary(column, self.room), True
        if is_text(kind):
            return escaped(plain_text(column, self.room), self.room), True
        if is_binary(kind):
            return _base64(column, self.room), True
        if pa.types.is_floating(kind):
            return self._floats(path, column), False
        if pa.types.is_timestamp(kind):
            return self._instants(path, column), True
        if pa.types.is_date(kind) or pa.types.is_time(kind):
            return self._calendar(path, column), True
        return pc.cast(column, pa.string()), False  # booleans, integers and decimals as they are

    def _bad(self, path: Path, rows: Bools, why: str, reason: str = "malformed") -> None:
        if rows.any():
            name = shown("/".join(("", *path)), 80)
            self.unheld.append(Unheld(rows, reason, f"JSON cannot hold the row: {name} holds {why}"))

    def _floats(self, path: Path, column: Array) -> Array | Words:
        if pa.types.is_float16(column.type):
            column = column.cast(pa.float32())
        finite = pc.fill_null(pc.is_finite(column), True)
        if finite.true_count == len(column):
            return _float_text(column)
        self._bad(path, ~np.asarray(finite), "a number that is not finite")
        text = pc.cast(column, pa.string())
        return pc.if_else(finite, text, pc.binary_join_element_wise('"', text, '"', ""))

    def _instants(self, path: Path, column: Array) -> Array:
        unit = column.type.unit
        text, outside = instants(column)
        if outside is not None:
            self._bad(path, outside, f"an instant ({unit}) that RFC 3339 cannot write")
        return text

    def _calendar(self, path: Path, column: Array) -> Array:
        kind, least, greatest = column.type, *_DAYS
        integers, valid = values_of(column)
        if pa.types.is_date64(kind):
            least, greatest = _DAYS[0] * _DAY_S * 1000, (_DAYS[1] + 1) * _DAY_S * 1000 - 1
        elif pa.types.is_time(kind):
            least, greatest = 0, _DAY_S * _A_SECOND[kind.unit] - 1
        outside = valid & ((integers < least) | (integers > greatest))
        if not outside.any():
            return pc.cast(column, pa.string())
        self._bad(path, outside, f"a {kind} that no calendar or clock has")
        sound = pc.if_else(pa.array(outside), pa.scalar(None, kind), column)
        return pc.coalesce(pc.cast(sound, pa.string()), pc.cast(pa.array(integers, mask=~valid), pa.string()))


# --- strings -----------------------------------------------------------------------------------------------------


def plain_text(column: Array, room: Room) -> Array:
    """A column of texts as a string array."""
    if pa.types.is_string(column.type):
        return column
    if pa.types.is_string_view(column.type):
        room.check(_view_bytes(column))  # views may stand for the same bytes any number of times
    return pc.cast(column, pa.string())


def _view_bytes(column: Array) -> int:
    """Bytes that a column of views stands for: the first four of a view's 16 bytes are its length."""
    if not len(column):
        return 0
    views = np.frombuffer(column.buffers()[1], "<i4").reshape(-1, 4)[column.offset : column.offset + len(column)]
    return int(views[:, 0].sum(where=np.asarray(column.is_valid()), dtype=np.int64))


def _dictionary(column: Array, room: Room) -> Array | Words:
    """A dictionary column of texts, each word of it escaped once."""
    words = plain_text(column.dictionary, room)
    if words.null_count or not len(words) or len(words) > len(column):
        lengths = np.append(np.diff(offsets_of(words)).astype(np.int64), 0)
        indices, valid = values_of(column.indices)
        room.check(int(lengths[np.where(valid, indices, len(words))].sum()))
        return escaped(pc.take(words, column.indices), room)
    return Words(escaped(words, room), column.indices)


def escaped(text: Array, room: Room) -> Array:
    """Texts as they stand between the quotation marks of JSON (RFC 8259 section 7): only what must be is escaped."""
    characters = characters_of(text)
    # Three comparisons of the whole take 0.1 ns a byte, and as a rule nothing must be escaped.
    if not ((characters < 0x20) | (characters == 0x22) | (characters == 0x5C)).any():
        return text
    found = np.bincount(characters, minlength=256)
    room.check(len(characters) + int(found @ _ESCAPED))
    for byte in (0x5C, *(byte for byte in np.flatnonzero(found * _ESCAPED).tolist() if byte != 0x5C)):
        if found[byte]:
            text = pc.replace_substring(text, pattern=chr(byte), replacement=_ESCAPES.get(byte, f"\\u{byte:04x}"))
    return text


def _base64(column: Array, room: Room) -> Array:
    """Binary values in base64 with padding (RFC 4648 section 4), all values in one call of the encoder."""
    if pa.types.is_binary_view(column.type):
        room.check(_view_bytes(column))
    plain = pc.fill_null(pc.cast(column, pa.binary()), b"")
    offsets, characters = offsets_of(plain).astype(np.int64), characters_of(plain)
    lengths = np.diff(offsets)
    groups = (lengths + 2) // 3
    room.check(int(groups.sum()) * 4)
    # Each value is padded to whole groups of three bytes, so that none shares a group with its neighbour.
    starts = np.cumsum(groups * 3) - groups * 3
    padded = np.zeros(int(groups.sum()) * 3, np.uint8)
    padded[np.arange(len(characters)) + np.repeat(starts - (offsets[:-1] - offsets[0]), lengths)] = characters
    text = np.frombuffer(bytearray(b2a_base64(padded.tobytes(), newline=False)), np.uint8)
    ends = np.cumsum(groups * 4)
    text[ends[lengths % 3 != 0] - 1] = text[ends[lengths % 3 == 1] - 2] = 0x3D
    return text_array(np.append(0, ends), text, column)


# --- numbers and instants ----------------------------------------------------------------------------------------


def _float_text(column: Array) -> Array | Words:
    """The shortest decimal number that reads back as the same float; each distinct one is written once, if they
    repeat."""
    some = column[: len(column) // _LOOKED_AT]
    if len(column) < _REPEATING_ROWS_AT_LEAST or len(pc.unique(some)) > len(some) * _DISTINCT_AT_MOST:
        return pc.cast(column, pa.string())
    encoded = pc.dictionary_encode(column)
    return Words(pc.cast(encoded.dictionary, pa.string()), encoded.indices)


def instants(column: Array) -> tuple[Array, Bools | None]:
    """Timestamps in RFC 3339, in UTC, with the decimals of their unit; and the rows outside years 0 to 9999.

    Those are written as their number and unit. A timestamp without a zone is taken for UTC.
    """
    unit = column.type.unit
    integers, valid = values_of(column)
    least, greatest = _YEARS[unit]
    outside = (integers < least) | (integers > greatest)
    outside &= valid
    sound = np.where(valid & ~outside, integers, 0)
    text = pc.cast(pa.array(sound).cast(pa.timestamp(unit)), pa.string())
    width = 19 + {"s": 0, "ms": 4, "us": 7, "ns": 10}[unit]
    table = np.empty((len(column), width + 1), np.uint8)
    table[:, :width] = characters_of(text).reshape(len(column), width)
    table[:, 10], table[:, width] = 0x54, 0x5A  # T, Z
    done = text_array(np.arange(len(column) + 1) * (width + 1), table, column)
    if not outside.any():
        return done, None
    numbers = pc.binary_join_element_wise(pc.cast(pa.array(integers), pa.string()), unit, " ")
    return pc.if_else(pa.array(outside), numbers, done), outside


def each_type(schema: Any) -> Iterator[tuple[Path, Any]]:
    """Every column of a schema with its path, those inside structs too; the outer first."""
    left: list[tuple[Path, Any]] = [((each.name,), each.type) for each in reversed(list(schema))]
    while left:
        path, kind = left.pop()
        yield path, kind
        if pa.types.is_struct(kind):
            inner = [kind.field(number) for number in range(kind.num_fields)]
            left.extend(((*path, each.name), each.type) for each in reversed(inner))

"""Values out of events, in the types of PostgreSQL's columns: only what a mapping points at is decoded.

A value that its column cannot hold exactly as a value of that type is not guessed at: "7" is no number, 1.0 no integer.
It comes out as None and its row is named. Nothing here knows tables, batches or a server.

All lines of a block are decoded at once into a struct of the wanted fields (an event of 160 bytes: 0.25 us, and 0.05 to
0.4 for each field); a line that does not have the expected types is read again by itself (2 us for each field).
"""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence
from typing import Annotated, Any, NamedTuple

import msgspec

from ..core.columns import Times
from ..ingest.pointer import decoded_lines, fits_structs, parse_pointer, raw_at
from ..ingest.timestamps import TimestampError, parse_rfc3339_column
from .postgres_columns import Column

EPOCH_US = 946_684_800_000_000  # 2000-01-01, from which PostgreSQL counts microseconds; in us since 1970 UTC
NUMBER_CHARACTERS_AT_MOST = 1000  # of a decimal number in jsonb, and its exponent: PostgreSQL's numeric ends at 16,383

Values = list[Any]
_NUL = re.compile(rb"(?<!\\)(?:\\\\)*\\u0000")
_LONG_NUMBER = re.compile(rb"[0-9][eE][+-]?[0-9]{4}|[0-9.]{1000}")
_NULL = msgspec.Raw(b"null")
_TEXTS = msgspec.json.Decoder(str | int)


class Unfit:
    """What stands for a value that its column cannot hold. One object: UNFIT."""


UNFIT = Unfit()


def storable(text: str) -> str:
    """The text as PostgreSQL can hold it: one with U+0000 becomes its JSON literal, `"a\\u0000b"` with the quotes.

    So does a text that looks like such a literal, so that two texts never become the same.
    """
    if "\0" in text or (text.startswith('"') and "\\u0000" in text):
        return msgspec.json.encode(text).decode()
    return text


def storable_column(texts: Sequence[str | None]) -> list[str | None]:
    """`storable` for a column; None stays None."""
    joined = "".join(filter(None, texts))
    if "\0" in joined or "\\u0000" in joined:
        return [None if text is None else storable(text) for text in texts]
    return list(texts)


def microseconds(times: Times) -> Times:
    """Times in ns since 1970 UTC as a timestamptz holds them: us since 2000; rounded down."""
    return times // 1000 - EPOCH_US


# ---- one type of column ---------------------------------------------------------------------------------------------


class _Type(NamedTuple):
    """How values of one type are found.

    `field` is what msgspec decodes in the fast way, None for an absent value. `slow` makes the same of one value's
    JSON, or raises or gives UNFIT. `finish` turns the found values into those of the column.
    """

    field: Any
    slow: Callable[[bytes], Any]
    finish: Callable[[Values], Values]


def _typed(kind: Any) -> Callable[[bytes], Any]:
    decode: Callable[[bytes], Any] = msgspec.json.Decoder(kind).decode
    return decode


def _slow_text(raw: bytes) -> str | int:
    """A string's content; of anything else the JSON as it came."""
    try:
        return _TEXTS.decode(raw)
    except msgspec.MsgspecError:
        return raw.decode()


def _texts(values: Values) -> Values:
    return storable_column([value if value is None or type(value) is str else str(value) for value in values])


def _instants(values: Values) -> Values:
    """RFC 3339 texts as microseconds; what is none is unfit."""
    rows = [row for row, value in enumerate(values) if value is not None]
    times, errors = parse_rfc3339_column([values[row] for row in rows])
    done: Values = [None] * len(values)
    for row, instant in zip(rows, microseconds(times).tolist(), strict=True):
        done[row] = instant
    for index in errors:
        done[rows[index]] = UNFIT
    return done


def _documents(values: Values) -> Values:
    return [None if value is None else _document(bytes(value)) for value in values]


def _document(raw: bytes) -> str | Unfit | None:
    """JSON that jsonb takes: it holds no U+0000, and no number beyond PostgreSQL's numeric."""
    if raw == b"null":
        return None
    if b"\\u0000" in raw and _NUL.search(raw):
        return UNFIT
    if _LONG_NUMBER.search(raw):
        try:
            _BOUNDED.decode(raw)
        except msgspec.MsgspecError:
            return UNFIT
    return raw.decode()


def _bounded(number: str) -> float:
    _, _, exponent = number.lower().partition("e")
    if len(number) > NUMBER_CHARACTERS_AT_MOST or (exponent and abs(int(exponent)) > NUMBER_CHARACTERS_AT_MOST):
        raise ValueError("a number that is too long")
    return 0.0


_BOUNDED = msgspec.json.Decoder(float_hook=_bounded)
_BIGINT = Annotated[int, msgspec.Meta(ge=-(2**63), le=2**63 - 1)]
_INTEGER = Annotated[int, msgspec.Meta(ge=-(2**31), le=2**31 - 1)]

_TYPES: dict[str, _Type] = {
    "text": _Type(str | int | None, _slow_text, _texts),
    "bigint": _Type(_BIGINT | None, _typed(_BIGINT), list),
    "integer": _Type(_INTEGER | None, _typed(_INTEGER), list),
    "double precision": _Type(float | None, _typed(float), list),
    "boolean": _Type(bool | None, _typed(bool), list),
    "timestamptz": _Type(str | None, _typed(str), _instants),
    "jsonb": _Type(msgspec.Raw, bytes, _documents),
}


# ---- all fields of a mapping ----------------------------------------------------------------------------------------


class Fields:
    """Finds the values that a mapping's columns point at."""

    def __init__(self, columns: Sequence[Column]) -> None:
        """Columns with a pointer, or with the whole event as jsonb. Raises ingest.pointer.PointerError."""
        self.columns = columns
        self._tokens = [parse_pointer(column.at) for column in columns]  # (): the whole event
        self._types = [_TYPES[column.type] for column in columns]
        self._decoder = self._fast_decoder()

    def read(self, block: bytes, count: int) -> tuple[list[Values], dict[int, list[int]]]:
        """Values by column of the `count` lines of a block, and the columns (by index) that did not fit, by row.

        A value that is absent, null or unfit is None.
        """
        if not self.columns:
            return [], {}
        found = self._fast(block, count) or self._by_line(block)
        unfit: dict[int, list[int]] = {}
        done = []
        for index, (kind, values) in enumerate(zip(self._types, found, strict=True)):
            finished = self._finished(kind, values)
            for row in [row for row, value in enumerate(finished) if value is UNFIT]:
                finished[row] = None
                unfit.setdefault(row, []).append(index)
            done.append(finished)
        return done, unfit

    @staticmethod
    def _finished(kind: _Type, values: Values) -> Values:
        """`finish` for a column in which some rows may be unfit already."""
        rows = [row for row, value in enumerate(values) if value is UNFIT]
        if not rows:
            return kind.finish(values)
        for row in rows:
            values[row] = None
        finished = kind.finish(values)
        for row in rows:
            finished[row] = UNFIT
        return finished

    # ---- the fast way -----------------------------------------------------------------------------------------------

    def _fast_decoder(self) -> msgspec.json.Decoder[Any] | None:
        """None where a pointer may go through an array, leads through another, or is nothing that a field can be."""
        paths = set(self._tokens)
        through = any(path != other and other[: len(path)] == path for path in paths for other in paths)
        if through or () in paths or len(paths) < len(self._tokens):
            return None
        if not fits_structs(token for path in paths for token in path):
            return None
        tree: dict[str, Any] = {}
        for index, tokens in enumerate(self._tokens):
            inner = tree
            for token in tokens[:-1]:
                inner = inner.setdefault(token, {})
            inner[tokens[-1]] = index
        self._paths = _paths(tree)
        return msgspec.json.Decoder(self._struct(tree))

    def _struct(self, tree: dict[str, Any]) -> Any:
        fields: list[tuple[str, Any, Any]] = []
        for number, leaf in enumerate(tree.values()):
            if isinstance(leaf, dict):
                fields.append((f"field_{number}", self._struct(leaf) | None, None))
            else:
                kind = self._types[leaf].field
                fields.append((f"field_{number}", kind, _NULL if kind is msgspec.Raw else None))
        rename = {f"field_{number}": token for number, token in enumerate(tree)}
        return msgspec.defstruct("Wanted", fields, rename=rename, gc=False)

    def _fast(self, block: bytes, count: int) -> list[Values] | None:
        records = None if self._decoder is None else decoded_lines(self._decoder, block, count)
        if records is None:
            return None
        return [self._along(records, self._paths[index]) for index in range(len(self.columns))]

    @staticmethod
    def _along(records: Values, path: Sequence[str]) -> Values:
        *inner, last = path
        for name in inner:
            records = [None if record is None else getattr(record, name) for record in records]
        return [None if record is None else getattr(record, last) for record in records]

    # ---- the slow way -----------------------------------------------------------------------------------------------

    def _by_line(self, block: bytes) -> list[Values]:
        found: list[Values] = [[] for _ in self.columns]
        for line in block.split(b"\n")[:-1]:
            values = self._fast(line + b"\n", 1)
            for index, column in enumerate(found):
                column.append(values[index][0] if values else self._slow(line, index))
        return found

    def _slow(self, line: bytes, index: int) -> Any:
        try:
            found = raw_at(line, self._tokens[index])
            raw = b"null" if found is None else bytes(found)
            return None if raw == b"null" else self._types[index].slow(raw)
        except (msgspec.MsgspecError, RecursionError, TimestampError):
            return UNFIT


def _paths(tree: dict[str, Any], above: tuple[str, ...] = ()) -> dict[int, tuple[str, ...]]:
    """The attributes that lead to each column's field."""
    paths: dict[int, tuple[str, ...]] = {}
    for number, leaf in enumerate(tree.values()):
        here = (*above, f"field_{number}")
        paths |= _paths(leaf, here) if isinstance(leaf, dict) else {leaf: here}
    return paths

"""What a value must be to count as the time, the source or the id of an event: one law, for one value and for columns.

The columns tell which rows break the law; the scalar functions, asked about such a row, say why. A property test holds
the two together. Nothing here reads JSON.
"""

from __future__ import annotations

import json
import re
import struct
from collections.abc import Mapping, Sequence
from hashlib import blake2b
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from ..core.columns import Times
from .pointer import MISSING, Unheld
from .timestamps import TimestampError, from_unit, from_unit_column, parse_rfc3339, parse_rfc3339_column

Unit = Literal["rfc3339", "s", "ms", "us", "ns"]
Rows = Sequence[int]

SOURCE_BYTES_AT_MOST = 256
ID_BYTES_AT_MOST = 1024
DETAIL_CHARACTERS_AT_MOST = 200
_SHOWN_CHARACTERS = 48
_POINTER_CHARACTERS = 80
_INTEGER = re.compile("-?[0-9]+")
# Native `long` packs Python ints in 7 ns each where np.array takes 14 (measured); it has 8 bytes except on Windows.
_INT64 = "l" if struct.calcsize("l") == 8 else "q"


class LineFault(Exception):
    """Why a line is no event: a key of errors.FAULT_REASONS, and a sentence of at most 200 characters."""

    def __init__(self, reason: str, detail: str) -> None:
        super().__init__(detail)
        self.reason, self.detail = reason, detail[:DETAIL_CHARACTERS_AT_MOST]


def shown(text: str, characters: int = _SHOWN_CHARACTERS) -> str:
    """A text in quotation marks, ASCII, free of control characters, cut to a bearable length."""
    cut = text if len(text) <= characters else text[: characters - 1] + "…"
    escaped = json.dumps(cut).replace("\\u2026", "...").replace("\x7f", "\\u007f")
    return escaped if len(escaped) <= characters + 40 else escaped[: characters + 36] + '..."'


def _found(value: Any) -> str:
    """What a value is, for a message."""
    if isinstance(value, str):
        return f"the string {shown(value)}"
    if value is True or value is False:
        return "true" if value else "false"
    if isinstance(value, Unheld):
        return f"the number {shown(value.text)[1:-1]}"
    if isinstance(value, int | float):
        return f"the number {shown(str(value))[1:-1]}"
    return "an object" if isinstance(value, dict) else "an array"


def _is_integer(value: Any) -> bool:
    return isinstance(value, int) and not isinstance(value, bool)


def _check_present(value: Any, role: str, at: str) -> None:
    """null counts as absent, as it does for the attributes of a CloudEvent."""
    if value is MISSING or value is None:
        what = "null" if value is None else "nothing"
        raise LineFault(f"{role}_missing", f"{what} stands at {shown(at, _POINTER_CHARACTERS)}")


def check_time(value: Any, unit: Unit, at: str) -> int:
    """The time in ns. Raises LineFault (time_missing, time_invalid, time_out_of_range)."""
    _check_present(value, "time", at)
    found = f"{shown(at, _POINTER_CHARACTERS)} holds {_found(value)}"
    wanted = "an RFC 3339 text" if unit == "rfc3339" else f"an integer of {unit} since 1970"
    try:
        if unit == "rfc3339" and isinstance(value, str):
            return parse_rfc3339(value)
        if unit != "rfc3339" and _is_integer(value):
            return from_unit(value, unit)
    except TimestampError as error:
        raise LineFault(error.reason, f"{found}: {error}") from None
    if unit != "rfc3339" and isinstance(value, Unheld) and _INTEGER.fullmatch(value.text):
        raise LineFault("time_out_of_range", f"{found}: int64 nanoseconds cannot hold it")
    raise LineFault("time_invalid", f"{found}, not {wanted}")


def check_source(value: Any, at: str) -> str:
    """The source's name. Raises LineFault (source_missing, source_invalid)."""
    text = _check_text(value, "source", at, SOURCE_BYTES_AT_MOST)
    if "\0" in text:  # stores could not hold it as text (PostgreSQL's documentation, "Character Types")
        found = f"{shown(at, _POINTER_CHARACTERS)} holds {_found(value)}"
        raise LineFault("source_invalid", f"{found}: no source has the character U+0000")
    return text


def is_source(text: str) -> bool:
    """The law of check_source for a text."""
    return _is_text(text, SOURCE_BYTES_AT_MOST) and "\0" not in text


def check_id(value: Any, at: str) -> str:
    """The id as text. Raises LineFault (id_missing, id_invalid). An empty id would make all its events one: refused."""
    return _check_text(value, "id", at, ID_BYTES_AT_MOST)


def _check_text(value: Any, role: str, at: str, bytes_at_most: int) -> str:
    _check_present(value, role, at)
    found = f"{shown(at, _POINTER_CHARACTERS)} holds {_found(value)}"
    if isinstance(value, Unheld) and _INTEGER.fullmatch(value.text):
        raise LineFault(f"{role}_invalid", f"{found}: longer than {bytes_at_most} bytes")
    if not isinstance(value, str) and not _is_integer(value):
        raise LineFault(f"{role}_invalid", f"{found}, neither a string nor an integer")
    text = str(value)
    try:
        size = len(text.encode())
    except UnicodeEncodeError:
        raise LineFault(f"{role}_invalid", f"{found}: half a surrogate pair is no character") from None
    if not 1 <= size <= bytes_at_most:
        why = "empty" if size == 0 else f"longer than {bytes_at_most} bytes"
        raise LineFault(f"{role}_invalid", f"{found}: {why}")
    return text


def _is_text(text: str, bytes_at_most: int) -> bool:
    """The law of _check_text for a text."""
    try:
        return 1 <= len(text.encode()) <= bytes_at_most
    except UnicodeEncodeError:
        return False


# --- columns -----------------------------------------------------------------------------------------------------


def time_column(values: Sequence[Any], unit: Unit) -> tuple[Times, Rows]:
    """Times of int64 integers or of texts, whichever the unit asks for; and the rows that are none."""
    if unit == "rfc3339":
        times, errors = parse_rfc3339_column(values)
        return times, list(errors)
    packed = struct.pack(f"{len(values)}{_INT64}", *values)
    times, outside = from_unit_column(np.frombuffer(packed, np.int64), unit)
    return times, () if outside is None else np.flatnonzero(outside).tolist()


def number_column(numbers: Sequence[int]) -> NDArray[np.uint32]:
    """Numbers of sources as a column."""
    return np.frombuffer(struct.pack(f"{len(numbers)}I", *numbers), np.uint32)


def source_column(values: Sequence[str | int], table: Mapping[str, int]) -> tuple[NDArray[np.uint32], list[str], Rows]:
    """Numbers of the sources, names that the table lacks in order of first appearance, rows that are no source.

    The number of the k-th new name (from 0) is len(table) + k. A row that is no source has number 0 and adds no name.
    """
    texts = [value if type(value) is str else str(value) for value in values]
    numbers: dict[str, int] = {}
    new: list[str] = []
    bad: set[str] = set()
    for text in dict.fromkeys(texts):
        number = table.get(text)
        if number is None and not is_source(text):
            bad.add(text)
            number = 0
        elif number is None:
            number = len(table) + len(new)
            new.append(text)
        numbers[text] = number
    rows = [row for row, text in enumerate(texts) if text in bad] if bad else ()
    return number_column([numbers[text] for text in texts]), new, rows


def identity_column(sources: Sequence[str | int], ids: Sequence[str | int]) -> tuple[NDArray[np.uint64], Rows]:
    """64-bit digests of (source, id), the same in every process and version; and the rows whose id is none.

    BLAKE2b (RFC 7693) with 8 bytes of output over: the length of the source's UTF-8 in 4 bytes, little-endian, the
    source, the id. The integer 7 and the text "7" are the same id. Faster hashes exist (some 100 ns instead of 200),
    but ids come from outside: with a hash that is not made for it, one sender could make up an id that collides with
    another sender's, whose event would then be taken for a repeat and be lost.
    """
    started = {source: _started(source) for source in dict.fromkeys(sources)}
    texts = [(value if type(value) is str else str(value)).encode(errors="surrogatepass") for value in ids]
    digests: list[bytes] = []
    for source, text in zip(sources, texts, strict=True):
        digest = started[source].copy()
        digest.update(text)
        digests.append(digest.digest())
    bad = [row for row, text in enumerate(texts) if not 1 <= len(text) <= ID_BYTES_AT_MOST]
    return np.frombuffer(b"".join(digests), "<u8").astype(np.uint64, copy=False), bad


def _started(source: str | int) -> blake2b:
    """The digest after the source's part, which all its events share."""
    name = str(source).encode(errors="surrogatepass")
    return blake2b(len(name).to_bytes(4, "little") + name, digest_size=8)

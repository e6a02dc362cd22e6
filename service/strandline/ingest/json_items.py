"""Bodies of JSON to lines: one object, or an array whose items count as lines.

A body that is no JSON at all is refused as a whole; an item that is nested too deep is a fault and hinders no other.
Whether an object is an event is not decided here.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import msgspec
import numpy as np

from ..core.columns import Fault
from ..errors import BodyError
from .limits import BodyLimits
from .lines import Lines, check_count, has_breaks, lines_of, no_lines, utf8_fault, without_breaks
from .nesting import deep_items

EITHER, OBJECT, ARRAY = "one JSON object or array", "one JSON object", "a JSON array"

_BLANKS = b" \t\r\n"
_ITEMS = msgspec.json.Decoder(list[msgspec.Raw])
_ANYTHING = msgspec.json.Decoder(msgspec.Raw)
_BYTE = re.compile(r" \(byte (\d+)\)$")
# An item that msgspec splits off costs some 80 bytes: with more commas than this in a body the items are counted first.
_COMMAS_AT_MOST = 1_000_000


class _NotJson(Exception):
    """Why a body is not what it should be, and at which byte, counting from 0."""

    def __init__(self, why: str, place: int | None = None) -> None:
        super().__init__(why)
        self.why, self.place = why, place


def split_json(body: bytes, limits: BodyLimits, wanted: str = EITHER) -> Lines:
    """The object, or the items of the array, as lines; an empty body is nothing. `wanted` is EITHER, OBJECT or ARRAY.

    Raises BodyError (413, 422).
    """
    try:
        return _split(body, limits, wanted)
    except _NotJson as error:
        where = "" if error.place is None else f" at byte {error.place}"
        detail = f"the body is not {wanted}{where}: {error.why}"
        raise BodyError(422, "Unprocessable Content", detail) from None


def _split(body: bytes, limits: BodyLimits, wanted: str) -> Lines:
    text = body.strip(_BLANKS)
    if not text:
        return no_lines()
    fault = utf8_fault(body)
    if fault is not None:
        raise _NotJson(f"it is not UTF-8: {fault}")
    begins = {b"{": OBJECT, b"[": ARRAY}.get(text[:1])
    if begins is None or wanted not in (EITHER, begins):
        why = "it begins neither an object nor an array" if begins is None else f"it begins {begins}"
        raise _NotJson(why, len(body) - len(body.lstrip(_BLANKS)))
    if begins == ARRAY:
        return _split_array(body, text, limits)
    try:
        _decoded(_ANYTHING, body)
    except RecursionError:
        return no_lines((_too_deep(1, text, limits),))
    return _lines_of([text], text, limits)


def _split_array(body: bytes, text: bytes, limits: BodyLimits) -> Lines:
    if len(body) > _COMMAS_AT_MOST and body.count(b",") > _COMMAS_AT_MOST:
        _deep_items(body, limits)
    try:
        items, deep = _decoded(_ITEMS, body), []
    except RecursionError:
        deep = _deep_items(body, limits)
        items = _without(body, deep)
    check_count(len(items), limits, "items")
    if not deep:
        return _lines_of(items, text, limits)
    faults = tuple(_too_deep(number, body[start:end].strip(), limits) for number, start, end in deep)
    keep = np.ones(len(items), np.bool_)
    keep[[number - 1 for number, _, _ in deep]] = False
    kept = np.flatnonzero(keep)
    lines = _lines_of([items[index] for index in kept], text, limits)
    return replace(lines, numbers=kept + 1, faults=faults)


def _deep_items(body: bytes, limits: BodyLimits) -> list[tuple[int, int, int]]:
    count, deep = deep_items(body, limits.nesting_at_most, limits.events_at_most)
    check_count(count, limits, "items or more")
    return deep


def _without(body: bytes, deep: Sequence[tuple[int, int, int]]) -> list[msgspec.Raw]:
    """The items, those that are too deep replaced by zeros of the same width, so that places in messages stay true."""
    shallow = bytearray(body)
    for _, start, end in deep:
        shallow[start:end] = b"0".ljust(end - start)
    try:
        return _decoded(_ITEMS, bytes(shallow))  # type: ignore[no-any-return]
    except RecursionError:
        raise _NotJson("it is nested too deep to be read") from None


def _decoded(decoder: msgspec.json.Decoder[Any], body: bytes) -> Any:
    try:
        return decoder.decode(body)
    except msgspec.DecodeError as error:
        raise _NotJson(*json_fault(error, len(body))) from None


def json_fault(error: msgspec.DecodeError, size: int) -> tuple[str, int]:
    """What msgspec says is wrong with a JSON text of `size` bytes, and at which byte, counting from 0."""
    text = str(error).removeprefix("JSON is malformed: ")
    place = _BYTE.search(text)
    if place is None:
        return f"{text[0].lower()}{text[1:]}", size
    text = _BYTE.sub("", text)
    return text, int(place[1]) - (text == "trailing characters")  # for these it counts from 1


def _too_deep(number: int, raw: bytes, limits: BodyLimits) -> Fault:
    detail = f"nested deeper than {limits.nesting_at_most} levels"
    return Fault(number, "too_deep", detail, without_breaks(raw[: limits.event_bytes_at_most]))


def _lines_of(items: Sequence[bytes | msgspec.Raw], text: bytes, limits: BodyLimits) -> Lines:
    """The items of a text as lines."""
    return lines_of([without_breaks(bytes(item)) for item in items] if has_breaks(text) else items, limits)

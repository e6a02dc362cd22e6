"""Bodies of MessagePack to lines: one map, or an array whose items count as lines, each written as compact JSON.

Events are JSON from here on, so what JSON cannot hold is a fault of its item: binary, extension types (timestamps too),
keys that are no strings, NaN and the infinities. A key that stands twice counts with its last value. Maps one after the
other without an array around them are refused: were one damaged, nothing could tell where the next begins.
"""

from __future__ import annotations

import datetime
from base64 import b64encode
from dataclasses import replace
from math import isfinite
from typing import Any

import msgspec
import numpy as np

from ..core.columns import Fault
from ..errors import BodyError
from .limits import BodyLimits
from .lines import Lines, check_count, lines_of, no_lines

_raws = msgspec.msgpack.Decoder(list[msgspec.Raw])
_anything = msgspec.msgpack.Decoder()
_json = msgspec.json.Encoder()
_ENVELOPE = b'{"messagepack":"%b"}'
_PLAIN = frozenset((str, int, bool, type(None)))
_NAMES = {bytes: "binary", msgspec.msgpack.Ext: "an extension type", datetime.datetime: "a timestamp extension"}


class _Unheld(Exception):
    """What JSON cannot hold of an item."""


def split_messagepack(body: bytes, limits: BodyLimits) -> Lines:
    """The map, or the items of the array, as lines of JSON. Raises BodyError (413, 422). An empty body is nothing."""
    if not body:
        return no_lines()
    texts: list[bytes] = []
    numbers: list[int] = []
    faults: list[Fault] = []
    size = 0
    for number, raw in enumerate(_items(body, limits), 1):
        text = _text_or_fault(number, bytes(raw), limits)
        if isinstance(text, Fault):
            faults.append(text)
            continue
        size += len(text) + 1
        if size > limits.decoded_bytes_at_most:
            detail = f"the body takes more than {limits.decoded_bytes_at_most} bytes as JSON: send less at once"
            raise BodyError(413, "Content Too Large", detail)
        texts.append(text)
        numbers.append(number)
    if not texts:
        return no_lines(tuple(faults))
    lines = lines_of(texts, limits)
    if not faults:
        return lines
    return replace(lines, numbers=np.array(numbers, np.int64), faults=tuple(faults))


def _items(body: bytes, limits: BodyLimits) -> list[msgspec.Raw]:
    """The items of the array, or the map alone."""
    size = _array_size(body)
    if size is None and not _is_map(body):
        raise _not_messagepack("it begins neither a map nor an array", 0)
    check_count(size or 1, limits, "items")  # before a list of so many is made
    try:
        # A map becomes the only item of an array, so that its end is found in the same way.
        return _raws.decode(body if size is not None else b"\x91" + body)
    except RecursionError:
        raise _not_messagepack("it is nested too deep to be read") from None
    except msgspec.DecodeError as error:
        raise _not_messagepack(str(error).removeprefix("MessagePack data is malformed: ")) from None


def _array_size(body: bytes) -> int | None:
    """How many items the array has that a body begins; None for anything else."""
    first = body[0]
    if first & 0xF0 == 0x90:
        return first & 0x0F
    length = {0xDC: 2, 0xDD: 4}.get(first)
    return None if length is None else int.from_bytes(body[1 : 1 + length])


def _is_map(text: bytes) -> bool:
    return text[0] & 0xF0 == 0x80 or text[0] in (0xDE, 0xDF)


def _not_messagepack(why: str, place: int | None = None) -> BodyError:
    where = "" if place is None else f" at byte {place}"
    return BodyError(422, "Unprocessable Content", f"the body is not one MessagePack map or array{where}: {why}")


def _text_or_fault(number: int, raw: bytes, limits: BodyLimits) -> bytes | Fault:
    if len(raw) > limits.event_bytes_at_most:  # its JSON is hardly ever shorter, and a byte can become an object here
        detail = f"the item has {len(raw)} bytes, {limits.event_bytes_at_most} are allowed"
        return Fault(number, "too_large", detail, _kept(raw, limits))
    if not _is_map(raw):
        return Fault(number, "malformed", "the item is no MessagePack map", _kept(raw, limits))
    try:
        return _as_json(raw)
    except RecursionError:
        detail = f"nested deeper than {limits.nesting_at_most} levels"
        return Fault(number, "too_deep", detail, _kept(raw, limits))
    except (_Unheld, msgspec.MsgspecError, ValueError) as error:
        why = str(error).removeprefix("MessagePack data is malformed: ").split(" - at ")[0]
        return Fault(number, "malformed", f"JSON cannot hold the item: {why}"[:200], _kept(raw, limits))


def _as_json(raw: bytes) -> bytes:
    value = _anything.decode(raw)
    _check_held(value)
    return _json.encode(value)


def _check_held(value: Any) -> None:
    """Raise _Unheld for what JSON cannot hold; 70 ns a value."""
    left = [value]
    while left:
        node = left.pop()
        kind = type(node)
        if kind in _PLAIN:
            continue
        if kind is dict:
            for key in node:
                if type(key) is not str:
                    raise _Unheld("a key is no string")
            left.extend(node.values())
        elif kind is list:
            left.extend(node)
        elif kind is not float:
            raise _Unheld(f"it holds {_NAMES.get(kind, kind.__name__)}")
        elif not isfinite(node):
            raise _Unheld("it holds a number that is not finite")


def _kept(raw: bytes, limits: BodyLimits) -> bytes:
    """The item as it is kept in quarantine, where everything is a line of text; cut to an event's length."""
    room = max(0, limits.event_bytes_at_most - len(_ENVELOPE)) // 4 * 3
    return (_ENVELOPE % b64encode(raw[:room]))[: limits.event_bytes_at_most]

"""JSON text sequences (RFC 7464) to lines: texts that each begin with the record separator (RS, 0x1E).

A text that cannot be read is a fault of its own and hinders no other, as section 2.1 asks. Separators with nothing but
blanks between them denote no text, and texts are numbered without them. There is no end marker. Whether a text is an
event is not decided here: that it must be an object settles section 2.4 too, for only numbers, true, false and null can
be cut short without a trace, and none of them is an event.
"""

from __future__ import annotations

from dataclasses import replace

import msgspec
import numpy as np

from ..core.columns import Fault
from ..errors import BodyError
from .json_items import json_fault
from .limits import BodyLimits
from .lines import Lines, check_parts, has_breaks, lines_of, no_lines, places_of, split_lines, without_breaks

_SEPARATOR = b"\x1e"
_BLANKS = b" \t\r\n"
_anything = msgspec.json.Decoder(msgspec.Raw)


def split_sequence(body: bytes, limits: BodyLimits) -> Lines:
    """The texts as lines. Raises BodyError: 413 for too many, 422 where something stands before the first separator."""
    if body[:1] != _SEPARATOR:
        before = body.partition(_SEPARATOR)[0].lstrip(_BLANKS)
        if before:
            detail = "the body is no JSON text sequence (RFC 7464): each text begins with the byte 0x1E, the first too"
            raise BodyError(422, "Unprocessable Content", detail)
    check_parts(body.count(_SEPARATOR), limits, "texts")
    return _in_columns(body, limits) or _one_by_one(body, limits)


def _in_columns(body: bytes, limits: BodyLimits) -> Lines | None:
    """Texts that stand on one line each, as encoders write them: without the separators they are lines already."""
    if body[:1] != _SEPARATOR or body[-1:] != b"\n":
        return None
    separators, line_feeds = places_of(body, _SEPARATOR[0]), places_of(body, 0x0A)
    if len(separators) != len(line_feeds) or not np.array_equal(line_feeds[:-1] + 1, separators[1:]):
        return None
    lines = split_lines(body.translate(None, _SEPARATOR), limits)
    return lines if lines.is_regular else None


def _one_by_one(body: bytes, limits: BodyLimits) -> Lines:
    texts = [text for part in body.split(_SEPARATOR) if (text := part.strip(_BLANKS))]
    faults: list[Fault] = []
    kept: list[bytes] = []
    numbers: list[int] = []
    for number, text in enumerate(texts, 1):
        fault = _fault(number, text, limits) if has_breaks(text) else None
        if fault is None:
            kept.append(without_breaks(text))
            numbers.append(number)
        else:
            faults.append(fault)
    if not kept:
        return no_lines(tuple(faults))
    lines = lines_of(kept, limits)
    if not faults:
        return lines
    return replace(lines, numbers=np.array(numbers, np.int64), faults=tuple(faults))


def _fault(number: int, text: bytes, limits: BodyLimits) -> Fault | None:
    """What is wrong with a text of several lines: to put it on one would mend a line break within a string."""
    if len(text) > limits.event_bytes_at_most:
        return None  # it is refused for that
    try:
        _anything.decode(text)
    except RecursionError:
        return None  # likewise
    except msgspec.DecodeError as error:
        what, place = json_fault(error, len(text))
        raw = without_breaks(text)
        return Fault(number, "malformed", f"not one JSON object at byte {place}: {what}", raw)
    return None

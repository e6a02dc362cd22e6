"""The formats that bodies may have, by media type, and how each is brought to lines.

One table; the formats themselves stand in modules of their own. deploy/formats.md describes them for whoever sends.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from functools import partial
from typing import NamedTuple

from ..errors import BodyError
from .arrow import ARROW
from .json_items import ARRAY, EITHER, OBJECT, split_json
from .json_sequence import split_sequence
from .limits import MEBIBYTE, BodyLimits
from .lines import Lines, check_count, split_lines
from .messagepack import split_messagepack

NDJSON = "application/x-ndjson"


class Format(NamedTuple):
    """How a body of one media type is read. `split` takes the body and the limits and raises BodyError (413, 422).

    None: by columns, in which the decoder looks for what the feed names.
    """

    split: Callable[[bytes, BodyLimits], Lines] | None
    what: str  # for people
    are_cloudevents: bool = False  # whether its events must keep the rules of CloudEvents
    loop_bytes: int = 4 * MEBIBYTE  # larger bodies hold the loop up for longer than some 100 ms, if they are hostile


FORMATS: dict[str, Format] = {
    NDJSON: Format(split_lines, "one JSON object a line (NDJSON)"),
    "application/jsonl": Format(split_lines, "the same (JSON Lines)"),
    "application/json": Format(partial(split_json, wanted=EITHER), "one JSON object, or an array of objects"),
    "application/json-seq": Format(split_sequence, "JSON objects, each behind the byte 0x1E (RFC 7464)"),
    "application/cloudevents+json": Format(partial(split_json, wanted=OBJECT), "one CloudEvent, structured", True),
    "application/cloudevents-batch+json": Format(partial(split_json, wanted=ARRAY), "an array of CloudEvents", True),
    # Each byte may be a value of its own, which costs some 150 ns.
    "application/vnd.msgpack": Format(
        split_messagepack, "one MessagePack map, or an array of maps", loop_bytes=MEBIBYTE // 4
    ),
    # A few bytes can stand for many rows, and the first body imports a large library: never on the loop.
    ARROW: Format(None, "one Arrow IPC stream (columns)", loop_bytes=0),
}
MEDIA_TYPES = tuple(FORMATS)


def split_body(body: bytes, media_type: str, limits: BodyLimits) -> Lines:
    """The lines of a body of one of MEDIA_TYPES that has them. Raises BodyError (413, 415, 422)."""
    check_size(body, limits)
    form = FORMATS.get(media_type)
    if form is None or form.split is None:
        raise BodyError(415, "Unsupported Media Type", f"bodies may be {', '.join(MEDIA_TYPES)}")
    lines = form.split(body, limits)
    check_count(len(lines.ends) + len(lines.faults), limits)
    return replace(lines, are_cloudevents=True) if form.are_cloudevents else lines


def are_as_sent(lines: Lines, body: bytes, media_type: str) -> bool:
    """Whether the lines of a body are its own, none rewritten and none left out; a last line feed may be added."""
    return FORMATS[media_type].split is split_lines and len(lines.payload) == len(body) + (not body.endswith(b"\n"))


def check_size(body: bytes, limits: BodyLimits) -> None:
    """Raise BodyError 413 for a body beyond the limit on decoded bytes."""
    if len(body) > limits.decoded_bytes_at_most:
        detail = f"the body has {len(body)} bytes, {limits.decoded_bytes_at_most} are allowed: send less at once"
        raise BodyError(413, "Content Too Large", detail)

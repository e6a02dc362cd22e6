"""The limits that hold for one request's body. Plain values; the modules beside this one enforce them."""

from __future__ import annotations

import msgspec

MEBIBYTE = 1024 * 1024


class BodyLimits(msgspec.Struct, frozen=True, forbid_unknown_fields=True):
    """Inclusive limits. `event_bytes_at_most` counts a line without its ending; the event itself is nesting level 1."""

    body_bytes_at_most: int = 16 * MEBIBYTE  # as it comes over the wire
    decoded_bytes_at_most: int = 64 * MEBIBYTE  # after every content coding is undone
    event_bytes_at_most: int = MEBIBYTE
    events_at_most: int = 100_000
    faults_at_most: int = 10_000  # lines that are no events; with more of them the whole body is refused
    nesting_at_most: int = 64

"""All rows of the benchmark, in the order in which they are shown."""

from __future__ import annotations

from . import (
    arrow,
    brokers,
    cluster,
    durable,
    growth,
    heap,
    idle,
    latency,
    limits,
    ordering,
    path,
    postgres,
    recovery,
    service,
    sqlite,
)
from .harness import Row, Scale

ROOMS = (
    path,
    arrow,
    ordering,
    growth,
    heap,
    durable,
    service,
    brokers,
    cluster,
    latency,
    idle,
    sqlite,
    postgres,
    recovery,
    limits,
)


def all_rows(scale: Scale) -> list[Row]:
    """The rows at this scale."""
    return [row for room in ROOMS for row in room.rows(scale)]

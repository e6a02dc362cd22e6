"""All rows of the benchmark, in the order in which they are shown."""

from __future__ import annotations

from . import heap, path, peers, postgres, recovery, service
from .harness import Row, Scale


def all_rows(scale: Scale) -> list[Row]:
    """The rows at this scale."""
    rooms = (path, peers, heap, recovery, service, postgres)
    return [row for room in rooms for row in room.rows(scale)]

"""All rows of the benchmark, in the order in which they are shown."""

from __future__ import annotations

from . import heap, path, peers, service
from .harness import Row, Scale


def all_rows(scale: Scale) -> list[Row]:
    """The rows at this scale."""
    return [*path.rows(scale), *peers.rows(scale), *heap.rows(scale), *service.rows(scale)]

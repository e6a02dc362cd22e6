"""Reads the lines of batches back out of a feed's journal, for its sinks and for those who listen."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from .core.columns import Batch
from .core.feed import Feed
from .journal.journal import Journal


class JournalLines:
    """ports.Lines over a journal and a feed's table of sources. May be used from several threads."""

    def __init__(self, journal: Journal, feed: Feed) -> None:
        self._journal = journal
        self._names = feed.state.sources.names

    def watch(self, feed: Feed) -> None:
        """Use the names of this feed's state (recovery replaces the state)."""
        self._names = feed.state.sources.names

    def lines(self, batch: Batch) -> list[bytes]:
        """The batch's lines, or the raw lines of its entries in quarantine."""
        if batch.lane == "quarantine":
            places = np.array([entry.place for entry in batch.entries], dtype=np.int64)
            lengths = np.array([entry.length for entry in batch.entries], dtype=np.int64)
            return self._journal.line_bytes(places, lengths)
        return self._journal.line_bytes(batch.refs["place"], batch.refs["length"])

    def ndjson(self, batch: Batch) -> bytes:
        """The batch's lines, each followed by a line feed."""
        return self._journal.gather(batch.refs["place"], batch.refs["length"])

    def source_names(self) -> Sequence[str]:
        """Names of the sources by number (only ever appended to)."""
        return self._names

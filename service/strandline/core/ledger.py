"""A feed's books (promise P9): every event received stands in exactly one column, at every moment."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(slots=True)
class Ledger:
    """Counts of events since the feed began."""

    received: int = 0
    released: int = 0
    late: int = 0
    duplicate: int = 0
    quarantined: int = 0
    buffered: int = 0

    def balance(self) -> int:
        """Received minus everything that became of it; 0 when the books balance."""
        return self.received - (self.released + self.late + self.duplicate + self.quarantined + self.buffered)

    def check(self, held: int) -> None:
        """Raise AssertionError, with the books, when they do not balance or disagree with what the runs hold."""
        if self.balance() or self.buffered != held:
            raise AssertionError(f"the books do not balance: {self}, held in runs: {held}")

"""Idempotency keys: what a request under a key was answered, for a while. In order of coming; pure bookkeeping.

A key is bound to its request by the journal: its record stands before the arrival's, so both are durable or neither
counts, and folding the arrival gives the answer again.
"""

from __future__ import annotations

from collections import OrderedDict
from dataclasses import dataclass

from .effects import Outcome

FAULT_BYTES = 200  # what a fault in a kept answer is reckoned with
ANSWER_BYTES_AT_MOST = 32 << 20  # kept answers of one feed; the oldest go


@dataclass(frozen=True, slots=True)
class Kept:
    """One key: the fingerprint of its body, the answer, when it came and where its record ends."""

    fingerprint: bytes
    outcome: Outcome
    arrived_ns: int
    end_lsn: int


class Keys:
    """The keys of the last while: bounded by number, by time and by the size of the kept answers."""

    def __init__(self) -> None:
        self.kept: OrderedDict[str, Kept] = OrderedDict()
        self._faults = 0

    def keep(self, key: str, kept: Kept, keys_at_most: int, since_ns: int) -> None:
        """Remember an answer, and forget what is beyond the limits or older than since_ns."""
        expired = self.kept.pop(key, None)  # it may have come before, longer ago than `find` looks: it is new now
        if expired is not None:
            self._faults -= len(expired.outcome.faults)
        self.kept[key] = kept
        self._faults += len(kept.outcome.faults)
        while self.kept:
            oldest = next(iter(self.kept.values()))
            if (
                len(self.kept) <= keys_at_most
                and oldest.arrived_ns >= since_ns
                and (self._faults * FAULT_BYTES <= ANSWER_BYTES_AT_MOST or len(self.kept) == 1)
            ):
                return
            self._faults -= len(self.kept.popitem(last=False)[1].outcome.faults)

    def find(self, key: str, since_ns: int) -> Kept | None:
        """The answer under a key that came at or after since_ns."""
        kept = self.kept.get(key)
        return kept if kept is not None and kept.arrived_ns >= since_ns else None

    def check(self) -> None:
        """Assert that the count of faults is right."""
        assert self._faults == sum(len(kept.outcome.faults) for kept in self.kept.values())

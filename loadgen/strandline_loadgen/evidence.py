"""What is laid before the judge, and what the judge answers: rows, what was sent, a verdict.

Columns and their meaning only; the judging is in `checker`, the reading of stores in `stores`.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from .trace import Int64s, Sources, Trace

UNKNOWN_SOURCE = 2**32 - 1  # the number of a source that the sender does not know
EXAMPLES_AT_MOST = 20
FAULTS = {
    "lost": "sent and answered, yet in no lane",
    "unexpected": "in the store, yet not what was sent",
    "duplicated": "in one lane more often than sent",
    "misplaced": "in two lanes at once",
    "disordered": "behind a later event in the ordered output",
    "miscounted": "the service's numbers and the store's rows differ",
}
Digests = NDArray[np.uint32]
Flags = NDArray[np.bool_]


@dataclass(frozen=True, slots=True)
class Rows:
    """Events by columns: `ids` and `times` (ns) int64, `sources` uint32 in the sender's numbering.

    `digests`: a CRC of each event's bytes, or None where the bytes are not compared.
    """

    ids: Int64s
    times: Int64s
    sources: Sources
    digests: Digests | None = None

    def __len__(self) -> int:
        return len(self.ids)

    def part(self, start: int, stop: int) -> Rows:
        """Rows start to stop (exclusive), as views."""
        digests = None if self.digests is None else self.digests[start:stop]
        return Rows(self.ids[start:stop], self.times[start:stop], self.sources[start:stop], digests)

    @classmethod
    def of(cls, events: Iterable[tuple[int, int, int]]) -> Rows:
        """From (id, time, source) triples."""
        table = np.array(list(events), dtype=np.int64).reshape(-1, 3)
        return cls(table[:, 0].copy(), table[:, 1].copy(), table[:, 2].astype(np.uint32))


Lane = Rows | Iterable[Rows]


@dataclass(frozen=True, slots=True)
class Sent:
    """What was sent, in order of sending: request after request, and in a request line after line.

    `requests`: int64 per row, never descending, which request brought it (None: each row is a request of its own).
    Requests arrive one after the other unless `begins` and `ends` say otherwise: per request, when it was begun and
    when it was answered; two requests whose spans overlap may have arrived in either order. `answered`: per request,
    whether success was answered (None: all); an event without that promise may be in the store or not.
    Rows with the same id are copies of one event.
    """

    rows: Rows
    requests: Int64s | None = None
    begins: Int64s | None = None
    ends: Int64s | None = None
    answered: Flags | None = None

    @classmethod
    def of(cls, trace: Trace, bounds: Int64s | None = None) -> Sent:
        """A whole trace, sent body by body as `bodies.cut_*` cut it, one after the other, all answered."""
        rows = Rows(trace.ids, trace.times, trace.sources)
        if bounds is None:
            return cls(rows)
        sizes = np.diff(bounds)
        return cls(rows, np.repeat(np.arange(len(sizes), dtype=np.int64), sizes))

    def check(self) -> None:
        """Assert what the class promises. Raises AssertionError."""
        if self.requests is not None:
            assert len(self.requests) == len(self.rows)
            assert bool(np.all(self.requests[1:] >= self.requests[:-1]))
        assert (self.begins is None) == (self.ends is None)
        if self.begins is not None and self.ends is not None:
            assert self.requests is not None, "spans belong to requests"
            assert len(self.begins) == len(self.ends)
            assert bool(np.all(self.begins <= self.ends))
        assert self.answered is None or self.requests is not None

    @property
    def promised(self) -> Flags:
        """Per row: was success answered?"""
        if self.answered is None or self.requests is None:
            return np.ones(len(self.rows), dtype=bool)
        return self.answered[self.requests]


@dataclass(frozen=True, slots=True)
class Verdict:
    """What the judge found. Counts of events; `examples` holds up to 20 sentences for each fault."""

    sent: int
    ordered: int
    late: int
    quarantined: int
    duplicates: int  # copies that were recognised as repeats and left out
    unpromised: int  # rows of requests that got no answer
    lost: int = 0
    unexpected: int = 0
    duplicated: int = 0
    misplaced: int = 0
    disordered: int = 0
    miscounted: int = 0
    examples: Mapping[str, list[str]] = field(default_factory=dict)

    @property
    def ok(self) -> bool:
        """No fault of any kind."""
        return not any(getattr(self, fault) for fault in FAULTS)

    def __str__(self) -> str:
        lines = [
            f"Sent {self.sent:,} events. The store holds {self.ordered:,} in order and {self.late:,} in the late lane; "
            f"{self.quarantined:,} went to quarantine, {self.duplicates:,} were recognised as repeats."
        ]
        if self.unpromised:
            lines.append(f"{self.unpromised:,} of them were never answered; those may be there or not.")
        for fault, meaning in FAULTS.items():
            count = getattr(self, fault)
            lines.append(f"  {fault:<11}{count:>12,}" + (f"  {meaning}" if count else ""))
            lines += [f"      {example}" for example in self.examples.get(fault, ())]
        lines.append("Verdict: all is well." if self.ok else "Verdict: NOT well.")
        return "\n".join(lines)

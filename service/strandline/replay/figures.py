"""What a replay is summed up in, and the bars that make it a test: late share, hold, peak held, batches.

Counting and comparing only; where events come from is `replaying`.
"""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import asdict, dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from strandline.core.columns import Batch
from strandline.core.histogram import SECONDS_NS, Histogram
from strandline.core.sketch import buckets_of
from strandline.core.state import State

from .lines import CapturedLines

Int64s = NDArray[np.int64]

RELATIVE_ERROR = 0.001  # of the quantiles: 21,837 buckets, 170 KB


class Holds(Histogram):
    """The feed's own count of holds, and beside it buckets that are fine enough for quantiles within 0.1 %."""

    def __init__(self) -> None:
        super().__init__(SECONDS_NS)
        self.buckets = buckets_of(RELATIVE_ERROR)
        self.fine: Int64s = np.zeros(len(self.buckets), dtype=np.int64)
        self.greatest_ns = 0

    def add(self, values: Int64s, times: Int64s | None = None) -> None:
        """Count a column, each value once or `times` times."""
        super().add(values, times)
        if len(values) < 2:  # one value is counted by `add_same`, which the line above calls
            return
        weights = np.ones(len(values)) if times is None else times
        self.fine += np.bincount(self.buckets.places(values), weights, len(self.fine)).astype(np.int64)
        self.greatest_ns = max(self.greatest_ns, int(values.max()))

    def add_same(self, value: int, times: int) -> None:
        """Count one value several times."""
        super().add_same(value, times)
        self.fine[self.buckets.place(value)] += times
        self.greatest_ns = max(self.greatest_ns, value)

    @property
    def events(self) -> int:
        """Events that were let go."""
        return int(self.fine.sum())

    def mean_ns(self) -> float | None:
        """Mean hold; None where nothing was let go."""
        return self.total / self.events if self.events else None

    def quantile_ns(self, q: float) -> float | None:
        """A quantile of the hold within RELATIVE_ERROR; None where nothing was let go."""
        return min(self.buckets.quantile(self.fine, q), float(self.greatest_ns)) if self.events else None


@dataclass(slots=True)
class Figures:
    """The sum of a replay. Holds in ns, over the events that it released; late share over all that it judged."""

    feed: str
    from_ns: int
    to_ns: int
    requests: int = 0
    received: int = 0
    released: int = 0
    late: int = 0
    duplicate: int = 0
    quarantined: int = 0
    held_at_start: int = 0  # came before `from_ns`: not in `received`, but released (or held on) like the others
    held_at_end: int = 0
    refused: int = 0  # events of requests that this configuration would have refused, to be sent again later
    late_share: float | None = None
    hold_mean_ns: float | None = None
    hold_p50_ns: float | None = None
    hold_p99_ns: float | None = None
    hold_max_ns: float | None = None
    peak_held: int = 0
    batches: int = 0
    slack_at_end_ns: int = 0
    digest: str | None = None  # of all batches in order
    verified: bool | None = None
    unlike: str | None = None  # where a decision was unlike the captured one
    seconds: float = 0.0
    events_per_s: float = 0.0
    bars: list[dict[str, Any]] = field(default_factory=list)

    def plain(self) -> dict[str, Any]:
        """As plain values, for programs."""
        return asdict(self)


def sum_up(figures: Figures, state: State, holds: Holds, before: dict[str, int]) -> None:
    """Take the sums out of a state; `before` are its books at the start."""
    books = {name: value - before.get(name, 0) for name, value in asdict(state.ledger).items()}
    figures.received, figures.released, figures.late = books["received"], books["released"], books["late"]
    figures.duplicate, figures.quarantined = books["duplicate"], books["quarantined"]
    figures.held_at_start, figures.held_at_end = before.get("buffered", 0), state.runs.held
    judged = figures.late + books["released"] + books["buffered"]
    figures.late_share = figures.late / judged if judged else None
    figures.hold_mean_ns = holds.mean_ns()
    figures.hold_p50_ns, figures.hold_p99_ns = holds.quantile_ns(0.5), holds.quantile_ns(0.99)
    figures.hold_max_ns = float(holds.greatest_ns) if holds.events else None
    figures.slack_at_end_ns = state.slack_ns


@dataclass(frozen=True, slots=True)
class Bar:
    """One condition: a figure and what it may be at most."""

    name: str
    attribute: str
    at_most: float
    is_time: bool = False

    def judged(self, figures: Figures) -> dict[str, Any]:
        """What was wanted, what came, and whether it was met; a figure that is not known meets nothing."""
        got = getattr(figures, self.attribute)
        met = got is not None and got <= self.at_most
        return {"bar": self.name, "at_most": self.at_most, "got": got, "met": met, "is_time": self.is_time}


def judge(figures: Figures, bars: Sequence[Bar]) -> bool:
    """Judge every bar into the figures; whether all were met."""
    figures.bars = [bar.judged(figures) for bar in bars]
    return all(bar["met"] for bar in figures.bars)


class Digests:
    """A digest of each batch: lane, number, event times, sources, and the lines' bytes (without them their lengths)."""

    def __init__(self, lines: CapturedLines | None) -> None:
        self._lines = lines
        self._all = hashlib.blake2b(digest_size=16)
        self.batches = 0

    def of(self, batch: Batch) -> bytes:
        """The batch's digest, 16 bytes. Raises CaptureError where its lines are not there."""
        found = hashlib.blake2b(f"{batch.lane} {batch.number} ".encode(), digest_size=16)
        if batch.lane == "quarantine":
            for entry in batch.entries:
                found.update(f"{entry.line} {entry.reason} {entry.place} {entry.length} ".encode())
            return found.digest()
        found.update(batch.times.tobytes())
        found.update(batch.refs["source"].tobytes())
        if self._lines is None:
            found.update(batch.refs["length"].tobytes())
        else:
            found.update(self._lines.ndjson(batch))
        return found.digest()

    def add(self, batch: Batch) -> bytes:
        """The same, and count it into the digest of all."""
        one = self.of(batch)
        self._all.update(one)
        self.batches += 1
        return one

    def hexdigest(self) -> str:
        """The digest of all batches that were added, in their order."""
        return self._all.hexdigest()

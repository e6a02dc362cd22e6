"""What other slacks would give a feed, from the lateness that it remembers: plain values for observers.

The state is read, never changed, and nothing is chosen here. How the memory fades is `lateness`.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from .state import State

QUANTILES = (0.5, 0.9, 0.99, 0.999, 0.9999)


@dataclass(frozen=True, slots=True)
class SlackShare:
    """One slack: between which two shares the events remembered would be late with it; equal where it is exact."""

    slack_ns: int
    at_least: float
    at_most: float
    in_force: bool


@dataclass(frozen=True, slots=True)
class SlacksView:
    """The slacks asked for and the one in force, ascending, and how late the events remembered were, in ns."""

    slacks: list[SlackShare]
    lateness_quantiles_ns: dict[float, float]
    greatest_ns: int
    weight: float  # how many events are remembered; those that have faded count for less than one
    since_ns: int
    fades: int
    relative_error: float
    judged: int  # since the feed began, exactly: events that were put in order or named late,
    late: int  # and those named late


def slacks_of(state: State, slacks_ns: Sequence[int]) -> SlacksView:
    """What each of these slacks (at least 0) would give, and the one in force."""
    memory, ledger = state.lateness, state.ledger
    in_force = state.slack_ns
    sketch = memory.sketch
    shares = []
    for slack_ns in sorted({*slacks_ns, in_force}):
        share = sketch.late_share(slack_ns)
        shares.append(SlackShare(slack_ns, share.at_least, share.at_most, slack_ns == in_force))
    return SlacksView(
        slacks=shares,
        lateness_quantiles_ns={q: sketch.quantile(q) for q in QUANTILES},
        greatest_ns=sketch.greatest_ns,
        weight=sketch.total,
        since_ns=memory.since_ns,
        fades=memory.fades,
        relative_error=sketch.buckets.relative_error,
        judged=ledger.late + ledger.released + ledger.buffered,
        late=ledger.late,
    )

"""What the core must know of a feed's configuration. It is journaled, so that a replay decides as the service did.

Only plain values live here; reading and checking the configuration file is `strandline.config`.
"""

from __future__ import annotations

from typing import Literal

import msgspec
from msgspec import UNSET, UnsetType

SECOND_NS = 1_000_000_000


class Settings(msgspec.Struct, frozen=True, forbid_unknown_fields=True):
    """The settings of one feed that its decisions depend on. Times in ns; `*_at_most` are inclusive limits."""

    name: str
    slack_ns: int = 5 * SECOND_NS  # where late_share is given: the longest that the slack may be
    slack_at_least_ns: int = 0
    late_share: float | None = None  # share of events that may be late; without it the slack is fixed
    idle_after_ns: int = 30 * SECOND_NS
    hold_at_most_ns: int = 60 * SECOND_NS
    ahead_limit_ns: int = 10 * SECOND_NS
    clock: Literal["event", "arrival"] = "event"
    expect_sources: tuple[str, ...] = ()
    held_events_at_most: int = 10_000_000  # events held in runs; beyond it arrivals are refused
    undelivered_events_at_most: int = 2_000_000  # released, not yet taken by every sink; beyond it no mark is set
    sources_at_most: int = 100_000
    batch_events_at_most: int = 50_000
    batch_bytes_at_most: int = 32 << 20  # of lines in one batch; a longer line is a batch of its own
    id_window_events: int = 1_000_000  # with an id: a repeat among at least so many last events is recognised
    keys_at_most: int = 10_000  # idempotency keys whose answers are kept
    keys_kept_for_ns: int = 24 * 3600 * SECOND_NS
    # Within what order is kept; left out: the feed as a whole, as in journals of before it could be chosen.
    order: Literal["source"] | UnsetType = UNSET

    def newest_at_most_ns(self, now_ns: int) -> int:
        """What lies beyond this time at an instant of the arrival clock is `ahead`: no event of this feed then."""
        return now_ns + self.ahead_limit_ns

    def __post_init__(self) -> None:
        """Raises ValueError for settings that contradict each other."""
        if self.order == "source" and self.clock == "arrival":
            raise ValueError('order = "source" goes with clock = "event" only')

"""What a report is made of: plain values of one feed and one stretch of time, and nothing that was worked out twice.

Data only. Instants are nanoseconds since 1970 UTC by the arrival clock. Instants of holds, and the ends of the time
itself, are whole tenths of a second (cut off), so that the durations a reader sees add up exactly.
"""

from __future__ import annotations

import msgspec

TENTH_NS = 100_000_000


def tenth(time_ns: int) -> int:
    """An instant cut to whole tenths of a second."""
    return time_ns // TENTH_NS * TENTH_NS


class Fact(msgspec.Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    """What all facts are: values that nothing changes."""


class Hold(Fact, frozen=True, kw_only=True):
    """A stretch in which one holder held the feed. `why` is a key of HOLD_WHYS."""

    why: str
    source: str | None = None
    sink: str | None = None
    from_ns: int
    to_ns: int

    @property
    def lasted_ns(self) -> int:
        """How long."""
        return self.to_ns - self.from_ns


class Total(Fact, frozen=True, kw_only=True):
    """What one holder had of the time."""

    why: str
    source: str | None
    sink: str | None
    lasted_ns: int
    holds: int


class Stall(Fact, frozen=True, kw_only=True):
    """One source or sink (or a stop, or all sources' silence) that held the feed without a break, for whatever reasons.

    `phases` follow on each other and together are the whole of it.
    """

    source: str | None
    sink: str | None
    phases: list[Hold]
    began_before: bool
    goes_on: bool

    @property
    def from_ns(self) -> int:
        """When it began, or the time's begin."""
        return self.phases[0].from_ns

    @property
    def to_ns(self) -> int:
        """When it ended, or the time's end."""
        return self.phases[-1].to_ns

    @property
    def lasted_ns(self) -> int:
        """How long it held the feed within the time."""
        return self.to_ns - self.from_ns


class Holds(Fact, frozen=True, kw_only=True):
    """All holds of the time, neighbours of one holder and reason as one.

    `listed`: the longest, in order; with the `brief` (below a second, no stop) and the `unlisted` they cover what is
    known of it.
    """

    known_since_ns: int | None
    listed: list[Hold]
    unlisted: int
    unlisted_ns: int
    brief: int
    brief_ns: int
    totals: list[Total]
    unlisted_totals: int
    unlisted_totals_ns: int
    stalls: list[Stall]
    unlisted_stalls: int
    stalls_ns: int  # of all of them
    besides_ns: int  # what sources and sinks held the feed for besides the stalls


class Series(Fact, frozen=True, kw_only=True):
    """How the feed stood, in steps: columns of equal length, one entry each step. The process keeps it in memory.

    `behind_ns`: newest event time minus watermark (None: there was none yet). `waited_ns`: age of the event that had
    been held longest. `unsynced_ns`, `undelivered_ns`: the same before the journal's sync and before the sinks; of
    the latter what is beyond the longest time for which a sink is configured to collect (a file's `roll_every`).
    """

    step_ns: int
    since_ns: int | None  # the first step that is known; None: nothing is
    t_ns: list[int]
    behind_ns: list[int | None]
    waited_ns: list[int]
    slack_ns: list[int]
    late: list[int]
    refused: list[int]
    unsynced_ns: list[int]
    undelivered_ns: list[int]
    balanced: bool


class Delay(Fact, frozen=True, kw_only=True):
    """How far the output was behind while a stall lasted. Values of `Series.behind_ns`; None: not known."""

    usual_ns: int | None  # in the whole time
    worst_ns: int | None
    worst_at_ns: int | None
    current_ns: int | None  # what counts as current again
    again_at_ns: int | None


class Count(Fact, frozen=True, kw_only=True):
    """The books at one instant; `buffered` is what is held."""

    at_ns: int
    received: int
    released: int
    late: int
    duplicate: int
    quarantined: int

    @property
    def buffered(self) -> int:
        """What the other columns leave of what was received."""
        return self.received - self.released - self.late - self.duplicate - self.quarantined


class Books(Fact, frozen=True, kw_only=True):
    """The books at both ends of the time; None where they are not known. `balance` is 0 where they balance now."""

    begin: Count | None
    end: Count | None
    balance: int
    recognises_repeats: bool


class Burst(Fact, frozen=True, kw_only=True):
    """Late events of one source that came with no pause of more than bursts.APART_NS between them."""

    source: str | None
    from_ns: int
    to_ns: int
    events: int
    late_by_least_ns: int
    late_by_most_ns: int


class LateSource(Fact, frozen=True, kw_only=True):
    """A source's late events in the time."""

    source: str | None
    events: int
    from_ns: int
    to_ns: int
    late_by_most_ns: int


class Late(Fact, frozen=True, kw_only=True):
    """Late events of the time that the late lane still keeps. None of `Facts.late`: it could not be read."""

    events: int
    sources: list[LateSource]  # those with most events, those first
    unlisted_sources: int
    unlisted_events: int
    bursts: list[Burst]  # the largest, in order of time
    unlisted_bursts: int
    complete: bool  # False: there were too many to look for bursts in all of them


class Failing(Fact, frozen=True, kw_only=True):
    """A stretch in which a sink was seen failing, in each sample."""

    sink: str
    from_ns: int
    to_ns: int
    goes_on: bool


class SinkState(Fact, frozen=True, kw_only=True):
    """A sink when the report was made."""

    sink: str
    failing_since_ns: int | None
    last_error: str | None
    paused: bool
    waiting_events: int


class RefusedRows(Fact, frozen=True, kw_only=True):
    """Events of batches made in the time that a sink refused for good; `detail` is one of its reasons."""

    sink: str
    events: int
    detail: str


class Trouble(Fact, frozen=True, kw_only=True):
    """Of journal and sinks."""

    failing: list[Failing]
    unlisted_failing: int
    sinks: list[SinkState]
    refused_rows: list[RefusedRows] | None  # None: it could not be read
    refused_requests: int | None  # in the time; None: not known
    refusals_since_start: dict[str, int]
    failure: str | None


class Act(Fact, frozen=True, kw_only=True):
    """What an operator did."""

    at_ns: int
    act: str
    subject: str
    who: str
    reason: str
    until_ns: int | None = None
    slack_ns: int | None = None


class Acts(Fact, frozen=True, kw_only=True):
    """The acts of the time, oldest first; `known_since_ns` where older ones may have been forgotten."""

    listed: list[Act]
    unlisted: int
    known_since_ns: int | None


class Facts(Fact, frozen=True, kw_only=True):
    """Everything that a report says."""

    feed: str
    made_ns: int
    from_ns: int
    to_ns: int
    idle_after_ns: int
    hold_at_most_ns: int
    late_share_target: float | None  # of a steered slack
    holds: Holds
    series: Series
    delays: list[Delay]  # of holds.stalls
    books: Books
    late: Late | None
    trouble: Trouble
    acts: Acts
    partition: bool = False  # of a cluster: other instances may have owned it in this time

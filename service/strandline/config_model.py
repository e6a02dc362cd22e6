"""The configuration as values: every key with its kind, its default and what it is for, declared once.

Reading is `config_read`, overriding `config_overrides`, comparing keys with each other `config_checks`, the kinds of
sinks `config_sinks`; the documentation's table is made from here too (`config_table`). Structs are frozen. Times in ns,
sizes in bytes, paths as they will be opened. Where a key's unit is in its value ("5s"), the attribute's name ends with
it (`slack_ns`).
"""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Literal

import msgspec
from msgspec import field

from .config_access import Access, Tls
from .config_cluster import ClusterConfig, Partitions, base_of, partition_feeds
from .config_intakes import INTAKE_KINDS, IntakeConfig
from .config_kinds import Address, address, choice, count, duration, name, path, pointer, share, size, texts
from .config_read import Key, Table, Tables
from .config_sinks import SINK_KINDS, SINK_KINDS_LATER, NdjsonConfig, SinkConfig, SqliteConfig
from .core.settings import SECOND_NS, Settings
from .ingest.limits import BodyLimits

__all__ = [
    "SINK_KINDS",
    "Config",
    "EventTime",
    "Feed",
    "Journal",
    "Limits",
    "NdjsonConfig",
    "SinkConfig",
    "SqliteConfig",
    "SteeredSlack",
]

KIB, MIB, GIB = 2**10, 2**20, 2**30

FEED_NAME = name("a-z0-9-", "1 to 63 of a-z, 0-9 and -, the first a letter or digit")


class SteeredSlack(msgspec.Struct, frozen=True):
    """A slack that is steered, so that this share of the events is late; in the place of a fixed slack."""

    late_share: Annotated[float, Key(share(), "share of the events that may be late")] = 0.001
    at_most_ns: Annotated[int, Key(duration(), "the longest slack")] = field(default=30 * SECOND_NS, name="at_most")
    at_least_ns: Annotated[int, Key(duration(), "the shortest slack")] = field(default=0, name="at_least")


class EventTime(msgspec.Struct, frozen=True):
    """Where an event's time stands and how it is written."""

    at: Annotated[str, Key(pointer(), "where in an event its time stands")] = "/time"
    unit: Annotated[
        Literal["rfc3339", "s", "ms", "us", "ns"],
        Key(choice("rfc3339", "s", "ms", "us", "ns"), "RFC 3339 text, or an integer since 1970 UTC in this unit"),
    ] = "rfc3339"


class Journal(msgspec.Struct, frozen=True):
    """How much room a feed's journal takes."""

    segment_bytes: Annotated[int, Key(size("64KiB", "4GiB"), "room that one file of the journal reserves")] = 64 * MIB
    at_most_bytes: Annotated[
        int, Key(size("128KiB"), "room for all files; at this limit events are refused until the sinks have caught up")
    ] = field(default=8 * GIB, name="at_most")
    retain_ns: Annotated[
        int,
        Key(duration("0s"), "how long what nothing needs any more stays, to be replayed; it goes first at the limit"),
    ] = field(default=0, name="retain")


class Feed(msgspec.Struct, frozen=True):
    """One feed."""

    name: Annotated[str, Key(FEED_NAME, "the feed's name in addresses, metrics and on the dashboard")]
    time: Annotated[EventTime, Table(EventTime)] = EventTime()
    source: Annotated[str | None, Key(pointer(), "where an event names its source; without it: one source")] = None
    id: Annotated[str | None, Key(pointer(), "where an event carries its id; a repeat is told by it, see Ids")] = None
    slack_ns: Annotated[
        int | SteeredSlack,
        Key(duration(), "how far the watermark stays behind: lateness up to it is put in order", SteeredSlack),
    ] = field(default=5 * SECOND_NS, name="slack")
    idle_after_ns: Annotated[
        int, Key(duration("1ms"), "a source that is silent this long no longer holds the watermark")
    ] = field(default=30 * SECOND_NS, name="idle_after")
    hold_at_most_ns: Annotated[int, Key(duration("1ms"), "no event is held longer, by the arrival clock")] = field(
        default=60 * SECOND_NS, name="hold_at_most"
    )
    ahead_limit_ns: Annotated[
        int, Key(duration(), "an event further ahead of the arrival clock goes to quarantine and moves nothing")
    ] = field(default=10 * SECOND_NS, name="ahead_limit")
    clock: Annotated[
        Literal["event", "arrival"],
        Key(choice("event", "arrival"), "what the watermark follows: the newest event times, or the arrival clock"),
    ] = "event"
    order: Annotated[
        Literal["feed", "source"],
        Key(choice("feed", "source"), "order over the whole feed, or within each source: then none waits for another"),
    ] = "feed"
    expect_sources: Annotated[
        tuple[str, ...], Key(texts("source", 256), "sources that hold the feed before they were heard")
    ] = ()
    held_events_at_most: Annotated[
        int, Key(count(1, 1_000_000_000), "events held (some 24 bytes each); beyond it events are refused")
    ] = 10_000_000
    undelivered_events_at_most: Annotated[
        int, Key(count(1, 1_000_000_000), "released events that a sink has not taken; beyond it nothing is released")
    ] = 2_000_000
    sources_at_most: Annotated[int, Key(count(1, 10_000_000), "sources; beyond it a new one is refused")] = 100_000
    batch_events_at_most: Annotated[int, Key(count(1, 1_000_000), "events in one batch for a sink")] = 50_000
    # A request becomes one record, and 256 MiB may wait for the disk: 128 MiB and 32 bytes for each of 10^6 events fit.
    batch_bytes_at_most: Annotated[
        int, Key(size("1KiB", "1GiB"), "bytes of events in one batch for a sink; a longer event is a batch of its own")
    ] = 32 * MIB
    id_window_events: Annotated[
        int, Key(count(0, 100_000_000), "with `id`: a repeat among at least so many last events is recognised")
    ] = 1_000_000
    keys_at_most: Annotated[int, Key(count(0, 1_000_000), "Idempotency-Keys whose answers are kept")] = 10_000
    keys_kept_for_ns: Annotated[int, Key(duration("1s"), "how long a key's answer is kept")] = field(
        default=24 * 3600 * SECOND_NS, name="keys_kept_for"
    )
    body_bytes_at_most: Annotated[int, Key(size("1B", "128MiB"), "a request's body as it is sent")] = 16 * MIB
    decoded_bytes_at_most: Annotated[int, Key(size("1B", "128MiB"), "a request's body, decompressed")] = 64 * MIB
    event_bytes_at_most: Annotated[int, Key(size("1B", "128MiB"), "one event; a longer one goes to quarantine")] = MIB
    events_at_most: Annotated[int, Key(count(1, 1_000_000), "events in one request")] = 100_000
    faults_at_most: Annotated[
        int, Key(count(0, 1_000_000), "lines of one request that are no events; with more the whole request is refused")
    ] = 10_000
    nesting_at_most: Annotated[int, Key(count(1, 200), "levels of nesting in one event")] = 64
    decoding: Annotated[
        Literal["plain", "compiled"],
        Key(choice("plain", "compiled"), "how bodies are read: as always, or first by compiled code, see Compiled"),
    ] = "plain"
    lanes_at_most_bytes: Annotated[
        int, Key(size("1MiB"), "room for the late lane and the quarantine together, as they are kept for you to read")
    ] = field(default=GIB, name="lanes_at_most")
    journal: Annotated[Journal, Table(Journal)] = Journal()
    sinks: Annotated[tuple[SinkConfig, ...], Tables(SINK_KINDS, SINK_KINDS_LATER)] = field(default=(), name="sink")
    intakes: Annotated[tuple[IntakeConfig, ...], Tables(INTAKE_KINDS)] = field(default=(), name="intake")
    partitions: Annotated[Partitions | None, Table(Partitions)] = None

    @property
    def one_source(self) -> bool:
        """Whether all events count as of one source: neither they nor a broker's messages name one."""
        takers = (*self.intakes, self.partitions)
        return self.source is None and not any(getattr(taker, "source", None) for taker in takers)

    @property
    def longest_slack_ns(self) -> int:
        """The slack, or the longest that it may grow to."""
        return self.slack_ns.at_most_ns if isinstance(self.slack_ns, SteeredSlack) else self.slack_ns

    def partition_feeds(self) -> tuple[Feed, ...]:
        """The feeds that its partitions are, in order, each as `name-0` and so on; none where it has no partitions."""
        return partition_feeds(self)

    def settings(self) -> Settings:
        """What the core must know of this feed; it is journaled with the feed."""
        return Settings(
            name=self.name,
            slack_ns=self.longest_slack_ns,
            slack_at_least_ns=self.slack_ns.at_least_ns if isinstance(self.slack_ns, SteeredSlack) else 0,
            late_share=self.slack_ns.late_share if isinstance(self.slack_ns, SteeredSlack) else None,
            idle_after_ns=self.idle_after_ns,
            hold_at_most_ns=self.hold_at_most_ns,
            ahead_limit_ns=self.ahead_limit_ns,
            clock=self.clock,
            order="source" if self.order == "source" else msgspec.UNSET,
            expect_sources=self.expect_sources,
            held_events_at_most=self.held_events_at_most,
            undelivered_events_at_most=self.undelivered_events_at_most,
            sources_at_most=self.sources_at_most,
            batch_events_at_most=self.batch_events_at_most,
            batch_bytes_at_most=self.batch_bytes_at_most,
            id_window_events=self.id_window_events,
            keys_at_most=self.keys_at_most,
            keys_kept_for_ns=self.keys_kept_for_ns,
        )

    def body_limits(self) -> BodyLimits:
        """What decoding must know of this feed's limits."""
        return BodyLimits(
            body_bytes_at_most=self.body_bytes_at_most,
            decoded_bytes_at_most=self.decoded_bytes_at_most,
            event_bytes_at_most=self.event_bytes_at_most,
            events_at_most=self.events_at_most,
            faults_at_most=self.faults_at_most,
            nesting_at_most=self.nesting_at_most,
        )


class Limits(msgspec.Struct, frozen=True):
    """Limits of the whole service."""

    bodies_at_most: Annotated[
        int, Key(count(1, 10_000), "request bodies in memory at one time; a further request waits unread")
    ] = 64
    body_within_ns: Annotated[
        int, Key(duration("10ms", "1h"), "a request whose body is not complete by then is refused")
    ] = field(default=60 * SECOND_NS, name="body_within")
    connections_at_most: Annotated[
        int, Key(count(1, 1_000_000), "connections at one time; a further one is refused at once")
    ] = 4_096
    idle_connection_within_ns: Annotated[
        int, Key(duration("10ms", "1d"), "a connection is closed on which no request came for so long")
    ] = field(default=120 * SECOND_NS, name="idle_connection_within")


class Config(msgspec.Struct, frozen=True):
    """The whole configuration."""

    listen: Annotated[Address, Key(address(), "where the service listens; port 0 takes any free one")] = Address(
        "127.0.0.1", 8600
    )
    data_dir: Annotated[
        Path, Key(path(), "the folder for all that the service keeps; relative to the folder it is started in")
    ] = Path("strandline-data")
    drain_at_most_ns: Annotated[
        int, Key(duration("0s", "1h"), "how long a stop waits until the sinks have taken what was released")
    ] = field(default=20 * SECOND_NS, name="drain_at_most")
    access: Annotated[Access, Table(Access)] = Access()
    tls: Annotated[Tls, Table(Tls)] = Tls()
    limits: Annotated[Limits, Table(Limits)] = Limits()
    cluster: Annotated[ClusterConfig | None, Table(ClusterConfig)] = None
    feeds: Annotated[tuple[Feed, ...], Tables({"": Feed})] = field(default=(), name="feed")

    def feed(self, wanted: str) -> Feed | None:
        """The feed of this name, or that of a partition, if there is one."""
        base = self.base_of(wanted)
        found = next((feed for feed in self.feeds if feed.name == base), None)
        if found is None or base == wanted:
            return found
        return next(feed for feed in found.partition_feeds() if feed.name == wanted)

    def runtime_feeds(self) -> tuple[Feed, ...]:
        """Every feed that is run by itself: in the place of one with partitions those of its partitions."""
        return tuple(each for feed in self.feeds for each in (feed.partition_feeds() or (feed,)))

    def base_of(self, runtime_name: str) -> str:
        """The configured feed that a runtime belongs to: for a partition its feed, else the name itself."""
        return base_of(self.feeds, runtime_name)

    def feed_dir(self, feed: Feed) -> Path:
        """The folder of one feed's journal and lanes."""
        return self.data_dir / "feeds" / feed.name

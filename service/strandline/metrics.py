"""The metrics: names, meanings and where each value comes from. A custom collector reads plain counts when it is asked.

What each metric means is written down in `metrics_reference`.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Mapping
from itertools import accumulate
from typing import Any

from prometheus_client import CollectorRegistry
from prometheus_client.core import CounterMetricFamily, GaugeMetricFamily, HistogramMetricFamily, Metric
from prometheus_client.registry import Collector

from .cluster.counts import TAKEOVER_BOUNDS_S, Figures
from .cluster.http import Documented
from .core.columns import TIME_MIN
from .core.histogram import Histogram
from .core.view import HOLD_WHYS, View
from .errors import REFUSALS
from .intake.counts import DELAY_BOUNDS_S
from .journal.counters import SYNC_BOUNDS_S
from .metrics_reference import METRICS
from .runtime import FeedRuntime
from .sinks.delivery import DeliveryState


class FeedCollector(Collector):
    """Reads the feeds' plain counts at the moment of a scrape."""

    def __init__(self, feeds: Mapping[str, FeedRuntime], cluster: Callable[[], Documented | None]) -> None:
        self._feeds, self._cluster = feeds, cluster

    def describe(self) -> Iterator[Metric]:
        """Families without samples: registering must not read the feeds."""
        yield from _families().values()

    def collect(self) -> Iterator[Metric]:
        """Families with a sample for each feed."""
        families = _families()
        for name, runtime in self._feeds.items():
            _Sampler(families, name, runtime).fill()
        if (cluster := self._cluster()) is not None:
            _fill_cluster(families, cluster.figures())
        yield from families.values()


def make_registry(
    feeds: Mapping[str, FeedRuntime], cluster: Callable[[], Documented | None] = lambda: None
) -> CollectorRegistry:
    """A registry that shows these feeds, the cluster where there is one, and nothing else."""
    registry = CollectorRegistry(auto_describe=False)
    registry.register(FeedCollector(feeds, cluster))
    return registry


def _families() -> dict[str, Metric]:
    kinds: dict[str, Callable[..., Metric]] = {
        "counter": CounterMetricFamily,
        "gauge": GaugeMetricFamily,
        "histogram": HistogramMetricFamily,
    }
    return {
        name: kinds[meaning.kind](name, meaning.help, labels=meaning.all_labels) for name, meaning in METRICS.items()
    }


def _fill_cluster(families: Mapping[str, Any], figures: Figures) -> None:
    families["strandline_cluster_connected"].add_metric((), float(figures.connected))
    if figures.instances is not None:
        families["strandline_cluster_instances"].add_metric((), figures.instances)
    for name, counts in (("owned", figures.owned), ("nobodys", figures.nobodys or {})):
        for feed, count in counts.items():
            families[f"strandline_cluster_partitions_{name}"].add_metric((feed,), count)
    for feed, takeovers in figures.takeovers.items():
        buckets = _buckets(TAKEOVER_BOUNDS_S, takeovers.counts)
        families["strandline_cluster_takeover_seconds"].add_metric((feed,), buckets, takeovers.total_s)
        families["strandline_cluster_takeover_failures"].add_metric((feed,), takeovers.failed)
    for name, found in (("trouble", figures.log_trouble), ("lost", figures.log_lost)):
        for partition, is_so in found.items():
            families[f"strandline_cluster_log_{name}"].add_metric((partition,), float(is_so))


def _buckets(bounds: Iterable[float], counts: Iterable[int]) -> list[tuple[str, int]]:
    """By its upper bound, how many lie at or below it; `counts` has one more, of what lies above all bounds."""
    return list(zip([*map(repr, bounds), "+Inf"], accumulate(counts), strict=True))


class _Sampler:
    """Adds one feed's samples to the families."""

    def __init__(self, families: Mapping[str, Metric], feed: str, runtime: FeedRuntime) -> None:
        self.families, self.feed, self.runtime = families, feed, runtime
        self.view: View = runtime.view()

    def add(self, name: str, value: float, *labels: str) -> None:
        self.families[name].add_metric((self.feed, *labels), value)  # type: ignore[attr-defined]

    def age_s(self, then_ns: int | None) -> float:
        if then_ns is None or then_ns == TIME_MIN:
            return 0.0
        return max(0.0, (self.view.now_ns - then_ns) / 1e9)

    def fill(self) -> None:
        self._books()
        self._order()
        self._journal()
        self._sinks()
        self._hops()
        self._intakes()

    def _books(self) -> None:
        view, ledger = self.view, self.view.ledger
        for column in ("received", "released", "late", "duplicate", "quarantined"):
            self.add(f"strandline_events_{column}", ledger[column])
        self.add("strandline_events_held", ledger["buffered"])
        self.add("strandline_books_unbalanced_events", self.view.balance)
        self.add("strandline_promises_broken", self.view.promises_broken)
        for reason in REFUSALS:  # those that never happened too: a counter that begins at 1 shows no increase
            self.add("strandline_requests_refused", self.view.refusals.get(reason, 0), reason)
        self.add("strandline_lanes_bytes", self.runtime.lane_store.size.file_bytes)
        self.add("strandline_lanes_limit_bytes", self.runtime.config.lanes_at_most_bytes)
        self.add("strandline_held_limit_events", self.runtime.config.held_events_at_most)
        if view.steering is not None:
            self.add("strandline_late_target_ratio", view.steering.target)

    def _order(self) -> None:
        view, figures = self.view, self.runtime.feed.state.figures
        self.add("strandline_held_oldest_seconds", self.age_s(view.held_oldest_ns))
        self.add("strandline_watermark_age_seconds", self.age_s(view.watermark_ns))
        self.add("strandline_watermark_advanced_seconds", self.age_s(view.marked_ns))
        self.add("strandline_slack_seconds", view.slack_ns / 1e9)
        self.add("strandline_hold_limit_seconds", self.runtime.config.hold_at_most_ns / 1e9)
        for why in HOLD_WHYS:
            self.add("strandline_hold", float(why == view.hold.why), why)
        self.add("strandline_open_runs", len(view.open_runs))
        self.add("strandline_sources", view.sources)
        self.add("strandline_sources_active", view.sources_active)
        self.add("strandline_sources_idle", view.sources_idle)
        for cause, count in view.marks.items():
            self.add("strandline_marks", count, cause)
        self.add("strandline_comparisons", view.comparisons)
        self.add("strandline_copies", view.copies)
        self.add("strandline_gallops", view.gallops)
        self.histogram("strandline_lateness_seconds", figures.lateness, 1e9)
        self.histogram("strandline_hold_seconds", figures.hold, 1e9)
        self.histogram("strandline_run_length_events", figures.run_length, 1)

    def histogram(self, name: str, counts: Histogram, unit: float) -> None:
        buckets = _buckets((bound / unit for bound in counts.bounds), counts.counts.tolist())
        self.families[name].add_metric((self.feed,), buckets, counts.total / unit)  # type: ignore[attr-defined]

    def _journal(self) -> None:
        journal = self.runtime.journal
        counters = journal.counters
        self.add("strandline_journal_bytes", journal.bytes_used)
        self.add("strandline_journal_needed_bytes", self.runtime.feed.next_lsn - self.runtime.feed.needed_place)
        self.add("strandline_journal_limit_bytes", self.runtime.config.journal.at_most_bytes)
        self.add("strandline_journal_unsynced_bytes", journal.queued_bytes)
        self.add("strandline_journal_syncs", counters.syncs)
        buckets = _buckets(SYNC_BOUNDS_S, counters.sync_counts)
        self.families["strandline_journal_sync_seconds"].add_metric(  # type: ignore[attr-defined]
            (self.feed,), buckets, counters.sync_seconds_total
        )

    def _sinks(self) -> None:
        for name, delivery in self.runtime.deliveries.items():
            state: DeliveryState = delivery.state()
            self.add("strandline_sink_retries", state.retries, name)
            for reason, count in state.counts.items():
                self.add("strandline_sink_refused_samples", count, name, reason)
            self.add("strandline_sink_failing", float(state.failing_since_ns is not None), name)
            for lane, waiting in state.lanes.items():
                self.add("strandline_sink_waiting_events", waiting.events, name, lane)
                self.add("strandline_sink_oldest_seconds", self.age_s(waiting.oldest_instant_ns), name, lane)
                self.add("strandline_sink_delivered_events", waiting.delivered_events, name, lane)

    def _intakes(self) -> None:
        for counts in self.runtime.intakes:
            name = counts.name
            self.add("strandline_intake_connected", float(counts.connected), name)
            for outcome, count in counts.outcomes.items():
                self.add("strandline_intake_messages", count, name, outcome)
            self.add("strandline_intake_redelivered", counts.repeats, name)
            self.add("strandline_intake_in_flight", counts.in_flight, name)
            self.add("strandline_intake_lost", counts.losses, name)
            if counts.waiting is not None:
                self.add("strandline_intake_waiting_messages", counts.waiting, name)
            buckets = _buckets(DELAY_BOUNDS_S, counts.delays.counts)
            self.families["strandline_intake_broker_seconds"].add_metric(  # type: ignore[attr-defined]
                (self.feed, name), buckets, counts.delays.total_s
            )

    def _hops(self) -> None:
        for name, hop in self.runtime.hops().items():
            self.add("strandline_hop_waiting", hop.waiting, name)
            self.add("strandline_hop_oldest_seconds", self.age_s(hop.oldest_ns), name)
            self.add("strandline_hop_advanced_seconds", self.age_s(hop.advanced_ns), name)

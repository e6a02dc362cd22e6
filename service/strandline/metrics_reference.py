"""What every metric tells, and what to do about it: the reference, from which the code and deploy/metrics.md are made.

Only names and words live here. Labels come from the configuration (feed, sink, lane) and from closed lists, never from
an event.
"""

from __future__ import annotations

from typing import NamedTuple


class Meaning(NamedTuple):
    """One metric: "counter", "gauge" or "histogram", what it tells and what to do about it, labels beside `feed`.

    `by_feed` is False for one that tells of the whole instance: it has no `feed`.
    """

    kind: str
    help: str
    act: str
    labels: tuple[str, ...] = ()
    by_feed: bool = True

    @property
    def all_labels(self) -> tuple[str, ...]:
        """In their order."""
        return ("feed", *self.labels) if self.by_feed else self.labels


METRICS: dict[str, Meaning] = {
    "strandline_events_received": Meaning(
        "counter",
        "Events received, good and faulty.",
        "Falls to zero: the senders or the network in front are silent; look at their links.",
    ),
    "strandline_events_released": Meaning(
        "counter", "Events released in order.", "Stands still while events are received: see who holds the feed."
    ),
    "strandline_events_late": Meaning(
        "counter",
        "Events that came behind the watermark.",
        "Grows: `strandline late list` names the sources; mend their links, or lengthen the slack.",
    ),
    "strandline_events_duplicate": Meaning(
        "counter",
        "Events recognised as repeats.",
        "Grows: a sender retries; look at its link and its timeouts. As many as received: a sender gives ids anew; "
        "see StrandlineOnlyRepeats in the runbook.",
    ),
    "strandline_events_quarantined": Meaning(
        "counter", "Lines that cannot be events of the feed.", "Grows: read the quarantine; mend the sender's encoding."
    ),
    "strandline_promises_broken": Meaning(
        "counter",
        "Events that came older than their source had promised.",
        "Grows: the feed names the source that broke most; mend what makes its promises.",
    ),
    "strandline_events_held": Meaning(
        "gauge", "Events held in runs.", "Grows without end: see who holds the feed; excuse the source if it is dead."
    ),
    "strandline_books_unbalanced_events": Meaning(
        "gauge",
        "Received minus all that became of it; 0 at every moment.",
        "Not 0: a defect; save a copy of data_dir and report it. The service may go on.",
    ),
    "strandline_held_oldest_seconds": Meaning(
        "gauge",
        "Age of the oldest held event by the arrival clock.",
        "Above hold_at_most: a sink takes nothing or the disk stands; see which hop waits longest.",
    ),
    "strandline_watermark_age_seconds": Meaning(
        "gauge",
        "Arrival clock minus watermark.",
        "Grows: the output falls behind; `strandline_hold` names the cause, GET /v1/feeds/{feed} the source.",
    ),
    "strandline_watermark_advanced_seconds": Meaning(
        "gauge", "Time since the watermark last moved.", "Grows while events are held: see who holds the feed."
    ),
    "strandline_slack_seconds": Meaning(
        "gauge",
        "The slack in force.",
        "A steered one stays at `at_most`: target and longest wait contradict each other; allow one of them more.",
    ),
    "strandline_hold": Meaning(
        "gauge",
        "1 for the cause that holds the feed now, 0 for the others.",
        "deploy/runbook.md has an entry for each cause, with what to do.",
        ("why",),
    ),
    "strandline_open_runs": Meaning(
        "gauge",
        "Runs held apart; all that is near its release counts as one, what gathers beyond that as one more.",
        "Grows: more sources interleave, or `source` is not set and many count as one; name them by `source`.",
    ),
    "strandline_sources": Meaning(
        "gauge",
        "Sources known.",
        "Grows without end: the pointer `source` finds something that changes with each event; mend it.",
    ),
    "strandline_sources_active": Meaning(
        "gauge",
        "Sources that are not idle.",
        "Falls: senders have gone silent; GET /v1/feeds/{feed}/sources says which and for how long.",
    ),
    "strandline_sources_idle": Meaning(
        "gauge",
        "Sources that were heard, or are expected, and are silent for longer than idle_after; excused ones apart.",
        "Grows: the feed no longer waits for them, and what they still send may be late; "
        "GET /v1/feeds/{feed}/sources says which they are.",
    ),
    "strandline_marks": Meaning(
        "counter",
        "Steps of the watermark, by cause. `silence` counts steps made while every source was silent or excused; "
        "that one source fell silent shows in `strandline_sources_idle`.",
        "Many by hold_at_most: a source lags further than you allow; the hold names it. Mend it, or excuse it.",
        ("cause",),
    ),
    "strandline_comparisons": Meaning(
        "counter",
        "Comparisons made by ordering.",
        "Grows per event: the feed is in more disorder than before; look for a source that sends its backlog.",
    ),
    "strandline_copies": Meaning(
        "counter",
        "Rows moved by merging.",
        "Grows per event: the feed is in more disorder than before; look for a source that sends its backlog.",
    ),
    "strandline_gallops": Meaning(
        "counter",
        "Times that a merge began to gallop.",
        "Nothing to do: the merge found long streaks, which are cheap. For comparison with the copies.",
    ),
    "strandline_lateness_seconds": Meaning(
        "histogram",
        "Newest event time seen before an event minus its own, at least 0.",
        "Its upper quantiles grow: links buffer longer. Lengthen the slack to the quantile you need.",
    ),
    "strandline_hold_seconds": Meaning(
        "histogram",
        "Time from an event's arrival to its release.",
        "Grows: ordering costs more time. See who holds the feed; shorten the slack if it holds.",
    ),
    "strandline_run_length_events": Meaning(
        "histogram",
        "Length of the runs that arrivals brought.",
        "Falls to a few events: requests are small or in disorder inside; have the senders sort and bundle.",
    ),
    "strandline_requests_refused": Meaning(
        "counter",
        "Requests refused whole, by reason.",
        "Grows: the reason names the limit; deploy/runbook.md has an entry for each, with what to do.",
        ("reason",),
    ),
    "strandline_hop_waiting": Meaning(
        "gauge",
        "What waits at a hop: bodies at ingest and decode, events behind them.",
        "Grows: the last hop in which it grows is where the trouble sits; at runs, see who holds the feed.",
        ("hop",),
    ),
    "strandline_hop_oldest_seconds": Meaning(
        "gauge",
        "How long the oldest that waits at a hop has waited.",
        "Grows: this hop stands. journal: look at the disk; runs: who holds the feed; sinks: the store.",
        ("hop",),
    ),
    "strandline_hop_advanced_seconds": Meaning(
        "gauge",
        "Time since a hop last advanced.",
        "Grows while events wait at it: this hop stands. journal: the disk; runs: the hold; sinks: the store.",
        ("hop",),
    ),
    "strandline_journal_bytes": Meaning(
        "gauge",
        "Bytes that the journal takes on disk, those kept for replay included.",
        "Near its limit: look at `strandline_journal_needed_bytes`; the rest goes by itself when room is short.",
    ),
    "strandline_journal_unsynced_bytes": Meaning(
        "gauge",
        "Bytes that wait for a sync.",
        "Grows: the disk is slower than the feed; find what else writes to it, or give the journal its own.",
    ),
    "strandline_journal_syncs": Meaning(
        "counter",
        "Syncs of the journal.",
        "As many as requests: each waits for a sync of its own; send larger requests, or more at one time.",
    ),
    "strandline_journal_sync_seconds": Meaning(
        "histogram",
        "Duration of a sync.",
        "Grows: the disk is slow or shared, and answers wait for it; find what else writes to it.",
    ),
    "strandline_sink_waiting_events": Meaning(
        "gauge",
        "Events that a sink has not durably taken.",
        "Grows: the store is slow or down; read the sink's `last_error` at /v1/feeds/{feed}, then look at the store.",
        ("sink", "lane"),
    ),
    "strandline_sink_oldest_seconds": Meaning(
        "gauge",
        "How long the oldest event that a sink has not taken has waited.",
        "Grows: the store is slow or down; read the sink's `last_error` at /v1/feeds/{feed}, then look at the store.",
        ("sink", "lane"),
    ),
    "strandline_sink_delivered_events": Meaning(
        "counter",
        "Events that a sink has durably taken since the start.",
        "Stands still while events wait: the store is down or out of reach; look at the store.",
        ("sink", "lane"),
    ),
    "strandline_sink_retries": Meaning(
        "counter",
        "Calls to a sink that failed and are tried again.",
        "Grows: read the sink's `last_error` at /v1/feeds/{feed}, and mend the store or the way to it.",
        ("sink",),
    ),
    "strandline_sink_refused_samples": Meaning(
        "counter",
        "Samples that a sink did not send or its store did not take, by reason.",
        "Grows: the reason says what to mend; see `counts` of the sink.",
        ("sink", "reason"),
    ),
    "strandline_sink_failing": Meaning(
        "gauge",
        "1 while a sink fails.",
        "1: read the sink's `last_error` at /v1/feeds/{feed}, and mend the store or the way to it.",
        ("sink",),
    ),
    "strandline_intake_connected": Meaning(
        "gauge",
        "1 while an intake has its broker.",
        "0: read the intake's `words` at /v1/feeds/{feed}, and mend the broker or the way to it.",
        ("intake",),
    ),
    "strandline_intake_messages": Meaning(
        "counter",
        "Messages of a broker by what became of them: taken, quarantined whole, or put back to come again.",
        "`quarantined` grows: read the quarantine, mend the producer. `put_back` grows: the feed refuses; see why.",
        ("intake", "outcome"),
    ),
    "strandline_intake_redelivered": Meaning(
        "counter",
        "Messages that the broker says it had sent before.",
        "Grows: acknowledgements get lost, or syncs take longer than `ack_wait`; look at the network and the disk.",
        ("intake",),
    ),
    "strandline_intake_in_flight": Meaning(
        "gauge",
        "Messages taken from a broker and not settled yet.",
        "Stays at in_flight_at_most: the journal's disk is slower than the broker, or the feed refuses; see which.",
        ("intake",),
    ),
    "strandline_intake_waiting_messages": Meaning(
        "gauge",
        "Messages that a broker holds and has not sent yet; only where it can tell.",
        "Grows: more is published than is taken; see `words` of the intake, then the disk and who holds the feed.",
        ("intake",),
    ),
    "strandline_intake_lost": Meaning(
        "counter",
        "Times that an intake's connection was lost.",
        "Grows: look at the broker's log and at the network between.",
        ("intake",),
    ),
    "strandline_intake_broker_seconds": Meaning(
        "histogram",
        "Time from a broker's clock to the arrival of a message; only where the broker tells it.",
        "Its upper quantiles grow: messages wait in the broker. Lateness that grows without this arose before it.",
        ("intake",),
    ),
    "strandline_lanes_bytes": Meaning(
        "gauge",
        "Bytes that the kept late lane and quarantine take.",
        "Near its limit: export, then `strandline late forget` and `strandline quarantine forget`.",
    ),
    "strandline_hold_limit_seconds": Meaning(
        "gauge",
        "The longest that an event may be held (hold_at_most).",
        "Changes with the configuration only: compare `strandline_held_oldest_seconds` with it.",
    ),
    "strandline_held_limit_events": Meaning(
        "gauge",
        "The most events that may be held (held_events_at_most).",
        "Changes with the configuration only: compare `strandline_events_held` with it.",
    ),
    "strandline_late_target_ratio": Meaning(
        "gauge",
        "The wanted share of late events; shown only where the slack is steered.",
        "Changes with the configuration only: compare the share of late events with it.",
    ),
    "strandline_journal_needed_bytes": Meaning(
        "gauge",
        "Bytes of the journal that events still held or undelivered need.",
        "Grows: a sink does not take its batches; look at the sink that waits longest.",
    ),
    "strandline_journal_limit_bytes": Meaning(
        "gauge",
        "The most that the journal may take on disk (journal.at_most).",
        "Changes with the configuration only: compare `strandline_journal_needed_bytes` with it.",
    ),
    "strandline_lanes_limit_bytes": Meaning(
        "gauge",
        "The most that the late lane and the quarantine may take (lanes_at_most).",
        "Changes with the configuration only: compare `strandline_lanes_bytes` with it.",
    ),
    "strandline_cluster_connected": Meaning(
        "gauge",
        "1 while this instance is in its cluster: the brokers answer, and its name is its own. Only with [cluster].",
        "0: read `words` at /v1/cluster, and mend the brokers or the way there; others that reach them own it then.",
        by_feed=False,
    ),
    "strandline_cluster_instances": Meaning(
        "gauge",
        "Instances that are there, as this one sees them; nothing is shown while it sees none.",
        "Falls: one is gone; /v1/cluster names it below `gone`. Start it again, or find out why it went.",
        by_feed=False,
    ),
    "strandline_cluster_partitions_owned": Meaning(
        "gauge",
        "Partitions of a feed that this instance owns and works on.",
        "0 at one instance while others have many: it cannot take them; read `words` at /v1/cluster.",
    ),
    "strandline_cluster_partitions_nobodys": Meaning(
        "gauge",
        "Partitions of a feed that nobody owns, as this instance sees it; nothing is shown while it sees none.",
        "Stays above 0: their events wait in the stream; read `words` at /v1/cluster, then the instances' logs.",
    ),
    "strandline_cluster_takeover_seconds": Meaning(
        "histogram",
        "Time from a lease to a partition at work, of those that this instance took over; its count is of takeovers.",
        "Its count grows all the time: leases are too short for these brokers. Its quantiles grow: more is held.",
    ),
    "strandline_cluster_takeover_failures": Meaning(
        "counter",
        "Takeovers that failed here and are tried again, here or by another instance.",
        "Grows: read `words` at /v1/cluster; it names the partition and what is in the way.",
    ),
    "strandline_cluster_log_trouble": Meaning(
        "gauge",
        "1 while the log of a partition that runs here takes nothing: the partition stands. `feed` is the partition.",
        "1: look at the brokers; the stream NAME-log needs a leader, two of three of them, and room on their disks.",
    ),
    "strandline_cluster_log_lost": Meaning(
        "gauge",
        "1 for a day after the log of a partition that runs here was found emptied. `feed` is the partition.",
        "1: what was delivered comes again. Stop all instances; see deploy/cluster.md on a log that lost its messages.",
    ),
}


def metrics_table() -> str:
    """The reference of all metrics as Markdown."""
    rows = ["| metric | kind | labels | what it tells | what to do |", "| --- | --- | --- | --- | --- |"]
    for name, meaning in METRICS.items():
        labels = ", ".join(meaning.all_labels)
        rows.append(f"| `{name}` | {meaning.kind} | {labels} | {meaning.help} | {meaning.act} |")
    return "\n".join(rows) + "\n"

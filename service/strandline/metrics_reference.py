"""What every metric tells, and what to do about it: the reference, from which the code and deploy/metrics.md are made.

Only names and words live here. Labels come from the configuration (feed, sink, lane) and from closed lists, never from
an event.
"""

from __future__ import annotations

from typing import NamedTuple


class Meaning(NamedTuple):
    """One metric: "counter", "gauge" or "histogram", what it tells and what to do about it, labels beside `feed`."""

    kind: str
    help: str
    act: str
    labels: tuple[str, ...] = ()


METRICS: dict[str, Meaning] = {
    "strandline_events_received": Meaning(
        "counter", "Events received, good and faulty.", "Falls to zero: the senders or the network in front are silent."
    ),
    "strandline_events_released": Meaning(
        "counter", "Events released in order.", "Stands still while events are received: see who holds the feed."
    ),
    "strandline_events_late": Meaning(
        "counter", "Events that came behind the watermark.", "Grows: lengthen the slack, or see which source is late."
    ),
    "strandline_events_duplicate": Meaning(
        "counter", "Events recognised as repeats.", "Grows: a sender retries; look at its link and its timeouts."
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
        "Not 0: a defect; save the data_dir, report it.",
    ),
    "strandline_held_oldest_seconds": Meaning(
        "gauge",
        "Age of the oldest held event by the arrival clock.",
        "Above hold_at_most: a sink is full or the disk stands.",
    ),
    "strandline_watermark_age_seconds": Meaning(
        "gauge", "Arrival clock minus watermark.", "Grows: the output falls behind; the hold names the cause."
    ),
    "strandline_watermark_advanced_seconds": Meaning(
        "gauge", "Time since the watermark last moved.", "Grows while events are held: see who holds the feed."
    ),
    "strandline_slack_seconds": Meaning("gauge", "The slack in force.", "Changes only when the configuration does."),
    "strandline_hold": Meaning(
        "gauge",
        "1 for the cause that holds the feed now, 0 for the others.",
        "See the runbook's entry for the cause.",
        ("why",),
    ),
    "strandline_open_runs": Meaning(
        "gauge", "Open runs.", "Grows with disorder: more sources interleave, or one sends its backlog."
    ),
    "strandline_sources": Meaning("gauge", "Sources known.", "Near sources_at_most: new sources will be refused."),
    "strandline_sources_active": Meaning("gauge", "Sources that are not idle.", "Falls: senders have gone silent."),
    "strandline_marks": Meaning(
        "counter",
        "Steps of the watermark, by cause.",
        "Many by hold_at_most: sources lag further than you allow.",
        ("cause",),
    ),
    "strandline_comparisons": Meaning("counter", "Comparisons made by ordering.", "Per event, a measure of disorder."),
    "strandline_copies": Meaning("counter", "Rows moved by merging.", "Per event, a measure of disorder."),
    "strandline_gallops": Meaning(
        "counter", "Times that a merge began to gallop.", "Nothing to do; long streaks are good."
    ),
    "strandline_lateness_seconds": Meaning(
        "histogram",
        "Newest event time seen before an event minus its own, at least 0.",
        "The quantile you need is the slack.",
    ),
    "strandline_hold_seconds": Meaning(
        "histogram",
        "Time from an event's arrival to its release.",
        "What ordering costs: shorten the slack to lower it.",
    ),
    "strandline_run_length_events": Meaning(
        "histogram", "Length of the runs that arrivals brought.", "Short runs are disorder inside requests."
    ),
    "strandline_requests_refused": Meaning(
        "counter",
        "Requests refused whole, by reason.",
        "The reason names the limit; the runbook says what to do.",
        ("reason",),
    ),
    "strandline_hop_waiting": Meaning(
        "gauge",
        "What waits at a hop: bodies at ingest and decode, events behind them.",
        "The hop with the most waiting is where the trouble sits.",
        ("hop",),
    ),
    "strandline_hop_oldest_seconds": Meaning(
        "gauge", "How long the oldest of them has waited.", "Grows: this hop, or the one behind it, stands.", ("hop",)
    ),
    "strandline_hop_advanced_seconds": Meaning(
        "gauge", "Time since a hop last advanced.", "Grows while events wait: this hop stands.", ("hop",)
    ),
    "strandline_journal_bytes": Meaning(
        "gauge", "Bytes that the journal takes on disk.", "Near its limit: a sink does not take its batches."
    ),
    "strandline_journal_unsynced_bytes": Meaning(
        "gauge", "Bytes that wait for a sync.", "Grows: the disk is slower than the feed."
    ),
    "strandline_journal_syncs": Meaning("counter", "Syncs of the journal.", "Per request, how well syncs are shared."),
    "strandline_journal_sync_seconds": Meaning(
        "histogram", "Duration of a sync.", "Grows: the disk is slow or shared; answers wait for it."
    ),
    "strandline_sink_waiting_events": Meaning(
        "gauge", "Events that a sink has not durably taken.", "Grows: the store is slow or down.", ("sink", "lane")
    ),
    "strandline_sink_oldest_seconds": Meaning(
        "gauge", "How long the oldest of them has waited.", "Grows: the store is slow or down.", ("sink", "lane")
    ),
    "strandline_sink_delivered_events": Meaning(
        "counter",
        "Events that a sink has durably taken since the start.",
        "Stands still: the store is down.",
        ("sink", "lane"),
    ),
    "strandline_sink_retries": Meaning(
        "counter", "Calls to a sink that failed and are tried again.", "Grows: read the sink's last error.", ("sink",)
    ),
    "strandline_sink_refused_samples": Meaning(
        "counter",
        "Samples that a sink did not send or its store did not take, by reason.",
        "Grows: the reason says what to mend; see `counts` of the sink.",
        ("sink", "reason"),
    ),
    "strandline_sink_failing": Meaning(
        "gauge", "1 while a sink fails.", "1: read the sink's last error at /v1/feeds/{feed}.", ("sink",)
    ),
    "strandline_lanes_bytes": Meaning(
        "gauge",
        "Bytes that the kept late lane and quarantine take.",
        "Near lanes_at_most: export, then remove what is settled.",
    ),
}


def metrics_table() -> str:
    """The reference of all metrics as Markdown."""
    rows = ["| metric | kind | labels | what it tells | what to do |", "| --- | --- | --- | --- | --- |"]
    for name, meaning in METRICS.items():
        labels = ", ".join(("feed", *meaning.labels))
        rows.append(f"| `{name}` | {meaning.kind} | {labels} | {meaning.help} | {meaning.act} |")
    return "\n".join(rows) + "\n"

"""The state that a journal's records determine, and what each record does to it: the same records, the same state.

Recovery, replay, a capture, debugging and simulation all are this fold. No decision is taken here: whether a mark is
set, or an arrival refused, was decided by `feed.py` before the record was written.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from .acts import UNKNOWN, Acts
from .arrivals import Arrivals
from .columns import (
    REF,
    TIME_MAX,
    TIME_MIN,
    Batch,
    QuarantineEntry,
    Refs,
    Times,
    as_refs,
    as_rows,
    empty_refs,
    empty_times,
    greatest_of,
)
from .effects import AnswerFault, Outcome
from .held import Held
from .held_by_source import HeldBySource
from .histogram import POWERS, SECONDS_NS, Histogram
from .holds import Holds, holder_of
from .keys import Kept, Keys
from .lateness import Behind, Lateness
from .ledger import Ledger
from .merge import Merger
from .outbox import Outbox
from .own import OwnWatermarks
from .records import (
    ActRecord,
    ArrivalBody,
    Cause,
    ExcuseRecord,
    IdleRecord,
    KeyRecord,
    Mark,
    NumbersRecord,
    PromiseRecord,
    SettingsRecord,
    SmallRecord,
    SourcesRecord,
    TakenRecord,
)
from .seen import Seen
from .settings import Settings
from .slack import Rows
from .slack_by_source import Slack, SteeredBySource, slack_for
from .sources import Sources
from .watermark import HoldBound
from .within import behind_of, check_order, keep_order, late_rows, note_held, release, stood


@dataclass(slots=True)
class Figures:
    """What is counted for observers on the way; histograms in ns, run lengths in events."""

    lateness: Histogram
    hold: Histogram
    run_length: Histogram
    arrivals: int = 0
    marks: int = 0
    marks_by_cause: list[int] = field(default_factory=lambda: [0] * len(Cause))


class State:
    """Everything that a feed knows. `end_lsn` arguments are the end of the record that is folded."""

    def __init__(self, settings: Settings) -> None:
        self.settings = settings
        self.slack: Slack = slack_for(settings)
        self.lateness = Lateness()
        self.now_ns = TIME_MIN  # arrival clock of the last record
        self.watermark_ns = TIME_MIN
        self.marked_ns = TIME_MIN  # when it last moved
        self.cause = Cause.SOURCES
        self.sources = Sources()
        self.merger = Merger()
        self.runs: Held | HeldBySource = Held(self.merger)
        self.own: OwnWatermarks | None = None  # where order is kept within each source only
        self.arrivals = Arrivals()
        self.hold = HoldBound()
        self.holds = Holds()
        self.acts = Acts()
        self.outbox = Outbox()
        self.ledger = Ledger()
        self.seen = Seen(settings.id_window_events)
        self.keys = Keys()
        self._key: KeyRecord | None = None  # of the arrival record that must follow
        self.figures = Figures(Histogram(SECONDS_NS), Histogram(SECONDS_NS), Histogram(POWERS))
        self.reordered = False  # something is held before the watermark: order within sources has just ended
        keep_order(self)

    @property
    def slack_ns(self) -> int:
        """The slack in force: one that an operator set for a time, else the configured or steered one.

        Where each source has its own, the longest of these: for observers, and it costs all sources.
        """
        chosen = self.acts.slack_set
        return self.slack.slack_ns if chosen is None or chosen.slack_ns is None else chosen.slack_ns

    @property
    def slacks_ns(self) -> int | Times:
        """The slack in force: one for all sources, or a column by source where each is steered by itself."""
        if isinstance(self.slack, SteeredBySource) and self.acts.slack_set is None:
            return self.slack.each(len(self.sources.names))
        return self.slack_ns

    def fold_small(self, record: SmallRecord) -> None:
        """Take over one of the rare records."""
        match record:
            case SourcesRecord():
                self.sources.add(record.names)
                return
            case SettingsRecord():
                self._fold_settings(record)
            case TakenRecord():
                self.outbox.taken(record.sink, record.lane, record.number)
            case PromiseRecord():
                self._end_slack(record.now_ns)
                self.sources.promise(record.source, record.time_ns, record.now_ns, self.slacks_ns)
            case ExcuseRecord(now_ns=now_ns, source=source, reason=reason, who=who):
                self.sources.excuse(source)
                self.acts.take(ActRecord(now_ns, "excuse", self.sources.names[source], who or UNKNOWN, reason))
            case ActRecord():
                self._fold_act(record)
            case NumbersRecord():
                self.outbox.next_number[record.lane] = max(self.outbox.next_number[record.lane], record.next_number)
            case IdleRecord():
                pass  # what it says is what `advance` does
            case KeyRecord():  # the arrival behind it stands at the same instant, and tells all that follows from it
                self._key = record
                return
        self.advance(record.now_ns)
        self.holds.note(self.now_ns, *holder_of(self))

    def _fold_act(self, record: ActRecord) -> None:
        self._end_slack(record.now_ns)
        self.acts.take(record)
        if record.act == "slack":
            self.sources.vouch_again(self.slacks_ns)

    def _end_slack(self, now_ns: int) -> None:
        """The configured slack holds again once the time of one that was set is over."""
        if self.acts.slack_ended(now_ns):
            self.acts.slack_set = None
            self.sources.vouch_again(self.slacks_ns)

    def _fold_settings(self, record: SettingsRecord) -> None:
        before, self.settings = self.settings, record.settings
        if record.resumed:
            self.holds.note_stopped(self.now_ns)
        self.slack = slack_for(record.settings, self.slack)
        keep_order(self)
        self.seen.window = record.settings.id_window_events
        self._key = None  # a crash may have cut off the arrival that it announced
        self.outbox.serve(record.sinks, record.positions)
        self.acts.serve(record.sinks)
        expected: Sequence[str] = record.settings.expect_sources
        if record.resumed:
            # Time in which this service did not listen is not silence of the sources.
            self.sources.keep_alive(record.now_ns)
        else:
            # One that was expected before and fell idle since is not waited for anew: settings are not a word of it.
            expected = [name for name in expected if name not in before.expect_sources]
        self.advance(record.now_ns)
        self.sources.expect(expected, record.now_ns)

    def advance(self, now_ns: int) -> None:
        """Let the arrival clock go on; it never goes back. Records alone move it: a tick without a record does not."""
        self.now_ns = max(self.now_ns, now_ns)
        self._end_slack(self.now_ns)
        self.sources.expire(self.now_ns - self.settings.idle_after_ns)

    def fold_arrival(self, body: ArrivalBody, end_lsn: int) -> tuple[Outcome, list[Batch]]:
        """Take in one request: what became of its events, and the batches for the late lane and the quarantine."""
        self.advance(body.arrived_ns)
        self.figures.arrivals += 1
        received = len(body.times) + len(body.faults)
        times, refs, identities = body.times, _refs(body), body.identities
        batches: list[Batch] = []
        entries = _faulty(body)
        duplicate = late = 0
        if len(times):
            times, refs, identities, ahead = self._without_ahead(body, times, refs)
            if ahead:
                entries = sorted(entries + ahead, key=lambda entry: entry.line)
        words, word_refs = times, refs  # a repeat is a word of its source too
        if len(times) and identities is not None and self.seen.window:
            times, refs, duplicate = self._without_repeats(times, refs, identities)
        if len(times):
            self._note_lateness(times)
        events, behind = len(times), behind_of(self, times, refs, body.arrived_ns)
        if len(words):
            self.sources.note_broken(word_refs["source"], words)
            self.sources.hear(word_refs["source"], words, body.arrived_ns)
        which, came = late_rows(self, times, refs), refs
        if which is not None:
            times, refs, late_batch = self._without_late(which, times, refs, body.arrived_ns, end_lsn)
            batches.append(late_batch)
            late = len(late_batch)
        if events:
            rows, set_aside = Rows(came["source"], which, len(self.sources.names)), self.acts.slack_set is not None
            seen = None if isinstance(behind, Behind) else behind  # a fixed slack learns nothing
            self.slack.learn(body.arrived_ns, events, late, seen, set_aside=set_aside, rows=rows)
            self.lateness.note(body.arrived_ns, events, behind)
        if len(times):
            self._hold(times, refs, body)
        if entries:
            batches.append(self._quarantine(entries, body.arrived_ns, end_lsn))
        for batch in batches:
            self.outbox.add(batch)
        ledger = self.ledger
        ledger.received += received
        ledger.late += late
        ledger.duplicate += duplicate
        ledger.quarantined += len(entries)
        ledger.buffered += len(times)
        faults = [AnswerFault(entry.line, entry.reason, entry.detail) for entry in entries]
        faults.sort(key=lambda fault: fault.line)
        outcome = Outcome(received, len(times), late, duplicate, len(entries), faults)
        self._keep_answer(outcome, body.arrived_ns, end_lsn)
        self.holds.note(self.now_ns, *holder_of(self))
        return outcome, batches

    def _keep_answer(self, outcome: Outcome, arrived_ns: int, end_lsn: int) -> None:
        key, self._key = self._key, None
        if key is not None:
            kept = Kept(key.fingerprint, outcome, arrived_ns, end_lsn)
            settings = self.settings
            self.keys.keep(key.key, kept, settings.keys_at_most, arrived_ns - settings.keys_kept_for_ns)

    def _without_repeats(self, times: Times, refs: Refs, identities: NDArray[np.uint64]) -> tuple[Times, Refs, int]:
        first = self.seen.first_time(identities)
        repeats = len(first) - int(np.count_nonzero(first))
        if not repeats:
            return times, refs, 0
        return *_pick(times, refs, first), repeats

    def _without_ahead(
        self, body: ArrivalBody, times: Times, refs: Refs
    ) -> tuple[Times, Refs, NDArray[np.uint64] | None, list[QuarantineEntry]]:
        identities = body.identities
        bound = self.settings.newest_at_most_ns(body.arrived_ns)
        if greatest_of(times) <= bound:
            return times, refs, identities, []
        ahead = times > bound
        found = []
        for index in np.flatnonzero(ahead).tolist():
            seconds = (int(times[index]) - body.arrived_ns) / 1e9
            detail = f"the event time lies {seconds:.3f} s beyond the arrival clock"
            ref = refs[index]
            found.append(QuarantineEntry(body.line_of(index), "ahead", detail, int(ref["place"]), int(ref["length"])))
        return *_pick(times, refs, ~ahead), None if identities is None else identities[~ahead], found

    def _without_late(
        self, late: NDArray[np.bool_], times: Times, refs: Refs, arrived_ns: int, end_lsn: int
    ) -> tuple[Times, Refs, Batch]:
        taken, number = _pick(times, refs, late), self.outbox.next_number["late"]
        behind_ns, own_behind = stood(self, taken[1])
        batch = Batch("late", number, *taken, arrived_ns, end_lsn, behind_ns=behind_ns, own_behind=own_behind)
        return *_pick(times, refs, ~late), batch

    def _quarantine(self, entries: list[QuarantineEntry], arrived_ns: int, end_lsn: int) -> Batch:
        number = self.outbox.next_number["quarantine"]
        return Batch("quarantine", number, empty_times(), empty_refs(), arrived_ns, end_lsn, entries=entries)

    def _note_lateness(self, times: Times) -> None:
        if len(times) == 1:
            self.figures.lateness.add_same(min(max(self.sources.newest_ns - int(times[0]), 0), TIME_MAX), 1)
        else:
            self.figures.lateness.add_behind(self.sources.newest_ns, times)

    def _hold(self, times: Times, refs: Refs, body: ArrivalBody) -> None:
        self.arrivals.note(body.payload_place, body.arrived_ns, len(times))
        note_held(self, times, body.arrived_ns)
        self.runs.hold(times, as_rows(refs))
        self.figures.run_length.add_stretches(times)

    def fold_mark(self, mark: Mark, end_lsn: int) -> list[Batch]:
        """Set the watermark and cut its release, in batches. It may stay where it is, so that equal times follow."""
        assert mark.watermark_ns >= self.watermark_ns, "the watermark never goes back"
        self.advance(mark.decided_ns)
        if mark.watermark_ns > self.watermark_ns:
            self.watermark_ns, self.marked_ns, self.cause = mark.watermark_ns, mark.decided_ns, mark.cause
        self.figures.marks += 1
        self.figures.marks_by_cause[mark.cause] += 1
        strand = release(self, mark)
        if not len(strand.times):
            self.holds.note(self.now_ns, *holder_of(self))
            return []
        rows, refs = len(strand.times), as_refs(strand.refs)
        came_ns, counts = self.arrivals.release(refs)
        self.figures.hold.add(np.maximum(mark.decided_ns - came_ns, 0), counts)
        self.ledger.released += rows
        self.ledger.buffered -= rows
        batches = self._batches(strand.times, refs, mark, end_lsn)
        for batch in batches:
            self.outbox.add(batch)
        self.holds.note(self.now_ns, *holder_of(self))
        return batches

    def _batches(self, times: Times, refs: Refs, mark: Mark, end_lsn: int) -> list[Batch]:
        assert mark.first_batch == self.outbox.next_number["ordered"]
        bounds = _bounds(refs["length"], mark.batch_events_at_most, mark.batch_bytes_at_most)
        return [
            Batch("ordered", mark.first_batch + index, times[start:stop], refs[start:stop], mark.decided_ns, end_lsn)
            for index, (start, stop) in enumerate(pairwise(bounds))
        ]

    def check(self) -> None:
        """Assert every invariant: books, runs, sources, arrivals, outbox."""
        self.ledger.check(self.runs.held)
        self.runs.check()
        self.sources.check()
        self.arrivals.check(self.runs.held)
        self.outbox.check()
        self.seen.check()
        self.keys.check()
        self.lateness.check()
        if isinstance(self.slack, SteeredBySource):
            self.slack.check(len(self.sources.names))
        self.holds.check()
        self.acts.check(self.now_ns)
        check_order(self)


def _refs(body: ArrivalBody) -> Refs:
    if len(body.times) == 1:
        return np.array([(body.payload_place, body.lengths[0], body.sources[0])], dtype=REF)
    refs = np.empty(len(body.times), dtype=REF)
    places = np.empty(len(refs) + 1, dtype=np.int64)
    places[0] = body.payload_place
    np.add(body.lengths, 1, out=places[1:], dtype=np.int64)  # the line feed
    refs["place"] = places.cumsum(out=places)[:-1]
    refs["length"] = body.lengths
    refs["source"] = body.sources
    return refs


def _pick(times: Times, refs: Refs, which: NDArray[np.bool_]) -> tuple[Times, Refs]:
    rows = np.flatnonzero(which)  # a mask on 16-byte items costs 4 to 9 ns each, taking by number 0.9
    return times[rows], as_refs(as_rows(refs)[rows])


def _faulty(body: ArrivalBody) -> list[QuarantineEntry]:
    entries = []
    place = body.faults_place
    for row in body.faults:
        entries.append(QuarantineEntry(row.line, row.reason, row.detail, place, row.length))
        place += row.length
    return entries


def _bounds(lengths: NDArray[np.uint32], events_at_most: int, bytes_at_most: int) -> list[int]:
    """Where batches begin and end, so that each is within both limits or a single event."""
    rows = len(lengths)
    if rows <= events_at_most and int(lengths.sum(dtype=np.int64)) <= bytes_at_most:
        return [0, rows]
    ends = np.cumsum(lengths, dtype=np.int64)
    bounds = [0]
    while bounds[-1] < rows:
        start = bounds[-1]
        before = int(ends[start - 1]) if start else 0
        within = int(np.searchsorted(ends, before + bytes_at_most, side="right"))
        bounds.append(min(rows, start + events_at_most, max(within, start + 1)))
    return bounds

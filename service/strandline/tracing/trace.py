"""One trace, from a question to everything that is known of the events it means. Blocking; for a thread of its own.

Puts the parts together: the search, the following, the watermarks' marks, the lane store. How it is worded is
`answer`.

Costs, measured: a journal of 10^6 events (152 MB, 200 sources, a window of 10^6 ids, saved every 64 MiB) in requests
of 100 is looked through in 0.26 s for an id of any source, 0.12 s for an id with its source or for a time; with the
following an event from the middle takes 0.6 s, the newest 1.3 s (2 cores at a load of 3, no idle machine; at a load
of 7 0.8, 0.4, 1.5 and 1.9 s; folding all of it takes 5.6 s). In requests of one event each record costs 4 to 8 us to
look through and 60 to 110 us to fold. Beside a trace a timer of the loop was late by 17 ms at p99 (43 ms without the
pauses of `budget`, 5 ms without a trace; at a load of 6).
"""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path

from ..core.columns import NO_SOURCE, TIME_MAX, TIME_MIN, Lane
from ..core.tracing import Followed, Late, Quarantined, Released, Stood, Target
from ..errors import JournalError
from ..journal.journal import Journal
from ..sinks.lane_tables import LateRow, QuarantineRow
from ..sinks.lane_tracing import (
    LateRecord,
    kept_late,
    kept_quarantine,
    late_record,
    refusals,
    refusals_of,
    repaired_through,
)
from .budget import Budget, Spent
from .following import Course, Standing, Starts, follow, mark_of, origins, standing_of
from .question import Question
from .scanning import MATCHES_AT_MOST, Occurrence, Scanned, scan

READ_BYTES_AT_MOST = 1 << 30  # of frames in one trace that a running service answers
OFFLINE_BYTES_AT_MOST = 1 << 40  # where nobody else waits for the processor
OPENINGS = 5  # a service that deletes a segment or a snapshot meanwhile is met again a moment later


@dataclass(slots=True)
class Traced:
    """All that was found out. Keys of the mappings are matches' targets."""

    question: Question
    scanned: Scanned
    standing: Standing
    budget: Budget
    first_lsn: int  # of what is kept
    durable_lsn: int
    course: Course = field(default_factory=Course)
    stood: dict[Target, Stood] = field(default_factory=dict)
    origins: dict[Target, Occurrence] = field(default_factory=dict)
    refused: dict[Target, dict[str, str]] = field(default_factory=dict)
    late: dict[Target, LateRecord] = field(default_factory=dict)
    kept_late: list[LateRow] = field(default_factory=list)
    kept_quarantine: list[QuarantineRow] = field(default_factory=list)
    kept_refused: dict[tuple[str, int], dict[str, str]] = field(default_factory=dict)  # by lane and number
    repaired_through: dict[str, int] = field(default_factory=dict)  # by sink, where late events were kept
    without_journal: bool = False  # only the lane store was looked through

    def source_name(self, number: int | None) -> str | None:
        """A source's name; None for none."""
        names = self.standing.names
        return None if number is None or number == NO_SOURCE or number >= len(names) else names[number]

    @property
    def found(self) -> bool:
        """Whether anything was."""
        return bool(self.scanned.matches or self.kept_late or self.kept_quarantine)


def trace(
    journal: Journal, question: Question, lanes: Path, budget: Budget, standing: Standing | None = None
) -> Traced:
    """Answer one question. `standing`: what the running feed says of itself; read from the journal where it is None.

    Raises JournalError, StrandlineError, OSError, budget.Abandoned.
    """
    for attempt in range(OPENINGS):
        first_lsn = journal.first_lsn
        try:
            return _trace(journal, question, lanes, budget, standing)
        except FileNotFoundError:
            if attempt == OPENINGS - 1:
                raise
        except JournalError:
            if attempt == OPENINGS - 1 or journal.first_lsn == first_lsn:
                raise
    raise AssertionError("the last attempt returns or raises")


def trace_kept(question: Question, lanes: Path, budget: Budget) -> Traced:
    """Answer from the lane store alone, where there is no journal. Raises StrandlineError."""
    found = Traced(question, Scanned(), Standing((), {}), budget, 0, 0, without_journal=True)
    _ask_kept(found, lanes, TIME_MAX)
    return found


def _trace(
    journal: Journal, question: Question, lanes: Path, budget: Budget, standing: Standing | None
) -> Traced:
    starts = Starts(journal, question.feed)
    stands = standing or standing_of(journal, starts)
    first_lsn, durable_lsn = journal.first_lsn, journal.durable_lsn
    scanned = scan(journal, question, stands.names, budget)
    found = Traced(question, scanned, stands, budget, first_lsn, durable_lsn)
    found.course = follow(journal, starts, [match.target for match in scanned.matches], budget)
    try:
        found.origins = origins(journal, starts, scanned.matches, found.course, budget)
        _find_marks(journal, found)
    except Spent:
        found.course.spent = True
    _ask_lanes(found, lanes)
    return found


def _find_marks(journal: Journal, found: Traced) -> None:
    known: dict[tuple[int, int], Stood] = {}
    for target, followed in found.course.followed.items():
        stood = followed.stood
        if stood is None or stood.lsn is not None or stood.watermark_ns == TIME_MIN:
            continue
        key = (stood.watermark_ns, stood.since_ns)
        if key not in known:
            known[key] = mark_of(journal, stood, target.lsn, found.budget)
        found.stood[target] = known[key]


def _ask_lanes(found: Traced, lanes: Path) -> None:
    sinks = sorted(found.standing.positions)
    for match in found.scanned.matches:
        followed = found.course.followed.get(match.target)
        placed = None if followed is None else place_of(followed)
        if placed is None:
            continue
        lane, batch, position = placed
        refused = refusals(lanes, sinks, lane, batch, position)
        if refused:
            found.refused[match.target] = refused
        if lane == "late" and match.target.time_ns is not None:
            found.late[match.target] = late_record(lanes, batch, match.target.time_ns, match.event)
    scanned = found.scanned
    if scanned.complete and found.first_lsn > 0 and scanned.begin_ns is not None:
        _ask_kept(found, lanes, scanned.begin_ns)


def place_of(followed: Followed) -> tuple[str, int, int] | None:
    """Lane, batch and position of what has left the feed."""
    match followed.fate:
        case Released(batch=batch, position=position):
            return "ordered", batch, position
        case Late(batch=batch, position=position):
            return "late", batch, position
        case Quarantined(batch=batch, position=position):
            return "quarantine", batch, position
        case _:
            return None


def _ask_kept(found: Traced, lanes: Path, before_ns: int) -> None:
    """What the lane store still has of the time before the journal that is kept."""
    question, room = found.question, MATCHES_AT_MOST - len(found.scanned.matches)
    if room <= 0:
        return
    text = None if question.id is None else question.id.encode()
    abandoned = found.budget.abandoned
    late = kept_late(lanes, question.time_ns, text, before_ns, room, abandoned)
    found.kept_late = [row for row in late if _is_meant(question, row.event.encode(errors="surrogatepass"), row.source)]
    if text is not None:
        rows = kept_quarantine(lanes, text, before_ns, room - len(found.kept_late), abandoned)
        found.kept_quarantine = [row for row in rows if _is_meant(question, row.event, question.source)]
    kept: list[LateRow | QuarantineRow] = [*found.kept_late, *found.kept_quarantine]
    for row in kept:
        sinks = [sink for sink, lanes_of in found.standing.positions.items() if kept_lane(row) in lanes_of]
        refused = refusals_of(lanes, sinks, kept_lane(row), row.batch, kept_event(row))
        found.kept_refused[kept_lane(row), row.number] = refused
    if found.kept_late:
        found.repaired_through = repaired_through(lanes)


def kept_lane(row: LateRow | QuarantineRow) -> Lane:
    """The lane of a row of the lane store."""
    return "late" if isinstance(row, LateRow) else "quarantine"


def kept_event(row: LateRow | QuarantineRow) -> bytes:
    """The bytes of the event in a row of the lane store."""
    return row.event.encode(errors="surrogatepass") if isinstance(row, LateRow) else row.event


def _is_meant(question: Question, event: bytes, source: str | None) -> bool:
    if question.source is not None and source != question.source:
        return False
    if question.id is None:
        return True
    read = None if question.reader is None else question.reader.read(event)
    return read.id == question.id if read is not None else f'"{question.id}"'.encode() in event


"""From lines in a journal to what became of them: the nearest saved state before each, and the records behind it.

Which state to begin with and when to stop is chosen here; what a record does is `core.tracing`. Reads only.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field

from ..core.columns import Lane
from ..core.outbox import Outbox
from ..core.records import Kind, SettingsRecord, SourcesRecord, TakenRecord, decode_mark, decode_small
from ..core.saved import restore
from ..core.settings import Settings
from ..core.state import State
from ..core.tracing import Duplicate, Followed, Follower, Quarantined, Stood, Target
from ..journal.journal import Journal
from .budget import Budget, Spent
from .scanning import Match, Occurrence, frames, occurrences, stretches, understood

REPEATS_AT_MOST = 64  # earlier events of one identity that are looked at for the one that was taken


class Starts:
    """States that folding can begin with: snapshots, and the beginning of the journal if that is the feed's own."""

    def __init__(self, journal: Journal, feed: str) -> None:
        self._feed = feed
        self._snapshots: Iterator[tuple[int, memoryview]] = journal.intact_snapshots()
        self._known: list[tuple[int, memoryview | None]] = []  # the newest first
        self._first_lsn = journal.first_lsn

    def _more(self) -> bool:
        for lsn, body in self._snapshots:
            if lsn >= self._first_lsn:
                self._known.append((lsn, body))
                return True
        if self._first_lsn == 0 and (not self._known or self._known[-1][1] is not None):
            self._known.append((0, None))
            return True
        return False

    def before(self, lsn: int) -> int | None:
        """Position of the nearest one at or before a record."""
        index = 0
        while index < len(self._known) or self._more():
            if self._known[index][0] <= lsn:
                return self._known[index][0]
            index += 1
        return None

    def oldest(self) -> tuple[int, State] | None:
        """The oldest one that can be read, with its position."""
        while self._more():
            pass
        for lsn, _ in reversed(list(self._known)):
            state = self.state(lsn)
            if state is not None:
                return lsn, state
        return None

    def newest(self) -> tuple[int, State] | None:
        """The newest one that can be read, with its position."""
        index = 0
        while index < len(self._known) or self._more():
            lsn = self._known[index][0]
            state = self.state(lsn)
            if state is not None:
                return lsn, state
        return None

    def state(self, lsn: int) -> State | None:
        """The state at one of these positions; None, and it is none of them any more, where it cannot be read."""
        index = next(index for index, (known, _) in enumerate(self._known) if known == lsn)
        body = self._known[index][1]
        if body is None:
            return State(Settings(self._feed))
        try:
            return restore(body)
        except ValueError:  # another version's: an earlier one does as well
            del self._known[index]
            return None


@dataclass(slots=True)
class Course:
    """What became of targets. `followed` lacks those that no saved state stands before; `spent`: the budget ran out.

    `end`: the state behind the last record, where it was folded up to there.
    """

    followed: dict[Target, Followed] = field(default_factory=dict)
    spent: bool = False
    end: Follower | None = None


def follow(journal: Journal, starts: Starts, targets: Sequence[Target], budget: Budget) -> Course:
    """Follow the targets until each has left the feed, or to the journal's end. Raises as `scan`, and JournalError."""
    course = Course()
    pending = sorted(set(targets), key=lambda target: (target.lsn, target.place, target.line))
    follower, position = _adopting(starts, pending, course)
    try:
        while pending or (follower is not None and follower.open):
            start = starts.before(pending[0].lsn) if pending else position
            if start is None:  # none can be read any more
                pending.pop(0)
                continue
            if follower is None or start > position:
                follower = None  # before the next state takes its room
                state = starts.state(start)
                if state is None:
                    continue
                follower, position = Follower(state), start
            position, over = _fold_on(journal, starts, follower, position, pending, course, budget)
            if over:
                follower.still_held()
                course.end = follower
                break
    except Spent:
        course.spent = True
    return course


def _adopting(starts: Starts, pending: list[Target], course: Course) -> tuple[Follower | None, int]:
    """Begin behind those that no saved state stands before: the oldest state may still hold them."""
    early = [target for target in pending if starts.before(target.lsn) is None]
    oldest = starts.oldest() if early else None
    if oldest is None:
        return None, 0
    follower = Follower(oldest[1])
    for target in early:
        pending.remove(target)
        followed = follower.adopt(target)
        if followed is not None:
            course.followed[target] = followed
    return (follower, oldest[0]) if follower.open else (None, 0)


def _fold_on(
    journal: Journal, starts: Starts, follower: Follower, position: int, pending: list[Target], course: Course,
    budget: Budget,
) -> tuple[int, bool]:  # fmt: skip
    """Fold until nothing is followed and the next target has a nearer start; the position, and if that is the end."""
    for frame in frames(journal, position, journal.durable_lsn):
        budget.spend(frame)
        here = []
        while pending and pending[0].lsn == frame.lsn:
            here.append(pending.pop(0))
        for followed in understood(frame, follower.fold, frame.kind, frame.version, frame.body, frame.lsn, here):
            course.followed[followed.target] = followed
        position = frame.end_lsn
        if not follower.open and (not pending or (starts.before(pending[0].lsn) or 0) > position):
            return position, False
    return position, True


def origins(
    journal: Journal, starts: Starts, matches: Sequence[Match], course: Course, budget: Budget
) -> dict[Target, Occurrence]:
    """For each match that is a repeat the event that it repeats, where that is still to be found."""
    repeats = [match for match in matches if _is_repeat(course.followed.get(match.target))]
    identities = {match.identity for match in repeats if match.identity is not None}
    if not identities:
        return {}
    last = max(match.target.lsn for match in repeats)
    every, whole = occurrences(journal, sorted(identities), last, REPEATS_AT_MOST * len(identities), budget)
    past = follow(journal, starts, [each.target for each in every], budget)
    course.spent = course.spent or past.spent or not whole
    found = {}
    for match in repeats:
        here = (match.target.lsn, match.target.place)
        for each in every:
            followed = past.followed.get(each.target)
            before = (each.target.lsn, each.target.place) < here and each.identity == match.identity
            if before and followed is not None and not _is_repeat(followed) and not _is_aside(followed):
                found[match.target] = each
    return found


def _is_repeat(followed: Followed | None) -> bool:
    return followed is not None and isinstance(followed.fate, Duplicate)


def _is_aside(followed: Followed) -> bool:
    """In quarantine, so that its identity was not noted."""
    return isinstance(followed.fate, Quarantined)


def mark_of(journal: Journal, stood: Stood, before_lsn: int, budget: Budget) -> Stood:
    """The same watermark with the position and source of its mark, sought backwards from a record; as it is if gone."""
    wanted = stood.since_ns.to_bytes(8, "little", signed=True) + stood.watermark_ns.to_bytes(8, "little", signed=True)
    for begin, end in stretches(journal):
        if begin >= before_lsn:
            continue
        for frame in frames(journal, begin, min(end, before_lsn)):
            budget.spend(frame)
            if frame.kind == Kind.MARK and bytes(frame.body[:16]) == wanted:
                mark = understood(frame, decode_mark, frame.body)
                return Stood(mark.watermark_ns, mark.decided_ns, mark.cause, mark.source, frame.lsn)
    return stood


@dataclass(frozen=True, slots=True)
class Standing:
    """Where a feed stands: names of sources by number, the last batch that each sink has taken of each lane, its clock.

    `now_ns` None: it is not running.
    """

    names: Sequence[str]
    positions: Mapping[str, Mapping[Lane, int]]
    now_ns: int | None = None


def standing_of(journal: Journal, starts: Starts) -> Standing:
    """The same for a feed that is not running: the newest saved state, and the small records behind it."""
    found = starts.newest()
    if found is None:
        lsn, names, outbox = journal.first_lsn, list[str](), Outbox()
    else:
        lsn, names, outbox = found[0], list(found[1].sources.names), found[1].outbox
    for frame in frames(journal, lsn, journal.durable_lsn):
        if frame.kind in (Kind.SOURCES, Kind.SETTINGS, Kind.TAKEN):
            _note(understood(frame, decode_small, Kind(frame.kind), frame.body), names, outbox)
    return Standing(names, outbox.positions)


def _note(record: object, names: list[str], outbox: Outbox) -> None:
    match record:
        case SourcesRecord():
            names += record.names
        case SettingsRecord():
            outbox.serve(record.sinks, record.positions)
        case TakenRecord():
            outbox.taken(record.sink, record.lane, record.number)
        case _:
            pass

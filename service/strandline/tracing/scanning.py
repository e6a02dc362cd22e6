"""The search through a journal for the lines that a question means: columns first, then the lines' own bytes.

The newest segment first, since it is the newest events that are asked for, and since the search may end at a limit.
Reads only; any thread may do it while the service appends.
"""

from __future__ import annotations

import struct
from collections import deque
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field
from itertools import pairwise
from typing import Any, TypeVar

import msgspec

from ..core.records import FRAME_HEADER_BYTES, ArrivalBody, Kind, decode_arrival, instant_of
from ..core.tracing import Finder, Target
from ..errors import JournalError
from ..journal.frame import Frame
from ..journal.journal import Journal
from .budget import Budget, Spent
from .question import Question

Result = TypeVar("Result")
MATCHES_AT_MOST = 20
EVENT_BYTES_AT_MOST = 4096  # of an event in the answer
UNREADABLE = (AssertionError, struct.error, ValueError, LookupError, msgspec.MsgspecError)


@dataclass(frozen=True, slots=True)
class Match:
    """One line that is meant. `by`: "id", "time", or "text" for a line whose fields cannot be read but which holds the
    id in quotation marks. `verified`: its own bytes were read, not only a digest. `event` is cut to a bearable length.
    """

    target: Target
    arrived_ns: int
    received: int  # lines of its request
    length: int
    source: int | None
    identity: int | None
    event: bytes
    by: str
    verified: bool


@dataclass(slots=True)
class Scanned:
    """What was found, in order of arrival, and what was looked through."""

    matches: list[Match] = field(default_factory=list)
    more: bool = False  # there are older ones beyond MATCHES_AT_MOST
    complete: bool = True  # everything that is kept was looked through
    begin_lsn: int = 0
    end_lsn: int = 0
    begin_ns: int | None = None  # arrival clock of the first record that was looked at
    without_ids: int = 0  # requests whose record holds no identities although an id is looked for


def stretches(journal: Journal) -> list[tuple[int, int]]:
    """First and end position of each segment, the newest first, up to what is durable now."""
    durable_lsn, first_lsn = journal.durable_lsn, journal.first_lsn
    bounds = [first_lsn, *(end for end in journal.ends if first_lsn < end < durable_lsn), durable_lsn]
    return [(begin, end) for begin, end in pairwise(bounds) if begin < end][::-1]


def scan(journal: Journal, question: Question, names: Sequence[str], budget: Budget) -> Scanned:
    """Look for the lines that are meant, newest first, up to MATCHES_AT_MOST of them and to the budget.

    Raises JournalError, OSError (a segment was deleted meanwhile), Abandoned.
    """
    look = _Look(question, names)
    found = Scanned(begin_lsn=journal.durable_lsn, end_lsn=journal.durable_lsn)
    for begin, end in stretches(journal):
        here: deque[Match] = deque(maxlen=MATCHES_AT_MOST)
        count = 0
        first_ns: int | None = None
        try:
            for frame in frames(journal, begin, end):
                budget.spend(frame)
                if first_ns is None:
                    first_ns = understood(frame, instant_of, frame.kind, frame.body)
                if frame.kind == Kind.ARRIVAL:
                    for match in look.matches(frame):
                        count += 1
                        here.append(match)
        except Spent:
            found.complete = False
        found.matches = [*here, *found.matches]
        found.more = found.more or count > len(here) or len(found.matches) > MATCHES_AT_MOST
        found.matches = found.matches[-MATCHES_AT_MOST:]
        if not found.complete:
            break
        found.begin_lsn = begin
        found.begin_ns = first_ns if first_ns is not None else found.begin_ns
        if found.more:
            found.complete = False
            break
    found.without_ids = look.finder.without_identities
    return found


def frames(journal: Journal, begin: int, end: int) -> Iterator[Frame]:
    """The frames from `begin`, where one starts, up to `end`."""
    for frame in journal.frames(begin, known=True):
        if frame.lsn >= end:
            return
        yield frame


def understood(frame: Frame, decode: Callable[..., Result], *arguments: Any) -> Result:
    """What a decoder makes of a frame. Raises JournalError where this program cannot read it."""
    try:
        return decode(*arguments)
    except UNREADABLE as error:
        raise JournalError(
            f"the record at position {frame.lsn} cannot be read ({error}): a newer program may have written it"
        ) from error


class _Look:
    """Holds arrival records against one question."""

    def __init__(self, question: Question, names: Sequence[str]) -> None:
        self._question, self._names = question, names
        number = names.index(question.source) if question.source in names else None
        self._unheard = question.source is not None and number is None
        identities = question.identities(names)
        self.finder = Finder(time_ns=question.time_ns, identities=identities, source=number)
        # A line that is cut short can still hold the id as it was written.
        self._text = None if question.id is None else msgspec.json.encode(question.id)

    def matches(self, frame: Frame) -> list[Match]:
        rows, faulty = understood(frame, self.finder.rows, frame.body)
        if self._unheard:
            rows = []
        if not rows and not faulty:
            return []
        body: ArrivalBody = understood(frame, decode_arrival, frame.body, frame.lsn)
        found = [match for row in rows if (match := self._event(frame, body, row)) is not None]
        return found + (list(self._faults(frame, body)) if faulty else [])

    def _event(self, frame: Frame, body: ArrivalBody, row: int) -> Match | None:
        source, length = int(body.sources[row]), int(body.lengths[row])
        if not self.finder.is_source(source):
            return None
        place = body.place_of(row)
        line = _bytes(frame, place, length)
        reader = self._question.reader
        by_id = self._question.id is not None
        if by_id and reader is not None:
            read = reader.read(line)
            if read is not None and not self._question.is_met(read):
                return None  # another id with the same digest
        identity = None if body.identities is None else int(body.identities[row])
        target = Target(frame.lsn, place, body.line_of(row), int(body.times[row]))
        by, verified = ("id", reader is not None) if by_id else ("time", True)
        return Match(
            target, body.arrived_ns, len(body.times) + len(body.faults), length, source, identity,
            line[:EVENT_BYTES_AT_MOST], by, verified,
        )  # fmt: skip

    def _faults(self, frame: Frame, body: ArrivalBody) -> Iterator[Match]:
        place = body.faults_place
        for fault in body.faults:
            line = _bytes(frame, place, fault.length)
            by = self._fault_by(line)
            if by is not None:
                target = Target(frame.lsn, place, fault.line, None)
                yield Match(
                    target, body.arrived_ns, len(body.times) + len(body.faults), fault.length, None, None,
                    line[:EVENT_BYTES_AT_MOST], by, self._question.reader is not None,
                )  # fmt: skip
            place += fault.length

    def _fault_by(self, line: bytes) -> str | None:
        question = self._question
        read = None if question.reader is None else question.reader.read(line)
        if read is not None and question.is_met(read):
            return "time" if question.id is None else "id"
        if read is None and self._text is not None and self._text in line:
            return "text"
        return None


def _bytes(frame: Frame, place: int, length: int) -> bytes:
    start = place - frame.lsn - FRAME_HEADER_BYTES
    return bytes(frame.body[start : start + length])


@dataclass(frozen=True, slots=True)
class Occurrence:
    """One event with an identity that is looked for."""

    target: Target
    identity: int
    arrived_ns: int


def occurrences(
    journal: Journal, identities: Sequence[int], end_lsn: int, at_most: int, budget: Budget
) -> tuple[list[Occurrence], bool]:
    """Events of these identities in records up to and including the one at `end_lsn`, the newest `at_most`.

    In order of arrival; what the budget did not reach is missing, and then the second value is False. Raises as `scan`.
    """
    finder = Finder(identities=identities)
    found: list[Occurrence] = []
    for begin, end in stretches(journal):
        if begin > end_lsn:
            continue
        here: list[Occurrence] = []
        try:
            for frame in frames(journal, begin, min(end, end_lsn + 1)):
                budget.spend(frame)
                if frame.kind == Kind.ARRIVAL:
                    here += _occurrences_in(frame, finder)
        except Spent:
            return (here + found)[-at_most:], False
        found = (here + found)[-at_most:]
        if len(found) == at_most:
            break
    return found, True


def _occurrences_in(frame: Frame, finder: Finder) -> list[Occurrence]:
    rows, _ = understood(frame, finder.rows, frame.body)
    if not rows:
        return []
    body: ArrivalBody = understood(frame, decode_arrival, frame.body, frame.lsn)
    assert body.identities is not None
    found = []
    for row in rows:
        target = Target(frame.lsn, body.place_of(row), body.line_of(row), int(body.times[row]), passing=True)
        found.append(Occurrence(target, int(body.identities[row]), body.arrived_ns))
    return found

"""Decoding: one body to one arrival, by columns where all is well, line by line where something is not.

Here live the decoder of a feed and the two ways it goes. The fast way decodes the whole payload at once and takes its
columns; it gives up at the first irregularity. The slow way judges every line, keeps the good ones and names the
others. Both give the same arrival (a property test holds them together). Where a feed asks for it, compiled code is
asked before the fast way (`compiled`; compiled.md says what it is worth, and what else was tried). No HTTP, no clock,
no ordering.
"""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from copy import copy
from typing import Annotated, Any, NamedTuple

import msgspec
import numpy as np
from numpy.typing import NDArray

from ..core.columns import Arrival, Fault, Times
from ..errors import TooManyFaults
from . import cloudevents
from .arrow import ARROW, arrow_rows
from .compiled import Scanned, Scanner, serves
from .formats import FORMATS, are_as_sent, check_size, split_body
from .json_items import json_fault
from .limits import BodyLimits
from .lines import Lines, is_utf8, split_lines, utf8_fault
from .nesting import deep_suspects, deepest, too_short_to_be_deep
from .pointer import Fields, Values, decoded_lines, parse_pointer
from .timestamps import unit_bounds
from .values import (
    LineFault,
    Rows,
    Unit,
    check_id,
    check_source,
    check_time,
    identity_column,
    number_column,
    source_column,
    time_column,
)

FAULTS_NAMED = 10  # in the refusal of a body for its many faults


class _Columns(NamedTuple):
    times: Times
    sources: NDArray[np.uint32]
    new_sources: Sequence[str]
    identities: NDArray[np.uint64] | None
    bad: Rows  # rows that break the law of their field


class Decoder:
    """Turns the bodies of one feed into arrivals. Holds no state between bodies; may be shared between threads."""

    def __init__(
        self,
        feed_name: str,
        time_at: str,
        time_unit: Unit,
        source: str | None = None,
        id: str | None = None,
        limits: BodyLimits | None = None,
        is_compiled: bool = False,
    ) -> None:
        """`time_at`, `source` and `id` are JSON Pointers. Raises pointer.PointerError.

        Without `source` every event's source is the feed's name; without `id` arrivals have no identities.
        `is_compiled`: JSON lines are read by `compiled` where it serves these pointers. Raises StrandlineError.
        """
        self._feed_name, self._unit, self._limits = feed_name, time_unit, limits or BodyLimits()
        self._at = Values(time_at, source, id)
        self._fields = Fields(time_at, _time_type(time_unit), source, id)
        self._scanner: Scanner | None = None
        if is_compiled and serves(time_at, source, id):
            self._scanner = Scanner(time_at, time_unit, source, self._limits.nesting_at_most)

    @property
    def is_compiled(self) -> bool:
        """Whether compiled code has the first look at bodies."""
        return self._scanner is not None

    def of_source(self, name: str) -> Decoder:
        """The same, for bodies whose events all are of this source, whatever they hold."""
        other = copy(self)
        other._feed_name = name
        return other

    def decode(self, body: bytes, media_type: str, source_numbers: Mapping[str, int]) -> Arrival:
        """The body, decoded; `media_type` is one of formats.MEDIA_TYPES.

        `source_numbers` is the feed's table of sources, numbered from 0 without gaps. Raises BodyError (413, 415, 422)
        and TooManyFaults; a line that is no event is a fault of the arrival and hinders no other.
        """
        if media_type == ARROW:
            return self._by_rows(self._rows(body), source_numbers)
        arrival = self.scanned(body, media_type, source_numbers)
        if arrival is not None:
            return arrival
        lines = self.split(body, media_type)
        arrival = self.at_once(lines, source_numbers, was_scanned=are_as_sent(lines, body, media_type))
        return arrival or self.line_by_line(lines, source_numbers)

    def decode_line_by_line(self, body: bytes, media_type: str, source_numbers: Mapping[str, int]) -> Arrival:
        """What `decode` answers, always by the slow way: the reference that tests hold the fast way against."""
        return self.line_by_line(self.split(body, media_type), source_numbers)

    # `decode` in its steps, for who wants to do them in different places.

    def split(self, body: bytes, media_type: str) -> Lines:
        """The body as lines. Raises BodyError (413, 415, 422)."""
        if media_type == ARROW:
            lines: Lines = self._rows(body).as_lines()
            return lines
        return split_body(body, media_type, self._limits)

    # --- the compiled way ---

    def scanned(self, body: bytes, media_type: str, source_numbers: Mapping[str, int]) -> Arrival | None:
        """The body by compiled code, before it is split; None where there is none, or it does not prove the body."""
        scanner, limits, form = self._scanner, self._limits, FORMATS.get(media_type)
        if scanner is None or form is None or form.split is not split_lines:
            return None
        if not 0 < len(body) <= limits.decoded_bytes_at_most:
            return None
        payload = body if body.endswith(b"\n") else body + b"\n"
        found = scanner.columns_of(payload, source_numbers, limits.events_at_most)
        if found is None or found.lengths.max() > limits.event_bytes_at_most:
            return None
        columns = self._scanned_columns(found, source_numbers)
        return Arrival(columns.times, columns.sources, found.lengths, payload, columns.new_sources)

    def _scanned_columns(self, found: Scanned, source_numbers: Mapping[str, int]) -> _Columns:
        if self._at.source is None:
            return _Columns(found.times, *self._one_source(len(found.times), source_numbers), None, ())
        return _Columns(found.times, found.sources, found.new_sources, None, ())

    # --- the fast way ---

    def at_once(self, lines: Lines, source_numbers: Mapping[str, int], *, was_scanned: bool = False) -> Arrival | None:
        """The whole payload in one go, or None when any line needs a closer look (`was_scanned`: not by `scanned`)."""
        decoder, count = self._fields.decoder, len(lines.ends)
        if decoder is None or not count or not lines.is_regular or not is_utf8(lines.payload):
            return None
        longest = int((lines.ends - lines.starts).max())
        if longest > self._limits.event_bytes_at_most:
            return None
        found = None if self._scanner is None or was_scanned else self._scanner.columns(lines, source_numbers)
        if found is not None:
            columns = self._scanned_columns(found, source_numbers)
        else:
            records = decoded_lines(decoder, lines.payload, count)
            if records is None or self._is_deep(lines, longest):
                return None
            columns = self._columns(records, source_numbers)
        if columns.bad or (lines.are_cloudevents and not cloudevents.all_sound(lines.payload, count)):
            return None
        self._check_faults(lines.faults)
        return _arrival(lines, columns, lines.faults)

    def _is_deep(self, lines: Lines, longest: int) -> bool:
        limit = self._limits.nesting_at_most
        is_short = too_short_to_be_deep(lines.payload, longest, limit)
        suspects = () if is_short else deep_suspects(lines.payload, lines.starts, limit)
        if not len(suspects):
            return False
        keep = np.zeros(len(lines.ends), np.bool_)
        keep[suspects] = True
        return deepest(lines.select(keep).payload) > limit

    def _columns(self, records: Sequence[Any], source_numbers: Mapping[str, int]) -> _Columns:
        """Columns of records, whose values have the types of their fields, and the rows that break a law even so."""
        fields, count = self._fields, len(records)
        times, bad_times = time_column(fields.times(records), self._unit)
        new: Sequence[str] = ()
        bad_sources: Rows = ()
        if self._at.source is None:
            sources, new = self._one_source(count, source_numbers)
        else:
            try:
                sources = number_column(fields.source_numbers(records, source_numbers))
            except KeyError:  # a new name, an integer or a fault
                sources, new, bad_sources = source_column(fields.sources(records), source_numbers)
        if self._at.id is None:
            return _Columns(times, sources, new, None, [*bad_times, *bad_sources])
        names = [self._feed_name] * count if self._at.source is None else fields.sources(records)
        identities, bad_ids = identity_column(names, fields.ids(records))
        return _Columns(times, sources, new, identities, [*bad_times, *bad_sources, *bad_ids])

    def _one_source(self, count: int, source_numbers: Mapping[str, int]) -> tuple[NDArray[np.uint32], Sequence[str]]:
        """The source column of a feed without a pointer to sources, and its name where it is new."""
        number = source_numbers.get(self._feed_name, len(source_numbers))
        new = [self._feed_name] if count and number == len(source_numbers) else []
        return np.full(count, number, np.uint32), new

    # --- rows of columns (Arrow): the lines are made here, and only those of doubtful rows are read again ---

    def _rows(self, body: bytes) -> Any:
        """The arrow_rows.Rows of a body. Raises BodyError."""
        check_size(body, self._limits)
        module, at = arrow_rows(), self._at
        source, id = (None if text is None else parse_pointer(text) for text in (at.source, at.id))
        return module.read_rows(body, module.Pointed(parse_pointer(at.time), self._unit, source, id), self._limits)

    def _by_rows(self, rows: Any, source_numbers: Mapping[str, int]) -> Arrival:
        lines: Lines = rows.lines
        if not len(lines.ends):
            return self.line_by_line(rows.as_lines(), source_numbers)
        faults = lines.faults
        columns, bad = self._row_columns(rows, source_numbers)
        bad |= lines.ends - lines.starts > self._limits.event_bytes_at_most
        if bad.any():
            judged = self.line_by_line(lines.select(bad), source_numbers)
            if len(judged.times):  # the columns were too careful
                return self.line_by_line(rows.as_lines(), source_numbers)
            faults, rows = tuple(judged.faults), rows.select(~bad)
            lines = rows.lines
            columns, _ = self._row_columns(rows, source_numbers)
        self._check_faults(faults)
        return _arrival(lines, columns, faults)

    def _row_columns(self, rows: Any, source_numbers: Mapping[str, int]) -> tuple[_Columns, NDArray[np.bool_]]:
        """The columns, and which rows are no events or may be none."""
        module = arrow_rows()
        times, bad = module.times_of(rows.time, self._unit)
        if self._at.source is None:
            sources, new = self._one_source(len(times), source_numbers)
        else:
            sources, new, bad_sources = module.sources_of(rows.source, source_numbers)
            bad = bad | bad_sources
        if self._at.id is None:
            return _Columns(times, sources, new, None, ()), bad
        ids, bad_ids = module.texts_of(rows.id)
        names = [self._feed_name] * len(ids) if self._at.source is None else module.texts_of(rows.source)[0]
        return _Columns(times, sources, new, identity_column(names, ids)[0], ()), bad | bad_ids

    # --- the slow way ---

    def line_by_line(self, lines: Lines, source_numbers: Mapping[str, int]) -> Arrival:
        """Every line on its own; then columns of the good ones, which may show more faults. Raises TooManyFaults."""
        records: list[Any] = []
        kept: list[int] = []
        faults = list(lines.faults)
        self._check_faults(faults)
        judge = _Judge(lines, self._fields, self._at, self._unit, self._limits)
        for index, line in enumerate(lines):
            try:
                records.append(judge.record(index, line))
                kept.append(index)
            except LineFault as fault:
                faults.append(self._fault(lines, index, line, fault))
                self._check_faults(faults)
        columns = self._columns(records, source_numbers)
        broken, bad = set(columns.bad), set()
        # The rules of CloudEvents are about whole events: then every line is looked at once more.
        for row in range(len(records)) if lines.are_cloudevents else sorted(broken):
            line = lines.payload[lines.starts[kept[row]] : lines.ends[kept[row]]]
            found = judge.fault_of(line, broken=row in broken)
            if found is not None:
                bad.add(row)
                faults.append(self._fault(lines, kept[row], line, found))
                self._check_faults(faults)
        if bad:
            records = [record for row, record in enumerate(records) if row not in bad]
            kept = [index for row, index in enumerate(kept) if row not in bad]
            columns = self._columns(records, source_numbers)
        keep = np.zeros(len(lines.ends), np.bool_)
        keep[kept] = True
        return _arrival(lines.select(keep), columns, tuple(sorted(faults, key=_line_of)))

    def _check_faults(self, faults: Sequence[Fault]) -> None:
        """Raise TooManyFaults at once: else a body of faults only would be judged to its end, for seconds."""
        if len(faults) <= self._limits.faults_at_most:
            return
        first = [(fault.line, fault.reason, fault.detail) for fault in sorted(faults, key=_line_of)[:FAULTS_NAMED]]
        line, reason, detail = first[0]
        raise TooManyFaults(
            f"more than {self._limits.faults_at_most} lines are no events of this feed, so none was taken; "
            f"line {line}: {reason}: {detail}",
            first,
        )

    def _fault(self, lines: Lines, index: int, line: bytes, fault: LineFault) -> Fault:
        return Fault(lines.number(index), fault.reason, fault.detail, line[: self._limits.event_bytes_at_most])


def _time_type(unit: Unit) -> Any:
    """What msgspec decodes times as. Bounds cost nothing, and without them 2**64 would decode to a Python integer."""
    if unit == "rfc3339":
        return str
    least, greatest = unit_bounds(unit)
    return Annotated[int, msgspec.Meta(ge=least, le=greatest)]


def _line_of(fault: Fault) -> int:
    return fault.line


def _arrival(lines: Lines, columns: _Columns, faults: Sequence[Fault]) -> Arrival:
    numbers = lines.numbers
    if numbers is not None and (not len(numbers) or numbers[-1] == len(numbers)):  # ascending: then it is 1, 2, 3, ...
        numbers = None
    return Arrival(
        times=columns.times,
        sources=columns.sources,
        lengths=(lines.ends - lines.starts).astype(np.uint32),
        payload=lines.payload,
        new_sources=columns.new_sources,
        line_numbers=numbers,
        faults=faults,
        identities=columns.identities,
    )


class _Judge:
    """Judges the lines of one body one by one."""

    def __init__(self, lines: Lines, fields: Fields, at: Values, unit: Unit, limits: BodyLimits) -> None:
        self._fields, self._at, self._unit, self._limits = fields, at, unit, limits
        self._is_utf8 = is_utf8(lines.payload)
        suspects = deep_suspects(lines.payload, lines.starts, limits.nesting_at_most)
        large = np.flatnonzero(lines.ends - lines.starts > limits.event_bytes_at_most)
        self._deep_suspects, self._large = frozenset(suspects.tolist()), frozenset(large.tolist())

    def record(self, index: int, line: bytes) -> Any:
        """The line as a record of the feed's fields. Raises LineFault."""
        if index in self._large:
            detail = f"the line has {len(line)} bytes, {self._limits.event_bytes_at_most} are allowed"
            raise LineFault("too_large", detail)
        fault = None if self._is_utf8 else utf8_fault(line)
        if fault is not None:
            raise LineFault("malformed", f"not UTF-8: {fault}")
        if index in self._deep_suspects and deepest(line) > self._limits.nesting_at_most:
            raise self._too_deep()
        if self._fields.decoder is not None:
            try:
                return self._fields.decoder.decode(line)
            except (msgspec.DecodeError, RecursionError):
                pass
        # The general way knows the last value of a repeated member, and why a line is no event.
        values = self._read(line)
        broken = self._law_broken(values)
        if broken is not None:
            raise broken
        return self._fields.record(values)

    def fault_of(self, line: bytes, broken: bool) -> LineFault | None:
        """Why a line is no event that has a record: because the columns call it `broken`, or else as a CloudEvent."""
        if not broken:
            return cloudevents.fault_of(line)
        fault = self._law_broken(self._read(line))
        assert fault is not None, "columns and scalar law differ"  # a property test holds the two laws together
        return fault

    def _too_deep(self) -> LineFault:
        return LineFault("too_deep", f"nested deeper than {self._limits.nesting_at_most} levels")

    def _read(self, line: bytes) -> Values:
        try:
            return self._fields.read(line)
        except RecursionError:
            raise self._too_deep() from None
        except msgspec.DecodeError as error:
            raise self._not_an_object(line, error) from None

    def _law_broken(self, values: Values) -> LineFault | None:
        """Why these are no time, source and id."""
        try:
            check_time(values.time, self._unit, self._at.time)
            if self._at.source is not None:
                check_source(values.source, self._at.source)
            if self._at.id is not None:
                check_id(values.id, self._at.id)
        except LineFault as fault:
            return fault
        return None

    def _not_an_object(self, line: bytes, error: msgspec.DecodeError) -> LineFault:
        what, place = json_fault(error, len(line))
        if isinstance(error, msgspec.ValidationError):
            return LineFault("malformed", f"not a JSON object: {what}")
        if b"\\u" in line:
            # msgspec calls half a surrogate pair malformed JSON; the grammar allows it, so say where it stands.
            try:
                document = json.loads(line, parse_constant=_refuse_constant)
            except (ValueError, RecursionError):
                document = None
            if isinstance(document, dict):
                fault = self._law_broken(self._fields.pick(document))
                return fault or LineFault("malformed", "a string holds half a surrogate pair")
        return LineFault("malformed", f"not one JSON object at byte {place}: {what}")


def _refuse_constant(name: str) -> None:
    """NaN and the infinities, which the standard library lets pass."""
    raise ValueError(name)

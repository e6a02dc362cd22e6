"""One Arrow body to rows: a JSON line for each, and the columns of the feed's time, source and id.

Here lives the reading of a stream within limits, and what a column must be to serve as time, source or id. Whether a
row is an event is judged on its line wherever its columns leave a doubt (`decode`), so the law is that of every other
format. Needs pyarrow; imported only once a body has come. No HTTP, no ordering.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from ..core.columns import Fault, Times
from ..errors import BodyError
from .arrow_frames import PARTS_AT_MOST, Sums, refused, walk
from .arrow_json import Path, Unheld, Writer, each_type, instants, plain_text
from .arrow_texts import Room, characters_of, offsets_of
from .arrow_types import TAKEN, is_name, is_taken, is_text, values_of
from .limits import BodyLimits
from .lines import Lines, no_lines
from .pointer import Tokens
from .timestamps import UNIT_NS, from_unit_column, parse_rfc3339_fixed
from .values import ID_BYTES_AT_MOST, Unit, is_source, shown

Bools = NDArray[np.bool_]
COLUMNS_AT_MOST = 1000  # of one body, those inside structs too; each costs some 50 us


@dataclass(frozen=True, slots=True)
class Pointed:
    """Where a feed's time, source and id stand in a row, and the time's unit."""

    time: Tokens
    unit: Unit
    source: Tokens | None
    id: Tokens | None


@dataclass(frozen=True, slots=True)
class Rows:
    """The rows of a body that JSON can hold: their lines, and their columns. `lines.faults` are the others.

    The payload of `lines` may be a view of the library's memory, which is the fast way into the journal; `as_lines` is
    for whoever reads lines.
    """

    lines: Lines
    time: Any = None  # pyarrow arrays; None where there are no rows, and for a pointer that the feed does not have
    source: Any = None
    id: Any = None

    def as_lines(self) -> Lines:
        """The lines with a payload of bytes."""
        return replace(self.lines, payload=bytes(self.lines.payload))

    def select(self, keep: Bools) -> Rows:
        """Only the rows that `keep` marks."""
        kept = pa.array(keep)
        columns = (None if column is None else column.filter(kept) for column in (self.time, self.source, self.id))
        return Rows(self.lines.select(keep), *columns)


def read_rows(body: bytes, pointed: Pointed, limits: BodyLimits) -> Rows:
    """The rows of a stream. Raises BodyError: 422 for what is no sound stream or has a column that is not taken, 413
    beyond a limit."""
    if not body:
        return Rows(no_lines())
    names, columns, count = columns_of(body, pointed, limits)
    if not count:
        return Rows(no_lines())
    room = Room(limits.decoded_bytes_at_most)
    role = {key: _plain(_at(names, columns, tokens), room) for key, tokens in _roles(pointed).items()}
    writer = Writer(count, room)
    if pa.types.is_timestamp(role["time"].type):
        _write_time(writer, role["time"], pointed)
    try:
        text = writer.lines(names, columns)
    except pa.ArrowException as error:  # no case is known: a body is refused rather than answered with 500
        refused(str(error))
    lines = _lines_of(text)
    if not writer.unheld:
        return Rows(lines, role["time"], role.get("source"), role.get("id"))
    faults, keep = _faults(lines, writer.unheld, limits)
    return Rows(replace(lines, faults=faults), role["time"], role.get("source"), role.get("id")).select(keep)


# --- the stream --------------------------------------------------------------------------------------------------


def columns_of(body: bytes, pointed: Pointed, limits: BodyLimits) -> tuple[list[str], list[Any], int]:
    """Names and arrays of the top-level columns, the record batches joined, and the number of rows."""
    sums = walk(body, limits)
    try:
        options = pa.ipc.IpcReadOptions(use_threads=False)
        reader = pa.ipc.open_stream(pa.py_buffer(body), options=options)
        names = [str(name) for name in reader.schema.names]
        _check_schema(reader.schema, pointed, limits, sums)
        batches = list(reader)
        for batch in batches:
            batch.validate(full=True)
        count = sum(batch.num_rows for batch in batches)
        if count != sums.rows or len(batches) != sums.batches:
            refused("its messages hold other numbers of rows than they say")
        return names, [_column([batch.column(number) for batch in batches]) for number in range(len(names))], count
    except (pa.ArrowException, OSError, UnicodeDecodeError, OverflowError) as error:
        refused(str(error))


def _column(chunks: list[Any]) -> Any:
    """The chunks of a column as one array."""
    if len(chunks) == 1:
        return chunks[0]
    if chunks and pa.types.is_dictionary(chunks[0].type):
        # Indices of 8 bits may be too few for the dictionaries of all batches together.
        wide = pa.dictionary(pa.int32(), chunks[0].type.value_type)
        chunks = [chunk.cast(wide) for chunk in chunks]
    return pa.concat_arrays(chunks) if chunks else None


def _check_schema(schema: Any, pointed: Pointed, limits: BodyLimits, sums: Sums) -> None:
    """Refuse columns that cannot be written or read here, by name. Raises BodyError."""
    kinds: dict[Path, Any] = {}
    for path, kind in each_type(schema):
        if len(kinds) >= COLUMNS_AT_MOST:
            _refuse_column(path, f"is one of more than {COLUMNS_AT_MOST:,} columns")
        if path in kinds:
            _refuse_column(path, "stands there twice")
        if not is_taken(kind):
            _refuse_column(path, f"is {_named(kind)}, which is not taken here: send {TAKEN}")
        if len(path) + bool(pa.types.is_struct(kind)) > limits.nesting_at_most:
            _refuse_column(path, f"is nested deeper than {limits.nesting_at_most} levels")
        kinds[path] = kind
    # A schema alone claims nothing; with batches its columns count for each of them.
    if len(kinds) * max(1, sums.batches) > PARTS_AT_MOST:
        raise BodyError(413, "Content Too Large", f"it has {sums.batches:,} record batches of {len(kinds)} columns: "
                        "send fewer and larger ones")  # fmt: skip
    for role, tokens in _roles(pointed).items():
        kind = kinds.get(tokens)
        if kind is None:
            _refuse_column(tokens, f"is where this feed has its {role}, and there is no such column")
        _check_role(role, tokens, kind, pointed.unit)


def _check_role(role: str, path: Path, kind: Any, unit: Unit) -> None:
    if role != "time":
        if not is_name(kind) and not pa.types.is_null(kind):
            _refuse_column(path, f"is {_named(kind)}, and the {role} of this feed is a string or an integer")
        return
    is_other = is_text(kind) if unit == "rfc3339" else bool(pa.types.is_integer(kind))
    if not pa.types.is_timestamp(kind) and not is_other and not pa.types.is_null(kind):
        other = "RFC 3339 strings" if unit == "rfc3339" else f"integers of {unit} since 1970"
        _refuse_column(path, f"is {_named(kind)}, and the time of this feed is a timestamp or {other}")


def _named(kind: Any) -> str:
    return " ".join(str(kind).split())[:60]


def _refuse_column(path: Path, why: str) -> None:
    name = "/".join(("", *path))[:80]
    text = "".join(each if each.isprintable() else "?" for each in f"the column {name} {why}")
    raise BodyError(422, "Unprocessable Content", text)


def _roles(pointed: Pointed) -> dict[str, Tokens]:
    found = {"time": pointed.time, "source": pointed.source, "id": pointed.id}
    return {role: tokens for role, tokens in found.items() if tokens is not None}


def _at(names: list[str], columns: list[Any], path: Path) -> Any:
    """The column at a path; null wherever a struct around it is null."""
    column = columns[names.index(path[0])]
    for name in path[1:]:
        column = column.flatten()[column.type.get_field_index(name)]
    return column


def _plain(column: Any, room: Room) -> Any:
    """The column with its texts as plain strings: few kernels know views."""
    if pa.types.is_dictionary(column.type):
        return pa.DictionaryArray.from_arrays(column.indices, plain_text(column.dictionary, room))
    return plain_text(column, room) if is_text(column.type) else column


# --- rows as lines -----------------------------------------------------------------------------------------------


def _lines_of(text: Any) -> Lines:
    """The lines of a string array, without a copy."""
    offsets = offsets_of(text).astype(np.int64)
    offsets -= offsets[0]
    payload: Any = characters_of(text).data
    return Lines(payload, offsets[:-1], offsets[1:] - 1, is_regular=True)


def _faults(lines: Lines, unheld: list[Unheld], limits: BodyLimits) -> tuple[tuple[Fault, ...], Bools]:
    """The rows that JSON cannot hold as faults, the first column that is to blame named; and which rows stay."""
    keep = np.ones(len(lines.ends), np.bool_)
    blamed: dict[int, Unheld] = {}
    for each in unheld:
        rows = np.flatnonzero(each.rows & keep)
        keep[rows] = False
        # More than are allowed refuse the body anyway: one more is enough to tell.
        room = max(0, limits.faults_at_most + 1 - len(blamed))
        blamed |= dict.fromkeys(rows[:room].tolist(), each)
    faults = []
    for row, each in sorted(blamed.items()):
        line = bytes(lines.payload[lines.starts[row] : lines.ends[row]])
        faults.append(Fault(row + 1, each.reason, each.why[:200], line[: limits.event_bytes_at_most]))
    return tuple(faults), keep


def _write_time(writer: Writer, column: Any, pointed: Pointed) -> None:
    """The text of a time column of timestamps: as this feed has its times, so that a line is an event of the feed."""
    unit, name = column.type.unit, shown("/".join(("", *pointed.time)), 80)
    integers, valid = values_of(column)
    if pointed.unit == "rfc3339":
        text, outside = instants(column)
        if outside is not None:
            writer.unheld.append(Unheld(outside, "time_out_of_range", f"{name} lies outside years 0 to 9999"))
        writer.replaced[pointed.time] = text, True
        return
    times, beyond = from_unit_column(integers, unit)
    outside = np.zeros(len(column), np.bool_) if beyond is None else beyond & valid
    factor = UNIT_NS[pointed.unit]
    finer = (times % factor != 0) & valid & ~outside
    for rows, reason, why in (
        (outside, "time_out_of_range", f"{name}: int64 nanoseconds cannot hold it"),
        (finer, "time_invalid", f"{name} is finer than {pointed.unit}, the unit of this feed"),
    ):
        if rows.any():
            writer.unheld.append(Unheld(rows, reason, why))
    text = pc.cast(pa.array(times // factor, mask=None if valid.all() else ~valid), pa.string())
    if outside.any() or finer.any():
        exact = pc.binary_join_element_wise('"', pc.cast(pa.array(integers), pa.string()), f' {unit}"', "")
        text = pc.if_else(pa.array(outside | finer), exact, text)
    writer.replaced[pointed.time] = text, False


# --- columns of the feed -----------------------------------------------------------------------------------------


def times_of(column: Any, unit: Unit) -> tuple[Times, Bools]:
    """Times in ns, and the rows that are none for certain or perhaps: their lines tell."""
    if pa.types.is_null(column.type):
        return np.zeros(len(column), np.int64), np.ones(len(column), np.bool_)
    if is_text(column.type):
        return _parsed(column)
    integers, valid = values_of(column)
    bad = ~valid
    if pa.types.is_uint64(column.type):
        bad |= integers < 0
    times, outside = from_unit_column(integers, column.type.unit if pa.types.is_timestamp(column.type) else unit)
    return times, bad if outside is None else bad | outside


def _parsed(column: Any) -> tuple[Times, Bools]:
    """RFC 3339 texts, those of one length together."""
    text = pc.fill_null(column, "")
    offsets, characters = offsets_of(text), characters_of(text)
    offsets = offsets - offsets[0]
    lengths = np.diff(offsets)
    times, bad = np.zeros(len(text), np.int64), np.ones(len(text), np.bool_)
    for length in np.unique(lengths).tolist():
        if 20 <= length <= 35:
            rows = np.flatnonzero(lengths == length)
            table = np.zeros((len(rows), length + 1), np.uint8)
            table[:, :length] = characters[offsets[rows][:, None] + np.arange(length)]
            times[rows], bad[rows] = parse_rfc3339_fixed(table)
    return times, bad


def sources_of(column: Any, table: Mapping[str, int]) -> tuple[NDArray[np.uint32], list[str], Bools]:
    """As values.source_column, by columns: numbers, new names in order of first appearance, rows that are no source."""
    encoded = _encoded(column)
    codes, valid = values_of(encoded.indices)
    codes = np.where(valid, codes, 0) if encoded.null_count else codes
    if len(encoded.dictionary) > len(codes):  # of a dictionary that others use too, only what these rows use
        used, codes = np.unique(codes, return_inverse=True)
        encoded = pa.DictionaryArray.from_arrays(pa.array(codes), encoded.dictionary.take(pa.array(used)))
    names = encoded.dictionary.to_pylist() or [""]
    sound = np.array([name is not None and is_source(name) for name in names])
    bad = ~valid | ~sound[codes]
    # The row at which each name is first seen: written from behind, so that the first one stays.
    first = np.full(len(names), len(codes), np.int64)
    good = np.flatnonzero(~bad)[::-1]
    first[codes[good]] = good
    numbers = np.zeros(len(names), np.uint32)
    new: dict[str, int] = {}
    for code in np.argsort(first, kind="stable").tolist():
        if first[code] < len(codes):
            name = names[code]
            number = table.get(name)
            numbers[code] = new.setdefault(name, len(table) + len(new)) if number is None else number
    return numbers[codes], list(new), bad


def _encoded(column: Any) -> Any:
    if pa.types.is_null(column.type):
        column = column.cast(pa.string())
    if pa.types.is_dictionary(column.type):
        return column
    if pa.types.is_integer(column.type):
        encoded = pc.dictionary_encode(column)
        return pa.DictionaryArray.from_arrays(encoded.indices, pc.cast(encoded.dictionary, pa.string()))
    return pc.dictionary_encode(column)


def texts_of(column: Any) -> tuple[list[str], Bools]:
    """Ids or sources as texts ("" for null), and the rows that are no id."""
    if pa.types.is_dictionary(column.type):
        column = column.dictionary_decode()
    text = pc.fill_null(pc.cast(column, pa.string()), "")
    lengths = np.asarray(pc.binary_length(text))
    return text.to_pylist(), (lengths < 1) | (lengths > ID_BYTES_AT_MOST)

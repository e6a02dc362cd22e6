"""The scan of JSON lines that numba compiles: it proves every byte of a body and fills the columns on the way.

Here live the two values that the scan takes, the members of a line and the lines. It is a prover, not a judge: whatever
it does not know (an escape in a key or a name, two times or sources, a fault of any kind) ends it with -1, and the body
goes the other way (`decode`), which names faults. So it may refuse what is sound, and must never take what the other
way would not. `compiled` imports this module, which takes seconds and memory. Bounds: see `compiled_text`.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from . import compiled_marks as near
from . import compiled_text as text
from .compiled_text import COMMA, QUOTE, ZERO, byte_at, compiled, half_at, inlined, item_at, outermost, word_at

Int64s = NDArray[np.int64]
Keys = tuple[int, int, int, int]  # address and length of the time's and of the source's name (length -1: none)
# Addresses: times (int64), lengths (uint32), numbers of sources (uint32) of the rows; see `scan`.
Columns = tuple[int, int, int]
# Addresses: place and length (int64[k, 2]) of each name, 1 + its number by slot (uint32, 0: free); names and slots that
# there is room for; where it stands how many names there are (int64).
Names = tuple[int, int, int, int, int]

TEXT_CHECKSUM = 2552056802  # CRC-32 of compiled_text.py and compiled_marks.py: changes this file when those change

LEVELS_AT_MOST = text.LEVELS_AT_MOST
# What the scan looks for, and in `seen` what a line has had.
TIME, SOURCE = 1, 2
TEXT_BITS = 6  # a time that is a text: its place and, in the lowest bits, its length
_TEXT_AT_MOST = 2**TEXT_BITS - 1
_NAME_AT_MOST = 256  # values.SOURCE_BYTES_AT_MOST: the other way judges longer ones
_PROBES_AT_MOST = 32  # names that were made to collide shall not cost more than this
_DIGITS_AT_MOST = 19
_REMEMBERED = 32  # members of a line whose keys are remembered
# What `scan` works with: three numbers for each of these, how many they are, how many names there are, the marks.
WORK_ITEMS = 3 * _REMEMBERED + 2 + near.MARKS_AT_MOST
_INT64_MAX = 2**63 - 1
_U = np.uint64
_SCATTER = _U(0x9E3779B97F4A7C15)


# --- the time ------------------------------------------------------------------------------------------------------


@inlined
def _eight_digits(digits: _U) -> _U:
    """The number of eight digits 0 to 9 in a word: neighbours are joined to pairs, then all pairs by two products."""
    pairs = digits * _U(10) + (digits >> _U(8))
    mask = _U(0x000000FF000000FF)
    upper, lower = (pairs & mask) * _U(0x000F424000000064), ((pairs >> _U(16)) & mask) * _U(0x0000271000000001)
    return (upper + lower) >> _U(32)


@inlined
def _integer(at: int, end: int) -> _U:
    """The number of at most 19 digits."""
    value = _U(0)
    while at + 8 <= end:
        value = value * _U(100_000_000) + _eight_digits(word_at(at) ^ text.ZEROS)
        at += 8
    while at < end:
        value = value * _U(10) + _U(byte_at(at) - 48)
        at += 1
    return value


@inlined
def _is_time(at: int, end: int, times: int, row: int) -> bool:
    """Whether a time of 9 to 19 digits stands there and nothing else; for lines with marks."""
    length = end - at
    if not 8 < length <= _DIGITS_AT_MOST or not near.are_digits(at, length) or byte_at(at) == ZERO:
        return False
    first, last = word_at(at) ^ text.ZEROS, _eight_digits(word_at(end - 8) ^ text.ZEROS)
    if length <= 16:  # what is no part of the first digits is shifted out, noughts come in before them
        value = _eight_digits(first << _U(8 * (16 - length))) * _U(100_000_000) + last
    else:
        middle = _eight_digits(word_at(end - 16) ^ text.ZEROS)
        value = (_eight_digits(first << _U(8 * (24 - length))) * _U(100_000_000) + middle) * _U(100_000_000) + last
    text.put_item(times + 8 * row, np.int64(value))
    return bool(value <= _U(_INT64_MAX))


@inlined
def _time_end(stop: int, at: int, as_text: bool, times: int, row: int) -> int:
    start = at + 1
    if as_text:
        end = text.plain_end(stop, start) if byte_at(at) == QUOTE else -1
        if end < 0 or end - start > _TEXT_AT_MOST:
            return -1
        text.put_item(times + 8 * row, start << TEXT_BITS | end - start)
        return end + 1
    if byte_at(at) != text.MINUS:
        start = at
    end = text.digits_end(stop, start)
    if not 1 <= end - start <= _DIGITS_AT_MOST or (byte_at(start) == ZERO and end > start + 1):
        return -1
    value = _integer(start, end)
    if value > _U(_INT64_MAX):  # -2**63 too: left to the other way
        return -1
    text.put_item(times + 8 * row, np.int64(value) if start == at else -np.int64(value))
    return end


# --- the source ----------------------------------------------------------------------------------------------------


@inlined
def _slot(stop: int, at: int, length: int) -> np.int64:
    """Where to look for a name in the table: any mixing will do, a bad one only costs probes."""
    mixed = text.short(stop, at, length) if length < 8 else word_at(at + length - 8)
    while length > 8:
        mixed = (mixed * _SCATTER ^ word_at(at)) * _SCATTER
        mixed ^= mixed >> _U(29)
        at, length = at + 8, length - 8
    mixed *= _SCATTER
    return np.int64(((mixed ^ (mixed >> _U(32))) * _SCATTER) >> _U(40))


@inlined
def _number_of(stop: int, at: int, length: int, names: Names) -> int:
    """The number of a name, in order of first appearance; -1 where there is no room for a new one."""
    places, table, room, slots, counted = names
    slot: Any = _slot(stop, at, length)
    for _ in range(_PROBES_AT_MOST):
        slot &= slots - 1
        number = half_at(table + 4 * slot) - 1
        if number < 0:
            count = item_at(counted)
            if count >= room:
                return -1
            text.put_half(table + 4 * slot, count + 1)
            text.put_item(places + 16 * count, at)
            text.put_item(places + 16 * count + 8, length)
            text.put_item(counted, count + 1)
            return count
        name = places + 16 * number
        if item_at(name + 8) == length and text.equal(stop, at, item_at(name), length):
            return number
        slot += 1
    return -1


@inlined
def _is_source(stop: int, at: int, end: int, sources: int, row: int, names: Names) -> bool:
    """Whether a name of fewer than 32 bytes stands there and nothing else; for lines with marks, so without escapes."""
    length = near.name_length(at + 1)
    if byte_at(at) != QUOTE or not 0 < length < near.NEAR or at + length + 2 != end:
        return False
    number = _number_of(stop, at + 1, length, names)
    text.put_half(sources + 4 * row, number)
    return number >= 0


@inlined
def _source_end(stop: int, at: int, sources: int, row: int, names: Names) -> int:
    start = at + 1
    end = text.plain_end(stop, start) if byte_at(at) == QUOTE else -1
    if not start < end <= start + _NAME_AT_MOST:
        return -1
    number = _number_of(stop, start, end - start, names)
    text.put_half(sources + 4 * row, number)
    return end + 1 if number >= 0 else -1


# --- members -------------------------------------------------------------------------------------------------------


@compiled
def _is_key(start: int, end: int, key: int, length: int) -> bool:
    if end - start != length:
        return False
    at = 0
    while at < length and byte_at(start + at) == byte_at(key + at):
        at += 1
    return at == length


@compiled
def _key(stop: int, at: int, keys: Keys) -> tuple[int, int]:
    """Behind a member's key, with the blanks around it, and whose it is: TIME, SOURCE or 0."""
    start = text.blanks_end(at)
    end = text.key_end(stop, start)
    name_end = text.plain_end(stop, start + 1) if end >= 0 else -1
    if name_end < 0:  # an escaped key may be one of ours
        return -1, 0
    if _is_key(start + 1, name_end, keys[0], keys[1]):
        return end, TIME
    return end, SOURCE if _is_key(start + 1, name_end, keys[2], keys[3]) else 0


@compiled
def _new_key(stop: int, at: int, member: int, keys: Keys, work: int) -> tuple[int, int]:
    """What `_key` answers; and it is remembered as that of this member."""
    end, role = _key(stop, at, keys)
    if end >= 0 and member < _REMEMBERED:
        text.put_item(work + 24 * member, at)
        text.put_item(work + 24 * member + 8, end - at)
        text.put_item(work + 24 * member + 16, role)
        known = work + 24 * _REMEMBERED
        text.put_item(known, max(item_at(known), member + 1))
    return end, role


@inlined
def _is_known(stop: int, at: int, place: int, length: int, mark: int) -> bool:
    """Whether the key of the last line stands here, blanks and all."""
    if mark and length <= near.NEAR:
        return near.starts_alike(at, place, length)
    return at + length <= stop and text.equal(stop, at, place, length)


@inlined
def _is_at_mark(
    stop: int, at: int, mark: int, role: int, as_text: bool, row: int, columns: Columns, names: Names
) -> bool:  # fmt: skip
    """Whether the value ends at the mark, for the usual ones; then its column has it."""
    if role == 0:
        return near.is_short_number(at, mark)
    if role == TIME:
        return not as_text and _is_time(at, mark, columns[0], row)
    return _is_source(stop, at, mark, columns[2], row, names)


@inlined
def _value_end(
    stop: int, at: int, role: int, as_text: bool, levels: int, row: int, columns: Columns, names: Names
) -> int:  # fmt: skip
    if role == TIME:
        return _time_end(stop, at, as_text, columns[0], row)
    if role == SOURCE:
        return _source_end(stop, at, columns[2], row, names)
    return text.any_end(stop, at, levels)


@inlined
def _members_end(
    stop: int, at: int, keys: Keys, as_text: bool, levels: int, row: int, columns: Columns, names: Names, work: int
) -> int:  # fmt: skip
    """Behind the last member of the line from `at` on, where its closing bracket must stand."""
    marks = work + 8 * (3 * _REMEMBERED + 2)
    marked, next_mark = near.marks_of(stop, at, marks), 0
    wanted, seen, member = TIME | SOURCE if keys[3] >= 0 else TIME, 0, 0
    known = item_at(work + 24 * _REMEMBERED)
    at += 1
    while True:
        mark = item_at(marks + 8 * next_mark) if next_mark < marked else 0
        # Lines are alike: a key that is the bytes of the last line's, blanks and all, was read already.
        remembered = work + 24 * member
        length = item_at(remembered + 8) if member < known else 0
        if length and _is_known(stop, at, item_at(remembered), length, mark):
            role, at = item_at(remembered + 16), at + length
        else:
            at, role = _new_key(stop, at, member, keys, work)
        if at < 0 or seen & role:  # repeated
            return -1
        seen |= role
        if mark and _is_at_mark(stop, at, mark, role, as_text, row, columns, names):
            at = mark
        else:
            at = _value_end(stop, at, role, as_text, levels, row, columns, names)
            if at < 0:
                return -1
            at = text.blanks_end(at)
            while next_mark < marked and item_at(marks + 8 * next_mark) < at:  # those of nested values
                next_mark += 1
        if byte_at(at) != COMMA:
            return at if seen == wanted else -1
        at, member, next_mark = at + 1, member + 1, next_mark + 1


# --- lines ---------------------------------------------------------------------------------------------------------


@outermost
def survey(begin: int, stop: int) -> tuple[int, bool]:
    """How many line feeds a payload has, and whether it is ASCII. Reads it into the cache, too."""
    return near.surveyed(begin, stop)


@outermost
def scan(
    begin: int, stop: int, rows: int, keys: Keys, as_text: bool, levels: int,
    times: Int64s, lengths: NDArray[np.uint32], sources: NDArray[np.uint32],
    names: Int64s, table: NDArray[np.uint32], work: Int64s,
) -> int:  # fmt: skip
    """Fill the columns of all lines and return how many names there are; or -1: not proven.

    `begin` and `stop` are the addresses of a payload that is UTF-8 and ends with a line feed, `rows` how many it has.
    `levels` is how deep a member's value may be. `times` get integers, or where times are texts their places (see
    TEXT_BITS); `lengths` get bytes without the line feed; `sources` get numbers of names, `names` place and length of
    each (int64[k, 2]). `table` is full of 0, a power of two of them and more than k. `work` has WORK_ITEMS.
    """
    columns = (times.ctypes.data, lengths.ctypes.data, sources.ctypes.data)
    known = work.ctypes.data + 24 * _REMEMBERED
    found = (names.ctypes.data, table.ctypes.data, len(names), len(table), known + 8)
    text.put_item(known, 0)
    text.put_item(known + 8, 0)
    start = begin
    for row in range(rows):
        if byte_at(start) != text.BRACE:
            return -1
        at = _members_end(stop, start, keys, as_text, levels, row, columns, found, work.ctypes.data)
        if at < 0 or byte_at(at) != text.BRACE_END or byte_at(at + 1) != text.LINE_FEED:
            return -1
        text.put_half(columns[1] + 4 * row, at + 1 - start)
        start = at + 2
    return item_at(known + 8)

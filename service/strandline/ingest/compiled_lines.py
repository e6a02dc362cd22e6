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

from . import compiled_text as text
from .compiled_text import COMMA, MINUS, QUOTE, ZERO, byte_at, compiled, inlined, outermost, plain_end, word_at

Int64s = NDArray[np.int64]
Int32s = NDArray[np.int32]
Keys = tuple[int, int, int, int]  # address and length of the time's and of the source's name (length -1: none)

TEXT_CHECKSUM = 1838338771  # CRC-32 of compiled_text.py: changes this file when that one changes

LEVELS_AT_MOST = text.LEVELS_AT_MOST
# What the scan looks for, and in `seen` what a line has had.
TIME, SOURCE = 1, 2
TEXT_BITS = 6  # a time that is a text: its place and, in the lowest bits, its length
_TEXT_AT_MOST = 2**TEXT_BITS - 1
_NAME_AT_MOST = 256  # values.SOURCE_BYTES_AT_MOST: the other way judges longer ones
_PROBES_AT_MOST = 32  # names that were made to collide shall not cost more than this
_REMEMBERED = 32  # members of a line whose keys are remembered
_INT64_MAX = 2**63 - 1
_U = np.uint64
_SCATTER = _U(0x9E3779B97F4A7C15)


# --- the time and the source ---------------------------------------------------------------------------------------


@inlined
def _eight_digits(word: _U) -> _U:
    """The number of eight digits in a word: neighbours are joined to pairs, then all four pairs by two products."""
    pairs = (word ^ text.ZEROS) * _U(10) + ((word ^ text.ZEROS) >> _U(8))
    mask = _U(0x000000FF000000FF)
    upper, lower = (pairs & mask) * _U(0x000F424000000064), ((pairs >> _U(16)) & mask) * _U(0x0000271000000001)
    return (upper + lower) >> _U(32)


@inlined
def _integer(stop: int, at: int, end: int) -> _U:
    """The number of at most 19 digits."""
    value = _U(0)
    while at + 8 <= end:
        value = value * _U(100_000_000) + _eight_digits(word_at(at))
        at += 8
    while at < end:
        value = value * _U(10) + _U(byte_at(at) - 48)
        at += 1
    return value


@inlined
def _time_end(stop: int, at: int, as_text: bool, times: Int64s, row: int) -> int:
    start = at + 1
    if as_text:
        end = plain_end(stop, start) if byte_at(at) == QUOTE else -1
        if end < 0 or end - start > _TEXT_AT_MOST:
            return -1
        times[row] = start << TEXT_BITS | end - start
        return end + 1
    if byte_at(at) != MINUS:
        start = at
    end = text.digits_end(stop, start)
    if not 1 <= end - start <= 19 or (byte_at(start) == ZERO and end > start + 1):
        return -1
    value = _integer(stop, start, end)
    if value > _U(_INT64_MAX):  # -2**63 too: left to the other way
        return -1
    times[row] = np.int64(value) if start == at else -np.int64(value)
    return end


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
def _number_of(stop: int, at: int, length: int, names: Int64s, count: int, table: Int32s) -> int:
    """The number of a name, in order of first appearance; `count` for a new one, -1 where there is no room for it."""
    slot: Any = _slot(stop, at, length)
    for _ in range(_PROBES_AT_MOST):
        slot &= len(table) - 1
        number: int = table[slot]
        if number < 0:
            if count >= len(names):
                return -1
            table[slot] = count
            names[count, 0], names[count, 1] = at, length
            return count
        if names[number, 1] == length and text.equal(stop, at, names[number, 0], length):
            return number
        slot += 1
    return -1


# --- lines ---------------------------------------------------------------------------------------------------------


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
    name_end = plain_end(stop, start + 1) if end >= 0 else -1
    if name_end < 0:  # an escaped key may be one of ours
        return -1, 0
    if _is_key(start + 1, name_end, keys[0], keys[1]):
        return end, TIME
    return end, SOURCE if _is_key(start + 1, name_end, keys[2], keys[3]) else 0


@inlined
def _source_end(
    stop: int, at: int, sources: Int32s, row: int, names: Int64s, count: int, table: Int32s
) -> int:  # fmt: skip
    start = at + 1
    end = plain_end(stop, start) if byte_at(at) == QUOTE else -1
    if not start < end <= start + _NAME_AT_MOST:
        return -1
    sources[row] = _number_of(stop, start, end - start, names, count, table)
    return end + 1 if sources[row] >= 0 else -1


@outermost
def scan(
    begin: int, starts: Int64s, ends: Int64s, keys: Keys, as_text: bool, levels: int,
    times: Int64s, sources: Int32s, names: Int64s, table: Int32s,
) -> int:  # fmt: skip
    """Fill the columns of all lines and return how many names there are; or -1: not proven.

    `begin` is the address of the payload: UTF-8, line i from starts[i] to ends[i], where a line feed stands; each
    begins with `{`. `levels` is how deep a member's value may be. `times` get integers, or where times are texts their
    places (see TEXT_BITS); `sources` get numbers of names, `names` place and length of each (int64[k, 2]). `table` is
    full of -1, a power of two of them and more than k.
    """
    places, lengths = np.zeros(_REMEMBERED, np.int64), np.zeros(_REMEMBERED, np.int64)
    roles = np.zeros(_REMEMBERED, np.int64)
    remembered = count = 0
    wanted = TIME | SOURCE if keys[3] >= 0 else TIME
    stop = begin + ends[-1] + 1
    for row in range(len(starts)):
        at, seen, member = begin + starts[row] + 1, 0, 0
        while True:
            # Lines are alike: a key that is the bytes of the last line's, blanks and all, was read already (8 ns less).
            length = lengths[member] if member < remembered else 0
            if length and at + length <= stop and text.equal(stop, at, places[member], length):
                role, at = roles[member], at + length
            else:
                start = at
                at, role = _key(stop, at, keys)
                if at >= 0 and member < _REMEMBERED:
                    places[member], lengths[member], roles[member] = start, at - start, role
                    remembered = max(remembered, member + 1)
            if at < 0 or seen & role:  # repeated
                return -1
            seen |= role
            if role == TIME:
                at = _time_end(stop, at, as_text, times, row)
            elif role == SOURCE:
                at = _source_end(stop, at, sources, row, names, count, table)
                count = max(count, sources[row] + 1)
            else:
                at = text.any_end(stop, at, levels)
            if at < 0:
                return -1
            at = text.blanks_end(at)
            if byte_at(at) != COMMA:
                break
            at, member = at + 1, member + 1
        if byte_at(at) != text.BRACE_END or at + 1 != begin + ends[row] or seen != wanted:
            return -1
    return count

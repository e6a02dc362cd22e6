"""Where the members of a line end, found 64 bytes at a time: with it the scan of `compiled_lines` runs ahead.

Here live masks over vectors of bytes, the marks made of them, and what is told of a value between two places. Without
marks each value must be read to its end before it is known where the next one begins, and the processor waits some 20
cycles for that. The parity of quotation marks as a bitmap is published (Langdale & Lemire, VLDB Journal 28, 2019).
Marks prove nothing: the scan looks at all that stands between two, and reads a line without marks too, only slower.

LLVM makes the masks of whatever vectors a machine has; no instruction is named here. Bounds: whoever has marks of a
line may read BEHIND bytes from each place in it (`marks_of` has asked for room). numba's cache: see `compiled_text`.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, cast

import numpy as np
from llvmlite import ir
from numba import types
from numba.extending import intrinsic

from .compiled_text import COMMA, LINE_FEED, MINUS, QUOTE, ZERO, byte_at, compiled, inlined, put_item

MARKS_AT_MOST = 256  # of a line; one with more is read without
NEAR = 32  # bytes that are compared or searched at once
BEHIND = 64
_BLOCK = 64  # bytes of a mask
_AT_ONCE = 6  # marks written whatever there is: spares the processor a guess at how many
_NUMBER_BYTES = 16
_BACKSLASH, _SPACE, _DOT = 0x5C, 0x20, 0x2E
_U = np.uint64
_NONE, _BIT = _U(0), _U(1)

# --- masks: a bit for each byte, the lowest for the first ------------------------------------------------------------


def _vector(builder: Any, address: Any, size: int) -> Any:
    kind = ir.PointerType(ir.VectorType(ir.IntType(8), size))
    return builder.load(builder.inttoptr(address, kind), align=1)


def _each(size: int, byte: int) -> Any:
    return ir.Constant(ir.VectorType(ir.IntType(8), size), [byte] * size)


def _mask(builder: Any, flags: Any, size: int) -> Any:
    bits = builder.bitcast(flags, ir.IntType(size))
    return bits if size == 64 else builder.zext(bits, ir.IntType(64))


def _compared(size: int, operator: str, byte: int, less: int = 0) -> Callable[[int], _U]:
    """Which of so many bytes at an address, something taken off each, compare so with a byte; all unsigned."""

    def typed(_: Any, address: Any) -> Any:
        def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
            found = builder.sub(_vector(builder, arguments[0], size), _each(size, less))
            return _mask(builder, builder.icmp_unsigned(operator, found, _each(size, byte)), size)

        return types.uint64(types.int64), generate

    return cast(Callable[[int], _U], intrinsic(typed))


def _differing(_: Any, one: Any, other: Any) -> Any:
    def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        left, right = (_vector(builder, address, NEAR) for address in arguments)
        return _mask(builder, builder.icmp_unsigned("!=", left, right), NEAR)

    return types.uint64(types.int64, types.int64), generate


def _lowest(_: Any, mask: Any) -> Any:
    def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        return builder.cttz(arguments[0], ir.Constant(ir.IntType(1), 0))

    return types.int64(types.uint64), generate


def _counted(_: Any, mask: Any) -> Any:
    def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        return builder.ctpop(arguments[0])

    return types.int64(types.uint64), generate


_line_feeds, _commas = _compared(_BLOCK, "==", LINE_FEED), _compared(_BLOCK, "==", COMMA)
_quotes, _near_quotes = _compared(_BLOCK, "==", QUOTE), _compared(NEAR, "==", QUOTE)
_backslashes, _controls = _compared(_BLOCK, "==", _BACKSLASH), _compared(_BLOCK, "<", _SPACE)
_beyond_ascii = _compared(_BLOCK, ">=", 0x80)
_no_digits, _near_no_digits = _compared(_NUMBER_BYTES, ">", 9, ZERO), _compared(NEAR, ">", 9, ZERO)
_differences = cast(Callable[[int, int], _U], intrinsic(_differing))
_place = cast(Callable[[_U], int], intrinsic(_lowest))  # of the lowest bit that is set; 64 where none is
_bits = cast(Callable[[_U], int], intrinsic(_counted))


# --- what is made of them --------------------------------------------------------------------------------------------


@inlined
def _parity(mask: _U) -> _U:
    """Each bit: whether an odd number of bits is set up to it."""
    mask ^= mask << _U(1)
    mask ^= mask << _U(2)
    mask ^= mask << _U(4)
    mask ^= mask << _U(8)
    mask ^= mask << _U(16)
    return mask ^ (mask << _U(32))


@inlined
def marks_of(stop: int, at: int, marks: int) -> int:
    """Places at which the members of the line from `at` on end: its commas outside strings, and its last byte.

    How many they are; 0 where they cannot be told: an escape or a control byte, a string without end, too many members,
    or fewer than BEHIND bytes up to `stop` behind its last block. Commas of nested values are among them.
    """
    found, inside = 0, _NONE
    while at + (_BLOCK + BEHIND) <= stop and found < MARKS_AT_MOST - _BLOCK:
        feeds, commas, strange = _line_feeds(at), _commas(at), _backslashes(at) | _controls(at)
        strings = _parity(_quotes(at)) ^ inside
        line = feeds ^ (feeds - _BIT)  # the bits up to the line feed, which is among them; else all
        commas &= ~strings & line
        count = _bits(commas)
        for number in range(_AT_ONCE):
            put_item(marks + 8 * (found + number), at + _place(commas))
            commas &= commas - _BIT
        for number in range(_AT_ONCE, count):
            put_item(marks + 8 * (found + number), at + _place(commas))
            commas &= commas - _BIT
        found += count
        feed = feeds & (_NONE - feeds)
        if strange & line != feed or strings & feed != _NONE:
            return 0
        if feed != _NONE:
            put_item(marks + 8 * found, at + _place(feed) - 1)
            return found + 1
        inside = _U(np.int64(strings) >> 63)
        at += _BLOCK
    return 0


@inlined
def _bits_up_to(count: int) -> _U:
    """The bits of so many bytes, fewer than 64."""
    return (_BIT << _U(count)) - _BIT


@inlined
def starts_alike(one: int, other: int, length: int) -> bool:
    """Whether so many bytes, at most NEAR, are the same at two places."""
    return bool(_differences(one, other) & _bits_up_to(length) == _NONE)


@inlined
def are_digits(at: int, length: int) -> bool:
    """Whether so many bytes, at most NEAR, are digits."""
    return bool(_near_no_digits(at) & _bits_up_to(length) == _NONE)


@inlined
def name_length(at: int) -> int:
    """How many bytes stand before the next quotation mark, where they are fewer than NEAR; else 64."""
    return _place(_near_quotes(at))


@inlined
def is_short_number(at: int, end: int) -> bool:
    """Whether a number of less than 16 characters and without an exponent stands there, and nothing else.

    Branches only for the length: where a dot is cannot be guessed, and a wrong guess costs as much as all of this.
    """
    length = end - at
    if _U(length - 1) >= _U(_NUMBER_BYTES - 1):
        return False
    sign = int(byte_at(at) == MINUS)
    others = (_no_digits(at) & _bits_up_to(length) | (_BIT << _U(length))) >> _U(sign)  # and the end
    whole = _place(others)  # digits before the dot, or all
    rest = others & (others - _BIT)
    is_whole = (whole != 0) & ((whole == 1) | (byte_at(at + sign) != ZERO))
    has_dot = (byte_at(at + sign + whole) == _DOT) & (rest & (rest - _BIT) == _NONE)
    has_digits = (rest >> _U(whole + 1)) & _BIT == _NONE
    return bool(is_whole & ((rest == _NONE) | (has_dot & has_digits)))


@compiled
def surveyed(begin: int, stop: int) -> tuple[int, bool]:
    """How many line feeds there are, and whether all bytes are ASCII."""
    count, beyond, at = 0, _NONE, begin
    while at + _BLOCK <= stop:
        count += _bits(_line_feeds(at))
        beyond |= _beyond_ascii(at)
        at += _BLOCK
    while at < stop:
        count += int(byte_at(at) == LINE_FEED)
        beyond |= _U(byte_at(at) >= 0x80)
        at += 1
    return count, beyond == _NONE

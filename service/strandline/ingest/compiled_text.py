"""JSON text (RFC 8259) for the scan of `compiled_lines`: strings, numbers, values, in functions that numba compiles.

Here live the grammar, what it reads with, and how a function is compiled. Which members an event must have is not
known here. Places are addresses: an array handed to a function is seven numbers and a count of its users, which cost
20 ns a member, and half of all time where a function is set into its caller (measured). Functions named `..._end`
return the place behind what they took, or -1 where it is not what they take; `stop` is the place behind the payload's
last byte.

Nothing here checks bounds, so this holds it together: a payload ends with a line feed, and no rule takes a line feed.
So a byte may be read wherever the byte before it was taken; several only after asking for room. A test scans payloads
that end where memory ends.

numba keeps compiled code by the contents of the file that holds the outermost function (since 0.68; before by its time
and size), and would not notice a change here or in `compiled_marks`: so `compiled_lines` holds the checksum of both
files (a test compares them).
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, TypeVar, cast

import numpy as np
from llvmlite import ir
from numba import njit, types
from numba.extending import intrinsic

_F = TypeVar("_F", bound=Callable[..., Any])

QUOTE, COMMA, MINUS, ZERO, BRACE, BRACE_END, LINE_FEED = 0x22, 0x2C, 0x2D, 0x30, 0x7B, 0x7D, 0x0A
_BACKSLASH, _COLON, _PLUS, _DOT, _SLASH = 0x5C, 0x3A, 0x2B, 0x2E, 0x2F
_BRACKET_END, _SPACE, _TAB = 0x5D, 0x20, 0x09
LEVELS_AT_MOST = 63  # as many as `_nested_end` has bits for; what is deeper goes the other way
_U = np.uint64
_ONES, _HIGHS = _U(0x0101010101010101), _U(0x8080808080808080)
_QUOTES, _BACKSLASHES, _SPACES = _ONES * _U(QUOTE), _ONES * _U(_BACKSLASH), _ONES * _U(_SPACE)
ZEROS = _ONES * _U(ZERO)
_BEYOND_NINE = _ONES * _U(0x76)  # carries a byte of 10 and more into its high bit
_LOW = np.array([(1 << (8 * count)) - 1 for count in range(8)], np.uint64)  # masks of the first bytes of a word
_TRUE, _FALSE, _NULL = (_U(int.from_bytes(text, "little")) for text in (b"true", b"false", b"null"))


def compiled(function: _F) -> _F:
    """For what is called from compiled code."""
    return cast(_F, njit(nogil=True)(function))


def inlined(function: _F) -> _F:
    """For what is hot: set into its callers."""
    return cast(_F, njit(nogil=True, forceinline=True)(function))


def outermost(function: _F) -> _F:
    """For what is called from Python: kept on disk where numba finds a folder (NUMBA_CACHE_DIR), else made anew."""
    try:
        return cast(_F, njit(nogil=True, error_model="numpy", cache=True)(function))
    except RuntimeError:  # no folder can be written to
        return cast(_F, njit(nogil=True, error_model="numpy")(function))


# --- what the processor can do and numba has no name for -----------------------------------------------------------


def _loaded(bits: int, kind: Any = None) -> Callable[..., Any]:
    def typed(_: Any, address: Any) -> Any:
        def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
            pointer = builder.inttoptr(arguments[0], ir.PointerType(ir.IntType(bits)))
            value = builder.load(pointer, align=1)
            return value if bits == 64 else builder.zext(value, ir.IntType(64))

        return (kind or (types.uint64 if bits == 64 else types.int64))(types.int64), generate

    return typed


def _stored(bits: int) -> Callable[..., Any]:
    def typed(_: Any, address: Any, value: Any) -> Any:
        def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
            value = arguments[1] if bits == 64 else builder.trunc(arguments[1], ir.IntType(bits))
            builder.store(value, builder.inttoptr(arguments[0], ir.PointerType(ir.IntType(bits))), align=bits // 8)
            return context.get_dummy_value()

        return types.void(types.int64, types.int64), generate

    return typed


def _first_mark(_: Any, marks: Any) -> Any:
    def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        zeros = builder.cttz(arguments[0], ir.Constant(ir.IntType(1), 1))
        return builder.lshr(zeros, ir.Constant(ir.IntType(64), 3))

    return types.int64(types.uint64), generate


# A byte, a little-endian word of eight, half of one and a signed one, at an address; what stores the last two there;
# the first byte of a word whose high bit is set.
byte_at = cast(Callable[[int], int], intrinsic(_loaded(8)))
word_at = cast(Callable[[int], _U], intrinsic(_loaded(64)))
half_at = cast(Callable[[int], int], intrinsic(_loaded(32)))
item_at = cast(Callable[[int], int], intrinsic(_loaded(64, types.int64)))
put_item = cast(Callable[[int, Any], None], intrinsic(_stored(64)))
put_half = cast(Callable[[int, int], None], intrinsic(_stored(32)))
first_mark = cast(Callable[[_U], int], intrinsic(_first_mark))


# --- strings and blanks --------------------------------------------------------------------------------------------


@inlined
def plain_end(stop: int, at: int) -> int:
    """The place of the quotation mark that ends a string; -2 - place where a backslash or a control byte comes first.

    Of three marks in a word the lowest is always a true one: a borrow can only set bits above the first.
    """
    while at + 8 <= stop:
        word = word_at(at)
        quotes, backslashes = word ^ _QUOTES, word ^ _BACKSLASHES
        marks = ((quotes - _ONES) & ~quotes) | ((backslashes - _ONES) & ~backslashes) | ((word - _SPACES) & ~word)
        marks &= _HIGHS
        if marks != _U(0):
            at += first_mark(marks)
            return at if byte_at(at) == QUOTE else -2 - at
        at += 8
    while byte_at(at) != QUOTE:
        if byte_at(at) == _BACKSLASH or byte_at(at) < _SPACE:
            return -2 - at
        at += 1
    return at


@compiled
def string_end(stop: int, at: int) -> int:
    """Behind a string whose first character is at `at`, escapes allowed, but none of surrogates: see `decode`."""
    end = plain_end(stop, at)
    while end < 0:
        at = -2 - end
        if byte_at(at) != _BACKSLASH:
            return -1
        kind = byte_at(at + 1)
        if kind == 0x75:  # u
            for place in range(at + 2, at + 6):
                byte = byte_at(place)
                if not (0x30 <= byte <= 0x39 or 0x41 <= (byte & 0xDF) <= 0x46):
                    return -1
            if (byte_at(at + 2) & 0xDF) == 0x44 and byte_at(at + 3) > 0x37:  # D800 to DFFF
                return -1
            at += 6
        elif kind in (QUOTE, _BACKSLASH, _SLASH, 0x62, 0x66, 0x6E, 0x72, 0x74):  # b f n r t
            at += 2
        else:
            return -1
        end = plain_end(stop, at)
    return end + 1


@inlined
def blanks_end(at: int) -> int:
    """Behind spaces and tabs, which may be none."""
    while byte_at(at) == _SPACE or byte_at(at) == _TAB:
        at += 1
    return at


@inlined
def short(stop: int, at: int, length: int) -> _U:
    """At most seven bytes, all within the payload, as a word."""
    if at + 8 <= stop:
        return _U(word_at(at) & _LOW[length])
    word = _U(0)
    for place in range(at + length - 1, at - 1, -1):
        word = word << _U(8) | _U(byte_at(place))
    return word


@inlined
def equal(stop: int, one: int, other: int, length: int) -> bool:
    """Whether so many bytes are the same at two places, all within the payload."""
    if length < 8:
        return bool(short(stop, one, length) == short(stop, other, length))
    at = 0
    while at + 8 <= length:  # a range with a step would divide
        if word_at(one + at) != word_at(other + at):
            return False
        at += 8
    return bool(word_at(one + length - 8) == word_at(other + length - 8))


# --- numbers -------------------------------------------------------------------------------------------------------


@inlined
def _not_digits(word: _U) -> _U:
    """High bits of the bytes that are no digits."""
    digits = word ^ ZEROS
    return ((digits + _BEYOND_NINE) | digits) & _HIGHS


@inlined
def digits_end(stop: int, at: int) -> int:
    while at + 8 <= stop:
        marks = _not_digits(word_at(at))
        if marks != _U(0):
            return at + first_mark(marks)
        at += 8
    while 0x30 <= byte_at(at) <= 0x39:
        at += 1
    return at


@compiled
def _number_end(stop: int, at: int) -> int:
    if byte_at(at) == MINUS:
        at += 1
    start = at
    at = digits_end(stop, at)
    if at == start or (byte_at(start) == ZERO and at > start + 1):
        return -1
    if byte_at(at) == _DOT:
        start = at + 1
        at = digits_end(stop, start)
        if at == start:
            return -1
    if byte_at(at) in (0x65, 0x45):  # e E
        at += 1
        if byte_at(at) in (_PLUS, MINUS):
            at += 1
        start = at
        at = digits_end(stop, start)
        if at == start:
            return -1
    return at


@inlined
def _short_number_end(stop: int, at: int) -> int:
    """Behind a number of some 15 characters without sign and exponent that a comma or brace follows; or -1.

    The common case out of one word: 2 ns, where the rules one after the other take 10 (measured).
    """
    if at + 8 > stop:
        return -1
    word = word_at(at)
    marks = _not_digits(word)
    starts_with_zero = (word & _U(0xFF)) == _U(ZERO)
    if marks == _U(0):
        end = at if starts_with_zero else digits_end(stop, at + 8)
    else:
        end = at + first_mark(marks)
        if starts_with_zero and end > at + 1:
            return -1
        if end > at and byte_at(end) == _DOT:
            marks &= marks - _U(1)
            if marks == _U(0) or first_mark(marks) == end - at + 1:  # the word ends before the number, or no digit
                return -1
            end = at + first_mark(marks)
    return end if end > at and (byte_at(end) == COMMA or byte_at(end) == BRACE_END) else -1


# --- values --------------------------------------------------------------------------------------------------------


@compiled
def _literal_end(stop: int, at: int) -> int:
    if at + 6 > stop:  # a bracket and a line feed follow at least
        return -1
    four = short(stop, at, 4)
    if four in (_TRUE, _NULL):
        return at + 4
    return at + 5 if short(stop, at, 5) == _FALSE else -1


@compiled
def _scalar_end(stop: int, at: int) -> int:
    first = byte_at(at)
    if first == QUOTE:
        return string_end(stop, at + 1)
    if first == MINUS or 0x30 <= first <= 0x39:
        return _number_end(stop, at)
    return _literal_end(stop, at)


@compiled
def key_end(stop: int, at: int) -> int:
    """Behind a member's name, its colon and the blanks after it."""
    if byte_at(at) != QUOTE:
        return -1
    at = string_end(stop, at + 1)
    if at < 0:
        return -1
    at = blanks_end(at)
    return blanks_end(at + 1) if byte_at(at) == _COLON else -1


@inlined
def _opens(byte: int) -> bool:
    """Whether it is an opening bracket: they differ in one bit only."""
    return byte | 0x20 == BRACE


@compiled
def _item(stop: int, at: int, kinds: _U) -> int:
    """Where the value begins, in the innermost of the open levels."""
    return key_end(stop, at) if kinds & _U(1) else at


@compiled
def _nested_end(stop: int, at: int, levels: int) -> int:
    """Behind an object or array of at most `levels` levels, which are at most LEVELS_AT_MOST."""
    kinds, depth = _U(0), 0  # a bit for each open level, the innermost lowest: 1 an object, 0 an array
    while at >= 0:
        first = byte_at(at)
        if _opens(first):
            depth += 1
            if depth > levels:
                return -1
            kinds = kinds << _U(1) | _U(first == BRACE)
            at = blanks_end(at + 1)
            if byte_at(at) != first + 2:  # not its closing bracket
                at = _item(stop, at, kinds)
                continue
        else:
            at = _scalar_end(stop, at)
            if at < 0:
                return -1
            at = blanks_end(at)
        while byte_at(at) == (BRACE_END if kinds & _U(1) else _BRACKET_END):
            kinds, depth = kinds >> _U(1), depth - 1
            if depth == 0:
                return at + 1
            at = blanks_end(at + 1)
        if byte_at(at) != COMMA:
            return -1
        at = _item(stop, blanks_end(at + 1), kinds)
    return -1


@inlined
def any_end(stop: int, at: int, levels: int) -> int:
    """Behind a value that nobody asks for."""
    end = _short_number_end(stop, at)
    if end >= 0:
        return end
    first = byte_at(at)
    if first == QUOTE:
        end = plain_end(stop, at + 1)
        return end + 1 if end >= 0 else string_end(stop, at + 1)
    return _nested_end(stop, at, levels) if _opens(first) else _scalar_end(stop, at)

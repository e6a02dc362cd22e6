"""Copying lines out of mapped segments by code that numba compiles: one pass that joins neighbours and checks bounds.

Here lives the loop over the lines, and nothing of where they stand (`gather` calls it where it is given to it). Nothing
is copied that lies outside of what may be read: each line is compared with its source's end first. Importing this takes
seconds and memory; only feeds with `decoding = "compiled"` do.

Lines of 147 bytes in exponential disorder cost 32 ns each, where numpy's windows take 74 (they copy twice, and ask for
no line's memory ahead); of 90 to 200 bytes 40 against 139. See ingest/compiled.md.

How a byte is read by its address and how code is kept are a few lines that `ingest/compiled_text` has too. Neither room
imports from the other, and numba's cache would not notice a change in a module that both share: there a checksum tells.
"""

from __future__ import annotations

import ctypes
from collections.abc import Callable, Sequence
from typing import TYPE_CHECKING, Any, TypeVar, cast

import numpy as np
from llvmlite import ir
from numba import njit, types
from numba.extending import intrinsic
from numpy.typing import NDArray

from .frame import octets

if TYPE_CHECKING:
    from .gather import Positions, Source

_F = TypeVar("_F", bound=Callable[..., Any])
_LINE_FEED = 0x0A
_PIECE = 64  # bytes copied at once
_MEMCPY_FROM = 2048  # bytes from which the library's way is as fast (a call costs some 10 ns)
_AHEAD = 6  # lines whose memory is asked for beforehand
_CACHE_LINE = 64
_FETCHED_AT_MOST = 256  # bytes of each that are asked for; behind them the processor has noticed by itself


def _outermost(function: _F) -> _F:
    """Kept on disk where numba finds a folder (NUMBA_CACHE_DIR), else made anew."""
    try:
        return cast(_F, njit(nogil=True, error_model="numpy", cache=True)(function))
    except RuntimeError:  # no folder can be written to
        return cast(_F, njit(nogil=True, error_model="numpy")(function))


# --- memory by address ----------------------------------------------------------------------------------------------


def _pointer(builder: Any, address: Any, kind: Any) -> Any:
    return builder.inttoptr(address, ir.PointerType(kind))


def _loaded(bits: int) -> Callable[..., Any]:
    def typed(_: Any, address: Any) -> Any:
        def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
            value = builder.load(_pointer(builder, arguments[0], ir.IntType(bits)), align=1)
            return value if bits == 64 else builder.zext(value, ir.IntType(64))

        return types.int64(types.int64), generate

    return typed


def _copied_piece(_: Any, into: Any, out_of: Any) -> Any:
    def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        kind = ir.VectorType(ir.IntType(8), _PIECE)
        value = builder.load(_pointer(builder, arguments[1], kind), align=1)
        builder.store(value, _pointer(builder, arguments[0], kind), align=1)
        return context.get_dummy_value()

    return types.void(types.int64, types.int64), generate


def _copied_bytes(_: Any, into: Any, out_of: Any, size: Any) -> Any:
    def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        byte = ir.IntType(8).as_pointer()
        kind = ir.FunctionType(ir.VoidType(), [byte, byte, ir.IntType(64), ir.IntType(1)])
        copy = builder.module.declare_intrinsic("llvm.memcpy", [byte, byte, ir.IntType(64)], kind)
        into, out_of = (builder.inttoptr(address, byte) for address in arguments[:2])
        builder.call(copy, [into, out_of, arguments[2], ir.Constant(ir.IntType(1), 0)])
        return context.get_dummy_value()

    return types.void(types.int64, types.int64, types.int64), generate


def _fetched(_: Any, address: Any) -> Any:
    def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        byte, number = ir.IntType(8).as_pointer(), ir.IntType(32)
        kind = ir.FunctionType(ir.VoidType(), [byte, number, number, number])
        fetch = builder.module.declare_intrinsic("llvm.prefetch", [byte], kind)
        hints = [ir.Constant(number, value) for value in (0, 3, 1)]  # to read, to be kept, data
        builder.call(fetch, [builder.inttoptr(arguments[0], byte), *hints])
        return context.get_dummy_value()

    return types.void(types.int64), generate


def _fed(_: Any, address: Any) -> Any:
    def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        builder.store(ir.Constant(ir.IntType(8), _LINE_FEED), _pointer(builder, arguments[0], ir.IntType(8)))
        return context.get_dummy_value()

    return types.void(types.int64), generate


_byte_at = cast(Callable[[int], int], intrinsic(_loaded(8)))
_item_at = cast(Callable[[int], int], intrinsic(_loaded(64)))
_copy_piece = cast(Callable[[int, int], None], intrinsic(_copied_piece))
_copy_bytes = cast(Callable[[int, int, int], None], intrinsic(_copied_bytes))
_fetch = cast(Callable[[int], None], intrinsic(_fetched))
_put_feed = cast(Callable[[int], None], intrinsic(_fed))


@_outermost
def _copy(
    into: int, room: int, views: int, ends: int, owners: int, offsets: int, lengths: int, rows: int
) -> int:  # fmt: skip
    """Copy the lines, a line feed behind each, and return how many bytes they are; -1: they do not fit, or lie outside.

    All are addresses but `room` (bytes at `into`) and `rows`: of int64 columns, `views` and `ends` by source, the
    others by line; `owners` is 0 where all lie in the first source.
    """
    at, row = into, 0
    stop = into + room
    while row < rows:
        owner = _item_at(owners + 8 * row) if owners else 0
        end = _item_at(ends + 8 * owner)
        begin, size = _item_at(offsets + 8 * row), _item_at(lengths + 8 * row)
        if begin < 0 or size < 0 or begin > end or size > end - begin:
            return -1
        view = _item_at(views + 8 * owner)
        ahead = row + _AHEAD
        if ahead < rows and not owners:
            place = view + _item_at(offsets + 8 * ahead)
            for step in range(0, min(_item_at(lengths + 8 * ahead), _FETCHED_AT_MOST) + _CACHE_LINE, _CACHE_LINE):
                _fetch(place + step)
        row += 1
        # Neighbours in a payload are one piece: each line's feed stands where it has to be put.
        while row < rows and _item_at(offsets + 8 * row) == begin + size + 1 and (
            not owners or _item_at(owners + 8 * row) == owner
        ):  # fmt: skip
            more = _item_at(lengths + 8 * row)
            if more < 0 or begin + size >= end or more > end - begin - size - 1:
                return -1
            if _byte_at(view + begin + size) != _LINE_FEED:
                break
            size += more + 1
            row += 1
        if size >= stop - at:
            return -1
        source = view + begin
        if size >= _MEMCPY_FROM or begin + size + _PIECE > end or at + size + _PIECE > stop:
            _copy_bytes(at, source, size)
        else:
            for step in range(0, size, _PIECE):  # up to 63 bytes too many, which the next line overwrites
                _copy_piece(at + step, source + step)
        at += size
        _put_feed(at)
        at += 1
    return at - into


# --- from columns to bytes ------------------------------------------------------------------------------------------

# A bytes object to be filled, as CPython's documents allow for one that nobody else has seen, and where its bytes are.
# An array would have to be copied once more.
_new_bytes = ctypes.PYFUNCTYPE(ctypes.py_object, ctypes.c_void_p, ctypes.c_ssize_t)(
    ("PyBytes_FromStringAndSize", ctypes.pythonapi)
)
_bytes_place = ctypes.PYFUNCTYPE(ctypes.c_void_p, ctypes.py_object)(("PyBytes_AsString", ctypes.pythonapi))


def copied(
    sources: Sequence[Source], owners: NDArray[np.intp] | None, offsets: Positions, lengths: Positions
) -> bytes | None:
    """What `gather.block` answers, for at least one line; None where a line lies outside of what may be read."""
    rows, total = len(offsets), int(lengths.sum()) + len(offsets)
    if total < rows:
        return None
    flat = [octets(source.view) for source in sources]
    columns = [
        np.array([_place(view) for view in flat], np.int64),
        np.array([min(source.end, len(view)) for source, view in zip(sources, flat, strict=True)], np.int64),
        None if owners is None else np.ascontiguousarray(owners, np.int64),
        np.ascontiguousarray(offsets, np.int64),
        np.ascontiguousarray(lengths, np.int64),
    ]
    found: bytes = _new_bytes(None, total)
    views, ends, numbers, places, sizes = (0 if column is None else _place(column) for column in columns)
    done = _copy(_bytes_place(found), total, views, ends, numbers, places, sizes, rows)
    return found if done == total else None


def _place(column: NDArray[Any]) -> int:
    return int(column.__array_interface__["data"][0])

"""Which Arrow types are taken, and in what way; and the numbers of a column as numpy has them.

The rule for a type's text is `arrow_json`. Needs pyarrow; imported only once a body has come.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

TAKEN = (
    "booleans, integers, floats, decimals, strings, binary, timestamps, dates, times, structs, dictionaries of strings"
)


def is_text(kind: Any) -> bool:
    """Strings, large ones and views."""
    return bool(pa.types.is_string(kind) or pa.types.is_large_string(kind) or pa.types.is_string_view(kind))


def is_binary(kind: Any) -> bool:
    """Binary of any layout."""
    tests = (pa.types.is_binary, pa.types.is_large_binary, pa.types.is_binary_view, pa.types.is_fixed_size_binary)
    return any(test(kind) for test in tests)


def is_text_dictionary(kind: Any) -> bool:
    """Dictionaries whose values are strings."""
    return bool(pa.types.is_dictionary(kind) and is_text(kind.value_type))


_TESTS = (
    pa.types.is_null, pa.types.is_boolean, pa.types.is_integer, pa.types.is_floating, pa.types.is_timestamp,
    pa.types.is_date, pa.types.is_time, pa.types.is_struct, pa.types.is_decimal128, pa.types.is_decimal256, is_text,
    is_binary, is_text_dictionary,
)  # fmt: skip


def is_taken(kind: Any) -> bool:
    """Whether a column of this type can be written as JSON here. Types of extensions are not, whatever is below."""
    if pa.types.is_decimal(kind) and kind.scale < 0:  # the library cannot write it
        return False
    return not isinstance(kind, pa.BaseExtensionType) and any(test(kind) for test in _TESTS)


def is_name(kind: Any) -> bool:
    """Whether a column of this type can hold sources or ids."""
    return is_text(kind) or is_text_dictionary(kind) or bool(pa.types.is_integer(kind))


def values_of(column: Any) -> tuple[NDArray[np.int64], NDArray[np.bool_]]:
    """The integers of a column of integers, timestamps, dates or times (0 for null; unsigned beyond int64 wrap), and
    which are not null."""
    kind = column.type
    if not pa.types.is_integer(kind):
        column = column.view(pa.int32() if kind.bit_width == 32 else pa.int64())
    if not column.null_count:
        return column.to_numpy(zero_copy_only=False).astype(np.int64, copy=False), np.ones(len(column), np.bool_)
    valid = np.asarray(column.is_valid())
    return pc.fill_null(column, 0).to_numpy(zero_copy_only=False).astype(np.int64, copy=False), valid

"""Columns of JSON lines by code that is compiled for this machine: the door to `compiled_lines`, which needs numba.

Here live which feeds it can serve, and what surrounds the scan: room for the columns, times out of texts, numbers of
sources. Lines need not be split before: the scan finds where they end. It answers either what the other way (`decode`)
would answer, or None; faults are found by the other way only.
"""

from __future__ import annotations

import importlib
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from functools import cache
from itertools import count
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
from numpy.typing import NDArray

from ..core.columns import Times
from ..errors import StrandlineError
from .lines import Lines, is_utf8
from .pointer import fits_structs, parse_pointer
from .timestamps import from_unit_column, parse_rfc3339_fixed
from .values import Unit

if TYPE_CHECKING:
    from types import ModuleType

_NAMES_AT_MOST = 65_536  # in one body; their table then has 1 MiB
_WARM = b'{"t":0,"s":"a"}\n'


class Scanned(NamedTuple):
    """Columns as an arrival has them."""

    times: Times
    sources: NDArray[np.uint32]
    lengths: NDArray[np.uint32]
    new_sources: list[str]


def serves(time_at: str, source: str | None, id: str | None) -> bool:
    """Whether events of these pointers can be scanned: two members of the event itself, and no id.

    Raises pointer.PointerError.
    """
    paths = [parse_pointer(text) for text in (time_at, source) if text is not None]
    return id is None and len(set(paths)) == len(paths) and all(len(path) == 1 and fits_structs(path) for path in paths)


@contextmanager
def compiling() -> Iterator[None]:
    """While code is imported and compiled; where that cannot be, a StrandlineError says what is missing."""
    advice = 'or write decoding = "plain"'
    try:
        yield
    except ModuleNotFoundError as error:
        extra = f"pip install 'strandline[compiled]', {advice}"
        raise StrandlineError(f'decoding = "compiled" needs the package {error.name}: {extra}') from error
    except ImportError as error:  # it is there, but refuses a numpy that it does not know
        raise StrandlineError(f'decoding = "compiled" cannot load numba: {error}; mend that, {advice}') from error
    except OSError as error:  # memory cannot be made executable
        extra = f"let it (systemd: MemoryDenyWriteExecute=no), {advice}"
        raise StrandlineError(f'decoding = "compiled" needs to make code while it runs: {extra} ({error})') from error


@cache
def compiled_lines() -> ModuleType:
    """The module, its scan compiled. Raises StrandlineError where that cannot be."""
    with compiling():
        module = importlib.import_module(".compiled_lines", __package__)
        Scanner("/t", "s", "/s", 1, module).columns_of(_WARM, {}, 1)
    return module


class Scanner:
    """Scans bodies of one feed. Holds no state between bodies; may be shared between threads."""

    def __init__(
        self, time_at: str, unit: Unit, source: str | None, nesting_at_most: int, module: ModuleType | None = None
    ) -> None:
        """For pointers that it `serves`. Raises StrandlineError."""
        self._module = module or compiled_lines()
        self._unit, self._has_source = unit, source is not None
        self._levels = min(nesting_at_most - 1, self._module.LEVELS_AT_MOST)
        names = [parse_pointer(text)[0].encode() for text in (time_at, source) if text is not None]
        self._names = [np.frombuffer(name + b"\0", np.uint8) for name in names]  # kept: the scan has their addresses
        keys = [(_address(array), len(array) - 1) for array in self._names]
        self.keys = sum(keys if self._has_source else [*keys, (0, -1)], ())

    def columns(self, lines: Lines, source_numbers: Mapping[str, int]) -> Scanned | None:
        """The columns of lines that are regular and UTF-8; None where they are not proven to be events."""
        assert lines.is_regular, "an empty line would not be proven"
        payload = lines.payload
        return self._scanned(payload, _address(np.frombuffer(payload, np.uint8)), len(lines.ends), source_numbers)

    def columns_of(self, payload: bytes, source_numbers: Mapping[str, int], rows_at_most: int) -> Scanned | None:
        """The same of a payload that ends with a line feed and was not looked at yet.

        None also where there are too many lines, or what has to be taken out first (empty ones, carriage returns).
        """
        begin = _address(np.frombuffer(payload, np.uint8))
        rows, is_ascii = self._module.survey(begin, begin + len(payload))
        if rows > rows_at_most or not (is_ascii or is_utf8(payload)):
            return None
        return self._scanned(payload, begin, rows, source_numbers)

    def _scanned(self, payload: bytes, begin: int, rows: int, source_numbers: Mapping[str, int]) -> Scanned | None:
        times, lengths, sources = np.empty(rows, np.int64), np.empty(rows, np.uint32), np.zeros(rows, np.uint32)
        room = min(rows, _NAMES_AT_MOST)
        names, table = np.empty((room, 2), np.int64), np.zeros(2 << room.bit_length(), np.uint32)
        found = self._module.scan(
            begin, begin + len(payload), rows, self.keys, self._unit == "rfc3339", self._levels,
            times, lengths, sources, names, table, np.empty(self._module.WORK_ITEMS, np.int64),
        )  # fmt: skip
        if found < 0:
            return None
        ready = self._times(payload, times, begin)
        if ready is None:
            return None
        texts = [payload[at - begin : at - begin + length].decode() for at, length in names[:found].tolist()]
        numbers, new = _numbers(texts, source_numbers)
        if numbers:
            sources = np.array(numbers, np.uint32).take(sources)
        return Scanned(ready, sources, lengths, new)

    def _times(self, payload: bytes, times: Times, begin: int) -> Times | None:
        if self._unit != "rfc3339":
            ready, outside = from_unit_column(times, self._unit)
            return ready if outside is None else None
        bits = self._module.TEXT_BITS
        lengths, places = times & (1 << bits) - 1, (times >> bits) - begin
        ready = np.empty_like(times)
        for length in np.unique(lengths).tolist():
            rows = lengths == length
            # The texts as items of one unaligned view: 2 ns each, where a table of indices takes 30 (measured).
            items = np.ndarray((len(payload) - length,), f"V{length + 1}", payload, 0, (1,))[places[rows]]
            ready[rows], bad = parse_rfc3339_fixed(items.view(np.uint8).reshape(-1, length + 1))
            if bad.any():
                return None
        return ready


def _address(array: NDArray[np.uint8]) -> int:
    return int(array.__array_interface__["data"][0])


def _numbers(names: list[str], source_numbers: Mapping[str, int]) -> tuple[list[int], list[str]]:
    """The numbers of names, each there once, and those that the table lacks in order of first appearance."""
    known = list(map(source_numbers.get, names))
    new = [name for name, number in zip(names, known, strict=True) if number is None] if None in known else []
    following = count(len(source_numbers))
    return [next(following) if number is None else number for number in known], new

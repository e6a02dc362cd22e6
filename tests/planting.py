"""Plants small faults in the real code for a while: one piece of one function's source replaced, nothing copied.

A piece that is not there, or not only once, is an error: then the code has changed, and the fault must be planted anew.
"""

from __future__ import annotations
import __future__

import inspect
import textwrap
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass, replace
from types import FunctionType
from typing import Any

from sim_loop import swapped
from strandline.core.effects import Append
from strandline.core.records import Kind, frame_bytes

ORDER = (Kind.ARRIVAL, Kind.MARK)


@dataclass(frozen=True)
class Change:
    """In `holder` (a class, or the module that calls it), in the function `name`, each `old` becomes its `new`."""

    holder: Any
    name: str
    old: str
    new: str
    more: tuple[tuple[str, str], ...] = ()

    def changed(self) -> Any:
        """The function with the change, as it stands in its holder."""
        found = self.holder.__dict__[self.name]
        function = getattr(found, "fget", None) or getattr(found, "__func__", None) or found
        assert isinstance(function, FunctionType)
        source = textwrap.dedent(inspect.getsource(function))
        for old, new in ((self.old, self.new), *self.more):
            times = source.count(old)
            assert times == 1, f"{old!r} stands {times} times in {function.__qualname__}: plant it anew"
            source = source.replace(old, new)
        flags = __future__.annotations.compiler_flag
        code = compile(source, f"<planted in {function.__qualname__}>", "exec", flags, dont_inherit=True)
        names: dict[str, Any] = {}
        exec(code, function.__globals__, names)
        return names[function.__name__]


@contextmanager
def planted(*changes: Change) -> Iterator[None]:
    """While it lasts, the real code has these faults."""
    with ExitStack() as stack:
        for change in changes:
            stack.enter_context(swapped(change.holder, change.name, change.changed()))
        yield


def marks_first(effects: list[Any]) -> None:
    """Let each mark be journaled before the arrival that it follows: what a fault does, see the table."""
    for index in range(len(effects) - 1):
        arrival, mark = effects[index : index + 2]
        if isinstance(arrival, Append) and isinstance(mark, Append) and (arrival.kind, mark.kind) == ORDER:
            begin, size = arrival.lsn, frame_bytes(sum(memoryview(part).nbytes for part in mark.parts))
            effects[index : index + 2] = [replace(mark, lsn=begin), replace(arrival, lsn=begin + size)]

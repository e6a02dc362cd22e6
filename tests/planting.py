"""Plants small faults in the real code for a while: one piece of one function's source replaced, nothing copied.

A piece that is not there, or not only once, is an error: then the code has changed, and the fault must be planted anew.
"""

from __future__ import annotations
import __future__

import inspect
import textwrap
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass
from types import FunctionType
from typing import Any

from sim_loop import swapped


@dataclass(frozen=True)
class Change:
    """In `holder` (a class, or the module that calls it), in the function `name`, `old` becomes `new`."""

    holder: Any
    name: str
    old: str
    new: str

    def changed(self) -> Any:
        """The function with the change, as it stands in its holder."""
        found = self.holder.__dict__[self.name]
        function = getattr(found, "fget", None) or getattr(found, "__func__", None) or found
        assert isinstance(function, FunctionType)
        source = textwrap.dedent(inspect.getsource(function))
        times = source.count(self.old)
        assert times == 1, f"{self.old!r} stands {times} times in {function.__qualname__}: plant it anew"
        text = source.replace(self.old, self.new)
        flags = __future__.annotations.compiler_flag
        code = compile(text, f"<planted in {function.__qualname__}>", "exec", flags, dont_inherit=True)
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

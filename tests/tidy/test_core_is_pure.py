"""The core decides and never waits: what it may import and call, and what comes along when it is imported."""

from __future__ import annotations

import ast
import json
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

SERVICE = Path(__file__).resolve().parents[2] / "service"
CORE = SERVICE / "strandline" / "core"
MODULES = sorted(CORE.rglob("*.py"))

# Pure modules of the standard library, the libraries that carry columns, the core itself, the closed lists of reasons.
ALLOWED = {
    "__future__", "abc", "bisect", "collections", "collections.abc", "dataclasses", "enum", "functools", "hashlib",
    "heapq", "itertools", "math", "operator", "struct", "types", "typing",
    "msgspec", "numpy", "numpy.typing", "sortedcontainers", "strandline.core", "strandline.errors",
}  # fmt: skip
FORBIDDEN_CALLS = {"open", "print", "input", "exec", "eval", "breakpoint", "__import__", "globals"}
# Attributes that would bring a clock, a file or randomness in by way of an allowed module.
FORBIDDEN_ATTRIBUTES = {"now", "utcnow", "today", "random", "fromfile", "tofile", "memmap", "load", "save", "loadtxt"}


def impurities(text: str, module: str = "strandline.core.m") -> list[str]:
    """What of a module's source makes it impure."""
    return [fault for node in ast.walk(ast.parse(text)) for fault in _impurities(node, module)]


def _impurities(node: ast.AST, module: str) -> Iterator[str]:
    match node:
        case ast.AsyncFunctionDef() | ast.AsyncFor() | ast.AsyncWith() | ast.Await():
            yield f"line {node.lineno}: waits"
        case ast.Import() | ast.ImportFrom():
            yield from (f"line {node.lineno}: imports {name}" for name in _imported(node, module) if not _allowed(name))
        case ast.Call(func=ast.Name(id=name)) if name in FORBIDDEN_CALLS:
            yield f"line {node.lineno}: calls {name}"
        case ast.Attribute(attr=name, value=value) if name in FORBIDDEN_ATTRIBUTES:
            # An object of the core's own may have a method of that name; numpy and datetime must not be asked for it.
            if isinstance(value, ast.Name) and value.id in {"np", "numpy", "datetime", "date"}:
                yield f"line {node.lineno}: uses {ast.unparse(node)}"


def _imported(node: ast.Import | ast.ImportFrom, module: str) -> list[str]:
    """Full names of the modules that an import statement names."""
    if isinstance(node, ast.Import):
        return [alias.name for alias in node.names]
    if node.level == 0:
        return [node.module or ""]
    package = module.split(".")[: -node.level]
    if node.module is None:
        return [".".join([*package, alias.name]) for alias in node.names]
    return [".".join([*package, node.module])]


def _allowed(name: str) -> bool:
    return name in ALLOWED or name.startswith("strandline.core.")


@pytest.mark.parametrize("path", MODULES, ids=lambda path: path.name)
def test_a_module_of_the_core_is_pure(path: Path) -> None:
    inside = path.relative_to(SERVICE).with_suffix("").parts
    assert impurities(path.read_text(), ".".join(inside)) == []


def test_there_is_a_core_to_look_at() -> None:
    assert {"feed.py", "watermark.py", "merge.py"} <= {path.name for path in MODULES}


@pytest.mark.parametrize(
    "text",
    [
        "import asyncio", "import time", "import os.path", "from random import random", "import logging",
        "import socket", "from pathlib import Path", "from datetime import datetime", "from ..ports import Clock",
        "from .. import ports", "from strandline.journal import Journal", "import strandline", "async def f(): ...",
        "def f():\n    open('x')", "print(1)", "import numpy as np\nnp.random.default_rng()",
        "import numpy as np\nnp.fromfile('x')", "def f():\n    import time",
    ],
)  # fmt: skip
def test_what_is_impure_is_found(text: str) -> None:
    assert len(impurities(text)) == 1


def test_what_is_pure_is_let_through() -> None:
    text = "from . import merge\nfrom .merge import x\nfrom ..errors import REFUSALS\n"
    assert impurities(text + "import numpy as np\nself.clock.now()\n") == []


def test_the_closed_lists_that_the_core_shares_import_nothing() -> None:
    tree = ast.parse((SERVICE / "strandline" / "errors.py").read_text())
    imports = [node for node in ast.walk(tree) if isinstance(node, ast.Import | ast.ImportFrom)]
    allowed = ("from __future__ import ", "from collections.abc import ")
    assert all(ast.unparse(node).startswith(allowed) for node in imports)


def test_importing_the_core_brings_no_other_room_along() -> None:
    names = [".".join(path.relative_to(SERVICE).with_suffix("").parts).removesuffix(".__init__") for path in MODULES]
    script = "import importlib, json, sys\n"
    script += f"for name in {names}: importlib.import_module(name)\nprint(json.dumps([*sys.modules]))"
    run = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    loaded = set(json.loads(run.stdout))
    assert set(names) <= loaded
    ours = {name for name in loaded if name.split(".")[0] in ("strandline", "strandline_loadgen")}
    assert {name for name in ours if not name.startswith("strandline.core")} <= {"strandline", "strandline.errors"}
    assert not loaded & {"asyncio", "aiohttp", "sqlite3", "prometheus_client", "rich", "uvloop"}

"""Functions of at most 50 lines of code, modules of at most 400 lines, lines of at most 120 characters."""

from __future__ import annotations

from pathlib import Path

import pytest
from tidy_sizes import Function, javascript_functions, long_lines, python_functions

ROOT = Path(__file__).resolve().parents[2]
FUNCTION_CODE_LINES_AT_MOST = 50
MODULE_LINES_AT_MOST = 400
LINE_AT_MOST = 120

MODULES = sorted(
    path
    for folder in ("service", "loadgen", "tests", "deploy")
    for path in (ROOT / folder).rglob("*")
    if path.suffix in (".py", ".js", ".mjs")
)


def test_there_are_modules_to_look_at() -> None:
    assert {"config.py", "test_sizes.py"} <= {path.name for path in MODULES}


@pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(ROOT)))
def test_a_module_is_small(path: Path) -> None:
    text = path.read_text()
    functions = python_functions(text) if path.suffix == ".py" else javascript_functions(text)
    found = [f"{each.name} in line {each.line} has {each.code_lines} lines of code" for each in functions
             if each.code_lines > FUNCTION_CODE_LINES_AT_MOST]  # fmt: skip
    found += [f"line {number} is too long" for number in long_lines(text, LINE_AT_MOST)]
    if len(text.splitlines()) > MODULE_LINES_AT_MOST:
        found.append(f"the module has {len(text.splitlines())} lines")
    assert not found


def test_python_is_counted_without_blank_lines_comments_and_docstrings() -> None:
    text = 'def a(\n    b,\n):\n    """D.\n\n    D.\n    """\n    # c\n\n    x = """1\n\n    2"""\n'
    text += "    def d(): ...\n    return x\n"
    assert python_functions(text) == [Function("a", 1, 8), Function("d", 13, 1)]


def test_javascript_is_counted_past_everything_that_hides_braces() -> None:
    text = r"""
// {
/* function hidden() { */
export function first(a, b = (1)) {
  if (a) { return "}"; }

  // comment
  const r = /[/}]{2}/g, t = `}
  {`;
  return a / b / 2;
}
class C {
  #secret() { return 1; }
  method() {
    return () => {
      for (const x of y) { z(x); }
    };
  }
}
const table = { a: 1 };
"""
    found = {each.name: (each.line, each.code_lines) for each in javascript_functions(text)}
    assert found == {"first": (4, 6), "#secret": (13, 1), "=>": (15, 3), "method": (14, 5)}

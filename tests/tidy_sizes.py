"""Counts lines of modules and functions, in Python and in JavaScript. What is too much is `tidy/test_sizes.py`."""

from __future__ import annotations

import ast
import io
import re
import tokenize
from collections.abc import Iterator
from dataclasses import dataclass

FUNCTION = ast.FunctionDef | ast.AsyncFunctionDef
_SILENT = {tokenize.COMMENT, tokenize.NL, tokenize.NEWLINE, tokenize.INDENT, tokenize.DEDENT, tokenize.ENDMARKER}


@dataclass(frozen=True, slots=True)
class Function:
    """One function: where it starts, and its lines of code (no blank lines, comments, docstrings)."""

    name: str
    line: int
    code_lines: int


def python_functions(text: str) -> list[Function]:
    """Every function of a module, those within others too."""
    tree = ast.parse(text)
    code = _python_code_lines(text) - _docstring_lines(tree)
    return [
        Function(node.name, node.lineno, len(code & set(range(node.lineno, (node.end_lineno or 0) + 1))))
        for node in ast.walk(tree)
        if isinstance(node, FUNCTION)
    ]


def _python_code_lines(text: str) -> set[int]:
    lines: set[int] = set()
    for token in tokenize.generate_tokens(io.StringIO(text).readline):
        if token.type not in _SILENT:
            lines.update(range(token.start[0], token.end[0] + 1))
    return lines


def _docstring_lines(tree: ast.Module) -> set[int]:
    lines: set[int] = set()
    for node in ast.walk(tree):
        if isinstance(node, FUNCTION | ast.ClassDef | ast.Module) and ast.get_docstring(node, clean=False) is not None:
            lines.update(range(node.body[0].lineno, (node.body[0].end_lineno or 0) + 1))
    return lines


# What a token of JavaScript can be, for counting braces: comments, texts, regular expressions (only where a value may
# stand, which `_blank` decides), or one character.
_TEXT = re.compile(r"//[^\n]*|/\*.*?\*/|'(?:\\.|[^'\\\n])*'|\"(?:\\.|[^\"\\\n])*\"|`(?:\\.|[^`\\])*`", re.DOTALL)
_REGEX = re.compile(r"/(?![*/])(?:\\.|\[(?:\\.|[^\]\\\n])*\]|[^/\\\[\n])+/[a-z]*")
_BEFORE_VALUE = re.compile(r"(?:^|[(,=:\[!&|?{};+\-*%<>~^]|=>|\breturn|\btypeof|\bcase)\s*$")
_NO_FUNCTION = {"if", "for", "while", "switch", "catch", "with"}
_NAME = re.compile(r"([\w$#]+)\s*$")


def _blank(text: str) -> str:
    """The text with comments, strings and regular expressions blanked out, every line kept."""
    out: list[str] = []
    at = 0
    while at < len(text):
        match = _TEXT.match(text, at)
        if match is None and text[at] == "/" and _BEFORE_VALUE.search("".join(out[-40:])):
            match = _REGEX.match(text, at)
        piece = match[0] if match else text[at]
        filler = "" if piece.startswith(("//", "/*")) else "0"  # a string is code, a comment is not
        out.extend(re.sub(r"[^\n]", " ", piece).replace(" ", filler or " ") if match else piece)
        at += len(piece)
    return "".join(out)


def javascript_functions(text: str) -> list[Function]:
    """Every function of a module with a body in braces: declarations, methods, function and arrow expressions."""
    code = _blank(text)
    open_braces: list[tuple[int, str | None]] = []
    found: list[Function] = []
    for at, character in enumerate(code):
        if character == "{":
            open_braces.append((at, _function_name(code, at)))
        elif character == "}" and open_braces:
            start, name = open_braces.pop()
            if name is not None:
                lines = code[code.rfind("\n", 0, start) + 1 : at + 1].split("\n")
                found.append(Function(name, code.count("\n", 0, start) + 1, sum(bool(line.strip()) for line in lines)))
    return found


def _function_name(code: str, brace: int) -> str | None:
    """The name of the function whose body begins at this brace; None where no function's body does."""
    before = code[:brace].rstrip()
    if before.endswith("=>"):
        return "=>"
    if not before.endswith(")"):
        return None
    depth = 0
    for at in range(len(before) - 1, -1, -1):
        depth += (before[at] == ")") - (before[at] == "(")
        if depth == 0:
            name = _NAME.search(before[:at])
            return None if name and name[1] in _NO_FUNCTION else name[1] if name else "function"
    return None


def long_lines(text: str, at_most: int) -> Iterator[int]:
    """Numbers of the lines that are too long."""
    return (number for number, line in enumerate(text.splitlines(), 1) if len(line) > at_most)

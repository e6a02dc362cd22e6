"""How commands answer: exit codes, tables for people, lines for programs. No command's own work lives here.

What comes from events is made harmless before it reaches a terminal: nothing in an event can move the cursor or colour
the screen.
"""

from __future__ import annotations

import shutil
import sys
from collections.abc import Iterable, Sequence
from pathlib import Path

from .errors import ConfigError

FINE, NO, WRONG_USE, NOT_REACHED, INTERRUPTED = 0, 1, 2, 3, 130
DEFAULT_FILE = Path("strandline.toml")
GAP = "  "
LAST_COLUMN_AT_LEAST = 20


def chosen_file(file: Path | None) -> Path:
    """The configuration file that was named, or strandline.toml here. Raises ConfigError where there is none."""
    if file is None and not DEFAULT_FILE.exists():
        sentence = f"there is no {DEFAULT_FILE} in {Path.cwd()}: name a configuration, such as deploy/minimal.toml"
        raise ConfigError([sentence])
    return file or DEFAULT_FILE


def complain(*lines: str) -> None:
    """Say on stderr what went wrong, one line each."""
    sys.stderr.write("".join(f"strandline: {line}\n" for line in lines))


def harmless(text: str) -> str:
    """The text with everything that is not printable written as an escape."""
    return text if text.isprintable() else "".join(c if c.isprintable() else ascii(c)[1:-1] for c in text)


def write_table(headings: Sequence[str], rows: Iterable[Sequence[str]]) -> None:
    """A table on a terminal; elsewhere the same cells with tabs between them, whole, for other programs."""
    cells = [[harmless(cell) for cell in row] for row in (headings, *rows)]
    if sys.stdout.isatty():
        sys.stdout.write("".join(line + "\n" for line in table_lines(cells, shutil.get_terminal_size().columns)))
    else:
        sys.stdout.write("".join("\t".join(row) + "\n" for row in cells))


def table_lines(rows: Sequence[Sequence[str]], columns: int) -> list[str]:
    """Rows of a table for a terminal so wide. The last column, which may be an event, gives way to the others."""
    widths = [max(map(len, cells)) for cells in zip(*rows, strict=True)][:-1]
    room = max(columns - sum(widths) - len(GAP) * len(widths), LAST_COLUMN_AT_LEAST)
    lines = []
    for row in rows:
        last = row[-1] if len(row[-1]) <= room else row[-1][: room - 1] + "…"
        padded = [cell.ljust(width) for cell, width in zip(row, widths, strict=False)]
        lines.append(GAP.join([*padded, last]))
    return lines

"""How commands answer: exit codes, tables for people, lines for programs. No command's own work lives here.

What comes from events is made harmless before it reaches a terminal: nothing in an event can move the cursor or colour
the screen.
"""

from __future__ import annotations

import shutil
import sys
import textwrap
from collections.abc import Iterable, Sequence
from pathlib import Path

from .errors import ConfigError

FINE, NO, WRONG_USE, NOT_REACHED, INTERRUPTED = 0, 1, 2, 3, 130
DEFAULT_FILE = Path("strandline.toml")
GAP = "  "
LAST_COLUMN_AT_LEAST = 20
WRAPPED_AT_LEAST = 30  # with less room beside the other columns a sentence stands below them


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


def lasting(seconds: float) -> str:
    """How long something takes, for a table: seconds, from ten minutes on minutes."""
    return f"{seconds:.1f}s" if seconds < 600 else f"{seconds / 60:.0f}m"


def to_the_second(time_text: str) -> str:
    """An RFC 3339 time in UTC without what is shorter, for a table; `--json` has it whole."""
    return time_text.partition(".")[0].removesuffix("Z") + "Z"


def write_table(headings: Sequence[str], rows: Iterable[Sequence[str]], *, wrap: bool = False) -> None:
    """A table on a terminal; elsewhere the same cells with tabs between them, whole, for other programs.

    `wrap`: the last column is a sentence to be read whole, so it goes on in further lines instead of being cut.
    """
    cells = [[harmless(cell) for cell in row] for row in (headings, *rows)]
    if sys.stdout.isatty():
        lines = (wrapped_lines if wrap else table_lines)(cells, shutil.get_terminal_size().columns)
        sys.stdout.write("".join(line + "\n" for line in lines))
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


def wrapped_lines(rows: Sequence[Sequence[str]], columns: int) -> list[str]:
    """Rows of a table whose last column is never cut: it goes on below itself, or below the row where that is full."""
    widths = [max(map(len, cells)) for cells in zip(*rows, strict=True)][:-1]
    indent = sum(widths) + len(GAP) * len(widths)
    beside = columns - indent >= WRAPPED_AT_LEAST
    room = columns - indent if beside else max(columns - 2 * len(GAP), LAST_COLUMN_AT_LEAST)
    margin = " " * (indent if beside else 2 * len(GAP))
    lines = []
    for row in rows:
        first = GAP.join(cell.ljust(width) for cell, width in zip(row, widths, strict=False))
        sentence = textwrap.wrap(row[-1], room)
        if beside:
            lines.append((first + GAP + "".join(sentence[:1])).rstrip())
            sentence = sentence[1:]
        else:
            lines.append(first.rstrip())
        lines += [margin + line for line in sentence]
    return lines

"""Runs benchmark rows in rounds, interleaved, and shows medians with their spread. What is measured is in the rows.

Machines are shared and uneven: a number from one run says little, a ratio to a yardstick that was measured in the same
round says much. So each round visits every row once, and each visit measures the row's subject and its yardstick one
after the other. Nothing is judged here: goals stand beside what was measured.
"""

from __future__ import annotations

import gc
import os
import platform
import statistics
import sys
from collections.abc import Callable, Sequence
from dataclasses import asdict, dataclass, field
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any, Literal

from rich.console import Console
from rich.table import Table

PACKAGES = ("strandline", "numpy", "msgspec", "aiohttp", "uvloop", "google-crc32c", "sortedcontainers", "zstandard")


@dataclass(frozen=True, slots=True)
class Scale:
    """How much is measured: events a row, events held in rows about holding, bodies of so many events."""

    events: int = 1_000_000
    held: tuple[int, ...] = (10_000, 100_000, 1_000_000)
    body_events: int = 5_000
    seed: int = 1

    @classmethod
    def quick(cls) -> Scale:
        """A tenth of it: for trying things out, not for quoting."""
        return cls(events=100_000, held=(10_000, 100_000))


@dataclass(frozen=True, slots=True)
class Sample:
    """One visit: the row's value, and what else was measured on the way (ns per event and the like)."""

    value: float
    beside: dict[str, float] = field(default_factory=dict)


Measure = Callable[[], Sample]


@dataclass(frozen=True, slots=True)
class Row:
    """One line of the table. `prepare` makes the data, checks once that the subject is right, and returns the measure.

    `goal`: what the value should be, at most or at least (None: shown without a goal). `on_demand`: it takes minutes or
    gigabytes, so it runs only where `--only` names it.
    """

    name: str
    unit: str  # "x" for ratios
    prepare: Callable[[Scale], Measure]
    goal: float | None = None
    sense: Literal["at most", "at least"] = "at most"
    on_demand: bool = False


@dataclass(frozen=True, slots=True)
class Figure:
    """A row's outcome over all rounds."""

    name: str
    unit: str
    median: float
    least: float
    greatest: float
    goal: float | None
    sense: str
    met: bool | None
    rounds: int
    beside: dict[str, float]  # medians


def run(rows: Sequence[Row], scale: Scale, rounds: int, say: Callable[[str], None]) -> list[Figure]:
    """Prepare every row, then visit all of them in each round, in turn. One unmeasured visit warms each row up."""
    measures: list[Measure] = []
    for row in rows:
        say(f"preparing {row.name}")
        measures.append(row.prepare(scale))
        measures[-1]()
    samples: list[list[Sample]] = [[] for _ in rows]
    for number in range(rounds):
        for row, measure, found in zip(rows, measures, samples, strict=True):
            say(f"round {number + 1} of {rounds}: {row.name}")
            gc.collect()
            found.append(measure())
    return [_figure(row, found) for row, found in zip(rows, samples, strict=True)]


def _figure(row: Row, samples: Sequence[Sample]) -> Figure:
    values = [sample.value for sample in samples]
    median = statistics.median(values)
    met = None
    if row.goal is not None:
        met = median <= row.goal if row.sense == "at most" else median >= row.goal
    beside = {key: statistics.median(sample.beside[key] for sample in samples) for key in samples[0].beside}
    return Figure(row.name, row.unit, median, min(values), max(values), row.goal, row.sense, met, len(values), beside)


def machine() -> dict[str, Any]:
    """What this ran on: processor, cores, memory, system, interpreter and the versions that matter."""
    return {
        "processor": _processor(),
        "cores": len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count(),
        "memory_gib": _memory_gib(),
        "system": f"{platform.system()} {platform.release()} {platform.machine()}",
        "python": f"{platform.python_implementation()} {platform.python_version()}",
        "packages": {name: _version(name) for name in PACKAGES},
    }


def _processor() -> str:
    cpuinfo = Path("/proc/cpuinfo")
    if cpuinfo.exists():
        for line in cpuinfo.read_text(errors="replace").splitlines():
            if line.startswith("model name"):
                return line.partition(":")[2].strip()
    return platform.processor() or platform.machine()


def _memory_gib() -> float | None:
    try:
        return round(os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES") / 2**30, 1)
    except (ValueError, OSError, AttributeError):
        return None


def _version(name: str) -> str:
    try:
        return version(name)
    except PackageNotFoundError:
        return "absent"


def as_plain(figures: Sequence[Figure], scale: Scale, facts: dict[str, Any]) -> dict[str, Any]:
    """For --json: everything that the table shows."""
    return {"machine": facts, "scale": asdict(scale), "figures": [asdict(figure) for figure in figures]}


def show(figures: Sequence[Figure], facts: dict[str, Any], console: Console) -> None:
    """The table, with the machine above it."""
    packages = ", ".join(f"{name} {number}" for name, number in facts["packages"].items())
    console.print(
        f"{facts['processor']}, {facts['cores']} cores, {facts['memory_gib']} GiB; {facts['system']}; "
        f"{facts['python']}; {packages}",
        soft_wrap=True,
        highlight=False,
    )
    table = Table(box=None, pad_edge=False)
    for name in ("row", "median", "spread", "goal", "beside (medians)"):
        table.add_column(
            name, justify="left" if name in ("row", "beside (medians)") else "right", no_wrap=name != "row"
        )
    for figure in figures:
        unit = "" if figure.unit == "x" else f" {figure.unit}"
        ratio = "x" if figure.unit == "x" else ""
        goal = "" if figure.goal is None else f"{figure.sense} {figure.goal:g}{ratio}"
        mark = {True: " met", False: " MISSED", None: ""}[figure.met]
        table.add_row(
            figure.name,
            f"{short(figure.median)}{ratio}{unit}",
            f"{short(figure.least)} to {short(figure.greatest)}",
            goal + mark,
            ", ".join(f"{key} {short(value)}" for key, value in figure.beside.items()),
        )
    console.print(table)


def short(value: float) -> str:
    """Three digits that matter."""
    if abs(value) >= 1000:
        return f"{value:,.0f}"
    return f"{value:.3g}"


def main_table(
    rows: Sequence[Row], *, scale: Scale, rounds: int, only: Sequence[str], json_path: Path | None, console: Console
) -> list[Figure]:
    """Run the rows whose name holds one of `only` (all without), show the table, write the file. Raises ValueError."""
    chosen = [row for row in rows if any(word in row.name for word in only) or not (only or row.on_demand)]
    if not chosen:
        names = "\n  ".join(row.name for row in rows)
        raise ValueError(f"no row has {' or '.join(map(repr, only))} in its name; there are:\n  {names}")
    progress = Console(stderr=True)
    live = progress.status("") if progress.is_terminal else None
    if live:
        live.start()
    try:
        figures = run(chosen, scale, rounds, live.update if live else lambda text: print(text, file=sys.stderr))
    finally:
        if live:
            live.stop()
    facts = machine()
    show(figures, facts, console)
    if json_path:
        import msgspec  # noqa: PLC0415 - only where a file is asked for

        json_path.write_bytes(
            msgspec.json.format(msgspec.json.encode(as_plain(figures, scale, facts)), indent=2) + b"\n"
        )
    return figures

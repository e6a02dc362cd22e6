"""Runs benchmark rows in rounds, interleaved, and shows medians with their spread. What is measured is in the rows.

Machines are shared and uneven: a number from one run says little, a ratio to a yardstick that was measured in the same
round says much. So each round visits every row once, and each visit measures the row's subject and its yardstick one
after the other. Nothing is judged here: goals stand beside what was measured.
"""

from __future__ import annotations

import gc
import statistics
import sys
import time
from collections.abc import Callable, Sequence
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import Any, Literal

import msgspec
from rich.console import Console
from rich.table import Table

from .machine import load, machine

Sense = Literal["at most", "at least"]


@dataclass(frozen=True, slots=True)
class Scale:
    """How much is measured: events a row, events held in rows about holding, bodies of so many events.

    `full`: also what takes minutes or gigabytes (10^7 held, the slow peers). `is_quick`: for trying things out.
    """

    events: int = 1_000_000
    held: tuple[int, ...] = (10_000, 1_000_000)
    body_events: int = 5_000
    seed: int = 1
    full: bool = False
    is_quick: bool = False

    @classmethod
    def quick(cls) -> Scale:
        """A tenth of it: for trying things out, not for quoting."""
        return cls(events=100_000, held=(10_000, 100_000), is_quick=True)

    @classmethod
    def whole(cls) -> Scale:
        """With what only `--full` measures."""
        return cls(held=(10_000, 1_000_000, 10_000_000), full=True)


@dataclass(frozen=True, slots=True)
class Sample:
    """One visit: the row's value, what else was measured on the way (ns per event and the like), a word on it.

    `also`: values of the row's further goals, by their names.
    """

    value: float
    beside: dict[str, float] = field(default_factory=dict)
    also: dict[str, float] = field(default_factory=dict)
    note: str = ""


Measure = Callable[[], Sample]


@dataclass(frozen=True, slots=True)
class Also:
    """A second figure from a row's visits, with a goal of its own."""

    name: str
    goal: float | None = None


@dataclass(frozen=True, slots=True)
class Row:
    """One line of the table. `prepare` makes the data, checks once that the subject is right, and returns the measure.

    `goal`: what the value should be, at most or at least (None: shown without a goal). `place`: what the row varies,
    for tables and pictures. `warm`: visit it once beforehand, unmeasured. `rounds_at_most`: it is slow and steady.
    """

    name: str
    unit: str  # "x" for ratios
    prepare: Callable[[Scale], Measure]
    goal: float | None = None
    sense: Sense = "at most"
    warm: bool = True
    rounds_at_most: int = 1000
    also: tuple[Also, ...] = ()
    place: dict[str, str | int] = field(default_factory=dict)


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
    note: str = ""
    place: dict[str, str | int] = field(default_factory=dict)


def run(rows: Sequence[Row], scale: Scale, rounds: int, say: Callable[[str], None]) -> list[Figure]:
    """Prepare every row, then visit all of them in each round, in turn."""
    measures: list[Measure] = []
    for row in rows:
        say(f"preparing {row.name}")
        measures.append(row.prepare(scale))
        if row.warm:
            measures[-1]()
    samples: list[list[Sample]] = [[] for _ in rows]
    for number in range(rounds):
        for row, measure, found in zip(rows, measures, samples, strict=True):
            if number < row.rounds_at_most:
                say(f"round {number + 1} of {rounds}: {row.name}")
                gc.collect()
                found.append(measure())
    return [figure for row, found in zip(rows, samples, strict=True) for figure in _figures(row, found)]


def _figures(row: Row, samples: Sequence[Sample]) -> list[Figure]:
    beside = {key: statistics.median(sample.beside[key] for sample in samples) for key in samples[0].beside}
    found = [_figure(row, row.name, row.goal, [sample.value for sample in samples], beside, samples[-1].note)]
    for also in row.also:
        values = [sample.also[also.name] for sample in samples]
        found.append(_figure(row, also.name, also.goal, values, {}, ""))
    return found


def _figure(
    row: Row, name: str, goal: float | None, values: Sequence[float], beside: dict[str, float], note: str
) -> Figure:
    median = statistics.median(values)
    met = None
    if goal is not None:
        met = median <= goal if row.sense == "at most" else median >= goal
    extremes = min(values), max(values)
    return Figure(
        name, row.unit, median, *extremes, goal, row.sense, met, len(values), beside, note, {**row.place}
    )  # fmt: skip


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
        left = name in ("row", "beside (medians)")
        table.add_column(name, justify="left" if left else "right", no_wrap=not left)
    for figure in figures:
        beside = ", ".join(f"{key} {short(value)}" for key, value in figure.beside.items())
        table.add_row(
            figure.name,
            with_unit(figure.median, figure.unit),
            f"{short(figure.least)} to {short(figure.greatest)}",
            goal_of(figure),
            "; ".join(filter(None, (beside, figure.note))),
        )
    console.print(table)


def goal_of(figure: Figure) -> str:
    """The goal, and whether it was met."""
    if figure.goal is None:
        return ""
    ratio = "x" if figure.unit == "x" else ""
    return f"{figure.sense} {figure.goal:g}{ratio} {'met' if figure.met else 'MISSED'}"


def with_unit(value: float, unit: str) -> str:
    """A value as the table shows it."""
    return f"{short(value)}x" if unit == "x" else f"{short(value)} {unit}"


def short(value: float) -> str:
    """Three digits that matter."""
    if abs(value) >= 1000:
        return f"{value:,.0f}"
    return f"{value:.3g}"


def chosen_rows(rows: Sequence[Row], only: Sequence[str]) -> list[Row]:
    """The rows whose name holds one of `only` (all without). Raises ValueError, which names those that there are."""
    chosen = [row for row in rows if not only or any(word in row.name for word in only)]
    if not chosen:
        names = "\n  ".join(row.name for row in rows)
        raise ValueError(f"no row has {' or '.join(map(repr, only))} in its name; there are:\n  {names}")
    return chosen


def main_table(
    rows: Sequence[Row], *, scale: Scale, rounds: int, only: Sequence[str], json_path: Path | None, console: Console
) -> list[Figure]:
    """Run the chosen rows, show the table, write the file. Raises ValueError."""
    chosen = chosen_rows(rows, only)
    facts, begin = machine() | {"load_before": load()}, time.monotonic()
    progress = Console(stderr=True)
    live = progress.status("") if progress.is_terminal else None
    if live:
        live.start()
    try:
        figures = run(chosen, scale, rounds, live.update if live else lambda text: print(text, file=sys.stderr))
    finally:
        if live:
            live.stop()
    facts |= {"when": time.strftime("%Y-%m-%d", time.gmtime()), "seconds": round(time.monotonic() - begin)}
    show(figures, facts, console)
    console.print(f"{len(figures)} figures in {facts['seconds']} s; load before: {facts['load_before']}")
    if json_path:
        json_path.write_bytes(
            msgspec.json.format(msgspec.json.encode(as_plain(figures, scale, facts)), indent=2) + b"\n"
        )
    return figures

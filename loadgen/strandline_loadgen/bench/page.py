"""The page of the benchmark: tables and a picture made from a kept result, by `bench --page FILE`. Measures nothing.

A kept result is what `bench --json` wrote. The newest one by its date, then by its name, is shown.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import Any

import msgspec

from .harness import Figure, goal_of, short, with_unit
from .page_words import ABOUT, LOSES, ORDERING, SECTIONS
from .pictures import Lines, picture

ORDERING_PREFIX, ORDERING_END = "ordering alone", "against the best peer"
NS = " ns/event"


class Kept(msgspec.Struct):
    """A kept result."""

    machine: dict[str, Any]
    scale: dict[str, Any]
    figures: list[Figure]


def newest(folder: Path) -> tuple[Path, Kept]:
    """The newest kept result of a folder. Raises ValueError where there is none, or one cannot be read."""
    found = []
    for path in sorted(folder.glob("*.json")):
        try:
            found.append((path, msgspec.json.decode(path.read_bytes(), type=Kept)))
        except msgspec.MsgspecError as error:
            raise ValueError(f"{path} is no result of `bench --json`: {error}") from error
    if not found:
        raise ValueError(f"there is no kept result in {folder}: write one with `bench --json {folder}/DATE.json`")
    return max(found, key=lambda each: (str(each[1].machine.get("when", "")), each[0].name))


def write_page(results: Path, page: Path) -> None:
    """Write the page, and its picture beside it. Raises ValueError, OSError."""
    path, kept = newest(results)
    image = page.with_name(f"{page.stem}-ordering.svg")
    drawn = picture_of(kept)
    if drawn:
        image.write_text(drawn)
    page.write_text(page_of(kept, path.name, image.name if drawn else None))


def page_of(kept: Kept, source: str, image: str | None) -> str:
    """The page as Markdown."""
    parts = [ABOUT, _where(kept, source), "## Goals that were missed", _missed(kept.figures)]
    shown: set[str] = set()
    for section in SECTIONS:
        figures = [figure for figure in kept.figures if figure.name.startswith(section.prefixes)]
        shown |= {figure.name for figure in figures}
        if figures:
            parts += [f"## {section.title}", section.about, _table(figures)]
    ordering = _ordering(kept.figures)
    if ordering:
        parts += ["## Ordering alone, against its peers", ORDERING]
        parts += [f"![ns an event by events held, for each shape and contestant]({image})"] if image else []
        parts += _ordering_tables(kept.figures)
    rest = [f for f in kept.figures if f.name not in shown and not f.name.startswith(ORDERING_PREFIX)]
    if rest:
        parts += ["## More", _table(rest)]
    return "\n\n".join([*parts, LOSES]) + "\n"


def _where(kept: Kept, source: str) -> str:
    facts = kept.machine
    packages = ", ".join(f"{name} {number}" for name, number in facts["packages"].items())
    scale = kept.scale
    rounds = " or ".join(map(str, sorted({each.rounds for each in kept.figures})))
    return (
        f"Measured on {facts.get('when', 'an unknown day')}: {facts['processor']}, {facts['cores']} cores, "
        f"{facts['memory_gib']} GiB; {facts['system']}; {facts['python']}; {packages}. Load before the run: "
        f"{facts.get('load_before')}. {scale['events']:,} events a row, bodies of {scale['body_events']:,} where "
        f"nothing else is said, seed {scale['seed']}; {facts.get('seconds', 0) / 60:.0f} minutes, {rounds} rounds. "
        f"From `{source}`."
    )


def _missed(figures: Iterable[Figure]) -> str:
    lines = [f"* {each.name}: {with_unit(each.median, each.unit)}, {each.sense} {each.goal:g}"
             for each in figures if each.met is False]  # fmt: skip
    return "\n".join(lines) or "None."


def _row(cells: Iterable[str]) -> str:
    return f"| {' | '.join(cells)} |"


def _table(figures: Sequence[Figure]) -> str:
    lines = [_row(("row", "median", "spread", "goal", "beside it (medians)")), "|---|---:|---:|---|---|"]
    for each in figures:
        beside = ", ".join(f"{key} {short(value)}" for key, value in each.beside.items())
        spread = f"{short(each.least)} to {short(each.greatest)}"
        text = "; ".join(filter(None, (beside, each.note)))
        lines.append(_row((each.name, with_unit(each.median, each.unit), spread, goal_of(each), text)))
    return "\n".join(lines)


def _ordering(figures: Iterable[Figure]) -> list[Figure]:
    return [each for each in figures if each.name.startswith(ORDERING_PREFIX) and each.name.endswith(ORDERING_END)]


def _ordering_tables(figures: Sequence[Figure]) -> list[str]:
    """For each held count: what every contestant took, and how many times as fast runs are."""
    ours, parts = _ordering(figures), []
    objects = {(each.place["shape"], each.place["held"]): each for each in figures
               if each.name.startswith(ORDERING_PREFIX) and each not in ours}  # fmt: skip
    for held in dict.fromkeys(int(each.place["held"]) for each in ours):
        some = [each for each in ours if each.place["held"] == held]
        names = list(dict.fromkeys(key.removesuffix(NS) for each in some for key in each.beside))
        ends = ["times as fast as the best", "goal", "as heapq, SortedKeyList", "goal"]
        lines = [_row(["ns an event", *names, *ends]), "|---|" + "---:|" * len(names) + "---:|---|---:|---|"]
        for each in some:
            other = objects[each.place["shape"], held]
            cells = [short(each.beside[name + NS]) if name + NS in each.beside else "" for name in names]
            ratios = [f"{short(each.median)}x", goal_of(each), f"{short(other.median)}x", goal_of(other)]
            lines.append(_row([str(each.place["shape"]), *cells, *ratios]))
        absent = sorted({word for each in some for word in each.note.split("; ") if word.endswith("not installed")})
        parts += [f"### {held:,} held", "\n".join(lines), *(["; ".join(absent) + "."] if absent else [])]
    return parts


def picture_of(kept: Kept) -> str:
    """The picture of all shapes by events held; nothing where only one held count was measured."""
    panels: dict[str, dict[str, list[tuple[float, float]]]] = {}
    for each in sorted(_ordering(kept.figures), key=lambda figure: figure.place["held"]):
        lines = panels.setdefault(str(each.place["shape"]), {})
        for key, value in each.beside.items():
            lines.setdefault(key.removesuffix(NS), []).append((float(each.place["held"]), value))
    if not any(len(points) > 1 for lines in panels.values() for points in lines.values()):
        return ""
    drawn: dict[str, Lines] = dict(panels)
    return picture("ns an event by events held", drawn)

"""A picture of lines on two logarithmic axes, in panels side by side, as SVG. No measuring, no reading of files.

The text keeps to the page's own font; every line has a colour and a dash of its own, and the last point of each is
named in the legend, so that the picture also works in grey.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from html import escape

Lines = Mapping[str, Sequence[tuple[float, float]]]  # name -> points (x, y), both above 0

WIDTH, HEIGHT, COLUMNS = 280, 200, 3  # of a panel
LEFT, TOP, BOTTOM, RIGHT = 52, 26, 26, 24
STYLES = (
    ("#0b5c8a", ""), ("#b3541e", ""), ("#5b7f1f", ""), ("#8a2b62", "6 3"),
    ("#7a6a00", "6 3"), ("#444444", "2 3"), ("#1c8a7d", "2 3"), ("#a33333", "8 2 2 2"),
)  # fmt: skip


def _ticks(low: float, high: float) -> list[float]:
    return [10.0**power for power in range(math.floor(math.log10(low)), math.ceil(math.log10(high)) + 1)]


def _label(value: float) -> str:
    return f"{value:,.0f}" if value < 10_000 else f"10^{round(math.log10(value))}"


class _Scale:
    """Values to places along one axis."""

    def __init__(self, values: Sequence[float], begin: float, end: float) -> None:
        self.ticks = _ticks(min(values), max(values))
        if len(self.ticks) == 1:
            self.ticks.append(self.ticks[0] * 10)
        self._low, self._span = math.log10(self.ticks[0]), math.log10(self.ticks[-1] / self.ticks[0])
        self._begin, self._end = begin, end

    def place(self, value: float) -> float:
        """Where a value stands."""
        share = (math.log10(value) - self._low) / self._span
        return round(self._begin + share * (self._end - self._begin), 1)


def _panel(title: str, lines: Lines, styles: Mapping[str, tuple[str, str]], ys: _Scale) -> list[str]:
    xs = _Scale([x for points in lines.values() for x, _ in points], LEFT, WIDTH - RIGHT)
    parts = [f'<text x="{LEFT}" y="16" font-weight="bold">{escape(title)}</text>']
    for tick in ys.ticks:
        y = ys.place(tick)
        parts.append(f'<path d="M{LEFT} {y}H{WIDTH - RIGHT}" stroke="#ddd"/>')
        parts.append(f'<text x="{LEFT - 6}" y="{y + 4}" text-anchor="end">{_label(tick)}</text>')
    for tick in xs.ticks:
        parts.append(f'<text x="{xs.place(tick)}" y="{HEIGHT - 8}" text-anchor="middle">{_label(tick)}</text>')
    for name, points in lines.items():
        colour, dash = styles[name]
        path = "L".join(f"{xs.place(x)} {ys.place(y)}" for x, y in points)
        wide = 3 if colour == STYLES[0][0] else 2  # the first one named is what the picture is about
        stroke = f'stroke="{colour}" stroke-width="{wide}" stroke-dasharray="{dash}"'
        parts.append(f'<path d="M{path}" fill="none" {stroke}/>')
        parts += [f'<circle cx="{xs.place(x)}" cy="{ys.place(y)}" r="2.5" fill="{colour}"/>' for x, y in points]
    return parts


def picture(title: str, panels: Mapping[str, Lines]) -> str:
    """An SVG of the panels, with one legend for all; the vertical axes are the same in all of them."""
    names = list(dict.fromkeys(name for lines in panels.values() for name in lines))
    styles = {name: STYLES[place % len(STYLES)] for place, name in enumerate(names)}
    values = [y for lines in panels.values() for points in lines.values() for _, y in points]
    ys = _Scale(values, HEIGHT - BOTTOM, TOP)
    rows = -(-len(panels) // COLUMNS)
    width, height = COLUMNS * WIDTH, rows * HEIGHT + 24 * -(-len(names) // 4) + 30
    parts = [
        f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {width} {height}" font-family="sans-serif" '
        f'font-size="11" role="img" aria-label="{escape(title, quote=True)}">',
        f"<title>{escape(title)}</title>",
        f'<rect width="{width}" height="{height}" fill="#fff"/>',
    ]
    for place, (name, lines) in enumerate(panels.items()):
        parts.append(f'<g transform="translate({place % COLUMNS * WIDTH} {place // COLUMNS * HEIGHT})">')
        parts += [*_panel(name, lines, styles, ys), "</g>"]
    for place, (name, (colour, dash)) in enumerate(styles.items()):
        x, y = 20 + place % 4 * (width - 40) / 4, rows * HEIGHT + 24 + place // 4 * 24
        parts.append(f'<path d="M{x} {y}h26" stroke="{colour}" stroke-width="2" stroke-dasharray="{dash}"/>')
        parts.append(f'<text x="{x + 32}" y="{y + 4}">{escape(name)}</text>')
    return "\n".join([*parts, "</svg>", ""])

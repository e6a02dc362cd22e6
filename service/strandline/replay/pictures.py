"""Pictures of an advice: late share, hold, sources, time of day. The answer as plain values in, axes drawn on out.

Only here is matplotlib imported, and only when a report is asked for. Nothing is worked out here: every value drawn is
one of the answer that `--json` prints. Shares, times and slacks have log axes, on which 0 has no place: it is left out
of the picture and stands in the table. What an event says (a source's name) is drawn as it is, never as a formula.

Colours: the eight of Okabe & Ito, "Color Universal Design" (2008), told apart with the common kinds of colour
blindness; shape and dash say the same a second time.
"""

from __future__ import annotations

import io
import math
import unicodedata
import warnings
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from itertools import accumulate
from typing import TYPE_CHECKING, Any

from strandline.cli_answers import harmless
from strandline.errors import ConfigError
from strandline.page_style import OKABE_ITO

if TYPE_CHECKING:
    from matplotlib.axes import Axes

PLAIN = "{http://www.w3.org/2000/svg}"
NEEDS = "a report needs matplotlib: pip install 'strandline[report]'"
WIDE, HIGH = 7.6, 3.9  # inches of one picture
DOTS_AN_INCH = 144
SOURCES_DRAWN = 12
NAME_DRAWN = 24  # columns as of a terminal: what is wide counts twice
TICKS_AT_LEAST, TICKS_AT_MOST = 3, 8
SECOND = 1e9


@dataclass(frozen=True, slots=True)
class Colours:
    """What is drawn in which colour."""

    ink: str
    grid: str
    one: str
    other: str
    chosen: str
    paper: str


PAPER = Colours(
    ink="#000000",
    grid="#DDDDDD",
    one=OKABE_ITO["blue"],
    other=OKABE_ITO["vermillion"],
    chosen=OKABE_ITO["bluish green"],
    paper="#FFFFFF",
)


@dataclass(frozen=True, slots=True)
class Picture:
    """One picture: how it is called, what it shows to who cannot see it, and what draws it on so many axes."""

    key: str
    title: str
    alternative: str
    axes: int
    draw: Callable[[Sequence[Axes], Mapping[str, Any], Colours], None]


def require_matplotlib() -> None:
    """Raises ConfigError where matplotlib is not installed."""
    try:
        import matplotlib.figure  # noqa: F401, PLC0415 - 0.3 s and 30 MB, only for who asks for a report
    except ImportError as error:
        raise ConfigError([NEEDS]) from error


@contextmanager
def _style(colours: Colours, salt: str) -> Iterator[None]:
    """Settings of our own only, whatever a user's file says: the same answer gives the same bytes."""
    import matplotlib  # noqa: PLC0415

    with matplotlib.rc_context(), warnings.catch_warnings():
        # A name in a script that the font lacks is drawn as boxes; the table has it as it is.
        warnings.filterwarnings("ignore", message="Glyph .* missing from")
        warnings.filterwarnings("ignore", message="Matplotlib currently does not support")
        matplotlib.rcdefaults()
        matplotlib.rcParams.update(
            {
                "svg.hashsalt": salt,
                "svg.fonttype": "none",
                "text.parse_math": False,
                "font.size": 9,
                "axes.titlesize": 10,
                "axes.spines.top": False,
                "axes.spines.right": False,
                "axes.grid": True,
                "axes.axisbelow": True,
                "grid.color": colours.grid,
                "grid.linewidth": 0.6,
                "legend.frameon": False,
                "legend.fontsize": 8.5,
                "figure.facecolor": colours.paper,
                "axes.facecolor": "none",
                "savefig.facecolor": colours.paper,
                **dict.fromkeys(("text.color", "axes.labelcolor", "axes.edgecolor", "axes.titlecolor"), colours.ink),
                **dict.fromkeys(("xtick.color", "ytick.color"), colours.ink),
            }
        )
        yield


def svg(picture: Picture, answer: Mapping[str, Any], colours: Colours) -> str:
    """One picture as an SVG document, with texts as texts."""
    from matplotlib.figure import Figure  # noqa: PLC0415

    out = io.BytesIO()
    with _style(colours, picture.key):
        figure = Figure(figsize=(WIDE, HIGH), layout="constrained")
        picture.draw(list(figure.subplots(1, picture.axes, squeeze=False)[0]), answer, colours)
        figure.savefig(out, format="svg", transparent=True, metadata={"Date": None, "Creator": None})
    return out.getvalue().decode()


def png(answer: Mapping[str, Any], shown: Sequence[Picture]) -> bytes:
    """All pictures below each other as one PNG."""
    from matplotlib.figure import Figure  # noqa: PLC0415
    from matplotlib.layout_engine import ConstrainedLayoutEngine  # noqa: PLC0415

    out = io.BytesIO()
    with _style(PAPER, "report"):
        layout = ConstrainedLayoutEngine(w_pad=0.1, h_pad=0.1)
        figure = Figure(figsize=(WIDE, HIGH * len(shown)), layout=layout)
        parts = figure.subfigures(len(shown), 1, squeeze=False)[:, 0]
        for part, picture in zip(parts, shown, strict=True):
            part.suptitle(picture.title, fontsize=11, fontweight="bold")
            picture.draw(list(part.subplots(1, picture.axes, squeeze=False)[0]), answer, PAPER)
        figure.savefig(out, format="png", dpi=DOTS_AN_INCH, metadata={"Software": None})
    return out.getvalue()


# ---- what is drawn --------------------------------------------------------------------------------------------------


def _draw_share(axes: Sequence[Axes], answer: Mapping[str, Any], colours: Colours) -> None:
    place, curve = axes[0], answer["pictures"]["curve"]
    slacks = [each["slack_ns"] / SECOND for each in curve]
    for part, label, colour, mark in (
        ("first_share", "first part, on which it was chosen", colours.one, "o-"),
        ("second_share", "second part, which verifies it", colours.other, "s--"),
    ):
        place.plot(*_positive(slacks, [each[part] for each in curve]), mark, color=colour, markersize=3.5, label=label)
    target, (low, high) = answer["wanted"]["late_share"], answer["interval"]
    place.axhline(target, color=colours.ink, linestyle=":", linewidth=1.2, label=f"wanted: {target:g}")
    shares = [share for each in curve for share in (each["first_share"], each["second_share"]) if share > 0]
    bottom = min([*shares, target, high]) / 2
    _log(place, slacks, [bottom, *shares, target, high], "slack (s)", "late share")
    chosen, found = answer["slack_ns"] / SECOND, answer["late_share"]
    if chosen > 0:
        # Of no late events the point stands at the bottom of the picture, below its interval.
        point = max(found, bottom)
        lower, upper = max(low, bottom), high
        place.vlines(chosen, lower, upper, color=colours.chosen, linewidth=2, zorder=4)
        place.plot([chosen, chosen], [lower, upper], "_", color=colours.chosen, markersize=18, mew=2, zorder=4)
        sure = f"{100 * answer['wanted']['confidence']:g} %"
        label = f"chosen: {chosen:g} s, share {found:.3g} ({sure}: {low:.3g} to {high:.3g})"
        place.plot([chosen], [point], "D", color=colours.chosen, markersize=4.5, zorder=5, label=label)
    _legend(place)


def _draw_hold(axes: Sequence[Axes], answer: Mapping[str, Any], colours: Colours) -> None:
    figures = [each["figure"] for each in answer["pictures"]["curve"]]
    slacks = [each["slack_ns"] / SECOND for each in figures]
    chosen = answer["slack_ns"] / SECOND
    quantiles = [each["hold_ns_quantiles"] or {} for each in figures]
    for place, label, lines in (
        (axes[0], "hold (s)", (("mean", [_seconds(each["hold_ns_mean"]) for each in figures]),
                               ("99 in 100 at most", [_seconds(each.get("0.99")) for each in quantiles]))),
        (axes[1], "held events", (("mean", [each["held_events_mean"] for each in figures]),
                                  ("most at one time", [each["held_events_peak"] for each in figures]))),
    ):  # fmt: skip
        drawn: list[float] = []
        for (name, values), colour, mark in zip(lines, (colours.one, colours.other), ("o-", "s--"), strict=True):
            points = _positive(slacks, values)
            drawn += points[1]
            place.plot(*points, mark, color=colour, markersize=3.5, label=name)
        _log(place, slacks, drawn, "slack (s)", label)
        if chosen > 0:
            place.axvline(chosen, color=colours.chosen, linestyle="-.", linewidth=1.5, label=f"chosen: {chosen:g} s")
        _legend(place)


def _draw_sources(axes: Sequence[Axes], answer: Mapping[str, Any], colours: Colours) -> None:
    found = sorted(answer["sources"], key=lambda each: -each["late"])[:SOURCES_DRAWN]
    rows = range(len(found))
    axes[0].barh(rows, [each["late"] for each in found], color=colours.one, height=0.6)
    for row, each in zip(rows, found, strict=True):
        share = f"{each['late'] / each['events']:.2g}" if each["events"] else "-"
        text, at = f"{each['late']:,} ({share})", (each["late"], row)
        axes[0].annotate(text, at, (4, 0), textcoords="offset points", va="center", fontsize=8)
    axes[0].set_xlabel("late events (share of its own)")
    axes[0].set_xlim(0, max([each["late"] for each in found], default=0) * 1.45 or 1)
    axes[0].xaxis.set_major_locator(_whole_numbers())
    drawn: list[float] = []
    for key, label, colour, mark in (
        ("lateness_ns_p99", "99 in 100 at most", colours.one, "o"),
        ("lateness_ns_max", "the latest", colours.other, "s"),
    ):
        values = [_seconds((each["lateness"] or {}).get(key)) for each in found]
        spots = [(value, row) for value, row in zip(values, rows, strict=True) if value]
        drawn += [value for value, _ in spots]
        places = [value for value, _ in spots], [row for _, row in spots]
        axes[1].plot(*places, mark, color=colour, markersize=6, label=label)
    slack = answer["slack_ns"] / SECOND
    _log(axes[1], [*drawn, slack], None, "lateness (s)", "")
    if slack > 0:
        axes[1].axvline(slack, color=colours.chosen, linestyle="-.", linewidth=1.5, label=f"slack chosen: {slack:g} s")
    _legend(axes[1])
    names = [_short(harmless(each["source"])) for each in found]
    for place, named in zip(axes, (names, [""] * len(names)), strict=True):
        place.set_yticks(rows, named)
        place.set_ylim(max(len(found), 1) - 0.5, -0.5)
        place.grid(visible=False, axis="y")
        place.tick_params(axis="y", length=0)


def _draw_time(axes: Sequence[Axes], answer: Mapping[str, Any], colours: Colours) -> None:
    steps, by_day = answer["pictures"]["steps"], answer["pictures"]["by_day"]
    unit, name = _time_unit(steps)
    label = "hour of the day (UTC)" if by_day else f"time since the capture begins ({name})"
    begins = [step["from_ns"] / unit for step in steps]
    width = (steps[0]["to_ns"] - steps[0]["from_ns"]) / unit
    shares = [step["lateness"]["late_share"] or 0.0 for step in steps]
    target = answer["wanted"]["late_share"]
    axes[0].bar(begins, shares, width=0.85 * width, align="edge", color=colours.one)
    axes[0].axhline(target, color=colours.ink, linestyle=":", linewidth=1.2, label=f"wanted: {target:g}")
    axes[0].set_ylabel("late share, with the slack chosen")
    axes[0].set_ylim(0, max([*shares, target]) * 1.25)
    middles = [begin + width / 2 for begin in begins]
    drawn: list[float] = []
    for key, text, colour, mark in (
        ("lateness_ns_p99", "99 in 100 at most", colours.one, "o-"),
        ("lateness_ns_max", "the latest", colours.other, "s--"),
    ):
        points = _positive(middles, [_seconds(step["lateness"][key]) for step in steps])
        drawn += points[1]
        axes[1].plot(*points, mark, color=colour, markersize=3.5, label=text)
    slack = answer["slack_ns"] / SECOND
    _log(axes[1], None, [*drawn, slack], "", "lateness (s)")
    if slack > 0:
        axes[1].axhline(slack, color=colours.chosen, linestyle="-.", linewidth=1.5, label=f"slack chosen: {slack:g} s")
    for place in axes:
        place.set_xlabel(label)
        place.set_xlim(begins[0], begins[-1] + width)
        _legend(place)
        if by_day:
            place.set_xticks(range(0, 25, 6))
        else:
            learnt = (answer["second"]["from_ns"] - answer["first"]["from_ns"]) / unit
            place.axvline(learnt, color=colours.ink, linewidth=0.8)
            at, where = (learnt, 0.99), ("data", "axes fraction")
            place.annotate("second part", at, (4, 0), where, "offset points", fontsize=8, va="top")


def _time_unit(steps: Sequence[Mapping[str, Any]]) -> tuple[float, str]:
    if steps[-1]["to_ns"] <= 120 * SECOND:
        return SECOND, "s"
    return (60 * SECOND, "min") if steps[-1]["to_ns"] <= 7200 * SECOND else (3600 * SECOND, "h")


def _positive(xs: Sequence[float | None], ys: Sequence[float | None]) -> tuple[list[float], list[float]]:
    """The points that are known and have a place on log axes."""
    points = [(x, y) for x, y in zip(xs, ys, strict=True) if x and y]
    return [x for x, _ in points], [y for _, y in points]


def _log(place: Axes, xs: Sequence[float] | None, ys: Sequence[float] | None, across: str, up: str) -> None:
    """Log axes that hold these values; None: that axis is no log axis."""
    from matplotlib.ticker import FixedLocator, FuncFormatter, NullFormatter  # noqa: PLC0415

    for values, axis, scale, limit in (
        (xs, place.xaxis, place.set_xscale, place.set_xlim),
        (ys, place.yaxis, place.set_yscale, place.set_ylim),
    ):
        if values is None:
            continue
        known = [each for each in values if each > 0] or [1.0]
        scale("log")
        low, high = min(known) / 1.3, max(known) * 1.5
        limit(low, high)
        axis.set_major_locator(FixedLocator(log_ticks(low, high)))
        axis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:,.10g}"))
        axis.set_minor_formatter(NullFormatter())
    if across:
        place.set_xlabel(across)
    if up:
        place.set_ylabel(up)


def log_ticks(low: float, high: float) -> list[float]:
    """Three to eight round numbers between the ends of a log axis, as evenly as round numbers go."""
    decades = range(math.floor(math.log10(low)), math.ceil(math.log10(high)) + 1)
    found: list[float] = []
    for steps in ((10,), (10, 20, 50), range(10, 100, 10), range(10, 100, 2), range(10, 100)):
        # By way of a text, so that 0.3 is 0.3 and not 0.30000000000000004.
        ticks = [float(f"{step}e{decade - 1}") for decade in decades for step in steps]
        found = [tick for tick in ticks if low <= tick <= high]
        if len(found) >= TICKS_AT_LEAST:
            break
    return found[:: math.ceil(len(found) / TICKS_AT_MOST)]


def _legend(place: Axes) -> None:
    place.legend(loc="upper center", bbox_to_anchor=(0.5, -0.16), ncols=2)


def _whole_numbers() -> Any:
    from matplotlib.ticker import MaxNLocator  # noqa: PLC0415

    return MaxNLocator(nbins=4, integer=True)


def _seconds(ns: float | None) -> float | None:
    return None if ns is None else ns / SECOND


def _short(name: str) -> str:
    widths = [2 if unicodedata.east_asian_width(character) in "WF" else 1 for character in name]
    if sum(widths) <= NAME_DRAWN:
        return name
    return "".join(c for c, end in zip(name, accumulate(widths), strict=True) if end < NAME_DRAWN) + "…"


SHARE = Picture(
    "share",
    "Late share against slack",
    "Two falling curves on log axes: the late share of each slack, on the first part of the capture and on the second; "
    "the wanted share as a level line; and the slack chosen with the share found on the second part and its Wilson "
    "interval. The table below has the same values.",
    1,
    _draw_share,
)
HOLD = Picture(
    "hold",
    "Hold and held events against slack",
    "Left: how long events are held with each slack, mean and 99 in 100. Right: how many are held at one time, mean "
    "and most. Log axes, the slack chosen marked. The table below has the same values.",
    2,
    _draw_hold,
)
SOURCES = Picture(
    "sources",
    "Lateness by source",
    "Left: late events of each of the sources that cost most. Right: lateness of their events, 99 in 100 and the "
    "latest, against the slack chosen. The table below has the same values.",
    2,
    _draw_sources,
)
TIME = Picture(
    "time",
    "Lateness by time",
    "Left: late share with the slack chosen, by time, against the wanted share. Right: lateness by time, 99 in 100 and "
    "the latest, against the slack chosen. The table below has the same values.",
    2,
    _draw_time,
)


def pictures_of(answer: Mapping[str, Any]) -> list[Picture]:
    """The pictures that this answer has something for."""
    return [SHARE, HOLD, *([SOURCES] if answer["sources_known"] > 1 else []), TIME]

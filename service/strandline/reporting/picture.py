"""The picture of a report: who held the feed when, how far the output was behind, late bursts, acts. Facts in, SVG out.

Pure, no library. One axis of time for all of it. Nothing is told by colour alone: each holder has a line of its own
with its name, each mark a title, and the tables have every figure.
"""

from __future__ import annotations

from collections.abc import Iterator
from html import escape
from typing import NamedTuple

from ..page_style import OKABE_ITO
from .facts import Facts, Hold
from .holding import USUAL
from .knowing import why_words
from .sentences import burst_words
from .tables import WHYS
from .words import DAY_NS, SECOND_NS, Clock, Foreign, full, lasted

WIDTH, LEFT, RIGHT = 960, 170, 30
LANE, BAR, LANES_AT_MOST = 22, 14, 10
BEHIND, LATE = 110, 46
NAME_CHARACTERS = 22
COLOURS = {
    "slow_source": OKABE_ITO["yellow"],
    "promised_source": OKABE_ITO["sky blue"],
    "expected_source": OKABE_ITO["bluish green"],
    "silent_source": OKABE_ITO["orange"],
    "hold_at_most": OKABE_ITO["vermillion"],
    "all_silent": OKABE_ITO["reddish purple"],
    "sink_full": OKABE_ITO["blue"],
    "sink_paused": "url(#paused)",
}
TICKS_S = (
    *(1, 2, 5, 10, 15, 30, 60, 120, 300, 600, 900, 1800, 3600, 7200, 10_800, 21_600, 43_200),
    *(86_400, 172_800, 345_600, 604_800),
)
TICKS_AT_MOST = 8
_PAUSED = (
    '<defs><pattern id="paused" width="6" height="6" patternUnits="userSpaceOnUse" patternTransform="rotate(45)">'
    f'<rect width="3" height="6" fill="{OKABE_ITO["blue"]}"/></pattern></defs>'
)


class Scale(NamedTuple):
    """From instants to places from left to right."""

    from_ns: int
    to_ns: int

    def x(self, time_ns: int) -> float:
        """Where an instant is; those outside of the time at its end."""
        part = (time_ns - self.from_ns) / max(1, self.to_ns - self.from_ns)
        return round(LEFT + min(1.0, max(0.0, part)) * (WIDTH - LEFT - RIGHT), 1)


def picture(facts: Facts) -> str:
    """One `svg` element."""
    scale = Scale(facts.from_ns, facts.to_ns)
    lanes = _lanes(facts)
    lanes_top = 34
    behind_top = lanes_top + LANE * len(lanes) + 30
    late_top = behind_top + BEHIND + 28
    axis = late_top + LATE
    legend = list(_legend(facts, axis + 40))
    height = axis + 40 + 20 * ((len(legend) + 1) // 2)
    parts = [
        *_ticks(scale, lanes_top - 4, axis),
        *_unknown(facts, scale, lanes_top, behind_top - 26),
        *_holds(facts, lanes, scale, lanes_top),
        *_stalls(facts, [name for name, _ in lanes], scale, lanes_top),
        *_behind(facts, scale, behind_top),
        *_late(facts, scale, late_top),
        *_acts(facts, scale, lanes_top - 4, axis),
        *legend,
    ]
    says = escape("Who held the feed, how far the output was behind, and late events; the tables have every figure.")
    head = f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {WIDTH} {height}" role="img" aria-label="{says}">'
    return "\n".join((head, _PAUSED, *parts, "</svg>\n"))


def _rect(box: tuple[float, float, float, float], look: str, title: str) -> str:
    x, y, width, height = box
    return (
        f'<rect x="{x}" y="{y}" width="{max(round(width, 1), 1)}" height="{height}" {look}>'
        f"<title>{escape(title)}</title></rect>"
    )


def _text(x: float, y: float, text: str, look: str = "") -> str:
    return f'<text x="{x}" y="{y}"{look}>{escape(text)}</text>'


# ---- time -----------------------------------------------------------------------------------------------------------


def _ticks(scale: Scale, top: float, bottom: float) -> Iterator[str]:
    length_ns = max(1, scale.to_ns - scale.from_ns)
    step_s = next((step for step in TICKS_S if length_ns <= step * SECOND_NS * TICKS_AT_MOST), TICKS_S[-1])
    step_ns = step_s * SECOND_NS
    first = -(-scale.from_ns // step_ns) * step_ns
    for time_ns in range(first, scale.to_ns + 1, step_ns):
        x = scale.x(time_ns)
        yield f'<line x1="{x}" y1="{top}" x2="{x}" y2="{bottom}" class="grid"/>'
        yield _text(x, bottom + 16, _tick(time_ns, step_s), ' text-anchor="middle" class="dim"')


def _tick(time_ns: int, step_s: int) -> str:
    date, _, time = full(time_ns).partition(" ")
    if time_ns % DAY_NS == 0:
        return date
    return time if step_s % 60 else time[:5]


# ---- holds ----------------------------------------------------------------------------------------------------------


def _lanes(facts: Facts) -> list[tuple[str, list[Hold]]]:
    """A line for each holder, those that held longest; the rest share one; the slack has its own, the last."""
    by_name: dict[str, list[Hold]] = {}
    usual: list[Hold] = []
    for hold in facts.holds.listed:
        if hold.why in USUAL:
            usual += [] if hold.why == "nothing_held" else [hold]
            continue
        by_name.setdefault(_name(hold, facts), []).append(hold)
    order = sorted(by_name, key=lambda name: -sum(hold.lasted_ns for hold in by_name[name]))
    lanes = [(name, by_name[name]) for name in order[:LANES_AT_MOST]]
    others = [hold for name in order[LANES_AT_MOST:] for hold in by_name[name]]
    lanes += [(f"{len(order) - LANES_AT_MOST:,} others", others)] if others else []
    return [*lanes, ("waiting out the slack", usual)]


def _name(hold: Hold, facts: Facts) -> str:
    if hold.source is not None:
        return Foreign(hold.source).shown
    if hold.sink is not None:
        return f"sink {Foreign(hold.sink).shown}"
    stopped = "taken over or started" if facts.partition else "service stopped"
    return {"stopped": stopped, "all_silent": "all silent"}.get(hold.why, hold.why)


def _short(name: str) -> str:
    return name if len(name) <= NAME_CHARACTERS else name[: NAME_CHARACTERS - 1] + "…"


def _holds(facts: Facts, lanes: list[tuple[str, list[Hold]]], scale: Scale, top: float) -> Iterator[str]:
    clock = Clock(facts.from_ns, facts.to_ns)
    for place, (name, holds) in enumerate(lanes):
        y = top + place * LANE
        yield _text(LEFT - 10, y + BAR - 3, _short(name), ' text-anchor="end"')
        yield f'<line x1="{LEFT}" y1="{y + BAR}" x2="{WIDTH - RIGHT}" y2="{y + BAR}" class="grid"/>'
        for hold in holds:
            x = scale.x(hold.from_ns)
            look = _look(hold.why)
            title = f"{_name(hold, facts)}: {why_words(hold.why, WHYS, facts)}, {clock.at(hold.from_ns)} to "
            title += f"{clock.at(hold.to_ns)}, {lasted(hold.lasted_ns)}"
            yield _rect((x, y, scale.x(hold.to_ns) - x, BAR), look, title)


def _stalls(facts: Facts, names: list[str], scale: Scale, top: float) -> Iterator[str]:
    """A stroke below what is a stall."""
    for stall in facts.holds.stalls:
        name = _name(stall.phases[0], facts)
        y = top + (names.index(name) if name in names else len(names) - 2) * LANE + BAR + 2
        x = scale.x(stall.from_ns)
        yield _rect((x, y, scale.x(stall.to_ns) - x, 3), 'class="dark"', f"stall: {name}, {lasted(stall.lasted_ns)}")


def _look(why: str) -> str:
    if why in USUAL:
        return 'class="quiet"'
    return f'class="edge" fill="{COLOURS[why]}"' if why in COLOURS else 'class="dark"'


def _unknown(facts: Facts, scale: Scale, top: float, bottom: float) -> Iterator[str]:
    since = facts.holds.known_since_ns
    end = scale.to_ns if since is None else min(since, scale.to_ns)
    if end > scale.from_ns:
        box = (LEFT, top - 2, scale.x(end) - LEFT, bottom - top)
        yield _rect(box, 'class="unknown"', "not known: the history of holds begins later")
        yield _text(LEFT + 6, top + 12, "not known", ' class="dim"')


def _legend(facts: Facts, top: float) -> Iterator[str]:
    found = {hold.why for hold in facts.holds.listed} - {"nothing_held"}
    whys = [why for why in WHYS if why in found]
    for place, why in enumerate(whys):
        x, y = LEFT + place % 2 * 390, top + place // 2 * 20
        label = _text(x + 18, y + 10, why_words(why, WHYS, facts), ' class="dim"')
        yield f'<rect x="{x}" y="{y}" width="12" height="12" {_look(why)}/>{label}'
    if facts.holds.stalls:
        x, y = LEFT + len(whys) % 2 * 390, top + len(whys) // 2 * 20
        text = _text(x + 18, y + 10, "a stall, as the table tells it", ' class="dim"')
        yield f'<rect x="{x}" y="{y + 5}" width="12" height="3" class="dark"/>{text}'


# ---- the output's delay, late events, acts --------------------------------------------------------------------------


def _behind(facts: Facts, scale: Scale, top: float) -> Iterator[str]:
    series = facts.series
    bottom = top + BEHIND
    yield _text(LEFT, top - 8, "ordered output behind the newest event")
    yield f'<line x1="{LEFT}" y1="{bottom}" x2="{WIDTH - RIGHT}" y2="{bottom}" class="grid"/>'
    most = max((value for value in series.behind_ns if value is not None), default=0)
    end = scale.to_ns if series.since_ns is None else min(series.since_ns, scale.to_ns)
    if end > scale.from_ns:
        yield _rect((LEFT, top, scale.x(end) - LEFT, BEHIND), 'class="unknown"', "not known to this process")
        yield _text(LEFT + 6, top + 14, "not known", ' class="dim"')
    yield _text(LEFT - 10, bottom, "0 s", ' text-anchor="end" class="dim"')
    if not most:
        return
    yield _text(LEFT - 10, top + 8, lasted(most), ' text-anchor="end" class="dim"')
    for stretch in _stretches(facts):
        places = [(scale.x(t_ns), round(bottom - value / most * BEHIND, 1)) for t_ns, value in stretch]
        line = " ".join(f"{x},{y}" for x, y in places)
        yield f'<polygon points="{places[0][0]},{bottom} {line} {places[-1][0]},{bottom}" class="area"/>'
        yield f'<polyline points="{line}" class="line"/>'


def _stretches(facts: Facts) -> Iterator[list[tuple[int, int]]]:
    """What is known without a gap."""
    series, stretch = facts.series, list[tuple[int, int]]()
    for t_ns, value in zip(series.t_ns, series.behind_ns, strict=True):
        if stretch and (value is None or t_ns - stretch[-1][0] > 3 * series.step_ns):
            yield stretch
            stretch = []
        if value is not None:
            stretch.append((t_ns, value))
    if stretch:
        yield stretch


def _late(facts: Facts, scale: Scale, top: float) -> Iterator[str]:
    yield _text(LEFT, top - 6, "late events (bursts, by how many)")
    bottom = top + LATE
    yield f'<line x1="{LEFT}" y1="{bottom}" x2="{WIDTH - RIGHT}" y2="{bottom}" class="grid"/>'
    if facts.late is None or not facts.late.bursts:
        said = "not known" if facts.late is None else "none"
        yield _text(LEFT - 10, bottom, said, ' text-anchor="end" class="dim"')
        return
    clock = Clock(facts.from_ns, facts.to_ns)
    most = max(burst.events for burst in facts.late.bursts)
    yield _text(LEFT - 10, top + 8, f"{most:,}", ' text-anchor="end" class="dim"')
    for burst in facts.late.bursts:
        x = scale.x(burst.from_ns)
        height = max(2, round(burst.events / most * LATE, 1))
        title = f"{burst_words(burst)}, {clock.at(burst.from_ns)} to {clock.at(burst.to_ns)}"
        box = (x, bottom - height, max(3, scale.x(burst.to_ns) - x), height)
        yield _rect(box, f'fill="{OKABE_ITO["vermillion"]}" fill-opacity="0.8"', title)


def _acts(facts: Facts, scale: Scale, top: float, bottom: float) -> Iterator[str]:
    for number, act in enumerate(facts.acts.listed, start=1):
        x = scale.x(act.at_ns)
        title = f"act {number}: {act.act}"
        yield f'<line x1="{x}" y1="{top - 4}" x2="{x}" y2="{bottom}" class="act"><title>{title}</title></line>'
        yield _text(x, top - 8, f"{number}", ' text-anchor="middle"')
    if facts.acts.listed:
        yield _text(LEFT - 10, top - 8, "acts", ' text-anchor="end" class="dim"')

"""The report of an advice as one HTML file: pictures inlined as SVG, the same values as tables, lines to paste.

In goes the answer as plain values, as `--json` prints it, and nothing else: so both say the same, and the same capture
gives the same bytes. The file needs no other file, no network and no script, and says so to the browser. What comes
from events is escaped wherever it stands; each number stands in a `data` element with its exact value.
"""

from __future__ import annotations

import xml.etree.ElementTree as ET
from collections.abc import Iterable, Iterator, Mapping, Sequence
from html import escape
from typing import Any

from strandline.caution import CAUTION
from strandline.cli_answers import harmless
from strandline.ingest.timestamps import format_rfc3339
from strandline.page_style import OKABE_ITO, POLICY

from .pictures import PLAIN, Colours, Picture, pictures_of, svg
from .report_style import DARK, LIGHT, STYLE
from .wording import (
    NO_LINES,
    REORDERING,
    SEQUENCE,
    UNKNOWN,
    gap_text,
    range_text,
    rows_of,
    share_text,
    slack_text,
    spelled,
    time_text,
    value_text,
)

LINK = "{http://www.w3.org/1999/xlink}href"
# Colours that nothing else has, in place of which the page's own are put: they differ on a dark screen.
STANDING_IN = Colours("#010000", "#020000", "#030000", "#040000", "#050000", "none")
PAGE_COLOURS = {
    STANDING_IN.ink: "currentColor",
    STANDING_IN.grid: "var(--grid)",
    STANDING_IN.one: "var(--one)",
    STANDING_IN.other: "var(--other)",
    STANDING_IN.chosen: "var(--chosen)",
}

ET.register_namespace("", PLAIN.strip("{}"))
ET.register_namespace("xlink", LINK.partition("}")[0].strip("{"))


def report_html(answer: Mapping[str, Any]) -> str:
    """The whole file. `answer` is what `--json` prints, with `pictures`."""
    title = f"How long {harmless(answer['feed'])} should wait"
    parts = [*_head(answer, title), *_sections(answer), *_foot()]
    return "".join(f"{part}\n" for part in parts)


def _head(answer: Mapping[str, Any], title: str) -> Iterator[str]:
    yield f'<!DOCTYPE html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n<title>{escape(title)}</title>'
    yield f'<meta http-equiv="Content-Security-Policy" content="{POLICY}">'
    yield '<meta name="viewport" content="width=device-width, initial-scale=1">\n'
    yield '<meta name="color-scheme" content="light dark">'
    yield f"<style>\n{STYLE}</style>\n</head>\n<body>\n<main>\n<h1>{escape(title)}</h1>"
    first, second = answer["first"], answer["second"]
    events = first["events"] + second["events"]
    yield (
        f"<p>From a capture of {_data(events, value_text)} events, {_instant(first['from_ns'])} to "
        f"{_instant(second['to_ns'])}.</p>"
    )
    yield _facts(list(_answer(answer)))
    yield "<h2>Lines for the configuration</h2>"
    lines = escape(chr(10).join(answer["configuration"]))
    yield f"<pre>{lines}</pre>" if lines else f"<p>{escape(NO_LINES.capitalize())}.</p>"
    yield f'<p class="caution"><strong>Caution.</strong> {escape(CAUTION)}</p>'


def _answer(answer: Mapping[str, Any]) -> Iterator[tuple[str, str]]:
    """What the text output says first, as terms with their values."""
    wanted, first, second = answer["wanted"], answer["first"], answer["second"]
    sure = f"{100 * wanted['confidence']:g} %"
    longest = ""
    if wanted["at_most_ns"] is not None:
        longest = f", waiting at most {_data(wanted['at_most_ns'], spelled)}"
    yield "Wanted", f"late share {_data(wanted['late_share'], '{:g}'.format)}{longest}"
    between = ""
    if answer["interval_ns"] is not None:
        between = " to ".join(_data(each, time_text) for each in answer["interval_ns"])
        between = f" ({sure}: {between})"
    yield (
        "Tried" if answer["verdict"] == "too_short" else "Chosen",
        f"slack <strong>{_data(answer['slack_ns'], spelled)}</strong>{between}, on {_data(first['events'], value_text)}"
        f" events, up to {_instant(first['to_ns'])}",
    )
    low, high = answer["interval"]
    yield (
        "Verified",
        f"late share <strong>{_data(answer['late_share'], share_text)}</strong> ({sure}, Wilson: "
        f"{_data(low, share_text)} to {_data(high, share_text)}), {_data(second['late'], value_text)} late of "
        f"{_data(second['events'], value_text)} events that had no say in the choice",
    )
    verdict = answer["verdict"]
    yield "Verdict", f"<strong>{escape(verdict.replace('_', ' '))}</strong>: {escape(answer['explanation'])}"
    if verdict == "too_short":
        yield "Needed", f"{_data(answer['events_needed'], value_text)} events in each part for {sure}"
    gap = gap_text(answer)
    if gap is not None:
        yield "Gap", escape(gap)
    if answer["attainable"] is not None:
        least = _data(answer["least_ns"], time_text)
        yield "Attainable", f"{_data(answer['attainable'], share_text)} with the longest wait; the target needs {least}"
    lag = _data(answer["lag_ns_mean"], time_text)
    yield "Lag", f"what the watermark follows is {lag} behind the clock, on average"


def _sections(answer: Mapping[str, Any]) -> Iterator[str]:
    makers = {"share": _share, "hold": _hold, "sources": _sources, "time": _time}
    for picture in pictures_of(answer):
        yield f"<section>\n<h2>{escape(picture.title)}</h2>"
        yield _figure(picture, answer)
        yield from makers[picture.key](answer)
        yield "</section>"
    if answer["reordering"]:
        yield "<section>\n<h2>Reordering by event time</h2>"
        yield "<p>After RFC 4737 and RFC 5236, over all sources; equal times are in order.</p>"
        yield _figures_table("Reordering by event time", answer["reordering"], REORDERING)
        yield "</section>"
    if answer["sequence"]:
        yield "<section>\n<h2>Lost upstream, and late, by sequence number</h2>"
        yield from _sequence(answer["sequence"])
        yield "</section>"


# ---- one section each -----------------------------------------------------------------------------------------------


def _share(answer: Mapping[str, Any]) -> Iterator[str]:
    yield (
        "<p>The slack was chosen on the first part of the capture and tried on the second, which had no say in it. "
        "Where the two curves part, the feed has changed. The interval presumes that events are late independently of "
        "each other; where they are late in bursts, the tenths below differ by more than chance.</p>"
    )
    chosen = answer["slack_ns"]
    rows = [
        [
            _data(each["slack_ns"], slack_text) + (" (chosen)" if each["slack_ns"] == chosen else ""),
            _data(each["first_share"], share_text),
            _data(each["second_share"], share_text),
        ]
        for each in answer["pictures"]["curve"]
    ]
    yield _table("Late share by slack", ("slack", "late, first part", "late, second part"), rows)
    tenths = [
        [
            _instant(each["from_ns"]),
            _data(each["events"], value_text),
            _data(each["late"], value_text),
            _data(each["late"] / each["events"] if each["events"] else None, share_text),
        ]
        for each in answer["tenths"]
    ]
    yield _table("The second part in tenths, with the slack chosen", ("from", "events", "late", "late share"), tenths)


def _hold(answer: Mapping[str, Any]) -> Iterator[str]:
    yield "<p>What waiting costs: each event is held for about the slack, and that many are held at one time.</p>"
    headings = ("slack", "hold, mean", "hold, 99 in 100", "held, mean", "held, most")
    rows = []
    for each in (alternative["figure"] for alternative in answer["pictures"]["curve"]):
        p99 = (each["hold_ns_quantiles"] or {}).get("0.99")
        cells = (each["hold_ns_mean"], time_text), (p99, time_text)
        held = (each["held_events_mean"], value_text), (each["held_events_peak"], value_text)
        rows.append([_data(each["slack_ns"], slack_text), *(_data(value, words) for value, words in (*cells, *held))])
    yield _table("Hold and held events by slack", headings, rows)


def _sources(answer: Mapping[str, Any]) -> Iterator[str]:
    found = answer["sources"]
    yield (
        f"<p>{_data(len(found), value_text)} of {_data(answer['sources_known'], value_text)} sources: those with the "
        "most late events and those with the longest mean delay. Where one source alone costs the wait, mend its link "
        "rather than wait for it.</p>"
    )
    headings = (
        *("source", "events", "late", "late share", "mean delay", "lateness, 99 in 100", "the latest"),
        *("slack without it", "watermark nearer without it", "late if excused"),
    )
    rows = []
    for each in found:
        lateness = each["lateness"] or {}
        rows.append([
            _name(each["source"]),
            _data(each["events"], value_text),
            _data(each["late"], value_text),
            _data(each["late"] / each["events"] if each["events"] else None, share_text),
            *(_data(value, time_text) for value in (
                each["delay_ns_mean"], lateness.get("lateness_ns_p99"), lateness.get("lateness_ns_max"),
                each["slack_without_ns"], each["lag_saved_ns"],
            )),
            _data(each["late_if_excused"], value_text),
        ])  # fmt: skip
    yield _table("The sources that cost most", headings, rows)


def _time(answer: Mapping[str, Any]) -> Iterator[str]:
    by_day = answer["pictures"]["by_day"]
    if by_day:
        yield "<p>By the hour of the arrival, UTC, all days of the capture together, both parts.</p>"
    else:
        yield "<p>By the time of the arrival since the capture begins; it is shorter than a day. Both parts.</p>"
    rows = []
    for step in answer["pictures"]["steps"]:
        found = step["lateness"]
        rows.append([
            f"{_data(step['from_ns'], _clock)} to {_data(step['to_ns'], _clock)}",
            _data(found["events"], value_text),
            _data(found["late"], value_text),
            _data(found["late_share"], share_text),
            *(_data(found[f"lateness_ns_{which}"], time_text) for which in ("p50", "p99", "max")),
        ])  # fmt: skip
    headings = ("time", "events", "late", "late share", "lateness, median", "lateness, 99 in 100", "the latest")
    yield _table("Lateness by time", headings, rows)


def _sequence(found: Mapping[str, Any]) -> Iterator[str]:
    yield (
        f"<p>By the sequence number at <code>{escape(harmless(found['pointer']))}</code>, source by source. A number "
        "that was jumped over is missing. If it comes later it is late; if it never came by the end of the capture it "
        "was lost before it reached this feed, and no slack brings it back.</p>"
    )
    yield _figures_table("By sequence number", found, SEQUENCE)
    yield _note_of(len(found["sources"]), found["sources_known"], "sources", "lost most, then late most")
    headings = (
        *("source", "received", "repeats", "late", "below its first", "gaps", "lost", "may come yet"),
        *("late time, median", "late time, longest", "remark"),
    )
    names = ("received", "duplicates", "late", "before_first", "gaps", "lost", "may_fill_yet")
    yield _table("By source", headings, [
        [
            _name(each["source"]),
            *(_data(each[name], value_text) for name in names),
            *(_data(each[f"late_time_ns_{which}"], time_text) for which in ("p50", "max")),
            escape(each["doubt"] or ""),
        ]
        for each in found["sources"]
    ])  # fmt: skip
    yield _note_of(len(found["lost_ranges"]), found["lost_ranges_known"], "ranges lost upstream", "longest")
    yield _table("Lost upstream", ("source", "numbers", "lost", "missed at", "missing for", "remark"), [
        [
            _name(each["source"]), _range(each), _data(each["lost"], value_text), _instant(each["missed_at_ns"]),
            _data(each["missing_for_ns"], time_text), "may come yet" if each["may_fill_yet"] else "",
        ]
        for each in found["lost_ranges"]
    ])  # fmt: skip
    yield _note_of(len(found["filled_gaps"]), found["gaps_filled"], "gaps that filled", "slowest")
    yield _table("Late, but all there", ("source", "numbers", "late", "missed at", "filled after"), [
        [
            _name(each["source"]), _range(each), _data(each["late"], value_text), _instant(each["missed_at_ns"]),
            _data(each["filled_after_ns"], time_text),
        ]
        for each in found["filled_gaps"]
    ])  # fmt: skip


def _foot() -> Iterator[str]:
    yield (
        "<footer>\n<p>Late events of the second part, and shares by slack, are exact; the slack chosen lies at most "
        "0.2 % above the least one, before it is rounded up to three digits; quantiles of lateness and hold lie within "
        "1 %. Repeated events, promises, excuses and <code>hold_at_most</code> are not followed. All of this is about "
        "the traffic that was captured: tomorrow's may be otherwise.</p>"
    )
    colours = ", ".join(name for name, value in OKABE_ITO.items() if value in {*LIGHT.values(), *DARK.values()})
    yield (
        f"<p>Colours: {colours}, of the palette of Okabe and Ito (2008), told apart with the common kinds of colour "
        "blindness too. Intervals: Wilson (1927).</p>\n</footer>\n</main>\n</body>\n</html>"
    )


# ---- pieces ---------------------------------------------------------------------------------------------------------


def _data(value: Any, words: Any) -> str:
    """A number in words, with its exact value for programs; `unknown` where there is none."""
    if value is None:
        return UNKNOWN
    return f'<data value="{value!r}">{escape(words(value))}</data>'


def _instant(ns: int) -> str:
    return _data(ns, format_rfc3339)


def _clock(ns: int) -> str:
    seconds = ns // 10**9
    hours, minutes = divmod(seconds // 60, 60)
    return f"{hours:02d}:{minutes:02d}" + (f":{seconds % 60:02d}" if seconds % 60 else "")


def _name(name: str) -> str:
    return f"<bdi>{escape(harmless(name))}</bdi>"


def _range(each: Mapping[str, Any]) -> str:
    return escape(range_text(each["first"], each["last"]))


def _facts(facts: Sequence[tuple[str, str]]) -> str:
    rows = "\n".join(f"<dt>{escape(term)}</dt>\n<dd>{value}</dd>" for term, value in facts)
    return f"<dl>\n{rows}\n</dl>"


def _note_of(shown: int, known: int, things: str, which: str) -> str:
    if not known:
        return f"<p>No {things}.</p>"
    rest = f", the {which}" if shown < known else ""
    return f"<p>{_data(shown, value_text)} of {_data(known, value_text)} {things}{rest}.</p>"


def _figures_table(caption: str, figures: Mapping[str, Any], names: Mapping[str, tuple[str, str]]) -> str:
    rows = [
        [escape(row.name), UNKNOWN if row.value is None else _data(row.value, lambda _, text=row.text: text),
         escape(row.defined_in)]
        for row in rows_of(figures, names)
    ]  # fmt: skip
    return _table(caption, ("figure", "value", "defined in"), rows)


def _table(caption: str, headings: Sequence[str], rows: Iterable[Sequence[str]]) -> str:
    """A table of cells that are HTML already; nothing where there is no row."""
    body = ["<tr>" + "".join(_cells(row)) + "</tr>" for row in rows]
    if not body:
        return ""
    head = "".join(f'<th scope="col">{escape(heading)}</th>' for heading in headings)
    return (
        f'<div class="wide" role="region" aria-label="{escape(caption)}" tabindex="0">\n<table>\n'
        f"<caption>{escape(caption)}</caption>\n<thead><tr>{head}</tr></thead>\n<tbody>\n"
        + "\n".join(body)
        + "\n</tbody>\n</table>\n</div>"
    )


def _cells(row: Sequence[str]) -> Iterator[str]:
    yield f'<th scope="row">{row[0]}</th>'
    yield from (f"<td>{cell}</td>" for cell in row[1:])


def _figure(picture: Picture, answer: Mapping[str, Any]) -> str:
    return f"<figure>\n{inlined(svg(picture, answer, STANDING_IN), picture)}\n</figure>"


def inlined(document: str, picture: Picture) -> str:
    """An SVG document as an element of a page: named for who cannot see it, its ids its own, in the page's colours.

    It is read and written as XML, so that a text in it stays a text whatever it says.
    """
    root = ET.fromstring(document)
    for parent in list(root.iter()):
        for child in list(parent):
            if child.tag in (f"{PLAIN}metadata", f"{PLAIN}style"):
                parent.remove(child)
    for element in root.iter():
        for name, value in element.attrib.items():
            element.set(name, _attribute(name, value, picture.key))
    root.attrib.pop("version", None)
    for size in ("width", "height"):
        root.attrib.pop(size, None)
    root.set("role", "img")
    root.set("aria-labelledby", f"{picture.key}-title {picture.key}-desc")
    for place, (tag, text) in enumerate((("title", picture.title), ("desc", picture.alternative))):
        element = ET.Element(f"{PLAIN}{tag}", {"id": f"{picture.key}-{tag}"})
        element.text = text
        root.insert(place, element)
    return ET.tostring(root, encoding="unicode").strip()


def _attribute(name: str, value: str, key: str) -> str:
    if name == "id":
        return f"{key}-{value}"
    if name == LINK and value.startswith("#"):
        return f"#{key}-{value[1:]}"
    value = value.replace("url(#", f"url(#{key}-")
    if name in ("style", "fill", "stroke"):
        for colour, own in PAGE_COLOURS.items():
            value = value.replace(colour, own)
    return value

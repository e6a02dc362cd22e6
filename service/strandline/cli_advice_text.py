"""How the answer of `strandline advise` reads in a terminal. Nothing is worked out here; the report says the same."""

from __future__ import annotations

import sys
import textwrap
from collections.abc import Iterator, Mapping, Sequence
from typing import Any

from .caution import CAUTION
from .cli_answers import harmless, write_table
from .ingest.timestamps import format_rfc3339
from .replay.wording import (
    NO_LINES,
    REORDERING,
    SEQUENCE,
    gap_text,
    range_text,
    rows_of,
    spelled,
    time_text,
    value_text,
)

HEADINGS = ("slack", "late, first part", "late, second part", "hold mean", "hold p99", "held mean", "held peak", "")
SOURCE_HEADINGS = (
    *("source", "events", "late", "mean delay"),
    *("slack without it", "watermark nearer without it", "late if excused"),
)
NUMBERED_HEADINGS = (
    *("source", "received", "repeats", "late", "below its first", "gaps", "lost", "may come yet"),
    *("late time, median", "longest", "remark"),
)
LOST_HEADINGS = ("source", "numbers lost", "how many", "missed at", "missing for", "remark")
FILLED_HEADINGS = ("source", "numbers late", "how many", "missed at", "filled after")
FIGURE_HEADINGS = ("figure", "value", "defined in")


def write_advice(answer: Mapping[str, Any]) -> None:
    """Write it to stdout. `answer` is what `--json` prints."""
    sys.stdout.write("".join(f"{line}\n" for line in _lines(answer)))
    if "alternatives" in answer:
        sys.stdout.write("\n")
        chosen_ns = answer["slack_ns"]
        remark = "tried" if answer["verdict"] == "too_short" else "chosen"
        write_table(HEADINGS, [_alternative(each, chosen_ns, remark) for each in answer["alternatives"]])
        if answer["sources_known"] > 1:
            sys.stdout.write(f"\nthe sources that cost most, {len(answer['sources'])} of {answer['sources_known']:,}\n")
            write_table(SOURCE_HEADINGS, map(_source, answer["sources"]))
    if answer["reordering"]:
        sys.stdout.write("\nreordering by event time\n")
        _write_figures(answer["reordering"], REORDERING)
    if answer["sequence"]:
        _write_sequence(answer["sequence"])
    sys.stdout.write("\n" + textwrap.fill(CAUTION, 98) + "\n")
    sys.stdout.write("\n" + "".join(f"{line}\n" for line in answer["configuration"] or [NO_LINES]))


def _lines(answer: Mapping[str, Any]) -> Iterator[str]:
    first, second, wanted = answer["first"], answer["second"], answer["wanted"]
    sure = f"{100 * wanted['confidence']:g} %"
    begin, end = format_rfc3339(first["from_ns"]), format_rfc3339(second["to_ns"])
    yield f"{harmless(answer['feed'])}, {begin} to {end}"
    longest = "" if wanted["at_most_ns"] is None else f", waiting at most {spelled(wanted['at_most_ns'])}"
    yield f"wanted    late share {wanted['late_share']:g}{longest}"
    between = ""
    if answer["interval_ns"] is not None:
        between = f" ({sure}: {' to '.join(map(time_text, answer['interval_ns']))})"
    tried = "tried " if answer["verdict"] == "too_short" else "chosen"
    yield f"{tried}    slack {spelled(answer['slack_ns'])}{between}"
    yield f"          on {first['events']:,} events, up to {format_rfc3339(first['to_ns'])}"
    low, high = answer["interval"]
    yield f"verified  late share {answer['late_share']:.3g} ({sure}: {low:.3g} to {high:.3g}), {second['late']:,} late"
    yield f"          of {second['events']:,} events that had no say in the choice"
    tenths = ("-" if not each["events"] else f"{each['late'] / each['events']:.2g}" for each in answer["tenths"])
    yield "tenths    " + " ".join(tenths)
    yield f"verdict   {answer['verdict'].replace('_', ' ')}: {answer['explanation']}"
    if answer["verdict"] == "too_short":
        yield f"          {answer['events_needed']:,} events are needed in each part for {sure}"
    gap = gap_text(answer)
    if gap is not None:
        yield f"          {gap}"
    if answer["attainable"] is not None:
        least = time_text(answer["least_ns"])
        yield f"          the longest wait gives {answer['attainable']:.3g}; the target needs {least}"
    if "lag_ns_mean" in answer:
        yield f"lag       what the watermark follows is {time_text(answer['lag_ns_mean'])} behind the clock, on average"
    yield f"read in   {answer['seconds']:.2f} s, {answer['events_per_s']:,.0f} events/s"


def _alternative(each: Mapping[str, Any], chosen_ns: int, remark: str) -> Sequence[str]:
    figure = each["figure"]
    return (
        spelled(each["slack_ns"]),
        f"{each['first_share']:.3g}",
        f"{each['second_share']:.3g}",
        time_text(figure["hold_ns_mean"]),
        time_text((figure["hold_ns_quantiles"] or {}).get("0.99")),
        value_text(figure["held_events_mean"]),
        value_text(figure["held_events_peak"]),
        remark if each["slack_ns"] == chosen_ns else "",
    )


def _source(cost: dict[str, Any]) -> Sequence[str]:
    return (
        cost["source"],
        f"{cost['events']:,}",
        f"{cost['late']:,}",
        time_text(cost["delay_ns_mean"]),
        time_text(cost["slack_without_ns"]),
        time_text(cost["lag_saved_ns"]),
        value_text(cost["late_if_excused"]),
    )


def _write_figures(figures: Mapping[str, Any], names: Mapping[str, tuple[str, str]]) -> None:
    write_table(FIGURE_HEADINGS, [(row.name, row.text, row.defined_in) for row in rows_of(figures, names)])


def _write_sequence(found: Mapping[str, Any]) -> None:
    sys.stdout.write(f"\nlost upstream, and late, by the sequence number at {harmless(found['pointer'])}\n")
    _write_figures(found, SEQUENCE)
    sys.stdout.write(f"\nsources by what they lost, {len(found['sources'])} of {found['sources_known']:,}\n")
    write_table(NUMBERED_HEADINGS, map(_numbered, found["sources"]))
    if found["doubtful_sources"]:
        sys.stdout.write(f"the numbers of {found['doubtful_sources']:,} sources say little: see their remarks\n")
    lost, filled = found["lost_ranges"], found["filled_gaps"]
    sys.stdout.write(f"\nlost upstream, the longest {len(lost):,} of {found['lost_ranges_known']:,} ranges\n")
    if lost:
        write_table(LOST_HEADINGS, map(_lost, lost))
    sys.stdout.write(f"\nlate, but all there, the slowest {len(filled):,} of {found['gaps_filled']:,} gaps\n")
    if filled:
        write_table(FILLED_HEADINGS, map(_filled, filled))


def _numbered(each: Mapping[str, Any]) -> Sequence[str]:
    names = ("received", "duplicates", "late", "before_first", "gaps", "lost", "may_fill_yet")
    counts = (each[name] for name in names)
    times = time_text(each["late_time_ns_p50"]), time_text(each["late_time_ns_max"])
    return (each["source"], *(value_text(count) for count in counts), *times, each["doubt"] or "")


def _lost(each: Mapping[str, Any]) -> Sequence[str]:
    remark = "may come yet" if each["may_fill_yet"] else ""
    return (*_missed(each, each["lost"]), time_text(each["missing_for_ns"]), remark)


def _filled(each: Mapping[str, Any]) -> Sequence[str]:
    return (*_missed(each, each["late"]), time_text(each["filled_after_ns"]))


def _missed(each: Mapping[str, Any], count: int) -> Sequence[str]:
    numbers = range_text(each["first"], each["last"])
    return (each["source"], numbers, value_text(count), format_rfc3339(each["missed_at_ns"]))

"""`strandline advise` for a feed with `order = "source"`: the answer as plain values, and how it reads in a terminal.

The choice itself lives in `replay.advice_by_source`. What a feed in order as a whole is told is `cli_advise`.
"""

from __future__ import annotations

import sys
import textwrap
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import asdict
from typing import Any

import msgspec
import numpy as np

from .caution import CAUTION
from .cli_answers import harmless, write_table
from .core.settings import SECOND_NS
from .ingest.timestamps import format_rfc3339
from .replay.advice import SUPPORTED, VERDICTS, Part, rounded_up
from .replay.advice_by_source import SHOWN_FIRST, AdviceBySource, SourceRow
from .replay.sequence import name_of
from .replay.wording import NO_LINES, decimal, spelled, time_text, value_text

SOURCES_IN_JSON = 10_000
WAYS = {
    "pooled": "one slack, the share kept over all events",
    "fixed": "one slack, the share kept for every source",
    "steered": "a slack for each source, steered",
}
WAY_HEADINGS = ("how to wait", "slack", "late, second part", "sources above the share", "hold mean", "")
HEADINGS = (
    *("source", "slack", "first part", "second part", "late"),
    *("late share", "its interval", "late if fixed", "verdict"),
)
RECOMMENDED = {
    "fixed": "one slack for all: a slack for each source would not be held for clearly less long",
    "steered": "a slack for each source: held for clearly less long than one that keeps the share for every source",
}
TOO_SHORT = (
    "the capture is too short for this claim: fewer than nine in ten events of the second part are of sources with "
    "enough events in each part; capture for longer, or ask for a larger share"
)


def document(feed: str, names: Sequence[str], advice: AdviceBySource, shown: int, quick: bool) -> dict[str, Any]:
    """The answer. `shown`: sources in a terminal; a program gets up to SOURCES_IN_JSON, the rest summed either way."""
    verdicts = advice.verdicts()[np.flatnonzero(advice.first_events + advice.second_events)]
    rows, rest = advice.rows(shown)
    supported = advice.verdict in SUPPORTED
    late, events = advice.totals()
    answer = {
        "feed": feed,
        "order": "source",
        "wanted": advice.wanted._asdict(),
        "idle_after_ns": advice.idle_after_ns,
        "first": _part(advice.first),
        "second": _part(advice.second) | {"judged_late": late, "judged_events": events},
        "events_needed": advice.events_needed,
        "relative_error": advice.relative_error,
        "ways": [asdict(way) for way in advice.ways.values()],
        "recommended": advice.recommended,
        "verdict": advice.verdict,
        "explanation": TOO_SHORT if advice.verdict == "too_short" else VERDICTS[advice.verdict],
        "sources_known": len(verdicts),
        "verdicts": {name: int(np.count_nonzero(verdicts == place)) for place, name in enumerate(SHOWN_FIRST)},
        "sources": [_row(names, row) for row in rows],
        "rest": asdict(rest),
        "held_followed": not quick,
        "configuration": configuration_lines(feed, advice) if supported else [],
    }
    plain: dict[str, Any] = msgspec.json.decode(msgspec.json.encode(answer))
    return plain


def _part(part: Part) -> dict[str, int]:
    return {"from_ns": part.from_ns, "to_ns": part.to_ns, "events": part.events}


def _row(names: Sequence[str], row: SourceRow) -> dict[str, Any]:
    return row._asdict() | {"source": name_of(names, row.source)}


def configuration_lines(feed: str, advice: AdviceBySource) -> list[str]:
    """Lines to paste: what is recommended, and the other way as a remark."""
    share = decimal(advice.wanted.late_share)
    longest = advice.wanted.at_most_ns or max(rounded_up(2 * advice.ways["steered"].slack_ns), SECOND_NS)
    fixed = f'slack = "{spelled(advice.ways["fixed"].slack_ns)}"'
    steered = f'slack = {{ late_share = {share}, at_most = "{spelled(longest)}" }}'
    first, other = (steered, fixed) if advice.recommended == "steered" else (fixed, steered)
    lines = ["[[feed]]", f"name = {msgspec.json.encode(feed).decode()}", 'order = "source"', first, f"# or {other}"]
    needed = longest if advice.recommended == "steered" else advice.ways["fixed"].slack_ns
    if advice.idle_after_ns is not None and advice.idle_after_ns < needed:
        lines.append(f'idle_after = "{spelled(needed)}"  # at least as long as the slack')
    return lines


# ---- in a terminal --------------------------------------------------------------------------------------------------


def write(answer: Mapping[str, Any]) -> None:
    """Write it to stdout."""
    sys.stdout.write("".join(f"{line}\n" for line in _lines(answer)) + "\n")
    write_table(WAY_HEADINGS, [_way(each, answer) for each in answer["ways"]])
    sys.stdout.write(f"\nthe sources to look at, {len(answer['sources']):,} of {answer['sources_known']:,}\n")
    rows = [_source(each) for each in answer["sources"]]
    if answer["rest"]["sources"]:
        rows.append(_rest(answer["rest"]))
    write_table(HEADINGS, rows)
    sys.stdout.write("\n" + textwrap.fill(CAUTION, 98) + "\n")
    sys.stdout.write("\n" + "".join(f"{line}\n" for line in answer["configuration"] or [NO_LINES]))


def _lines(answer: Mapping[str, Any]) -> Iterator[str]:
    first, second, wanted = answer["first"], answer["second"], answer["wanted"]
    yield (
        f"{harmless(answer['feed'])}, in order within each source, {format_rfc3339(first['from_ns'])} to "
        f"{format_rfc3339(second['to_ns'])}"
    )
    longest = "" if wanted["at_most_ns"] is None else f", waiting at most {spelled(wanted['at_most_ns'])}"
    yield f"wanted    late share {wanted['late_share']:g} of each source{longest}"
    yield f"chosen    on {first['events']:,} events, up to {format_rfc3339(first['to_ns'])}"
    yield f"verified  on {second['events']:,} events that had no say in the choice"
    best = next(way for way in answer["ways"] if way["name"] == answer["recommended"])
    too_short = answer["verdict"] == "too_short"
    yield f"{'tried     ' if too_short else 'advice    '}{_slack_of(best)}: {RECOMMENDED[answer['recommended']]}"
    yield f"verdict   {answer['verdict'].replace('_', ' ')}: {answer['explanation']}"
    counts = ", ".join(f"{count:,} {name.replace('_', ' ')}" for name, count in answer["verdicts"].items() if count)
    yield f"sources   {counts} (each with a slack of its own)"
    if answer["verdicts"]["too_short"]:
        sure = f"{100 * wanted['confidence']:g} %"
        yield f"          {answer['events_needed']:,} events of a source are needed in each part for {sure}"
    yield f"read in   {answer['seconds']:.2f} s, {answer['events_per_s']:,.0f} events/s"


def _slack_of(way: Mapping[str, Any]) -> str:
    if way["name"] == "steered":
        return f"{spelled(way['least_ns'])} to {spelled(way['slack_ns'])}, median {time_text(way['median_ns'])}"
    return spelled(way["slack_ns"])


def _way(way: Mapping[str, Any], answer: Mapping[str, Any]) -> Sequence[str]:
    return (
        WAYS[way["name"]],
        _slack_of(way),
        f"{way['late'] / answer['second']['events']:.3g}",
        f"{way['above']:,}",
        time_text(way["hold_ns_mean"]),
        "advised" if way["name"] == answer["recommended"] and answer["configuration"] else "",
    )


def _source(row: Mapping[str, Any]) -> Sequence[str]:
    low, high = row["interval"]
    return (
        row["source"],
        spelled(row["slack_ns"]),
        f"{row['first_events']:,}",
        f"{row['second_events']:,}",
        f"{row['late']:,}",
        "-" if row["late_share"] is None else f"{row['late_share']:.3g}",
        f"{low:.3g} to {high:.3g}",
        f"{row['late_fixed']:,}",
        row["verdict"].replace("_", " "),
    )


def _rest(rest: Mapping[str, Any]) -> Sequence[str]:
    counts = (f"{rest[name]:,}" for name in ("first_events", "second_events", "late"))
    share = rest["late"] / rest["second_events"] if rest["second_events"] else None
    return (
        f"{value_text(rest['sources'])} others",
        f"up to {spelled(rest['longest_ns'])}",
        *counts,
        "-" if share is None else f"{share:.3g}",
        "",
        f"{rest['late_fixed']:,}",
        "",
    )

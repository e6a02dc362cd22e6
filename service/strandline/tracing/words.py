"""A traced event in one or two sentences, for a person who was woken up: out of its document, nothing else."""

from __future__ import annotations

from typing import Any

from ..sinks_of import LANE_STORE

Json = dict[str, Any]

# Why a mark was set, in words for a person; keys are the names of core.records.Cause.
CAUSES: dict[str, str] = {
    "sources": "the source furthest behind had moved on",
    "clock": "the arrival clock had moved on",
    "silence": "every source was silent or excused, so the most advanced one led",
    "hold_at_most": "events had been held for hold_at_most",
    "drain": "an operator drained the feed",
}


def because(stood: Json) -> str:
    """Why a watermark stood where it did, as the end of a sentence."""
    source = f" ({stood['source']})" if stood["source"] is not None else ""
    return f"{stood['explanation']}{source}"


def explained(match: Json) -> str:
    """What became of one event, and why."""
    return _EXPLAIN[match["fate"]](match)


def _held(match: Json) -> str:
    held = match["held"]
    hold = held["hold"]
    holder = hold["source"] if hold["source"] is not None else hold["sink"]
    who = "" if holder is None else f" ({holder})"
    lacks = (
        "there is no watermark yet" if held["lacks_s"] is None
        else f"the watermark must move on by {held['lacks_s']:.3f} s" if held["lacks_s"] > 0
        else "the watermark is there; it leaves with the next mark"
    )  # fmt: skip
    so = f"{lacks}; {hold['explanation']}{who}."
    if not held["running"]:
        return (
            f"It was held for {held['held_for_s']:.3f} s when the journal ended, and {so} "
            "It leaves when the feed is running again."
        )
    return (
        f"It is held for {held['held_for_s']:.3f} s so far, and {so} "
        f"It leaves by {held['at_the_latest']} at the latest, unless a sink holds the feed up."
    )


def _released(match: Json) -> str:
    released = match["released"]
    why = "" if released["mark"] is None else f", because {because(released['mark'])}"
    return (
        f"It was released at {released['at']} in batch {released['batch']}, as event {released['position'] + 1} of "
        f"{released['events']}, {released['held_for_s']:.3f} s after it came{why}. {_sinks(match)}"
    )


def _late(match: Json) -> str:
    late, stood = match["late"], match["watermark"]
    if match["matched_by"] == "kept":
        return (
            f"It came {late['late_by_s']:.3f} s too late: the watermark stood at {late['behind']}. It was handed to "
            f"the late lane as batch {late['batch']}, and the lane store keeps it. {_kept_sinks(match)}"
        )
    since = "" if stood is None else f", where it stood since {stood['since']} because {because(stood)}"
    return (
        f"It came {late['late_by_s']:.3f} s too late: the watermark stood at {late['behind']}{since}. "
        f"It went to the late lane. {_sinks(match)}"
    )


def _quarantined(match: Json) -> str:
    found = match["quarantined"]
    act = f" ({found['what_to_do']})" if found["what_to_do"] else ""
    return f"It is in quarantine: {found['reason']}: {found['detail']}{act}."


def _duplicate(match: Json) -> str:
    of = match["duplicate"]["of"]
    if of is None:
        return "It is a repeat of an event that came before what could be read; it went no further."
    return (
        f"It is a repeat of the event that came at {of['arrived']} on line {of['line']} of the request at position "
        f"{of['position']}; it went no further."
    )


def _unknown(match: Json) -> str:
    return f"It came, but what became of it cannot be told: {match['unknown']['why']}."


def _kept_sinks(match: Json) -> str:
    """Who has it by the batch's number alone: who took the lane in those days is not known."""
    if not match["sinks"]:
        return f"Which sinks took it is not known any more.{_repaired(match)}"
    sinks = {sink: each for sink, each in match["sinks"].items() if sink != LANE_STORE}
    by_state = {state: [sink for sink, each in sinks.items() if each["state"] == state] for state in _KEPT}
    told = [f"{_KEPT[state]}: {', '.join(names)}" for state, names in by_state.items() if names]
    now = f"Of the sinks that take that lane now, {'; '.join(told)}." if told else "No other sink takes that lane now."
    return f"{now} Which others took it then is not known any more.{_repaired(match)}"


_KEPT = {
    "taken": "these are at or beyond that batch and so have it, unless one was added to the feed later",
    "refused": "these refused it",
    "behind": "these are before that batch and so do not have it",
}


def _repaired(match: Json) -> str:
    repaired = [sink for sink, each in match.get("repairs", {}).items() if each["sent"]]
    return f" Sent as a repair to {', '.join(repaired)}." if repaired else ""


def _sinks(match: Json) -> str:
    by_state: dict[str, list[str]] = {}
    for sink, each in match.get("sinks", {}).items():
        by_state.setdefault(each["state"], []).append(sink)
    words = {"taken": "Taken by", "waiting": "Not yet taken by", "refused": "Refused by"}
    told = [f"{words[state]} {', '.join(by_state[state])}." for state in words if state in by_state]
    return (" ".join(told) + _repaired(match)).strip() or "No sink takes this lane."


_EXPLAIN = {
    "held": _held,
    "released": _released,
    "late": _late,
    "quarantined": _quarantined,
    "duplicate": _duplicate,
    "unknown": _unknown,
}

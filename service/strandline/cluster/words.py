"""How a cluster stands, in a sentence that needs nobody to read a table: for the dashboard, the command and people.

Pure: the document of GET /v1/cluster in, words out. What is worst is said first; at most two things are said.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping, Sequence
from typing import Any, NamedTuple

from .causes import AWAY, BARRED, LEASE, NAME, SETTINGS, TAKEOVER

FINE, WATCH, BAD = "fine", "watch", "bad"
NOBODYS_AFTER_S = 5.0  # what changes hands is nobody's for a moment: a look takes a second, and so does the taking
QUIET_SHARE = 0.6  # of the lease: a heartbeat comes each fifth of it, so at least two are missing by then
FAR_BEHIND_MESSAGES = 1000  # of 50 to 500 events each; what is being caught up after a takeover is less, or soon gone
_NUMBERS = re.compile(r"\d[\d,.:]*")
_ORDER = (FINE, WATCH, BAD)


class Said(NamedTuple):
    """How bad it is, what is so, and what to do."""

    level: str
    says: str
    next: str


def said(document: Mapping[str, Any]) -> Said:
    """Of a document, or of that part of it that somebody may see. `says` is one sentence or two, never empty."""
    found = sorted(_troubles(document), key=lambda each: -_ORDER.index(each.level))
    if not found:
        return Said(FINE, _well(document), "Nothing to do.")
    return Said(found[0].level, " ".join(each.says for each in found[:2]), found[0].next)


def is_far_behind(row: Mapping[str, Any]) -> bool:
    """Whether a partition has so many messages before it that somebody should know."""
    behind = row["behind_messages"]
    return behind is not None and behind >= FAR_BEHIND_MESSAGES


def eyes_first(rows: Sequence[Mapping[str, Any]]) -> list[Mapping[str, Any]]:
    """Partitions, those first that need somebody's eyes: nobody's, changing hands or hindered, far behind.

    Else as configured.
    """
    return sorted(rows, key=_rank)


def _rank(row: Mapping[str, Any]) -> tuple[int, int]:
    if row["state"] == "nobody's":
        return 0, 0
    if row["state"] != "owned" or row.get("words"):
        return 1, 0
    return (2, -row["behind_messages"]) if is_far_behind(row) else (3, 0)


def _troubles(document: Mapping[str, Any]) -> Iterator[Said]:
    if document["away_s"] is not None or not document["connected"]:
        yield _away(document)
        return  # what this instance saw of the others is old
    yield from _nobodys(document)
    yield from _hindered(document)
    yield from _quiet(document)
    yield from _causes(document)
    yield from _behind(document)
    yield from _gone(document)


def _away(document: Mapping[str, Any]) -> Said:
    me, away_s = document["instance"], document["unseen_s"]
    for_s = "" if away_s < 1 else f" for {_age(away_s)}"
    level = BAD if away_s > document["lease_s"] else WATCH
    if document["connected"]:
        name = _told(document, NAME)
        why = f": {name}" if name else ""
        next = "Wait some seconds. If it lasts, look at the brokers: they may have no leader."
        if "another" in name:
            next = f"Find the other process called {me}, and start one of the two under another name."
        return Said(level, f"{me} has not been in the cluster{for_s}{why}.", next)
    lacks = "could not join the cluster" if (barred := _told(document, BARRED)) else "has had no broker"
    why = barred or _told(document, AWAY)
    leases = _told(document, LEASE)
    says = f"{me} {lacks}{for_s}{f': {why}' if why else ''}. "
    unseen = "what others do cannot be seen from here."
    says += f"{_capital(leases, ())}; {unseen}" if leases else _capital(unseen, ()) + "."
    if barred:
        return Said(level, says, "Mend what it says; it tries again by itself.")
    return Said(level, says, "Mend what it says, or look at the brokers and the way to them; it tries again by itself.")


def _nobodys(document: Mapping[str, Any]) -> Iterator[Said]:
    rows = [row for row in document["partitions"] if row["state"] == "nobody's"]
    if not rows:
        return
    ages = [row["nobodys_s"] for row in rows if row["nobodys_s"] is not None]
    lasts = max(ages, default=0.0)
    all_of_them = len(document["partitions"])
    subject = f"{len(rows)} of {_counted(all_of_them, 'partition')} {'is' if len(rows) == 1 else 'are'} nobody's"
    lasting = f"for {_age(lasts)} now" if lasts >= 1 else "for a moment"
    why = _who_left(document) or lasting
    if hindered := _told(document, TAKEOVER):
        subject, why = f"{subject}, {lasting}", hindered
        next = "Mend what hinders it: it is tried again by itself."
    elif lasts < NOBODYS_AFTER_S:
        next = f"Wait some seconds: another instance takes {'it' if len(rows) == 1 else 'them'}."
    else:
        next = "Look at the logs of the instances: what keeps them from taking over? Start the one that is missing."
    yield Said(BAD if lasts >= NOBODYS_AFTER_S else WATCH, f"{subject}: {why}.", next)


def _who_left(document: Mapping[str, Any]) -> str:
    """The instance that is missing, or about to be."""
    for one in document["gone"]:
        if one["owned"]:
            return f"{one['instance']} {'was stopped' if one['stopped'] else 'was last seen'} {_age(one['seen_s'])} ago"
    return ""


def _quiet(document: Mapping[str, Any]) -> Iterator[Said]:
    lease_s = document["lease_s"]
    for one in document["instances"]:
        if one["seen_s"] > QUIET_SHARE * lease_s:
            owns = f", and the {_counted(one['owns'], 'partition')} that it owns stand{'s' * (one['owns'] == 1)}"
            says = f"{one['instance']} was last seen {_age(one['seen_s'])} ago{owns if one['owns'] else ''}."
            next = f"Look at {one['instance']}. Unless it comes back, others take what it owns when its lease ends."
            yield Said(WATCH, says, next)


def _hindered(document: Mapping[str, Any]) -> Iterator[Said]:
    """Partitions that stand, or would soon. What differs in numbers alone is one sentence: there may be 64."""
    alike: dict[str, list[Mapping[str, Any]]] = {}
    for row in document["partitions"]:
        if row["words"]:
            alike.setdefault(_NUMBERS.sub("#", row["words"]), []).append(row)
    for rows in sorted(alike.values(), key=len, reverse=True):
        first, all_of_them = rows[0], len(document["partitions"])
        subject, words = f"{first['runtime']} is hindered", first["words"].removesuffix(".")
        owners = sorted({row["owner"] for row in rows if row["owner"]})
        if len(rows) > 1:
            same = all(row["words"] == first["words"] for row in rows)
            as_one = "" if same else f", {first['runtime']} so"
            subject = f"{len(rows):,} of {_counted(all_of_them, 'partition')} are hindered{as_one}"
        where = owners[0] if len(owners) == 1 else f"{len(owners):,} instances"
        next = f"Mend what it says. More stands in the log{'s' * (len(owners) != 1)} of {where}."
        yield Said(WATCH, f"{subject}: {words}.", next)


def _causes(document: Mapping[str, Any]) -> Iterator[Said]:
    """What hinders in other ways; what is told of takeovers belongs to partitions that are nobody's, if there are."""
    names = _names(document)
    for about, next in (
        (NAME, "Give each process a cluster.instance of its own."),
        (TAKEOVER, "Mend what it says, or look at the log of that instance."),
        (SETTINGS, "Compare the configurations, and start the instance that is wrong again."),
    ):
        shown = about == TAKEOVER and any(row["state"] == "nobody's" for row in document["partitions"])
        if not shown and (words := _told(document, about)):
            yield Said(WATCH, f"{_capital(words, names)}.", next)


def _behind(document: Mapping[str, Any]) -> Iterator[Said]:
    rows = [row for row in eyes_first(document["partitions"]) if _is_only_behind(row)]
    if rows:
        worst, more = rows[0], len(rows) - 1
        others = f", and {_counted(more, 'other')} far behind too" if more else ""
        says = f"{worst['runtime']} is {worst['behind_messages']:,} messages behind, at {worst['owner']}{others}."
        next = f"Look at its page at {worst['owner']}: a sink that stands? If not, wait, or start one more instance."
        yield Said(WATCH, says, next)


def _is_only_behind(row: Mapping[str, Any]) -> bool:
    """Whether that is all that is known: what hinders it is said elsewhere."""
    return row["state"] == "owned" and is_far_behind(row) and not row["words"]


def _gone(document: Mapping[str, Any]) -> Iterator[Said]:
    """Who went without a word; what it owned runs elsewhere by now, or the sentence on that comes first."""
    if any(row["state"] == "nobody's" for row in document["partitions"]):
        return
    names = [one for one in document["gone"] if not one["stopped"]]
    if names:
        first, more = names[0], len(names) - 1
        others = f", and so are {_counted(more, 'other')}" if more else ""
        says = f"{first['instance']} is gone: it was last seen {_age(first['seen_s'])} ago{others}."
        next = f"What it owned runs elsewhere. Start {first['instance']} again, or find out why it went."
        yield Said(WATCH, says, next)


def _well(document: Mapping[str, Any]) -> str:
    moving = sum(row["state"] != "owned" for row in document["partitions"])
    whole = _counted(len(document["partitions"]), "partition")
    shared = f", by {_counted(len(document['instances']), 'instance')}"
    if moving:
        return f"{moving} of {whole} {'is' if moving == 1 else 'are'} changing hands."
    return f"{'All ' * (len(document['partitions']) > 1)}{whole} {'is' if whole[:2] == '1 ' else 'are'} owned{shared}."


def _counted(number: int, noun: str) -> str:
    return f"{number:,} {noun}{'' if number == 1 else 's'}"


def _age(seconds: float) -> str:
    """Ages as the dashboard writes them, in little room."""
    whole = round(seconds)
    for unit, name, below, part in ((3600, "h", 60, "min"), (60, "min", 1, "s")):
        if whole >= unit:
            rest = whole % unit // below
            return f"{whole // unit} {name}{f' {rest} {part}' if rest else ''}"
    return f"{whole} s"


def _told(document: Mapping[str, Any], about: str) -> str:
    """What is told about this."""
    return "; ".join(cause["words"] for cause in document["causes"] if cause["about"] == about)


def _names(document: Mapping[str, Any]) -> tuple[str, ...]:
    """Of instances and partitions: they are written as they are, at the beginning of a sentence too."""
    there = (one["instance"] for one in (*document["instances"], *document["gone"]))
    return (*there, document["instance"], *(row["runtime"] for row in document["partitions"]))


def _capital(text: str, names: Sequence[str]) -> str:
    text = text.removesuffix(".")
    first = text.partition(" ")[0].rstrip(",:;")
    return text if first in names else f"{text[:1].upper()}{text[1:]}"

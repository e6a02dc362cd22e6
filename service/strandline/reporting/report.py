"""A report as sections of words and tables, the same for every way of writing it. Facts in, sections out; pure."""

from __future__ import annotations

from typing import NamedTuple

from ..caution import CAUTION
from . import tables
from .facts import Facts
from .limits import limits
from .sentences import besides, summary
from .tables import Table
from .words import Foreign, Words, full, say, span


class Section(NamedTuple):
    """`sentences` are a list, `picture` says whether the picture stands before the tables."""

    title: str
    sentences: list[Words]
    tables: list[Table]
    picture: bool = False


class Report(NamedTuple):
    """A title, a line about the report, and the sections in order."""

    title: Words
    made: str
    sections: list[Section]


def report_of(facts: Facts) -> Report:
    """The whole report."""
    return Report(
        say(f"What happened to {{feed}}, {span(facts.from_ns, facts.to_ns)}", feed=Foreign(facts.feed)),
        f"Made at {full(facts.made_ns)} UTC by the service itself, from what it knows. All times are UTC, by the "
        "service's clock.",
        [
            Section("Summary", summary(facts), []),
            Section("Holds", besides(facts), _holds(facts), picture=True),
            Section("Late events", [], [tables.late_sources(facts), tables.bursts(facts)]),
            Section("Journal and sinks", _journal(facts), _trouble(facts)),
            Section("Acts", [], [tables.acts(facts)]),
            Section("Books", [], [tables.books(facts)]),
            Section("What the service cannot know", limits(facts), []),
            Section("Caution", [(CAUTION,)], []),
        ],
    )


def _holds(facts: Facts) -> list[Table]:
    return [tables.stalls(facts), tables.totals(facts), tables.holds(facts)]


def _trouble(facts: Facts) -> list[Table]:
    return [tables.failing(facts), tables.sinks(facts), tables.refused(facts)]


def _journal(facts: Facts) -> list[Words]:
    worst = tables.longest_waits(facts)
    return [worst] if worst else []

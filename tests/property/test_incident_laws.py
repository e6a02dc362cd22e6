"""Laws of the report: what is told adds up to its time and to the books, and the same facts give the same bytes.

Durations are read back from the words as they are written, so that the law is about what a person reads.
"""

from __future__ import annotations

import re
from itertools import pairwise

import msgspec
from helpers_incident import BEGIN_NS, HOUR_NS, RULES, at, incident, late_events, series, silent_gateway
from hypothesis import given
from hypothesis import strategies as st
from strandline.core.view import HOLD_WHYS
from strandline.reporting import holding, tables
from strandline.reporting.bursts import APART_NS, late_of
from strandline.reporting.facts import TENTH_NS, Books, Count, Facts, Hold, Stall
from strandline.reporting.html import report_html
from strandline.reporting.markdown import report_markdown
from strandline.reporting.sentences import summary
from strandline.reporting.words import Words, lasted, plain
from strandline.sinks.lane_summary import LateSecond

END_NS = BEGIN_NS + HOUR_NS
WHYS = sorted(HOLD_WHYS)
DURATION = re.compile(r"(?:([\d,]+) h)? ?(?:(\d+) min)? ?(?:(\d+)(?:\.(\d))? s)?")


def read(text: str) -> int:
    """A duration as it is written, in tenths of a second."""
    match = DURATION.fullmatch(text)
    assert match and text, text
    hours, minutes, seconds, tenths = (int((group or "0").replace(",", "")) for group in match.groups())
    return ((hours * 60 + minutes) * 60 + seconds) * 10 + tenths


def whole_stall(stall: Stall) -> Stall | None:
    return stall


@st.composite
def histories(draw: st.DrawFn) -> list[Hold]:
    """Holds without gaps that may begin and end before, in or behind the hour; some with names, some very short."""
    instants = draw(
        st.lists(st.integers(BEGIN_NS - HOUR_NS, END_NS + HOUR_NS), min_size=2, max_size=40, unique=True).map(sorted)
    )
    found = []
    for from_ns, to_ns in pairwise(instants):
        why = draw(st.sampled_from(WHYS))
        named = "source" in why or why in ("hold_at_most", "slack")
        source = draw(st.sampled_from(("gw-1", "gw-2"))) if named else None
        sink = "archive" if "sink" in why else None
        found.append(Hold(why=why, source=source, sink=sink, from_ns=from_ns, to_ns=to_ns))
    return found


def facts_of(known: list[Hold]) -> Facts:
    found = holding.holds_of(known, BEGIN_NS, END_NS, known[0].from_ns, RULES, whole_stall)
    facts = incident()
    return msgspec.structs.replace(facts, holds=found, delays=[unknown] * len(found.stalls))


unknown = silent_gateway(steps=series(since=0, until=0)).delays[0]


def column(table: tables.Table, place: int) -> list[str]:
    return [plain(row[place]) for row in table.rows]


@given(st.integers(0, 40 * 24 * 36_000))
def test_a_duration_is_read_back_as_it_was(tenths: int) -> None:
    assert read(lasted(tenths * TENTH_NS)) == tenths


@given(histories())
def test_holds_and_totals_are_the_whole_time_that_is_known(known: list[Hold]) -> None:
    facts = facts_of(known)
    covered = min(known[-1].to_ns, END_NS) // TENTH_NS - max(known[0].from_ns, BEGIN_NS) // TENTH_NS
    for table in (tables.holds(facts), tables.totals(facts)):
        assert sum(map(read, column(table, 2))) == max(0, covered)


@given(histories())
def test_listed_holds_are_joined_in_order_and_none_is_brief(known: list[Hold]) -> None:
    listed = facts_of(known).holds.listed
    assert all(hold.lasted_ns >= holding.BRIEF_NS or hold.why == "stopped" for hold in listed)
    for one, other in pairwise(listed):
        assert one.to_ns <= other.from_ns
        touching = one.to_ns == other.from_ns
        assert not touching or (one.why, one.source, one.sink) != (other.why, other.source, other.sink)


def test_neighbours_are_one_row_and_brief_ones_one_line() -> None:
    spans = [("gw-1", 0, 30), ("gw-1", 30, 31), ("gw-2", 31, 31.4), ("gw-1", 31.4, 40), ("gw-2", 40, 40.9)]
    known = [
        Hold(why="slow_source", source=source, sink=None, from_ns=at(begin), to_ns=at(end))
        for source, begin, end in spans
    ]
    rows = [[plain(cell) for cell in row] for row in tables.holds(facts_of(known)).rows]
    assert [row[2:4] for row in rows[:2]] == [["31 s", "gw-1"], ["8.6 s", "gw-1"]]
    assert rows[2:] == [["2 shorter", "", "1.3 s", "", "each below 1 s, left out here"]]


@given(histories())
def test_stalls_lie_in_the_time_apart_and_their_phases_add_up(known: list[Hold]) -> None:
    facts = facts_of(known)
    stalls = facts.holds.stalls
    for stall in stalls:
        assert BEGIN_NS <= stall.from_ns < stall.to_ns <= END_NS
        assert sum(phase.lasted_ns for phase in stall.phases) == stall.lasted_ns
        assert all(one.to_ns == other.from_ns for one, other in pairwise(stall.phases))
        assert {(phase.source, phase.sink) for phase in stall.phases} == {(stall.source, stall.sink)}
    assert all(one.to_ns <= other.from_ns for one, other in pairwise(stalls))
    held = [total for total in facts.holds.totals if total.why not in holding.USUAL]
    assert facts.holds.besides_ns + facts.holds.stalls_ns == sum(total.lasted_ns for total in held)
    assert facts.holds.besides_ns >= 0


@given(histories())
def test_durations_in_the_text_are_those_of_the_table(known: list[Hold]) -> None:
    facts = facts_of(known)
    said = [plain(words) for words in summary(facts)]
    of_stalls = [match[1] for text in said if (match := re.match(r"From \S+ to \S+ \(([^)]*)\) ", text))]
    table = column(tables.stalls(facts), 2)
    assert of_stalls == table[: len(of_stalls)] and len(of_stalls) == min(len(table), 8)
    several = [match[1] for text in said if (match := re.match(r"There were \S+ stalls .*: (.*) in all\.", text))]
    assert [read(text) for text in several] == ([sum(map(read, table))] if len(table) > 1 else [])
    for text in said:
        phases = re.search(r"\(([^)]*)\) (?:source|sink) \S+ held the feed: it (.*?)\.(?: |$)", text)
        if phases and ";" in phases[2]:
            assert sum(read(part) for part in re.findall(r"\(([^)]*)\)", phases[2])) == read(phases[1])


@given(st.integers(5, 30))
def test_phases_that_are_too_many_are_told_together(changes: int) -> None:
    whys = ("silent_source", "hold_at_most")
    known = [
        Hold(why=whys[at_ % 2], source="gw-1", sink=None, from_ns=at(10 * at_), to_ns=at(10 * at_ + 10))
        for at_ in range(changes)
    ]
    (stall,) = facts_of(known).holds.stalls
    assert len(stall.phases) == min(changes, holding.PHASES_AT_MOST)
    assert sum(phase.lasted_ns for phase in stall.phases) == stall.lasted_ns == changes * 10_000_000_000


counts = st.integers(0, 10_000)


@given(st.lists(counts, min_size=10, max_size=10))
def test_numbers_in_text_and_table_are_the_books(given_counts: list[int]) -> None:
    begun = dict(zip(("released", "late", "duplicate", "quarantined"), given_counts[:4], strict=True))
    more = dict(zip(begun, given_counts[4:8], strict=True))
    held, held_later = given_counts[8:]
    begin = Count(at_ns=at(0), received=sum(begun.values()) + held, **begun)
    after = {name: begun[name] + more[name] for name in begun}
    end = Count(at_ns=at(3600), received=sum(after.values()) + held_later, **after)
    facts = incident(books=Books(begin=begin, end=end, balance=0, recognises_repeats=True))
    table = {plain(row[0]): [int(plain(cell).replace(",", "")) for cell in row[1:]] for row in tables.books(facts).rows}
    for place in range(3):
        assert table["received"][place] == sum(row[place] for name, row in table.items() if name != "received")
    assert (table["buffered"][0], table["buffered"][1]) == (held, held_later)
    if end.received >= begin.received:
        text = next(plain(words) for words in summary(facts) if " received" in plain(words))
        found = re.findall(r"([\d,]+) (?:was|were) (\w+)", text)
        said = [(int(number.replace(",", "")), what) for number, what in found]
        words = ("released", "named", "recognised", "put", "held")
        counted = zip((*more.values(), held_later), words, strict=True)
        assert said == [(number, what) for number, what in counted if number]


def words_of(late: list[LateSecond]) -> tuple[int, int, int]:
    found = late_of((), late, complete=True)
    shown = sum(burst.events for burst in found.bursts)
    return shown, len(found.bursts), found.unlisted_bursts


@given(st.lists(st.tuples(st.sampled_from(("a", "b")), st.integers(0, 4000), st.integers(1, 9)), max_size=60))
def test_bursts_have_all_events_and_are_apart(came: list[tuple[str, int, int]]) -> None:
    by_second = {(source, second): events for source, second, events in came}
    seconds = [
        LateSecond(source, events, at(second), at(second), 1, 2)
        for (source, second), events in sorted(by_second.items())
    ]
    shown, bursts, unlisted = words_of(seconds)
    assert shown == sum(each.events for each in seconds) and unlisted == 0
    gaps = sum(
        one.source != other.source or other.from_ns - one.to_ns > APART_NS
        for one, other in pairwise(seconds)
    )
    assert bursts == (gaps + 1 if seconds else 0)


@given(histories())
def test_the_same_facts_give_the_same_bytes_also_after_a_journey_as_json(known: list[Hold]) -> None:
    facts = facts_of(known)
    again = msgspec.json.decode(msgspec.json.encode(facts), type=Facts)
    assert again == facts
    assert report_html(again) == report_html(facts) and report_markdown(again) == report_markdown(facts)


def test_lists_are_bounded_and_say_what_they_leave_out() -> None:
    known = [
        Hold(why="silent_source", source=f"gw-{number}", sink=None, from_ns=at(number * 10), to_ns=at(number * 10 + 10))
        for number in range(360)
    ]
    facts = facts_of(known)
    assert (len(facts.holds.listed), facts.holds.unlisted) == (holding.LISTED_AT_MOST, 60)
    assert (len(facts.holds.stalls), facts.holds.unlisted_stalls) == (holding.STALLS_AT_MOST, 320)
    assert sum(map(read, column(tables.stalls(facts), 2))) == 36_000
    many = late_events(*((f"gw-{number}", 1, number * 10, number * 10, 1) for number in range(300)))
    told = msgspec.structs.replace(facts, late=many)
    shown: list[Words] = [row[1] for row in tables.late_sources(told).rows]
    assert sum(int(plain(cell)) for cell in shown) == 300 and len(shown) == 51
    assert len(report_html(told)) < 300_000

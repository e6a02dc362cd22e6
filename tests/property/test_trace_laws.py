"""A trace agrees with what happened to each line of any feed: over restarts, from any saved state, beside gaps."""

from __future__ import annotations

from typing import Any

from helpers_feed import FOR_EVER_NS, patient
from helpers_trace import FEED, Sent, Story, asked, line_of
from hypothesis import event, given, settings
from hypothesis import strategies as st
from strandline.core.columns import as_refs
from strandline.core.settings import Settings

SOURCES = ("gw-1", "gw-2")
ids = st.integers(0, 12).map(lambda number: f"event {number}")
good = st.builds(line_of, st.integers(-3, 40), st.sampled_from(SOURCES), ids)
bad = st.sampled_from(
    (b"{", b'{"t":5,"s":"gw-1"}', b'{"t":"noon","s":"gw-1","id":"event 3"}', b'{"t":5,"s":"gw-1","id":"event 4"', b"[]")
)
request = st.lists(st.one_of(good, good, good, bad), min_size=1, max_size=5)
step = st.one_of(
    st.tuples(st.just("send"), request, st.booleans()),
    st.tuples(st.just("send"), request, st.booleans()),
    st.tuples(st.just("send"), request, st.booleans()),
    st.tuples(st.sampled_from(("tick", "drain", "restart", "save", "take store", "take lanes", "other settings"))),
)
some_settings = st.builds(
    patient,
    name=st.just(FEED),
    slack_ns=st.sampled_from((0, 3, 10)),
    idle_after_ns=st.sampled_from((3, FOR_EVER_NS)),
    hold_at_most_ns=st.sampled_from((6, FOR_EVER_NS)),
    ahead_limit_ns=st.sampled_from((15, FOR_EVER_NS)),
    batch_events_at_most=st.sampled_from((2, 50_000)),
)


def played(chosen: Settings, other: Settings, steps: list[tuple[Any, ...]]) -> Story:
    """A story of these steps, one instant each."""
    story = Story(chosen)
    for now, (name, *details) in enumerate(steps, 1):
        match name:
            case "send":
                story.send(details[0], now, with_key=details[1])
            case "tick":
                story.shell.tick(now)
            case "drain":
                story.shell.act("drain", now_ns=now)
            case "restart":
                story.restart(now)
            case "other settings":
                story.restart(now, other)
            case "save":
                story.save()
            case _:
                story.take(name.split()[1], now)
    return story


def questions(story: Story) -> set[tuple[tuple[str, str], ...]]:
    """Every question that a line gives rise to."""
    found: set[tuple[tuple[str, str], ...]] = set()
    for sent in story.sent:
        if sent.time is not None and sent.id is not None and sent.source is not None:
            found.add((("id", sent.id),))
            found.add((("id", sent.id), ("source", sent.source)))
            found.add((("time", str(sent.time)),))
    return found


def agrees(story: Story, match: dict[str, Any], sent: Sent, fate: dict[str, Any]) -> None:
    """One match against what happened."""
    arrival, name = match["arrival"], match["fate"]
    assert arrival["idempotency_key"] == sent.key
    assert match["event"].encode() == sent.text
    assert name == fate["fate"], (match, fate)
    details = match[name]
    for key in fate.keys() & {"batch", "position", "reason"}:
        assert details[key] == fate[key]
    mark = story.stood(sent.lsn)
    if mark is None:
        assert match["watermark"] is None
    else:
        stood = match["watermark"]
        assert (stood["at_ns"], stood["cause"]) == (mark.watermark_ns, mark.cause.name.lower())
        names = story.shell.feed.state.sources.names
        assert stood["source"] == (names[mark.source] if mark.source < len(names) else None)
    if name == "late":
        assert mark is not None and sent.time is not None
        assert details["late_by_ns"] == mark.watermark_ns - sent.time > 0
    if name == "duplicate":
        assert (details["of"]["position"], details["of"]["line"]) == fate["of"]
    if name == "held":
        runs = story.shell.feed.state.runs
        chunks = runs.runs[details["run"] - 1].chunks
        places = [place for each in chunks for place in as_refs(each.refs)["place"].tolist()]
        assert places[details["before_it"]] == sent.place and details["run_events"] == len(places)
    if name in ("released", "late", "quarantined"):
        lane = {"released": "ordered", "late": "late", "quarantined": "quarantine"}[name]
        taken = {sink: lanes[lane] for sink, lanes in story.shell.feed.state.outbox.positions.items() if lane in lanes}
        assert {sink: each["state"] == "taken" for sink, each in match["sinks"].items()} == {
            sink: number >= details["batch"] for sink, number in taken.items()
        }


def meant(story: Story, query: dict[str, str]) -> dict[tuple[int, int], Sent]:
    """Lines that are events and that a question means, by their own words."""
    return {
        (sent.lsn, sent.line): sent
        for sent in story.sent
        if sent.time is not None
        and query.get("source") in (None, sent.source)
        and query.get("id") in (None, sent.id)
        and query.get("time") in (None, str(sent.time))
    }


@settings(max_examples=120, deadline=None)
@given(chosen=some_settings, other=some_settings, steps=st.lists(step, min_size=1, max_size=14))
def test_a_trace_tells_what_happened_to_every_event(
    chosen: Settings, other: Settings, steps: list[tuple[Any, ...]]
) -> None:
    story = played(chosen, other, steps)
    journal, fates = story.journal(), story.fates()
    for query in questions(story):
        answer = asked(journal, **dict(query))
        wanted = meant(story, dict(query))
        found = {(match["arrival"]["position"], match["arrival"]["line"]): match for match in answer["matches"]}
        assert wanted.keys() <= found.keys() and answer["searched"]["complete"]
        for place, match in found.items():
            sent = next(sent for sent in story.sent if (sent.lsn, sent.line) == place)
            event(match["fate"])
            agrees(story, match, sent, fates[place])
            assert place in wanted or match["fate"] == "quarantined"


@settings(max_examples=60, deadline=None)
@given(
    chosen=some_settings, steps=st.lists(step, min_size=6, max_size=20), share=st.floats(0.2, 1)
)  # fmt: skip
def test_what_is_no_longer_kept_is_said_and_what_is_told_still_agrees(
    chosen: Settings, steps: list[tuple[Any, ...]], share: float
) -> None:
    story = played(chosen, chosen, [*steps, ("save",)])
    journal, fates = story.journal(512), story.fates()
    ends = [end for end in journal.ends if end <= story.saved[-1][0]]
    if not ends:
        return
    journal.drop_before(ends[int(share * (len(ends) - 1))])
    for query in questions(story):
        answer = asked(journal, **dict(query))
        assert answer["searched"]["journal_begins_at"] == journal.first_lsn > 0
        assert any("is kept from position" in note for note in answer["notes"])
        kept = {place for place in meant(story, dict(query)) if place[0] >= journal.first_lsn}
        found = {(match["arrival"]["position"], match["arrival"]["line"]): match for match in answer["matches"]}
        assert kept <= found.keys() and all(place[0] >= journal.first_lsn for place in found)
        for place, match in found.items():
            fate, name = fates[place], match["fate"]
            event(f"{name} beside a gap")
            assert name in ("unknown", fate["fate"])
            if name == "unknown":
                assert fate["fate"] in ("released", "late", "duplicate", "quarantined")
            for key in fate.keys() & {"batch", "position", "reason"} if name != "unknown" else ():
                assert match[name][key] == fate[key]

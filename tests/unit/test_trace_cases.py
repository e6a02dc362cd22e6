"""Cases of a trace: digests that collide, what stores refused and repairs sent, what only the lane store still has.

And its limits: bytes read, matches shown, a client that left, records that cannot be read.
"""

from __future__ import annotations

import dataclasses
import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from helpers_feed import patient
from helpers_trace import FEED, Story, asked, budget, line_of, question, told
from strandline.core.columns import Arrival, Batch, Lane
from strandline.core.records import Kind, arrival_parts
from strandline.core.tracing import Finder
from strandline.errors import JournalError
from strandline.ingest.values import identity_column
from strandline.journal.journal import Journal
from strandline.ports import Lines
from strandline.sinks.lanes import LaneStore
from strandline.tracing.answer import document_of
from strandline.tracing.budget import Abandoned, Budget
from strandline.tracing.following import Standing
from strandline.tracing.question import QuestionError, time_of
from strandline.tracing.scanning import MATCHES_AT_MOST
from strandline.tracing.trace import trace, trace_kept


class StoryLines(Lines):
    """Lines of a story's journal."""

    def __init__(self, story: Story) -> None:
        self.story = story

    def lines(self, batch: Batch) -> list[bytes]:
        return self.story.shell.lines(batch)

    def ndjson(self, batch: Batch) -> bytes:
        return b"".join(line + b"\n" for line in self.lines(batch))

    def source_names(self) -> list[str]:
        return self.story.shell.feed.state.sources.names


def late_story() -> Story:
    """Two late events after a newest one at 100, and two lines that are no events; all were taken."""
    story = Story(patient(name=FEED))
    story.send([line_of(100, "gw-1", "new")], 1)
    story.send([line_of(5, "gw-1", "old"), b'{"t":7,"s":"gw-1"}', line_of(6, "gw-2", "older")], 2)
    story.send([b'{"t":8,"s":"gw-1","id":"cut'], 3)
    story.take("store", 4)
    story.take("lanes", 5)
    return story


async def store_of(path: Path, story: Story) -> LaneStore:
    """A lane store that has taken what left."""
    store = LaneStore(path)
    await store.open()
    for lane in ("late", "quarantine"):
        batches = story.shell.batches[lane]  # type: ignore[index]
        if batches:
            await store.take(batches, StoryLines(story))  # type: ignore[arg-type]
    return store


async def keep_refused_and_repaired(path: Path, story: Story, lane: Lane) -> None:
    """As `store_of`; one sink refused what is in a lane, and the first late event was sent to another as a repair."""
    store, batches = await store_of(path, story), story.shell.batches[lane]
    await store.keep_refused("store", batches, "no such series", StoryLines(story), 1 << 30)  # type: ignore[arg-type]
    await store.plan_repair("archive", 1)
    await store.end_repair("archive", 1, 2)
    await store.close()


async def test_a_refusal_and_a_repair_are_told(tmp_path: Path) -> None:
    path, story = tmp_path / "lanes.db", late_story()
    await keep_refused_and_repaired(path, story, "ordered")
    journal = story.journal()
    refused = asked(journal, lanes=path, id="new")["matches"][0]
    assert refused["sinks"]["store"] == {"state": "refused", "taken_up_to_batch": 1, "detail": "no such series"}
    assert "Refused by store" in refused["explanation"]
    sent, waits = (asked(journal, lanes=path, id=id)["matches"][0] for id in ("old", "older"))
    assert (sent["kept_as"], sent["repairs"]) == (1, {"archive": {"sent": True, "through": 1}})
    assert (waits["kept_as"], waits["repairs"]["archive"]["sent"]) == (2, False)
    assert sent["sinks"]["lanes"]["state"] == sent["sinks"]["store"]["state"] == "taken"


async def test_what_only_the_lane_store_still_has_is_found(tmp_path: Path) -> None:
    path, story = tmp_path / "lanes.db", late_story()
    await (await store_of(path, story)).close()
    journal = short_of(story)
    assert journal.first_lsn > max(sent.lsn for sent in story.sent if sent.id == "older")
    for texts in ({"id": "old"}, {"time": "5"}, {"time": "5", "source": "gw-1"}):
        match = asked(journal, lanes=path, **texts)["matches"][0]
        assert (match["fate"], match["matched_by"], match["late"]["late_by_ns"]) == ("late", "kept", 95)
        assert match["arrival"]["position"] is None and "95" not in match["event"]
        assert {sink: each["state"] for sink, each in match["sinks"].items()} == {"lanes": "taken", "store": "taken"}
        assert "handed to the late lane as batch 1, and the lane store keeps it" in match["explanation"]
        assert "at or beyond that batch and so have it, unless one was added to the feed later: store." in (
            match["explanation"]
        )
    cut = asked(journal, lanes=path, id="cut")
    assert cut["matches"] == [], "the lane store's line does not hold the id in quotation marks"
    assert asked(journal, lanes=path, time="5", source="gw-2")["found"] == 0
    gone = asked(journal, lanes=path, id="new")
    assert gone["found"] == 0 and any("is kept from position" in note for note in gone["notes"])


def short_of(story: Story) -> Journal:
    """The story's journal after it went on, without all that came before."""
    story.restart(10)
    story.send([line_of(200 + number, "gw-1", f"filler {number}") for number in range(20)], 11)
    story.save()
    story.send([line_of(300, "gw-1", "last")], 12)
    journal = story.journal(512)
    assert journal.drop_before(story.saved[-1][0])
    return journal


async def test_who_has_a_kept_event_is_told_by_position_refusal_and_repair(tmp_path: Path) -> None:
    path, story = tmp_path / "lanes.db", late_story()
    await keep_refused_and_repaired(path, story, "late")
    journal = short_of(story)
    stands: dict[str, dict[Lane, int]] = {
        "lanes": {"late": 1, "quarantine": 2}, "store": {"late": 1}, "river": {"late": 0}, "files": {"ordered": 9},
    }  # fmt: skip
    found = trace(journal, question(id="old"), path, budget(), Standing(["gw-1"], stands))
    match = document_of(found)["matches"][0]
    assert {sink: each["state"] for sink, each in match["sinks"].items()} == {
        "lanes": "taken", "store": "refused", "river": "behind"
    }  # fmt: skip
    assert match["sinks"]["store"]["detail"] == "no such series"
    assert match["repairs"] == {"archive": {"sent": True, "through": 1}}
    assert "these refused it: store; these are before that batch and so do not have it: river." in match["explanation"]
    assert match["explanation"].endswith("Sent as a repair to archive.")
    alone = trace(journal, question(id="old"), path, budget(), Standing(["gw-1"], {"lanes": {"late": 1}}))
    assert "No other sink takes that lane now." in document_of(alone)["matches"][0]["explanation"]


async def test_where_there_is_no_journal_the_lane_store_is_looked_through(tmp_path: Path) -> None:
    path, story = tmp_path / "lanes.db", late_story()
    await (await store_of(path, story)).close()
    answer = document_of(trace_kept(question(id="old"), path, budget()))
    match = answer["matches"][0]
    assert (match["fate"], match["matched_by"], match["late"]["batch"], match["sinks"]) == ("late", "kept", 1, {})
    assert match["explanation"].endswith("the lane store keeps it. Which sinks took it is not known any more.")
    assert answer["searched"]["journal"] is False and "only the lane store was looked through" in answer["notes"][0]
    gone = document_of(trace_kept(question(id="new"), path, budget()))
    assert gone["found"] == 0 and len(gone["notes"]) == 1
    absent = trace_kept(question(id="old"), tmp_path / "absent.db", budget())
    assert not absent.found


async def test_a_partition_is_not_told_to_keep_its_journal_for_longer(tmp_path: Path) -> None:
    journal = short_of(late_story())
    for partition in (False, True):
        wanted = dataclasses.replace(question(id="new"), partition=partition)
        (note,) = told(journal, wanted, tmp_path / "absent.db")["notes"]
        assert ("journal.retain" in note) is not partition
        assert ("the stream keeps the message, the stores keep the event" in note) is partition


def test_an_event_whose_digest_collides_is_not_taken_for_the_one_that_is_meant() -> None:
    story = Story()
    wanted, _ = identity_column(["gw-1"], ["wanted"])
    lines = [line_of(5, "gw-1", "other")]
    made = Arrival(
        times=np.array([5], np.int64), sources=np.array([0], np.uint32), lengths=np.array([len(lines[0])], np.uint32),
        payload=lines[0] + b"\n", new_sources=["gw-1"], identities=wanted,
    )  # fmt: skip
    story.shell.send(made, 1)
    journal = story.journal()
    assert asked(journal, id="wanted")["found"] == 0
    unread = asked(journal, id="wanted", read=False)
    assert unread["found"] == 1 and not unread["matches"][0]["verified"] and "digest" in unread["notes"][-1]


def test_many_matches_are_the_newest_ones_with_a_note() -> None:
    story = Story(patient(name=FEED, slack_ns=10))
    for number in range(MATCHES_AT_MOST + 5):
        story.send([line_of(50, f"gw-{number}", f"event {number}")], number)
    answer = asked(story.journal(), time="50")
    assert [json.loads(each["event"])["id"] for each in answer["matches"]] == [f"event {n}" for n in range(5, 25)]
    assert "narrow it down" in answer["notes"][0]
    assert asked(story.journal(), time="50", source="gw-0")["found"] == 1


def test_matches_within_one_request_keep_their_lines() -> None:
    story = Story(patient(name=FEED, slack_ns=10))
    story.send([line_of(50, "gw-1", "a"), line_of(51, "gw-1", "b"), line_of(50, "gw-1", "a")], 1)
    matches = asked(story.journal(), time="50")["matches"]
    assert [(each["arrival"]["line"], each["fate"]) for each in matches] == [(1, "held"), (3, "duplicate")]
    assert matches[1]["duplicate"]["of"]["line"] == 1
    assert [each["held"]["before_it"] for each in matches[:1]] == [0]


@pytest.mark.parametrize("share", [0.0, 0.1, 0.4, 0.7, 0.95])
def test_a_budget_is_never_exceeded_and_what_is_told_is_true(share: float) -> None:
    story = Story(patient(name=FEED, slack_ns=10))
    for number in range(30):
        story.send([line_of(number, "gw-1", f"event {number % 12}")], number)
    journal, fates = story.journal(512), story.fates()
    whole = trace(journal, question(id="event 3"), Path("absent.db"), spent := budget())
    limit = int(share * spent.read)
    answer = told(journal, question(id="event 3"), Path("absent.db"), limit)
    assert answer["searched"]["bytes_read"] <= limit == answer["searched"]["bytes_at_most"]
    assert any(f"limit of {limit:,} bytes" in note for note in answer["notes"])
    assert len(answer["matches"]) <= len(document_of(whole)["matches"]) == 3
    for match in answer["matches"]:
        place = (match["arrival"]["position"], match["arrival"]["line"])
        assert match["fate"] in ("unknown", fates[place]["fate"])


def test_an_abandoned_trace_ends_at_its_next_pause() -> None:
    story = Story()
    story.send([line_of(1, "gw-1", "a")], 1)
    with pytest.raises(Abandoned):
        trace(story.journal(), question(id="a"), Path("absent.db"), Budget(1 << 40, lambda: True))


def test_a_record_that_cannot_be_read_is_named() -> None:
    story = Story(patient(name=FEED, slack_ns=10))
    story.send([line_of(1, "gw-1", "a")], 1)
    journal = story.journal()
    lsn = journal.next_lsn
    for kind, body in ((Kind.ARRIVAL, b"short"), (200, b"")):
        journal.append(journal.next_lsn, kind, [body])
        journal.flush()
        with pytest.raises(JournalError, match=f"position {lsn} cannot be read"):
            asked(journal, id="a")
        journal = story.journal()


def test_requests_from_before_the_feed_had_an_id_are_said_to_be_left_out() -> None:
    story = Story(patient(name=FEED, slack_ns=10))
    line = line_of(5, "gw-1", "a")
    made = Arrival(
        times=np.array([5], np.int64), sources=np.array([0], np.uint32), lengths=np.array([len(line)], np.uint32),
        payload=line + b"\n", new_sources=["gw-1"],
    )  # fmt: skip
    story.shell.send(made, 1)
    answer = asked(story.journal(), id="a")
    assert answer["found"] == 0 and "1 requests came before the feed had an `id`" in answer["notes"][0]
    assert asked(story.journal(), time="5")["matches"][0]["fate"] == "held"


@pytest.mark.parametrize("count", [1, 3, 200])
def test_a_finder_finds_what_a_comparison_finds(count: int) -> None:
    random = np.random.default_rng(count)
    for _ in range(50):
        times = random.integers(-3, 4, count) * 2**40
        identities = random.integers(0, 6, count).astype(np.uint64) << np.uint64(50)
        given = Arrival(
            times=times, sources=np.zeros(count, np.uint32), lengths=np.ones(count, np.uint32),
            payload=b"x\n" * count, identities=identities,
        )  # fmt: skip
        body = b"".join(bytes(part) for part in arrival_parts(given, 0))
        assert Finder(time_ns=2**40).rows(body) == (np.flatnonzero(times == 2**40).tolist(), False)
        wanted = [1 << 50, 4 << 50, 7 << 50]
        assert Finder(identities=wanted).rows(body)[0] == np.flatnonzero(np.isin(identities, wanted)).tolist()
        assert Finder(identities=wanted[:1]).rows(body)[0] == np.flatnonzero(identities == wanted[0]).tolist()
        assert Finder().rows(body) == ([], False)


@pytest.mark.parametrize(
    ("text", "unit", "time_ns"),
    [("1970-01-01T00:00:01Z", None, 10**9), ("5", "ms", 5_000_000), ("-5", "s", -5 * 10**9), ("7", "ns", 7)],
)
def test_times_are_read_as_the_feed_reads_them(text: str, unit: Any, time_ns: int) -> None:
    assert time_of(text, unit) == time_ns


@pytest.mark.parametrize(
    ("text", "unit"),
    [("5", None), ("5", "rfc3339"), ("5.0", "s"), ("9" * 20, "s"), ("\u0665", "s"), ("--5", "s"), ("", "s")],
)
def test_what_is_no_time_is_refused(text: str, unit: Any) -> None:
    with pytest.raises(QuestionError, match="the time"):
        time_of(text, unit)


def test_a_segment_that_goes_during_the_search_is_met_again(monkeypatch: pytest.MonkeyPatch) -> None:
    story = Story(patient(name=FEED, slack_ns=10))
    for number in range(30):
        story.send([line_of(number, "gw-1", f"event {number}")], number)
    story.save()
    journal = story.journal(512)
    whole = Journal.frames
    dropped: list[int] = []

    def frames(self: Journal, from_lsn: int | None = None, **given: bool) -> Any:
        if not dropped:
            dropped.append(self.drop_before(self.ends[2]))
            return whole(self, 0, **given)
        return whole(self, from_lsn, **given)

    monkeypatch.setattr(Journal, "frames", frames)
    assert asked(journal, id="event 29")["found"] == 1
    assert dropped[0] > 0

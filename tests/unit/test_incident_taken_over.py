"""What a report says of a time of which this process saw only a part: after a restart, or a partition taken over."""

from __future__ import annotations

from typing import Any

import msgspec
import pytest
from helpers_incident import at, books, hold, incident, late_events, no_trouble, series
from strandline.reporting import tables
from strandline.reporting.facts import Facts, Failing
from strandline.reporting.html import report_html
from strandline.reporting.knowing import NEAR_NS, seen_since_ns
from strandline.reporting.limits import limits
from strandline.reporting.markdown import report_markdown
from strandline.reporting.sentences import paragraphs
from strandline.reporting.words import plain

BEGUN = 1020  # 03:17:00
STOP = hold("stopped", 1000, 1018)


def said(facts: Facts) -> list[str]:
    return [plain(words) for sentences in paragraphs(facts) for words in sentences]


def begun_within(late: int = 15, total: int = 194, **more: Any) -> Facts:
    """The process, or its ownership, begins at 03:17:00; since then so many were late, of so many in all."""
    found = books(late=late)
    assert found.begin is not None and found.end is not None
    before = total - late
    begin = msgspec.structs.replace(found.begin, at_ns=at(BEGUN), late=before, received=found.begin.received + before)
    end = msgspec.structs.replace(found.end, late=total, received=found.end.received + before)
    both = msgspec.structs.replace(found, begin=begin, end=end)
    return incident([STOP], steps=series(since=BEGUN), books=both, **more)


def test_what_a_partition_s_new_owner_did_not_see_is_not_told_as_whole() -> None:
    facts = begun_within(partition=True)
    facts = msgspec.structs.replace(facts, late=late_events(("weir-5", 179, 100, 1800, 20)))
    told = said(facts)
    assert (
        "From 03:16:40 to 03:16:58 (18 s) another instance took the partition over, or the service was started; what "
        "was held waited for it."
    ) in told
    assert (
        "As far as this instance's late lane goes, 179 events of weir-5 came too late to be put in order. The late "
        "lane keeps them."
    ) in told
    assert (
        "What came late while another instance owned the partition is in that one's late lane; this instance saw this "
        "time since 03:17:00. At 04:00:00 the books count 194 late since the feed began."
    ) in told
    assert "As far as this instance saw, since 03:17:00, no sink was failing, and no request was refused." in told
    assert told[-1] == "The slack was 5 s (known since 03:17:00)."
    for text in (report_html(facts), report_markdown(facts)):
        assert "No sink was seen failing" not in text and "None was seen failing since 03:17:00." in text
        assert "service was stopped" not in text and "service stopped" not in text
        assert "Late events by source, as far as this instance" in text and "requests since 03:17:00" in text
    unknown = " ".join(plain(words) for words in limits(facts))
    assert "from 03:17:00 on: this instance took the partition over then, or was started then" in unknown
    assert "while another instance owned the partition is kept there" in unknown


def test_a_partition_that_was_owned_all_the_time_is_told_as_any_feed() -> None:
    late = late_events(("weir-5", 20, 100, 1800, 20))
    part, feed = (incident(partition=each, late=late, books=books(late=20)) for each in (True, False))
    assert said(part) == said(feed) and "No sink was seen failing, and no request was refused." in said(part)
    assert [plain(words) for words in limits(part)] == [plain(words) for words in limits(feed)]
    assert report_markdown(part) == report_markdown(feed)


def test_after_a_restart_the_late_lane_is_whole_and_the_rest_is_not() -> None:
    told = said(begun_within(late=0, total=7))
    assert "No event was late since 03:17:00, and of before the late lane keeps none." in told
    assert "As far as this process saw, since 03:17:00, no sink was failing, and no request was refused." in told
    facts = begun_within(late=0)
    whole = said(msgspec.structs.replace(facts, late=late_events(("weir-5", 179, 100, 1000, 20))))
    assert "179 events of weir-5 came too late to be put in order. The late lane keeps them." in whole
    assert not any("another instance" in text for text in whole)


@pytest.mark.parametrize("partition", [False, True])
def test_a_sink_that_was_seen_failing_does_not_hide_what_was_not_seen(partition: bool) -> None:
    failing = [Failing(sink="river", from_ns=at(2000), to_ns=at(2060), goes_on=False)]
    told = said(begun_within(partition=partition, trouble=no_trouble(failing=failing)))
    who = "this instance" if partition else "this process"
    place = told.index("Sink river was failing from 03:33:20 to 03:34:20.")
    assert told[place + 1] == f"As far as {who} saw, since 03:17:00, nothing else of that kind is known."
    seen = said(incident(trouble=no_trouble(failing=failing)))
    assert not any(text.startswith(("As far as", "No sink")) for text in seen)


def test_a_partition_of_which_this_instance_saw_nothing() -> None:
    unread = msgspec.structs.replace(books(), begin=None, end=None)
    told = said(incident(partition=True, steps=series(since=0, until=0), books=unread))
    assert "The late lane of this instance keeps no event of this time." in told
    assert (
        "What came late while another instance owned the partition is in that one's late lane; this instance saw "
        "nothing of this time."
    ) in told


def test_a_sample_missed_at_the_begin_is_no_later_begin() -> None:
    steps = series()
    for since_ns, known in ((at(0) + NEAR_NS, None), (at(0) + NEAR_NS + 1, at(0) + NEAR_NS + 1), (None, at(3600))):
        facts = incident(steps=msgspec.structs.replace(steps, since_ns=since_ns))
        assert seen_since_ns(facts) == known
        assert any("keeps no more" in text or "has none" in text for (text,) in limits(facts)) is (known is not None)
    assert tables.failing(incident()).empty == "None was seen failing."

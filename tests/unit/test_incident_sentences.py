"""What a report says about hand-made incidents, sentence by sentence."""

from __future__ import annotations

import msgspec
from helpers_incident import (
    EXCUSE,
    FALLS_SILENT,
    SECOND,
    at,
    books,
    hold,
    incident,
    late_events,
    no_trouble,
    series,
    silent_gateway,
)
from strandline.reporting.facts import Act, Acts, Facts, Failing, RefusedRows
from strandline.reporting.limits import limits
from strandline.reporting.sentences import besides, paragraphs, summary
from strandline.reporting.words import plain

HEAD = "Feed river-gauges, from 2026-05-01 03:00:00 to 04:00:00 UTC (1 h)."


def said(facts: Facts) -> list[str]:
    return [plain(words) for sentences in paragraphs(facts) for words in sentences]


def unknown(facts: Facts) -> str:
    return " ".join(plain(words) for words in limits(facts))


def test_an_hour_in_which_nothing_happened() -> None:
    assert said(incident()) == [
        HEAD,
        "No source or sink held the feed for 10 s or longer in this time.",
        "At worst in this time, the ordered output was 5 s behind the newest event (at 03:00:00); no event was seen "
        "held longer than 5 s (at 03:00:00).",
        "At the end of this time (03:59:50) it was 5 s behind.",
        "No event was late.",
        "From 03:00:00 to 04:00:00 7,200 events were received. With the 10 held at its begin: 7,200 were "
        "released in order and 10 were held at its end.",
        "The books balance: each event that was answered with success stands in them exactly once, so none of them is "
        "missing here and none was released twice.",
        "No sink was seen failing, and no request was refused.",
        "No act of an operator is recorded in this time.",
        "The slack was 5 s.",
    ]


def test_a_gateway_that_falls_silent_is_excused_and_comes_back_late() -> None:
    assert said(silent_gateway())[:12] == [
        HEAD,
        "From 03:12:05 to 03:14:40 (2 min 35 s) source gw-2 held the feed: it was silent, and waited for (1 min); was "
        "so far behind that hold_at_most went past it (1 min 35 s).",
        "It ended as night shift excused gw-2 at 03:14:40.",
        "In that time the ordered output stood at most 2 min 5 s behind the newest event (usually 5 s), at 03:14:10; "
        "it was current again, at most 15 s behind, at 03:14:40.",
        "At worst in this time, the ordered output was 2 min 5 s behind the newest event (at 03:14:10); no event was "
        "seen held longer than 2 min 5 s (at 03:14:10).",
        "At the end of this time (03:59:50) it was 5 s behind.",
        "220 events came too late to be put in order: 212 of gw-2 (96 %) and 8 of gw-3 (3.6 %). The late lane keeps "
        "them.",
        "They came from 03:20:00 to 03:21:42.5, at most 7 min 55 s behind the watermark.",
        "From 03:00:00 to 04:00:00 7,420 events were received. With the 10 held at its begin: 7,200 were "
        "released in order, 220 were named late and 10 were held at its end.",
        "The books balance: each event that was answered with success stands in them exactly once, so none of them is "
        "missing here and none was released twice.",
        "No sink was seen failing, and no request was refused.",
        "At 03:14:40 night shift excused gw-2 (reason given: its mast has no mains).",
    ]


def test_sentences_that_belong_together_are_one_paragraph_for_the_ticket() -> None:
    told = [plain(words) for words in summary(silent_gateway())]
    assert len(told) == 8 and " ".join(told) == " ".join(said(silent_gateway()))
    assert told[1].startswith("From 03:12:05 to 03:14:40 (2 min 35 s) source gw-2 held the feed: ")
    assert " It ended as night shift excused gw-2 at 03:14:40. In that time the ordered output stood " in told[1]


def test_it_is_still_going_on() -> None:
    facts = incident([hold("silent_source", 3500, 3600, "gw-2")], steps=series(lambda second: max(5, second - 3495)))
    assert said(facts)[1:4] == [
        "From 03:58:20 to 04:00:00 (1 min 40 s) source gw-2 held the feed: it was silent, and waited "
        "for.",
        "It was still going on at the end of this time.",
        "In that time the ordered output stood at most 1 min 35 s behind the newest event (usually 5 s), at "
        "03:59:50.",
    ]


def test_it_had_begun_before_this_time() -> None:
    steps = series(lambda second: 90 if second < 30 else 5)
    told = said(incident([hold("silent_source", -60, 30, "gw-2")], steps=steps))
    assert told[1].startswith("From 03:00:00 to 03:00:30 (30 s) source gw-2 held the feed")
    assert told[2] == "It had begun before this time."
    worst = "In that time the ordered output stood at most 1 min 30 s behind the newest event (usually 5 s), at "
    assert told[3].startswith(worst)


def test_a_restart_in_the_middle() -> None:
    """Holds are known across it; delays and books only since the process was started again."""
    held = [hold("silent_source", 600, 640, "gw-2"), hold("stopped", 1000, 1008.5)]
    begin = msgspec.structs.replace(books().begin, at_ns=at(1010))
    facts = incident(held, steps=series(since=1010), books=msgspec.structs.replace(books(), begin=begin))
    told = said(facts)
    assert told[1] == "There were 2 stalls in this time: 48.5 s in all."
    assert told[3] == "How far the output was behind in that time is not known."
    assert told[4] == (
        "From 03:16:40 to 03:16:48.5 (8.5 s) the service was stopped or starting; what was held waited for it."
    )
    assert told[5].startswith("At worst from 03:16:50 on, since when it is known, the ordered output was 5 s behind")
    assert any(text.startswith("From 03:16:50 to 04:00:00 7,200 events were received.") for text in told)
    assert "Delays, failing sinks and counts are known from 03:16:50 on: the process was started then" in unknown(facts)


def test_the_output_catches_up_after_a_restart() -> None:
    steps = series(lambda second: max(5, 1060 - second), since=1010)
    told = said(incident([hold("stopped", 1000, 1008.5)], steps=steps))
    assert told[2] == "The ordered output was current again, at most 15 s behind the newest event, at 03:17:30."


def test_nothing_is_known_of_the_time() -> None:
    nothing = series(since=0, until=0)
    unread = msgspec.structs.replace(books(), begin=None, end=None)
    facts = incident(
        known_since=3600, steps=nothing, books=unread, late=None,
        trouble=no_trouble(refused_rows=None, refused_requests=None),
    )  # fmt: skip
    assert said(facts) == [
        HEAD,
        "Who held the feed in this time is not known.",
        "How far the output was behind is not known for this time.",
        "The late lane could not be read, so which sources' events were late is not known.",
        "How many events were received and released in this time is not known.",
        "No act of an operator is recorded in this time.",
    ]
    for sentence in ("Nothing is known of this time's holds", "has none of this time", "could not be read when"):
        assert sentence in unknown(facts)


def test_history_that_begins_within_the_time() -> None:
    facts = incident(known_since=600)
    assert said(facts)[1] == (
        "No source or sink held the feed for 10 s or longer from 03:10:00 on, since when holds are known."
    )
    assert "Holds are known from 03:10:00 on; what was before it is not." in unknown(facts)


def test_a_source_that_is_merely_the_furthest_behind_is_no_stall() -> None:
    """One always is. Without the output falling behind by it nobody need read of it."""
    held = [hold("slow_source", 100, 400, "gw-1"), hold("slow_source", 500, 800, "gw-3")]
    told = said(incident(held))
    assert told[1] == "No source or sink held the feed for 10 s or longer in this time."
    assert [plain(words) for words in besides(incident(held))] == [
        "Besides stalls, sources or sinks held the feed for 10 min in all: each time for less than 10 s, or as the one "
        "furthest behind without the output falling behind by 10 s."
    ]
    assert besides(incident()) == []
    behind = said(incident(held, steps=series(lambda second: 30 if 500 <= second < 800 else 5)))
    assert behind[1].startswith("From 03:08:20 to 03:13:20 (5 min) source gw-3 held the feed")
    unseen = incident(held, steps=series(since=1000))
    assert said(unseen)[1] == told[1]
    assert "no stall is told of it in which a source was merely furthest behind" in unknown(unseen)


def test_a_stall_that_moved_the_output_little_is_told_all_the_same() -> None:
    told = said(incident([hold("silent_source", 100, 112, "gw-1")]))
    assert told[2].endswith("(usually 5 s), at 03:01:40; that is no further than usual.")


def test_several_stalls_are_counted_and_the_first_are_told() -> None:
    held = [hold("silent_source", 100 * number, 100 * number + 20, f"gw-{number}") for number in range(1, 12)]
    told = said(incident(held))
    assert told[1] == "There were 11 stalls in this time: 3 min 40 s in all."
    assert sum(" held the feed: it was silent" in text for text in told) == 8
    assert "3 more stalls of this time: see Holds." in told


def test_a_sink_that_holds_is_paused_and_is_resumed() -> None:
    done = [
        Act(at_ns=at(100), act="pause", subject="archive", who="day shift", reason="its disk is changed"),
        Act(at_ns=at(390.5), act="resume", subject="archive", who="unknown", reason=" "),
    ]
    told = said(incident([hold("sink_paused", 300, 390, sink="archive")], acts=done))
    assert told[1] == (
        "From 03:05:00 to 03:06:30 (1 min 30 s) sink archive held the feed: it was paused and had too much waiting "
        "for it."
    )
    assert told[2] == "It ended as somebody resumed sink archive at 03:06:30.5."
    assert "At 03:01:40 day shift paused sink archive (reason given: its disk is changed)." in told
    assert "At 03:06:30.5 somebody resumed sink archive." in told


def test_an_act_on_something_else_is_not_told_as_the_end() -> None:
    other = msgspec.structs.replace(EXCUSE, subject="gw-9")
    assert not any(text.startswith("It ended as") for text in said(incident(FALLS_SILENT, acts=[other])))


def test_a_slack_that_was_set_and_a_steered_one() -> None:
    done = [
        Act(at_ns=at(10), act="slack", subject="", who="a", reason="", slack_ns=8 * SECOND, until_ns=at(1810)),
        Act(at_ns=at(20), act="slack", subject="", who="a", reason=""),
        Act(at_ns=at(30), act="drain", subject="", who="a", reason=""),
    ]
    told = said(incident(acts=done, late_share_target=0.001))
    assert "At 03:00:10 a set the slack to 8 s until 03:30:10." in told
    assert "At 03:00:20 a ended the slack that had been set." in told
    assert "At 03:00:30 a released all that was held (drain)." in told
    assert told[-1] == "The slack is steered towards 0.1 % late: it went from 5 s to 5 s, and lay between 5 s and 5 s."


def test_all_sources_fall_silent() -> None:
    told = said(incident([hold("all_silent", 100, 130)]))
    assert told[1] == (
        "From 03:01:40 to 03:02:10 (30 s) no source was waited for, since all were silent or excused; what was held "
        "waited for hold_at_most, which is 2 min."
    )


def test_trouble_of_sinks_and_refused_requests() -> None:
    failing = [
        Failing(sink="archive", from_ns=at(60), to_ns=at(90), goes_on=False),
        Failing(sink="archive", from_ns=at(120), to_ns=at(150), goes_on=False),
        Failing(sink="river", from_ns=at(3000), to_ns=at(3600), goes_on=True),
    ]
    refused = [RefusedRows(sink="river", events=3, detail="out of order sample")]
    told = said(
        incident(trouble=no_trouble(failing=failing, refused_rows=refused, refused_requests=1, failure="disk is gone."))
    )
    assert "Sink archive was failing 2 times, from 03:01:00 to 03:02:30." in told
    assert "Sink river was failing from 03:50:00 on, and still was at the end of this time." in told
    assert "Sink river refused 3 events of this time for good; they are kept, see strandline refused list." in told
    assert any(text.startswith("1 request was refused whole") for text in told)
    assert "The feed has failed and takes nothing more: disk is gone." in told


def test_books_that_do_not_balance_are_called_a_defect() -> None:
    told = said(incident(books=msgspec.structs.replace(books(), balance=3)))
    assert any(text.startswith("The books do not balance") and "defect" in text for text in told)
    assert not any(text.startswith("The books balance") for text in told)


def test_late_events_that_were_forgotten_are_counted_by_the_books() -> None:
    told = said(silent_gateway(late=late_events(("gw-2", 12, 1200, 1201, 475))))
    assert (
        "The books count 220 late from 03:00:00 to 04:00:00; the late lane keeps 12 of this time. What is not "
        "there was forgotten, or is on its way."
    ) in told


def test_a_feed_without_ids_says_that_it_cannot_tell_repeats() -> None:
    told = said(incident(books=books(recognises_repeats=False)))
    assert "This feed names no id, so an event that a sender sent twice counts as two." in told


def test_many_acts_are_counted() -> None:
    acts = [msgspec.structs.replace(EXCUSE, at_ns=at(second)) for second in range(15)]
    facts = incident().__class__(
        **{
            **msgspec.structs.asdict(incident(acts=acts)),
            "acts": Acts(listed=acts, unlisted=4, known_since_ns=at(-30)),
        }
    )
    assert "7 more acts of this time: see Acts." in said(facts)
    assert "Acts are known from" not in unknown(facts)

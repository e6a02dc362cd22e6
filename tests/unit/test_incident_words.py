"""How a report says durations, instants and counts, and how its colours stand out."""

from __future__ import annotations

import re
import xml.etree.ElementTree as ET

import pytest
from helpers_incident import at, hold, incident, silent_gateway
from strandline.reporting.picture import COLOURS, TICKS_AT_MOST, picture
from strandline.reporting.report import report_of
from strandline.reporting.style import DARK, LIGHT
from strandline.reporting.words import Clock, Foreign, count, full, joined, lasted, plain, say, share, span

SECOND = 10**9
DAY = 86_400 * SECOND
SVG = "{http://www.w3.org/2000/svg}"


@pytest.mark.parametrize(
    ("ns", "text"),
    [
        (0, "0 s"),
        (1, "less than 0.1 s"),
        (400_000_000, "0.4 s"),
        (35 * SECOND, "35 s"),
        (60 * SECOND, "1 min"),
        (155 * SECOND + 200_000_000, "2 min 35.2 s"),
        (3600 * SECOND, "1 h"),
        (3903 * SECOND, "1 h 5 min 3 s"),
        (31 * DAY, "744 h"),
    ],
)
def test_a_duration_in_words(ns: int, text: str) -> None:
    assert lasted(ns) == text


def test_instants_have_a_date_only_where_they_need_one() -> None:
    day = 1_777_593_600 * SECOND  # 2026-05-01
    assert Clock(day, day + DAY).at(day + 100_000_000) == "00:00:00.1"
    assert Clock(day, day + DAY).at(day + DAY) == "2026-05-02 00:00:00"
    assert Clock(day, day + DAY + 1).at(day + SECOND) == "2026-05-01 00:00:01"
    assert span(day, day + SECOND) == "2026-05-01 00:00:00 to 00:00:01 UTC"
    assert full(2**63 - 1).startswith("2262-04-11") and full(-(2**63)).startswith("1677-09-2")


def test_counts_shares_and_lists() -> None:
    counts = [count(number, "event") for number in (0, 1, 2, 1204)]
    assert counts == ["no events", "1 event", "2 events", "1,204 events"]
    assert [share(part, 100_000) for part in (0, 1, 300, 94_000)] == ["0 %", "less than 0.01 %", "0.3 %", "94 %"]
    assert plain(joined([("one",), ("two",), ("three",)])) == "one, two and three"
    assert plain(say("{who} did {what}", who=Foreign("{what}\u202e"), what="it")) == r"{what}\u202e did it"
    assert len(Foreign("x" * 1000).shown) == 200


def _luminance(colour: str) -> float:
    """WCAG 2.2, relative luminance."""
    parts = [int(colour[place : place + 2], 16) / 255 for place in (1, 3, 5)]
    red, green, blue = (part / 12.92 if part <= 0.04045 else ((part + 0.055) / 1.055) ** 2.4 for part in parts)
    return 0.2126 * red + 0.7152 * green + 0.0722 * blue


@pytest.mark.parametrize("colours", [LIGHT, DARK], ids=["light", "dark"])
def test_texts_and_marks_stand_out_from_their_ground(colours: dict[str, str]) -> None:
    """WCAG 2.2: texts 4.5 to 1 (1.4.3), marks 3 to 1 (1.4.11); marks have an outline in the ink's colour."""
    for name, least in (("ink", 4.5), ("soft", 4.5), ("line", 3.0)):
        light, dark = sorted((_luminance(colours[name]), _luminance(colours["ground"])), reverse=True)
        assert (light + 0.05) / (dark + 0.05) >= least, name


def test_the_picture_is_well_formed_and_shows_each_hold_once_where_it_was() -> None:
    facts = silent_gateway()
    drawn = ET.fromstring(picture(facts))
    titles = [title.text or "" for title in drawn.iter(f"{SVG}title")]
    for each in facts.holds.listed:
        name = each.source or "waiting out the slack"
        clock = Clock(facts.from_ns, facts.to_ns)
        wanted = f", {clock.at(each.from_ns)} to {clock.at(each.to_ns)}, {lasted(each.lasted_ns)}"
        assert sum(title.endswith(wanted) for title in titles) == 1, name
    (box,) = [box for box in drawn.iter(f"{SVG}rect") if (box.findtext(f"{SVG}title") or "").startswith("stall: gw-2")]
    left, right = 170.0, 930.0
    begin = left + (right - left) * 725 / 3600
    assert abs(float(box.attrib["x"]) - begin) < 0.1
    assert abs(float(box.attrib["width"]) - (right - left) * 155 / 3600) < 0.2
    ticks = [text.text for text in drawn.iter(f"{SVG}text") if re.fullmatch(r"\d\d:\d\d", text.text or "")]
    assert ticks[0] == "03:00" and ticks[-1] == "04:00" and len(ticks) <= TICKS_AT_MOST + 1


def test_what_is_not_known_is_drawn_as_unknown() -> None:
    drawn = ET.fromstring(picture(incident(known_since=600)))
    (box,) = [box for box in drawn.iter(f"{SVG}rect") if box.attrib.get("class") == "unknown"]
    assert (float(box.attrib["x"]), float(box.attrib["width"])) == (170.0, round(760 / 6, 1))


def test_many_holders_share_a_line_and_every_reason_has_a_look() -> None:
    held = [hold("silent_source", 10 * number, 10 * number + 9, f"gw-{number}") for number in range(30)]
    drawn = ET.fromstring(picture(incident(held)))
    assert "20 others" in [text.text for text in drawn.iter(f"{SVG}text")]
    assert len(set(COLOURS.values())) == len(COLOURS)


def test_the_caution_is_the_last_word() -> None:
    last = report_of(incident(made_ns=at(9))).sections[-1]
    assert last.title == "Caution" and "No alarm path that protects people" in plain(last.sentences[0])

"""What was lost upstream and what came late, by sequence number: by hand, as published, out of lines."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
from helpers_advice import exponential, write_capture
from helpers_captures import captured, kept
from helpers_feed import Shell, arrival, patient
from helpers_report import numbered_capture
from strandline.core.columns import Fault
from strandline.errors import CaptureError, ConfigError
from strandline.replay import sequence
from strandline.replay.capture import Capture
from strandline.replay.requests import CapturedRequests
from strandline.replay.sequence import Numbers, read_numbers, sequence_figures

MS = 1_000_000


def told(path: Path, pointer: str = "/seq", sources_at_most: int = 10) -> dict[str, Any]:
    with Capture(path) as capture:
        names = CapturedRequests(capture)
        list(names.blocks())
        return sequence_figures(read_numbers(capture, pointer), names.names, sources_at_most)


def figures(numbers: list[int], arrivals_ms: list[int], sources: list[int] | None = None) -> dict[str, Any]:
    owners = np.array(sources or [0] * len(numbers), dtype=np.uint32)
    clock = np.array(arrivals_ms, dtype=np.int64) * MS
    found = Numbers(np.array(numbers, dtype=np.int64), owners, clock, len(numbers), 0, 0)
    return sequence_figures(found, ["gw-1", "gw-2"], 10)


def test_a_lost_range_and_a_filled_gap_worked_out_by_hand(tmp_path: Path) -> None:
    """gw-1 sends 1 to 13, gw-2 1 to 3 with 2 twice; each line comes a second after the one before.

    5 jumps over 3 and 4: 3 comes at 4 s, 4 never. 9 jumps over 7 and 8 at 7 s: never. 12 jumps over 10 and 11 at 9 s:
    both come, 11 at 10 s and 10 at 12 s, 3 s late. 13 ends it at 14 s.
    """
    sent = [("gw-1", 1), ("gw-1", 2), ("gw-2", 1), ("gw-1", 5), ("gw-1", 3), ("gw-2", 2), ("gw-1", 6), ("gw-1", 9)]
    sent += [("gw-2", 2), ("gw-1", 12), ("gw-1", 11), ("gw-2", 3), ("gw-1", 10), ("gw-2", 4), ("gw-1", 13)]
    rows = [(1_000_000 + 1000 * second, 999_000 + second, *each) for second, each in enumerate(sent)]
    found = told(numbered_capture(tmp_path, rows))
    assert [(each["source"], each["first"], each["last"], each["lost"]) for each in found["lost_ranges"]] == [
        ("gw-1", 7, 8, 2),
        ("gw-1", 4, 4, 1),
    ]
    first, second = found["lost_ranges"]
    assert (first["missed_at_ns"], first["missing_for_ns"]) == (1_007_000 * MS, 7_000 * MS)
    assert (second["missed_at_ns"], second["missing_for_ns"]) == (1_003_000 * MS, 11_000 * MS)
    assert found["filled_gaps"] == [
        {
            "source": "gw-1",
            "first": 10,
            "last": 11,
            "late": 2,
            "missed_at_ns": 1_009_000 * MS,
            "filled_after_ns": 3_000 * MS,
        }
    ]
    assert {name: found[name] for name in ("received", "duplicates", "in_order", "late", "lost", "gaps")} == {
        "received": 15, "duplicates": 1, "in_order": 11, "late": 3, "lost": 3, "gaps": 3,
    }  # fmt: skip
    assert (found["gaps_filled"], found["lost_ranges_known"], found["may_fill_yet"]) == (1, 2, 0)
    assert found["lost_share"] == 3 / 17  # 13 of gw-1 and 4 of gw-2 were sent
    # 3 is a second late, 11 a second, 10 three.
    assert (found["late_time_ns_p50"], found["late_time_ns_max"]) == (1_000 * MS, 3_000 * MS)
    assert found["late_time_ns_mean"] == pytest.approx(5_000 * MS / 3)
    one, other = found["sources"]
    assert (one["source"], one["lost"], one["late"], one["late_time_ns_max"]) == ("gw-1", 3, 3, 3_000 * MS)
    assert (other["source"], other["duplicates"], other["late_time_ns_max"]) == ("gw-2", 1, None)


def test_the_first_example_of_the_rfc() -> None:
    # RFC 4737, section 7.1, table 1: packet 4 comes 62 ms late, behind four later ones, and is 4-reordered.
    found = figures([1, 2, 3, 5, 6, 7, 8, 4, 9, 10], [68, 88, 108, 148, 168, 188, 208, 210, 228, 248])
    assert (found["late_time_ns_max"], found["late"], found["lost"]) == (62 * MS, 1, 0)
    assert (found["extent_max"], found["n_reordering_greatest"], found["reordered_ratio"]) == (4, 4, 0.1)
    gap = found["filled_gaps"][0]
    assert (gap["first"], gap["last"], gap["filled_after_ns"], found["gaps_filled"]) == (4, 4, 62 * MS, 1)


def test_a_discontinuity_that_is_filled_in_part() -> None:
    # RFC 4737, section 4.3.4: of 1, 10, 5 with the rest lost, 10 is in order and opens a gap of 8, 5 is reordered.
    found = figures([1, 10, 5], [0, 10, 20])
    ranges = [(each["first"], each["last"]) for each in found["lost_ranges"]]
    assert ranges == [(6, 9), (2, 4)]
    assert (found["lost"], found["late"], found["gaps_filled"], found["extent_max"]) == (7, 1, 0, 1)


def test_what_has_been_missing_for_no_longer_than_its_source_takes_may_come_yet() -> None:
    """gw-1 fills within 50 ms; its number 6 is missing for 10 ms at the end, 3 for 90. gw-2 never fills anything."""
    found = figures([1, 4, 2, 5, 7, 1, 3], [0, 10, 60, 70, 90, 95, 100], [0, 0, 0, 0, 0, 1, 1])
    young = {(each["source"], each["first"]): each["may_fill_yet"] for each in found["lost_ranges"]}
    assert young == {("gw-1", 3): False, ("gw-1", 6): True, ("gw-2", 2): True}  # missing for no time at all
    assert [(each["lost"], each["may_fill_yet"]) for each in found["sources"]] == [(2, 1), (1, 1)]
    later = figures([1, 4, 2, 5, 7, 1, 3, 8], [0, 10, 60, 70, 90, 95, 100, 145], [0, 0, 0, 0, 0, 1, 1, 0])
    assert later["may_fill_yet"] == 0


def test_lists_are_bounded_and_say_how_many_there_are() -> None:
    numbers = list(range(0, 200, 2))
    found = figures(numbers, list(range(100)))
    assert (len(found["lost_ranges"]), found["lost_ranges_known"], found["lost"]) == (20, 99, 99)
    both = figures([1, 3, 2, 5, 4], [0, 1, 5, 6, 20])
    assert [each["first"] for each in both["filled_gaps"]] == [4, 2]  # the slowest first


def test_a_source_that_counts_anew_and_numbers_that_are_no_count_are_remarked_on() -> None:
    anew = figures([*range(50), *range(40)], list(range(90)))
    assert anew["sources"][0]["doubt"] == "it may have begun to count anew" and anew["doubtful_sources"] == 1
    sparse = figures([0, 10_000, 900_000], [0, 1, 2])
    assert sparse["sources"][0]["doubt"] == "its numbers are hardly a count"
    sound = figures(list(range(50)), list(range(50)))
    assert sound["sources"][0]["doubt"] is None and sound["doubtful_sources"] == 0


def test_events_without_a_number_are_counted_and_left_out(tmp_path: Path) -> None:
    values: list[object] = [1, 2, "3", None, 2.0, True, 2**70, -(2**62), 4, {"a": 1}]
    rows = [(1_000 + place, 900 + place, "gw-1", value) for place, value in enumerate(values)]
    found = told(numbered_capture(tmp_path, rows))
    assert (found["events"], found["unnumbered"], found["received"]) == (10, 7, 3)
    assert [(each["first"], each["last"]) for each in found["lost_ranges"]] == [(3, 3)]
    (tmp_path / "feed.capture").unlink()
    deep = told(numbered_capture(tmp_path, [(1_000, 900, "gw-1", {"a": [1, 7]})]), "/seq/a/1")
    assert (deep["received"], deep["in_order"]) == (1, 1)


@pytest.mark.parametrize("faulty", [True, False])
def test_requests_of_several_lines_some_without_a_number(tmp_path: Path, faulty: bool) -> None:
    """What stands in quarantine is not read; lines of a request with faults are found all the same."""
    shell = Shell(patient())
    lines = [[b'{"seq":1}', b'{"seq":2}'], [b'{"seq": 4}'], [b'{"seq":5}', b'{"a":"long before"}', b'{"seq":6}']]
    for place, own in enumerate(lines):
        faults = [Fault(2, "malformed", "no", b"no")] if faulty and place == 1 else []
        given = arrival([place] * len(own), lines=own, faults=faults, new_sources=["gw-1"][place:])
        shell.send(given, place * MS)
    with Capture(kept(tmp_path / "a.capture", captured(shell))) as capture:
        found = read_numbers(capture, "/seq")
    assert found.numbers.tolist() == [1, 2, 4, 5, 6]
    assert (found.events, found.unnumbered, found.quarantined_lines) == (6, 1, faulty)
    assert found.arrivals.tolist() == [0, 0, MS, 2 * MS, 2 * MS]


def test_only_so_many_events_are_looked_at(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = numbered_capture(tmp_path, [(1_000 + place, 900, "gw-1", place) for place in range(30)])
    monkeypatch.setattr(sequence, "EVENTS_AT_MOST", 11)
    with Capture(path) as capture:
        found = read_numbers(capture, "/seq")
    assert found.numbers.tolist() == list(range(11)) and found.events == 11


def test_what_cannot_be_read_says_why(tmp_path: Path) -> None:
    path = numbered_capture(tmp_path, [(1_000, 900, "gw-1", 1)])
    with Capture(path) as capture:
        with pytest.raises(ConfigError, match="must begin with '/'"):
            read_numbers(capture, "seq")
        with pytest.raises(ConfigError, match="none of 1 events has a whole number there"):
            read_numbers(capture, "/other")
    write_capture(tmp_path / "bare.capture", exponential(50, 1.0, 100, 3), ["gw-1"])
    with Capture(tmp_path / "bare.capture") as capture, pytest.raises(CaptureError, match="--without-events"):
        read_numbers(capture, "/seq")

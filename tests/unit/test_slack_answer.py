"""GET /v1/feeds/{feed}/slack: what other slacks would give, from live traffic, and what a memory of lateness keeps."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from helpers_feed import Shell, patient, saved_bytes
from helpers_service import configuration, problem_of, running
from hypothesis import given, settings
from hypothesis import strategies as st
from strandline.core.columns import TIME_MAX
from strandline.core.lateness import FADE_EVERY_NS, KEPT_EVENTS, Lateness
from strandline.core.saved import restore
from strandline.core.sketch import Sketch
from strandline.core.slacks import slacks_of
from strandline.slack_answer import GRID_NS

SECOND = 10**9
durations = st.one_of(st.integers(0, TIME_MAX), st.integers(0, 10**11), st.integers(0, 5000))


# ---- laws of the sketch and of the memory ---------------------------------------------------------------------------


@settings(max_examples=200)
@given(st.lists(durations, min_size=1, max_size=60), durations)
def test_the_two_bounds_hold_the_share_and_quantiles_keep_the_stated_error(values: list[int], slack: int) -> None:
    sketch = Sketch()
    sketch.add(np.array(values, dtype=np.int64))
    bounds = sketch.late_share(slack)
    later = sum(value > slack for value in values) / len(values)
    if slack >= 1000:  # below 1 us all counts as none
        assert bounds.at_least - 1e-12 <= later <= bounds.at_most + 1e-12
    for edge in sketch.buckets.upper[1:-1:200].tolist():
        share = sketch.late_share(edge)
        assert share.exact and share.at_least == pytest.approx(sum(value > edge for value in values) / len(values))
    median, found = sorted(values)[(len(values) - 1) // 2], sketch.quantile(0.5)
    if 1000 <= median <= 366 * 86400 * SECOND:
        assert found == pytest.approx(median, rel=0.0101)


columns = st.lists(st.one_of(st.none(), st.lists(durations, min_size=1, max_size=5)), max_size=12)


@given(columns, st.integers(0, 12))
def test_a_saved_memory_goes_on_the_same(rows: list[list[int] | None], cut: int) -> None:
    memory, other = Lateness(), Lateness()
    for number, row in enumerate(rows):
        if number == cut:
            other.restore(memory.saved())
        for each in (memory, other) if number >= cut else (memory,):
            column = None if row is None else np.array(row, dtype=np.int64)
            each.note(number * FADE_EVERY_NS // 3, 2 if row is None else len(row), column)
            each.check()
    if cut < len(rows):
        assert other.saved() == memory.saved()


def test_a_busy_feed_forgets_by_the_hour_and_a_quiet_one_does_not() -> None:
    busy, quiet = Lateness(), Lateness()
    for hour in range(5):
        late = np.full(2 * KEPT_EVENTS, (hour + 1) * SECOND)
        busy.note(hour * FADE_EVERY_NS, len(late), late)
        quiet.note(hour * FADE_EVERY_NS, 10, late[:10])
        busy.check()
        quiet.check()
    assert (busy.fades, quiet.fades) == (4, 0)
    assert busy.sketch.total == 2 * KEPT_EVENTS * (1 + 1 / 2 + 1 / 4 + 1 / 8 + 1 / 16)
    assert quiet.sketch.total == 50
    assert busy.sketch.late_share(4_500_000_000).at_least > 0.5 > quiet.sketch.late_share(4_500_000_000).at_least


# ---- the feed and the answer ----------------------------------------------------------------------------------------


@settings(max_examples=50)
@given(st.lists(st.lists(st.integers(0, 40), min_size=1, max_size=4), min_size=2, max_size=15), st.integers(0, 20))
def test_every_feed_remembers_what_its_own_slack_gave(bodies: list[list[int]], slack: int) -> None:
    """One source, marks at every arrival: then the share remembered for the slack in force is the ledger's."""
    shell = Shell(patient(slack_ns=slack * SECOND))
    newest = -1
    lateness: list[int] = []
    for number, body in enumerate(bodies):
        lateness += [max(newest - time, 0) for time in body] if newest >= 0 else [0] * len(body)
        shell.events([time * SECOND for time in body], number * SECOND, ["a"] * len(body))
        newest = max(newest, *body)
    state = shell.feed.state
    state.check()
    found = slacks_of(state, [each * SECOND for each in range(45)])
    assert found.weight == found.judged == len(lateness)
    for share in found.slacks:
        exact = sum(each * SECOND > share.slack_ns for each in lateness) / len(lateness)
        assert share.at_least - 1e-12 <= exact <= share.at_most + 1e-12
    assert [share.slack_ns for share in found.slacks if share.in_force] == [slack * SECOND]
    again = restore(saved_bytes(shell.feed))
    assert slacks_of(again, [SECOND]) == slacks_of(state, [SECOND])


async def test_the_answer_of_a_fixed_slack(tmp_path: Path) -> None:
    async with running(configuration(tmp_path, slack="5s")) as service:
        empty = (await service.get("slack")).json
        assert empty["lateness"]["p50_s"] is None and empty["slacks"][0]["late_share_at_most"] is None
        assert len(empty["slacks"]) == len(set(GRID_NS) | {5 * SECOND})
        await service.send([100])
        for back in range(1, 10):  # nine events, 1 to 9 s late: four beyond the slack
            await service.send([100 - back])
        found = (await service.get("slack?at=3.2s,7s,1h")).json
        assert [row["slack_s"] for row in found["slacks"]] == [3.2, 5.0, 7.0, 3600.0]
        assert [row["in_force"] for row in found["slacks"]] == [False, True, False, False]
        for row, late in zip(found["slacks"], (6, 4, 2, 0), strict=True):
            assert row["late_share_at_least"] <= late / 10 <= row["late_share_at_most"]
        assert (found["late_share_since_begin"], found["events_since_begin"]) == (0.4, 10)
        assert found["events_remembered"] == 10
        assert found["lateness"]["p50_s"] == pytest.approx(4, rel=0.0101)
        assert found["lateness"]["greatest_s"] == 9.0
        assert found["steering"] is None and "bucket" in found["exact"]


async def test_the_answer_of_a_steered_slack(tmp_path: Path) -> None:
    async with running(configuration(tmp_path, slack={}).replace("slack = {}", STEERED)) as service:
        for number in range(30):
            await service.send([1000 + number, *(1000 + number - 60 for _ in range(9))])
        found = (await service.get("slack?at=30s")).json
        assert found["steering"]["late_share_target"] == 0.001
        assert found["steering"]["contradiction"] is True and "contradict" in found["steering"]["explanation"]
        in_force = next(row for row in found["slacks"] if row["in_force"])
        assert in_force["slack_s"] == 30.0 and in_force["late_share_at_least"] > 0.8


STEERED = 'slack = { late_share = 0.001, at_most = "30s" }'


@pytest.mark.parametrize("at", ["", "3", "soon", "5s,", "-1s", "9999999999h", ",".join(["1s"] * 101)])
async def test_a_question_that_makes_no_sense_is_answered_with_what_would(tmp_path: Path, at: str) -> None:
    async with running(configuration(tmp_path)) as service:
        assert "at=" in problem_of(await service.get(f"slack?at={at}"), 400)
        problem_of(await service.get("/v1/feeds/sea-gauges/slack"), 404)

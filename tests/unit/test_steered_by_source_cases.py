"""Cases of a steered slack with `order = "source"`: what it is for, an operator's slack, and what observers see."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from helpers_feed import Shell, patient
from helpers_service import configuration, running
from strandline.core.settings import Settings
from strandline.core.slack_by_source import SteeredBySource
from strandline.core.view import sources_of

SECOND = 1_000_000_000
NAMES = ["gw-near", "gw-far"]
SCALES_S = np.array([0.2, 20.0])


def steered(**given: object) -> Settings:
    return patient(slack_ns=300 * SECOND, late_share=0.05, order="source", **given)


def fed(shell: Shell, seconds: int, seed: int = 1) -> Shell:
    """One event a second of each gateway, each with exponential delays of its own scale."""
    random = np.random.default_rng(seed)
    begun = shell.feed.state.now_ns // SECOND
    rows = []
    for number, scale in enumerate(SCALES_S):
        times = begun + 1 + np.arange(seconds)
        rows += [(time + random.exponential(scale), time, NAMES[number]) for time in times.tolist()]
    for came, time, name in sorted(rows):
        shell.events([time * SECOND], round(came * SECOND), name)
    return shell


def started(settings: Settings) -> Shell:
    shell = Shell(settings, sinks={"store": ["ordered", "late"]})
    shell.events([SECOND, SECOND], SECOND, NAMES)
    return shell


def slacks_s(shell: Shell) -> dict[str, float]:
    rows = sources_of(shell.feed.state, 0, 9)
    return {row.name: row.slack_ns / SECOND for row in rows if row.slack_ns is not None}


def test_a_far_gateway_does_not_make_a_near_one_wait() -> None:
    """5 % late for each: the near gateway waits less than a tenth of what the far one needs."""
    shell = fed(started(steered()), 700)
    found = slacks_s(shell)
    # With one event a second a delay is lateness only beyond it, so the near one's slack is that of whole seconds.
    assert 0 <= found["gw-near"] <= 2 and 30 <= found["gw-far"] <= 120
    near, far = (row.steering for row in sources_of(shell.feed.state, 0, 9))
    assert near is not None and far is not None
    assert near.late / near.events < 0.05, "no slack at all would keep it"
    assert far.late / far.events == pytest.approx(0.05, rel=0.4)
    view = shell.feed.snapshot(shell.feed.state.now_ns)
    assert view.steering is not None and view.steering.by_source is not None
    assert view.slack_ns == round(found["gw-far"] * SECOND) == view.steering.by_source.longest_ns


def test_a_slack_that_is_set_holds_for_all_sources_and_then_each_has_its_own_again() -> None:
    shell = fed(started(steered()), 500)
    before, now_ns = slacks_s(shell), shell.feed.state.now_ns
    shell.act("set_slack", 7 * SECOND, 50 * SECOND, "a storm", now_ns=now_ns, who="night shift")
    assert slacks_s(shell) == dict.fromkeys(NAMES, 7.0) and shell.feed.state.slack_ns == 7 * SECOND
    own, newest = shell.feed.state.own, shell.feed.state.sources.newest
    assert own is not None
    assert own.at[0] == newest[0] - before["gw-near"] * SECOND, "a longer slack moves nothing back"
    assert own.at[1] == newest[1] - 7 * SECOND, "a shorter one holds at once"
    shell.tick(now_ns + 49 * SECOND)
    assert slacks_s(shell) == dict.fromkeys(NAMES, 7.0)
    shell.tick(now_ns + 50 * SECOND)
    assert slacks_s(shell) == before


def test_while_a_slack_is_set_those_count_that_the_steered_one_would_have_made_late() -> None:
    """Late by the slack that was set, and not late by their own: the steering has no hand in these."""
    shell = fed(started(steered()), 500)
    slack, now_ns = shell.feed.state.slack, shell.feed.state.now_ns
    assert isinstance(slack, SteeredBySource)
    shell.act("set_slack", 0, 50 * SECOND, "a storm", now_ns=now_ns, who="night shift")
    before, newest = slack.stretch(1), int(shell.feed.state.sources.newest[1])
    outcome = shell.events([newest - 1] * 4, now_ns, "gw-far")
    assert outcome is not None and outcome.late == 4
    after = slack.stretch(1)
    assert (after.events, after.late) == (before.events + 4, before.late)
    assert after.exact_ns < before.exact_ns, "in time by its own slack: it sinks"
    (row,) = sources_of(shell.feed.state, 1, 1)
    assert row.steering is not None and row.steering.late >= 4, "the books tell what really was late"


def test_a_promise_needs_no_slack_whatever_its_source_has() -> None:
    shell = fed(started(steered()), 500)
    state = shell.feed.state
    now_ns, newest_ns = state.now_ns, state.sources.newest_ns
    shell.act("promise", "gw-far", newest_ns - 3 * SECOND, now_ns=now_ns)
    assert state.own is not None and state.own.at[1] == newest_ns - 3 * SECOND
    assert state.sources.vouched[1] == newest_ns - 3 * SECOND + round(slacks_s(shell)["gw-far"] * SECOND)


async def test_the_answers_over_http(tmp_path: Path) -> None:
    text = configuration(tmp_path, slack={}, order="source", idle_after="30s")
    text = text.replace("slack = {}", 'slack = { late_share = 0.001, at_most = "30s" }')
    async with running(text) as service:
        for number in range(30):
            # gw-2 sends nine of ten a minute late, gw-1 none; 300 events of each.
            seconds = [1000 + number, *(1000 + number - 60 for _ in range(9))]
            await service.send(seconds, station="gw-2")
            await service.send([1000 + number + row / 10 for row in range(10)], station="gw-1")
        await service.send([1000], station="gw-3")
        rows = {row["source"]: row for row in (await service.get("sources")).json["sources"]}
        assert rows["gw-1"]["slack_s"] < 1 and rows["gw-1"]["late_share"] == 0.0
        assert rows["gw-2"]["slack_s"] == 30.0 and 0.8 < rows["gw-2"]["late_share"] < 0.9
        assert rows["gw-3"]["slack_s"] == 30.0 and rows["gw-3"]["steering"]["warming_up"]
        assert rows["gw-2"]["steering"]["contradiction"] and not rows["gw-1"]["steering"]["contradiction"]
        assert rows["gw-2"]["steering"]["attainable_late_share"] > 0.8
        steering = (await service.document())["steering"]
        assert steering["contradiction"] is True and steering["bound_this_stretch"] is None
        assert "contradict" in steering["explanation"] and "gw-2" in steering["explanation"]
        assert (steering["by_source"]["warming_up"], steering["by_source"]["contradiction"]) == (1, 1)
        assert steering["by_source"]["contradiction_most_of"] == "gw-2"
        assert steering["by_source"]["slack_longest_s"] == 30.0
        await service.post("slack", {"slack": "4s", "for": "1h", "reason": "a storm"})
        rows = {row["source"]: row for row in (await service.get("sources")).json["sources"]}
        assert {row["slack_s"] for row in rows.values()} == {4.0}
        assert rows["gw-2"]["steering"]["slack_s"] == 30.0

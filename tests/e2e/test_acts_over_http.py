"""Operators' acts and the history of holds over HTTP, with the real application: answers, effects, restarts."""

from __future__ import annotations

import asyncio
from pathlib import Path
from typing import Any

import pytest
from helpers_faulty import planted, scripted
from helpers_receiver import Receiver
from helpers_service import (
    BEGIN_S,
    FEED,
    Process,
    Running,
    configuration,
    events,
    eventually,
    problem_of,
    running,
    stored,
)
from helpers_sinks import VirtualTime
from strandline.access_gate import WHO
from strandline.acting import REASON_CHARACTERS_AT_MOST, WHO_CHARACTERS_AT_MOST, who_of
from strandline.documents import STALLED_AFTER_S
from strandline.sinks.lanes import late_rows

SECOND = 10**9
PATH = f"/v1/feeds/{FEED}"
WHY = {"reason": "a storm is coming", "who": "night shift"}


def at_the_beginning() -> VirtualTime:
    """A clock that stands at second 0 of the tests' events."""
    clock = VirtualTime()
    clock.now = BEGIN_S * SECOND
    return clock


async def act(service: Running, path: str, body: Any = None) -> None:
    """An act that must be done."""
    answer = await service.post(path, body)
    assert answer.status == 204, answer.content


async def acts(service: Running) -> list[dict[str, Any]]:
    answer = await service.get("acts")
    assert answer.status == 200
    return list(answer.json["acts"])


# ---- acts -----------------------------------------------------------------------------------------------------------


async def test_every_act_is_listed_with_who_and_why_the_newest_first(tmp_path: Path) -> None:
    clock = at_the_beginning()
    toml, sinks = scripted("a")
    async with running(configuration(tmp_path, sinks=toml), clock=clock, make=planted(**sinks)) as service:
        await service.send([1])
        await act(service, "excuse", {"source": "gw-1", **WHY})
        await act(service, "excuse", {"source": "gw-1"})
        await act(service, "drain", {"reason": "the shift ends"})
        await act(service, "drain")
        await act(service, "slack", {"slack": "8s", "for": "30m", **WHY})
        await act(service, "slack", {"slack": None, **WHY})
        await act(service, "sinks/a/pause", WHY)
        await act(service, "sinks/a/resume", WHY)
        found = await acts(service)
        assert [(row["act"], row["subject"], row["who"], row["reason"]) for row in found] == [
            ("resume", "a", "night shift", WHY["reason"]),
            ("pause", "a", "night shift", WHY["reason"]),
            ("slack", "", "night shift", WHY["reason"]),
            ("slack", "", "night shift", WHY["reason"]),
            ("drain", "", "unknown", ""),
            ("drain", "", "unknown", "the shift ends"),
            ("excuse", "gw-1", "unknown", ""),
            ("excuse", "gw-1", "night shift", WHY["reason"]),
        ]
        ended, chosen = found[2], found[3]
        assert (ended["slack_s"], ended["until"]) == (None, None)
        assert (chosen["slack_s"], chosen["at"]) == (8.0, "2023-11-14T22:13:20Z")
        assert (chosen["at_ms"], chosen["until"]) == (BEGIN_S * 1e3, "2023-11-14T22:43:20Z")
        assert len((await service.get("acts?limit=3")).json["acts"]) == 3


async def test_a_slack_for_a_time_holds_and_ends(tmp_path: Path) -> None:
    clock = at_the_beginning()
    async with running(configuration(tmp_path, slack="2s"), clock=clock) as service:
        await service.send([0])
        await act(service, "slack", {"slack": "8s", "for": "10s", **WHY})
        await service.send([20])
        document = await service.document()
        assert (document["slack_s"], document["watermark_ns"]) == (8.0, (BEGIN_S + 12) * SECOND)
        assert document["slack_set"] == {
            "slack_s": 8.0, "until": "2023-11-14T22:13:30Z", "who": "night shift",
            "since": "2023-11-14T22:13:20Z", "reason": WHY["reason"],
        }  # fmt: skip
        assert (await service.get("slack")).json["slack_s"] == 8.0
        clock.now += 10 * SECOND
        await service.send([21])
        document = await service.document()
        assert (document["slack_s"], document["slack_set"]) == (2.0, None)
        assert document["watermark_ns"] == (BEGIN_S + 19) * SECOND


async def test_a_paused_sink_is_offered_nothing_and_others_go_on(tmp_path: Path) -> None:
    clock = at_the_beginning()
    toml, sinks = scripted("a", "b")
    async with running(configuration(tmp_path, sinks=toml), clock=clock, make=planted(**sinks)) as service:
        await service.send([1])
        await eventually(lambda: sinks["a"].durable["ordered"] == [1] and sinks["b"].durable["ordered"] == [1])
        await act(service, "sinks/a/pause", WHY)
        await service.send([2])
        await eventually(lambda: sinks["b"].durable["ordered"] == [1, 2])
        assert sinks["a"].durable["ordered"] == [1]
        clock.now += int((STALLED_AFTER_S + 1) * SECOND)
        detail = problem_of(await service.get("/health/ready"), 503)
        words = "it is paused by night shift since 2023-11-14T22:13:20Z: a storm is coming"
        assert f"sink a has taken nothing of lane ordered for 31 s: {words}" in detail
        shown = (await service.document())["sinks"]
        assert shown["a"]["paused"] and shown["a"]["pause"]["who"] == "night shift"
        assert not shown["b"]["paused"] and shown["b"]["pause"] is None
        await act(service, "sinks/a/resume", WHY)
        await eventually(lambda: sinks["a"].durable["ordered"] == [1, 2])
        assert (await service.get("/health/ready")).status == 200


async def test_no_repair_goes_to_a_paused_sink(tmp_path: Path) -> None:
    with Receiver() as receiver:
        late = 'late = { deliver = "repair", every = "1h" }'
        urls = f'url = "{receiver.url}/ordered"\nlate_url = "{receiver.url}/late"'
        sinks = f'[[feed.sink]]\nkind = "http"\nname = "archive"\n{urls}\n{late}\n'
        async with running(configuration(tmp_path, sinks=sinks)) as service:
            await service.send([100])
            await act(service, "sinks/archive/pause", WHY)
            await service.send([1, 2])
            await eventually(lambda: len(late_rows(service.runtime.lanes_file)) == 2)
            detail = problem_of(await service.post("late/resend", {"sink": "archive"}), 409, "sink_paused")
            assert "resume it" in detail
            repairing = asyncio.create_task(service.runtime.repairers["archive"].run())
            await service.send([101])
            assert "/late" not in [request.path for request in receiver.requests]
            await act(service, "sinks/archive/resume", WHY)
            assert await repairing == 2
            assert (await service.post("late/resend", {"sink": "archive"})).json == {"sent": 2}
        assert receiver.faults == []


async def test_limits_still_hold_while_a_sink_is_paused(tmp_path: Path) -> None:
    toml, sinks = scripted("a", "b")
    keys = {"undelivered_events_at_most": 1, "batch_events_at_most": 1, "held_events_at_most": 3, "events_at_most": 2}
    async with running(configuration(tmp_path, sinks=toml, **keys), make=planted(**sinks)) as service:
        await act(service, "sinks/a/pause", WHY)
        for second in range(1, 6):
            await service.send([second])
        hold = (await service.document())["hold"]
        assert (hold["why"], hold["sink"]) == ("sink_paused", "a")
        problem_of(await service.post("events", events([6])), 429, "held_full")
        await act(service, "sinks/a/resume", WHY)
        await eventually(lambda: service.runtime.feed.state.runs.held == 0)
        await service.send([6])


async def test_an_act_whose_asker_has_left_is_done_all_the_same(tmp_path: Path) -> None:
    """The pause follows from its record, not from the request that waits for it."""
    toml, sinks = scripted("a")
    async with running(configuration(tmp_path, sinks=toml), make=planted(**sinks)) as service:
        runtime = service.runtime
        asking = asyncio.create_task(
            runtime.act(lambda now_ns, token: runtime.feed.pause("a", True, "why", now_ns, token, "night shift"))
        )
        await asyncio.sleep(0)
        asking.cancel()
        await eventually(lambda: runtime.deliveries["a"].state().paused)


def test_what_is_in_force_survives_a_kill_and_a_stop(tmp_path: Path) -> None:
    with Process(tmp_path, configuration(tmp_path, slack="2s", idle_after="24h", hold_at_most="24h")) as process:
        assert process.ask(f"{PATH}/events", events([0])).status == 200
        as_json = {"Content-Type": "application/json"}
        slack = b'{"slack":"30s","for":"24h","reason":"a storm","who":"night shift"}'
        assert process.ask(f"{PATH}/slack", slack, as_json).status == 204
        pause = b'{"reason":"its disk is changed","who":"day shift"}'
        assert process.ask(f"{PATH}/sinks/sqlite/pause", pause, as_json).status == 204
        for end in (process.kill, process.terminate):
            end()
            process.start()
            assert process.ask(f"{PATH}/events", events([40])).status == 200
            found = process.document()
            assert (found["slack_s"], found["slack_set"]["who"]) == (30.0, "night shift")
            assert found["sinks"]["sqlite"]["pause"]["reason"] == "its disk is changed"
            assert stored(tmp_path) == [], "nothing was offered to it"
            names = [row["act"] for row in process.ask(f"{PATH}/acts").json["acts"]]
            assert names == ["pause", "slack"]
            assert "stopped" in [row["why"] for row in process.ask(f"{PATH}/holds").json["holds"]]
        assert process.ask(f"{PATH}/sinks/sqlite/resume", pause, as_json).status == 204
        process.until(lambda: stored(tmp_path) == [0], "what waited for it comes out")


# ---- what is refused ------------------------------------------------------------------------------------------------

LONG_REASON, LONG_WHO = "x" * (REASON_CHARACTERS_AT_MOST + 1), "x" * (WHO_CHARACTERS_AT_MOST + 1)


@pytest.mark.parametrize(
    ("path", "body", "status", "says"),
    [
        ("slack", {"slack": "8s", "for": "30m"}, 422, "reason"),
        ("slack", {"slack": "8s", "for": "30m", "reason": " "}, 422, "/reason: must say why"),
        ("slack", {"slack": "8s", "for": "30m", "reason": LONG_REASON}, 422, "1000"),
        ("slack", {"slack": "8s", "for": "30m", "reason": "a", "who": LONG_WHO}, 422, "100"),
        ("slack", {"slack": "8s", "reason": "a"}, 422, "/for: must say for how long"),
        ("slack", {"slack": "8s", "for": "25h", "reason": "a"}, 422, "/for: 25h must be"),
        ("slack", {"slack": "8s", "for": "0s", "reason": "a"}, 422, "/for: 0s must be"),
        ("slack", {"slack": "61s", "for": "1h", "reason": "a"}, 422, "more than hold_at_most, which is 1m"),
        ("slack", {"slack": "8", "for": "1h", "reason": "a"}, 422, "/slack: '8' has no unit"),
        ("slack", {"slack": None, "for": "1h", "reason": "a"}, 422, "/for: must be left out"),
        ("slack", {"for": "1h", "reason": "a"}, 422, "slack"),
        ("sinks/a/pause", {}, 422, "reason"),
        ("sinks/a/pause", {"reason": "a", "way": 1}, 422, "way"),
        ("sinks/b/pause", {"reason": "a"}, 404, "no sink 'b'; there are: a"),
        ("sinks/lanes/pause", {"reason": "a"}, 404, "no sink 'lanes'"),
        ("sinks/b/resume", {"reason": "a"}, 404, "no sink 'b'"),
        ("excuse", {"source": "gw-9", "reason": "a"}, 404, "gw-9"),
        ("drain", {"who": 5}, 422, "who"),
    ],
)
async def test_what_cannot_be_done_is_refused_and_changes_nothing(
    tmp_path: Path, path: str, body: Any, status: int, says: str
) -> None:
    toml, sinks = scripted("a")
    async with running(configuration(tmp_path, sinks=toml, hold_at_most="1m"), make=planted(**sinks)) as service:
        before = service.runtime.feed.next_lsn
        assert says in problem_of(await service.post(path, body), status)
        assert service.runtime.feed.next_lsn == before and await acts(service) == []


async def test_bodies_that_excuse_and_drain_always_took_are_taken_still(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service:
        await service.send([1])
        await act(service, "excuse", {"source": "gw-1", "reason": "x" * 5_000})
        await act(service, "drain", b"not looked at")
        assert len((await acts(service))[1]["reason"]) == REASON_CHARACTERS_AT_MOST


async def test_a_reason_of_wide_characters_finds_room_in_the_journal(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service:
        wide = {"reason": "\U0001f30a" * REASON_CHARACTERS_AT_MOST, "who": "\U0001f30a" * WHO_CHARACTERS_AT_MOST}
        await act(service, "slack", {"slack": "8s", "for": "30m", **wide})
        assert (await acts(service))[0]["who"] == wide["who"]


def test_who_acts_is_whom_access_control_knows_else_whom_the_body_names() -> None:
    assert who_of({WHO: "token of the night shift"}, "somebody") == "token of the night shift"  # type: ignore[arg-type]
    assert who_of({}, " somebody ") == "somebody"  # type: ignore[arg-type]
    assert who_of({}, "") == "unknown"  # type: ignore[arg-type]


# ---- the history of holds -------------------------------------------------------------------------------------------


async def test_who_held_the_feed_and_for_how_long(tmp_path: Path) -> None:
    clock = at_the_beginning()
    text = configuration(tmp_path, idle_after="40s", hold_at_most="1h")
    async with running(text, clock=clock) as service:
        await service.send([0], "gw-1")
        await service.send([5], "gw-2")  # gw-1 is behind: slow for 10 s, silent from then on
        clock.now += 30 * SECOND
        await act(service, "excuse", {"source": "gw-1", **WHY})
        clock.now += 20 * SECOND
        found = (await service.get("holds")).json
        rows = [(row["why"], row["source"], row["from"], row["to"]) for row in found["holds"]]
        begin, silent, excused = "2023-11-14T22:13:20Z", "2023-11-14T22:13:30.000000001Z", "2023-11-14T22:13:50Z"
        assert rows == [("silent_source", "gw-1", silent, excused), ("slow_source", "gw-1", begin, silent)]
        assert found["holds"][0]["for_s"] == pytest.approx(20) and "excuse it" in found["holds"][0]["explanation"]
        assert found["holds"][1]["from_ms"] == BEGIN_S * 1e3 and found["known_since"] == begin
        totals = [(row["why"], row["source"], round(row["for_s"], 3), row["count"]) for row in found["summary"]]
        assert totals == [("silent_source", "gw-1", 20.0, 1), ("slow_source", "gw-1", 10.0, 1)]
        part = (await service.get("holds?from=2023-11-14T22:13:45Z&to=2023-11-14T23:00:00Z&limit=1")).json
        assert [(row["why"], row["to"]) for row in part["holds"]] == [("silent_source", excused)]
        assert part["summary"][0]["for_s"] == 5.0, "totals count what lies within"
        await service.send([3], "gw-1")  # late, and behind again
        await service.send([6], "gw-2")
        clock.now += 4 * SECOND
        lasting = (await service.get("holds")).json["holds"][0]
        assert (lasting["why"], lasting["to"], lasting["to_ms"], lasting["for_s"]) == ("slow_source", None, None, 4.0)
        hold = (await service.document())["hold"]
        assert (hold["why"], hold["for_s"], hold["idle_at"]) == ("slow_source", 4.0, "2023-11-14T22:14:50Z")


@pytest.mark.parametrize(
    ("query", "says"),
    [("?from=yesterday", "?from= must be a time"), ("?to=1", "?to= must be"), ("?limit=x", "?limit= must be"),
     ("?from=2026-05-01T00:00:00Z&to=2026-04-01T00:00:00Z", "must not be later")],
)  # fmt: skip
async def test_questions_that_make_no_sense(tmp_path: Path, query: str, says: str) -> None:
    async with running(configuration(tmp_path)) as service:
        assert says in problem_of(await service.get(f"holds{query}"), 400)


async def test_a_source_that_hold_at_most_goes_past_is_named(tmp_path: Path) -> None:
    clock = at_the_beginning()
    async with running(configuration(tmp_path, hold_at_most="10s"), clock=clock) as service:
        await service.send([0], "gw-1")
        await service.send([5], "gw-2")
        clock.now += 11 * SECOND
        await service.send([16], "gw-2")
        hold = (await service.document())["hold"]
        assert (hold["why"], hold["source"]) == ("hold_at_most", "gw-1")
        assert (await service.document())["watermark_ns"] == (BEGIN_S + 5) * SECOND

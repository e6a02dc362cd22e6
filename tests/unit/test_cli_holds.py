"""`strandline holds`: asks a running service, shows holds or totals, and says what is wrong."""

from __future__ import annotations

import asyncio
import json
from pathlib import Path

import pytest
from helpers_service import BEGIN_S, FEED, Running, configuration, running
from helpers_sinks import VirtualTime
from strandline.cli import main

SECOND = 10**9


async def told(service: Running, *arguments: str) -> int:
    """The exit code of the command against this service; it runs in a thread, for the service is in this one."""
    return await asyncio.to_thread(main, ["holds", "--feed", FEED, "--url", service.url, *arguments])


async def test_it_shows_who_held_the_feed(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    clock = VirtualTime()
    clock.now = BEGIN_S * SECOND
    async with running(configuration(tmp_path, idle_after="40s"), clock=clock) as service:
        await service.send([0], "gw-1")
        await service.send([5], "gw-2")
        clock.now += 30 * SECOND
        assert await told(service) == 0
        rows = [line.split("\t") for line in capsys.readouterr().out.splitlines()]
        assert rows[0] == ["from", "to", "for", "who", "why", "what it means"]
        assert [row[2:5] for row in rows[1:]] == [["20.0s", "gw-1", "silent_source"], ["10.0s", "gw-1", "slow_source"]]
        assert rows[1][1] == "it lasts" and rows[2][0] == "2023-11-14T22:13:20Z"
        assert await told(service, "--totals", "--to", "2023-11-14T22:13:25Z") == 0
        assert capsys.readouterr().out.splitlines()[1].split("\t") == ["5.0s", "1", "gw-1", "slow_source"]
        assert await told(service, "--limit", "1", "--json") == 0
        assert [row["why"] for row in json.loads(capsys.readouterr().out)["holds"]] == ["silent_source"]
        assert await told(service, "--limit", "1") == 0
        assert "go on with --to 2023-11-14T22:13:30" in capsys.readouterr().err
        assert await told(service, "--from", "1h") == 0  # by the machine's clock: long after
        assert "slow_source" not in capsys.readouterr().out


async def test_short_holds_are_left_out_and_counted(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    clock = VirtualTime()
    clock.now = BEGIN_S * SECOND
    async with running(configuration(tmp_path, idle_after="4m"), clock=clock) as service:
        await service.send([0], "gw-1")
        await service.send([2], "gw-2")  # gw-1 is behind for 2 s, then gw-2 for 3 s, then gw-1 for 12 s
        for second, source, seconds in ((4, "gw-1", 2), (6, "gw-2", 3)):
            clock.now += seconds * SECOND
            await service.send([second], source)
        clock.now += 12 * SECOND
        whole = (await service.get("holds")).json
        lasted = [round(row["for_s"]) for row in whole["holds"]]
        assert sorted(lasted) == [2, 3, 12] and whole["shorter"] == {"count": 0, "for_s": 0}
        part = (await service.get("holds?at_least=3s")).json
        assert [round(row["for_s"]) for row in part["holds"]] == [12, 3]
        assert (part["shorter"]["count"], round(part["shorter"]["for_s"])) == (1, 2)
        assert part["summary"] == whole["summary"]
        within = (await service.get("holds?at_least=3s&to=2023-11-14T22:13:21Z")).json
        assert (within["holds"], within["shorter"]) == ([], {"count": 1, "for_s": 1.0}), "of the time asked about"
        assert await told(service) == 0
        shown = capsys.readouterr()
        assert len(shown.out.splitlines()) == 2 and "gw-1\tslow_source" in shown.out
        assert "2 holds shorter than 10s left out, 5.0s in all; --at-least 0s shows them" in shown.err
        assert await told(service, "--at-least", "0s") == 0
        shown = capsys.readouterr()
        assert len(shown.out.splitlines()) == 4 and "left out" not in shown.err
        assert (await service.get("holds?at_least=10")).status == 400


async def test_what_is_wrong_is_said(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    async with running(configuration(tmp_path)) as service:
        assert await told(service, "--from", "yesterday") == 2
        assert "--from 'yesterday' is neither" in capsys.readouterr().err
        assert await told(service, "--from", "2026-05-01T00:00:00Z", "--to", "2026-04-01T00:00:00Z") == 2
        assert "must not be later" in capsys.readouterr().err
    assert main(["holds", "--feed", FEED, "--url", "http://127.0.0.1:1"]) == 3
    assert "could not be reached" in capsys.readouterr().err
    with pytest.raises(SystemExit) as ended:
        main(["holds", "--feed", FEED, "--limit", "0"])
    assert ended.value.code == 2

"""`strandline act`: each act over real HTTP against a running service, what it prints, and its exit codes."""

from __future__ import annotations

import asyncio
from pathlib import Path
from typing import Any

import pytest
from helpers_access import asking, everything, write_tokens
from helpers_faulty import planted, scripted
from helpers_service import FEED, Running, configuration, running
from strandline.cli import main

WHY = ("--reason", "a storm", "--who", "night shift")


async def told(service: Running, *arguments: str) -> int:
    """The exit code of the command against this service; it runs in a thread, for the service is in this one."""
    command = ["act", *arguments, "--feed", FEED, "--url", service.url]
    return await asyncio.to_thread(main, command)


async def acts(service: Running) -> list[dict[str, Any]]:
    """What the service has noted, the oldest first."""
    return list(reversed((await service.get("acts")).json["acts"]))


async def test_each_act_is_done_noted_with_who_and_why_and_said(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    toml, sinks = scripted("a")
    async with running(configuration(tmp_path, sinks=toml), make=planted(**sinks)) as service:
        await service.send([1], "gw-east")
        says = {
            ("excuse", "--source", "gw-east"): "gw-east is not waited for until it speaks again.",
            ("drain",): f"What feed {FEED} held is released in order, as fast as its sinks take it; "
            "what still comes and is older is late.",
            ("slack", "--slack", "8s", "--for", "30m"): f"The slack of feed {FEED} is 8s for 30m; "
            "then the configured one holds again.",
            ("slack", "--end"): f"The configured slack of feed {FEED} holds again.",
        }
        for arguments, sentence in says.items():
            assert await told(service, *arguments, *WHY) == 0
            assert capsys.readouterr().out == sentence + "\n"
        found = await acts(service)
        assert [(row["act"], row["subject"]) for row in found] == [
            ("excuse", "gw-east"), ("drain", ""), ("slack", ""), ("slack", ""),
        ]  # fmt: skip
        assert {(row["who"], row["reason"]) for row in found} == {("night shift", "a storm")}
        assert [row["slack_s"] for row in found[2:]] == [8.0, None]
        document = await service.document()
        assert document["ledger"]["buffered"] == 0 and document["slack_set"] is None


async def test_a_sink_is_paused_and_resumed(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    toml, sinks = scripted("a")
    async with running(configuration(tmp_path, sinks=toml), make=planted(**sinks)) as service:
        assert await told(service, "pause", "--sink", "a", *WHY) == 0
        assert "Sink a is handed nothing more until it is resumed" in capsys.readouterr().out
        assert (await service.document())["sinks"]["a"]["paused"]
        assert await told(service, "resume", "--sink", "a", "--reason", "it is over") == 0
        assert capsys.readouterr().out == "Sink a is handed batches again, from where it stands.\n"
        assert not (await service.document())["sinks"]["a"]["paused"]
        assert (await acts(service))[1]["who"] == "unknown"


async def test_a_token_comes_from_a_file_and_names_who_acts(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    made = write_tokens(tmp_path / "tokens.toml", {"night-shift": everything(), "gauge": {"ingest": [FEED]}})
    for name, token in made.items():
        (tmp_path / name).touch(0o600)
        (tmp_path / name).write_text(token + "\n")
    async with running(configuration(tmp_path, top=asking(tmp_path / "tokens.toml"))) as service:
        assert await told(service, "drain", *WHY) == 2
        assert await told(service, "drain", *WHY, "--token-file", str(tmp_path / "gauge")) == 2
        shown = capsys.readouterr()
        assert "has not the role" in shown.err and shown.out == ""
        assert await told(service, "drain", "--reason", "a storm", "--token-file", str(tmp_path / "night-shift")) == 0
        assert made["night-shift"] not in "".join(capsys.readouterr())
        (act,) = service.runtime.feed.state.acts.newest(10)
        assert (act.act, act.who, act.reason) == ("drain", "night-shift", "a storm")


async def test_what_the_service_refuses_is_said_and_is_2(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    async with running(configuration(tmp_path, hold_at_most="1m")) as service:
        refused = {
            ("excuse", "--source", "gw-9"): "no source 'gw-9'",
            ("slack", "--slack", "61s", "--for", "1h"): "more than hold_at_most, which is 1m",
            ("slack", "--slack", "8s", "--for", "25h"): "/for: 25h must be",
            ("pause", "--sink", "a/b"): "no sink 'a/b'",
            ("resume", "--sink", "lanes"): "no sink 'lanes'",
        }
        for arguments, says in refused.items():
            assert await told(service, *arguments, *WHY) == 2
            shown = capsys.readouterr()
            assert says in shown.err and shown.out == ""
        assert await acts(service) == []


@pytest.mark.parametrize(
    "arguments",
    [
        ("excuse", "--source", "gw-1"),  # without why
        ("drain",),
        ("drain", "--reason", " "),
        ("excuse", *WHY),
        ("pause", *WHY),
        ("slack", "--slack", "8", "--for", "30m", *WHY),
    ],
)
def test_wrong_use_is_2(arguments: tuple[str, ...]) -> None:
    with pytest.raises(SystemExit) as ended:
        main(["act", *arguments, "--feed", FEED])
    assert ended.value.code == 2


@pytest.mark.parametrize("arguments", [("--slack", "8s"), ("--for", "30m"), (), ("--end", "--slack", "8s")])
def test_options_of_a_slack_that_do_not_go_together_are_2(
    arguments: tuple[str, ...], capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["act", "slack", *arguments, *WHY, "--feed", FEED, "--url", "http://127.0.0.1:1"]) == 2
    assert "--end" in capsys.readouterr().err


def test_a_service_out_of_reach_is_3(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["act", "drain", *WHY, "--feed", FEED, "--url", "http://127.0.0.1:1"]) == 3
    assert "could not be reached" in capsys.readouterr().err

"""The command line: exit codes, help, and what is written where. What `serve` and `demo` run is tested end to end."""

from __future__ import annotations

import argparse
import base64
import json
import subprocess
import sys
import tomllib
from collections.abc import Iterator
from pathlib import Path

import pytest
from helpers_sinks import START_NS, HeldLines
from strandline.cli import main, parser
from strandline.cli_answers import harmless, table_lines, wrapped_lines
from strandline.cli_lanes import since_ns
from strandline.errors import ConfigError
from strandline.sinks.lanes import LaneStore

ROOT = Path(__file__).resolve().parents[2]
FEED = '[[feed]]\nname = "river-gauges"\n'
Capture = pytest.CaptureFixture[bytes]


def run(*arguments: str, cwd: Path = ROOT) -> subprocess.CompletedProcess[str]:
    """The command line as a process of its own."""
    command = [sys.executable, "-m", "strandline.cli", *arguments]
    return subprocess.run(command, cwd=cwd, capture_output=True, text=True, check=False)


def commands(of: argparse.ArgumentParser, *names: str) -> Iterator[tuple[str, ...]]:
    """Every command, groups of commands too."""
    yield names
    for action in of._actions:
        if isinstance(action, argparse._SubParsersAction):
            for name, below in action.choices.items():
                yield from commands(below, *names, name)


@pytest.fixture
async def lanes(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A data folder with 20 late events and 20 quarantined lines, and a configuration beside it, where we stand."""
    (tmp_path / "strandline.toml").write_text(f'data_dir = "data"\n{FEED}{FEED.replace("river-gauges", "radio")}')
    store, lines = LaneStore(tmp_path / "data/feeds/river-gauges/lanes.db"), HeldLines()
    await store.open()
    await store.take(lines.batches("late", range(1, 6), 4), lines)
    await store.take(lines.batches("quarantine", range(1, 6), 4), lines)
    await store.close()
    monkeypatch.chdir(tmp_path)
    return tmp_path / "data"


# ---- as a process: exit codes and help ------------------------------------------------------------------------------


def test_exit_codes_of_a_process(tmp_path: Path) -> None:
    (tmp_path / "bad.toml").write_text(FEED + "clock = 5\nslak = 6\n")
    good, bad = run("check", str(ROOT / "deploy/minimal.toml")), run("check", "bad.toml", cwd=tmp_path)
    assert (good.returncode, good.stderr) == (0, "")
    assert (bad.returncode, bad.stdout) == (2, "")
    assert bad.stderr.splitlines() == [
        'strandline: bad.toml: feed[1].slak of "river-gauges" is no key of a feed; did you mean `slack`?',
        'strandline: bad.toml: feed[1].clock of "river-gauges" = 5 is none of event, arrival',
        "strandline: 2 faults; nothing was done.",
    ]
    assert run("serve", "bad.toml", cwd=tmp_path).returncode == 2
    nothing = run("serve", cwd=tmp_path)
    assert nothing.returncode == 2
    assert "there is no strandline.toml in" in nothing.stderr
    assert run().returncode == 2
    absent = run("late", "list", "--feed", "river-gauges", "--data-dir", "absent", cwd=tmp_path)
    assert (absent.returncode, absent.stdout) == (3, "")
    assert "has the service run with this folder yet?" in absent.stderr


def test_help_is_light() -> None:
    """Importing what the work needs takes ten times as long as the help itself."""
    script = (
        "import sys\nfrom strandline.cli import main\n"
        "try:\n    main(['--help'])\nexcept SystemExit as stop:\n    assert stop.code == 0\n"
        "print(sorted({'numpy', 'msgspec', 'rich', 'aiohttp', 'asyncio', 'sqlite3', 'tomllib'} & set(sys.modules)))"
    )
    shown = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True).stdout
    assert shown.splitlines()[-1] == "[]"
    assert "strandline demo" in shown


def test_whoever_stops_reading_ends_an_export_quietly(lanes: Path) -> None:
    command = [sys.executable, "-c", "import sys; from strandline.cli import main; sys.exit(main())"]
    command += ["late", "export", "--feed", "river-gauges"]
    with subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, cwd=lanes.parent) as process:
        assert process.stdout is not None
        assert process.stderr is not None
        process.stdout.close()
        assert process.stderr.read() == b""
        assert process.wait() == 0


# ---- wrong use and help ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize("names", list(commands(parser())), ids=" ".join)
def test_every_command_explains_itself(names: tuple[str, ...], capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit) as stop:
        main([*names, "--help"])
    shown = capsys.readouterr().out
    assert stop.value.code == 0
    assert f"usage: {' '.join(('strandline', *names))} " in shown
    if "COMMAND" not in shown:
        assert f"example:\n  {' '.join(('strandline', *names))} " in shown
    assert max(map(len, shown.splitlines())) <= 100


@pytest.mark.parametrize(
    "arguments",
    [
        ["unknown"],
        ["late"],
        ["late", "list"],
        ["late", "list", "--feed", "a", "--limit", "0"],
        ["late", "list", "--feed", "a", "--limit", "many"],
        ["late", "list", "--feed", "a", "--config", "x", "--data-dir", "y"],
        ["quarantine", "list", "--feed", "a", "--reason", "mood"],
        ["late", "forget", "--feed", "a"],
        ["demo", "--seconds", "0"],
        ["demo", "--seconds", "nan"],
        ["check"],
    ],
)
def test_wrong_use_is_refused(arguments: list[str], capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit) as stop:
        main(arguments)
    assert stop.value.code == 2
    assert "usage: strandline" in capsys.readouterr().err


def test_the_version_is_the_project_s(capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit) as stop:
        main(["--version"])
    assert stop.value.code == 0
    version = tomllib.loads((ROOT / "pyproject.toml").read_text())["project"]["version"]
    assert capsys.readouterr().out == f"strandline {version}\n"


# ---- check ----------------------------------------------------------------------------------------------------------


def test_check_tells_what_a_configuration_amounts_to(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["check", str(ROOT / "deploy/strandline.toml")]) == 0
    lines = capsys.readouterr().out.splitlines()
    assert lines[0].endswith("has no fault. Listens on 127.0.0.1:8600, keeps its data in strandline-data.")
    assert lines[1:] == [
        "feed\tslack\tidle after\thold at most\tsinks",
        "river-gauges\t5s\t30s\t1m\tsqlite, files (ndjson)",
        "radio-gateways\t5s\t30s\t1m\tsqlite",
    ]


def test_check_answers_programs(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["check", "--json", str(ROOT / "deploy/minimal.toml")]) == 0
    answer = json.loads(capsys.readouterr().out)
    assert (answer["ok"], answer["faults"]) == (True, [])
    assert answer["feeds"][0]["slack_ns"] == 5_000_000_000
    assert answer["feeds"][0]["sinks"] == [{"name": "sqlite", "kind": "sqlite"}]
    (tmp_path / "bad.toml").write_text(FEED + "slack = 5\n")
    assert main(["check", "--json", str(tmp_path / "bad.toml")]) == 2
    answer = json.loads(capsys.readouterr().out)
    assert (answer["ok"], len(answer["faults"])) == (False, 1)


def test_variables_count_in_check(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> None:
    monkeypatch.setenv("STRANDLINE_FEED__RIVER_GAUGES__SLACK", "7s")
    assert main(["check", str(ROOT / "deploy/minimal.toml")]) == 0
    assert "river-gauges\t7s\t" in capsys.readouterr().out
    monkeypatch.setenv("STRANDLINE_LISTN", "x")
    assert main(["check", str(ROOT / "deploy/minimal.toml")]) == 2
    assert "did you mean STRANDLINE_LISTEN?" in capsys.readouterr().err


# ---- late and quarantine --------------------------------------------------------------------------------------------


async def test_late_events_as_a_table_in_steps(lanes: Path, capfdbinary: Capture) -> None:
    assert main(["late", "list", "--feed", "river-gauges", "--limit", "12"]) == 0
    out, err = capfdbinary.readouterr()
    rows = [line.split("\t") for line in out.decode().splitlines()]
    assert rows[0] == ["number", "event time", "late by", "arrived", "source", "event"]
    assert [row[0] for row in rows[1:]] == [str(number) for number in range(1, 13)]
    assert rows[1][2] == "7.000s"
    assert rows[1][4:] == ["gauge-1", harmless('{"lane":"late","batch":1,"row":0,"text":"Höhe 1\u2028"}')]
    assert err == b"strandline: there are more: go on with --after 12\n"
    assert main(["late", "list", "--feed", "river-gauges", "--after", "12", "--data-dir", str(lanes)]) == 0
    out, err = capfdbinary.readouterr()
    assert len(out.splitlines()) == 1 + 8
    assert err == b""


async def test_late_events_of_one_source_and_since(lanes: Path, capfdbinary: Capture) -> None:
    assert main(["late", "list", "--feed", "river-gauges", "--source", "gauge-2", "--json"]) == 0
    found = [json.loads(line) for line in capfdbinary.readouterr().out.splitlines()]
    assert {row["source"] for row in found} == {"gauge-2"}
    assert found[0]["event"]["lane"] == "late"
    assert found[0].keys() == {
        "number", "batch", "time_ns", "source", "arrived_ns", "late_by_ns", "watermark_ns", "event"
    }  # fmt: skip
    assert main(["late", "list", "--feed", "river-gauges", "--since", "2000-01-01T00:00:00Z"]) == 0
    assert len(capfdbinary.readouterr().out.splitlines()) == 21
    assert main(["late", "list", "--feed", "river-gauges", "--since", "2262-01-01T00:00:00Z"]) == 0
    assert len(capfdbinary.readouterr().out.splitlines()) == 1
    assert main(["late", "list", "--feed", "river-gauges", "--since", "yesterday"]) == 2
    assert b"neither a duration such as 1h nor a time such as" in capfdbinary.readouterr().err


async def test_late_events_are_exported_as_they_came(lanes: Path, capfdbinary: Capture) -> None:
    assert main(["late", "export", "--feed", "river-gauges"]) == 0
    out, err = capfdbinary.readouterr()
    lines = HeldLines()
    lines.batches("late", range(1, 6), 4)
    assert out == b"".join(line + b"\n" for line in lines.held)
    assert err == b""
    assert main(["late", "export", "--feed", "river-gauges", "--json", "--after", "18"]) == 0
    assert [json.loads(line)["number"] for line in capfdbinary.readouterr().out.splitlines()] == [19, 20]


async def test_nothing_in_a_line_reaches_the_terminal_raw(lanes: Path, capfdbinary: Capture) -> None:
    assert main(["quarantine", "list", "--feed", "river-gauges", "--limit", "1"]) == 0
    heading, row = capfdbinary.readouterr().out.decode().splitlines()
    assert heading.split("\t") == ["number", "arrived", "line", "reason", "what was wrong", "bytes as they came"]
    assert row.isprintable() or row.replace("\t", "").isprintable()
    assert row.split("\t")[3:] == ["malformed", "line 1: no 'time'\\n\\x00 in \"it\"", '\\xff\\x00 \\n1/0 "']


async def test_quarantined_bytes_come_out_whole(lanes: Path, capfdbinary: Capture) -> None:
    lines = HeldLines()
    lines.batches("quarantine", range(1, 6), 4)
    assert main(["quarantine", "export", "--feed", "river-gauges", "--json", "--reason", "malformed"]) == 0
    found = [json.loads(line) for line in capfdbinary.readouterr().out.splitlines()]
    assert [base64.b64decode(row["event_base64"]) for row in found] == lines.held
    assert main(["quarantine", "export", "--feed", "river-gauges"]) == 0
    assert capfdbinary.readouterr().out == b"".join(line + b"\n" for line in lines.held)
    assert main(["quarantine", "export", "--feed", "river-gauges", "--reason", "ahead"]) == 0
    assert capfdbinary.readouterr().out == b""


async def test_what_was_exported_can_be_forgotten(lanes: Path, capfdbinary: Capture) -> None:
    assert main(["late", "forget", "--feed", "river-gauges", "--through", "15"]) == 0
    assert capfdbinary.readouterr().out == b"15 deleted from the late lane\n"
    assert main(["late", "export", "--feed", "river-gauges", "--json"]) == 0
    assert [json.loads(line)["number"] for line in capfdbinary.readouterr().out.splitlines()] == [16, 17, 18, 19, 20]
    assert main(["quarantine", "forget", "--feed", "river-gauges", "--through", "15"]) == 0
    assert capfdbinary.readouterr().out == b"15 deleted from quarantine\n"


async def test_what_a_sink_refused_is_listed_exported_and_forgotten(lanes: Path, capfdbinary: Capture) -> None:
    store, lines = LaneStore(lanes / "feeds/river-gauges/lanes.db"), HeldLines()
    await store.open()
    await store.keep_refused("store", lines.batches("ordered", [7, 8], 2), "400: no\nsuch gauge", lines, 2**40)
    await store.keep_refused("other", [lines.batch("quarantine", 9, 1)], "gone", lines, 2**40)
    await store.close()
    assert main(["refused", "list", "--feed", "river-gauges", "--limit", "4"]) == 0
    out, err = capfdbinary.readouterr()
    rows = [line.split("\t") for line in out.decode().splitlines()]
    assert rows[0] == ["number", "sink", "lane", "batch", "event time", "source", "why", "event"]
    assert rows[3][:4] == ["3", "store", "ordered", "8"]
    assert rows[3][5:7] == ["gauge-1", "400: no\\nsuch gauge"]
    assert err == b"strandline: there are more: go on with --after 4\n"
    assert main(["refused", "export", "--feed", "river-gauges"]) == 0
    assert capfdbinary.readouterr().out == b"".join(line + b"\n" for line in lines.held)
    assert main(["refused", "export", "--feed", "river-gauges", "--json", "--sink", "other"]) == 0
    (found,) = [json.loads(line) for line in capfdbinary.readouterr().out.splitlines()]
    assert (found["number"], found["time_ns"], found["detail"]) == (5, None, "gone")
    assert base64.b64decode(found["event_base64"]) == lines.held[-1]
    assert main(["refused", "forget", "--feed", "river-gauges", "--through", "4"]) == 0
    assert capfdbinary.readouterr().out == b"4 deleted from what sinks refused\n"
    assert main(["refused", "list", "--feed", "river-gauges"]) == 0
    assert len(capfdbinary.readouterr().out.splitlines()) == 1 + 1


async def test_a_feed_that_is_not_there(lanes: Path, capfdbinary: Capture) -> None:
    assert main(["late", "list", "--feed", "river"]) == 2
    assert b"has no feed 'river': there is river-gauges, radio" in capfdbinary.readouterr().err
    assert main(["late", "list", "--feed", "radio"]) == 3
    assert b"holds nothing of a feed 'radio': there is river-gauges" in capfdbinary.readouterr().err
    assert main(["late", "list", "--feed", "../feeds/river-gauges", "--data-dir", str(lanes)]) == 3
    capfdbinary.readouterr()
    (lanes / "feeds/river-gauges/lanes.db").write_bytes(b"no database" * 1000)
    assert main(["late", "list", "--feed", "river-gauges"]) == 3
    assert b"lanes.db" in capfdbinary.readouterr().err


def test_a_table_keeps_all_but_its_last_column_whole() -> None:
    rows = [["number", "event"], ["1", "x" * 30], ["1234567", "y" * 21]]
    assert table_lines(rows, 30) == ["number   event", "1        " + "x" * 20 + "…", "1234567  " + "y" * 21]
    assert table_lines(rows, 10)[1] == "1        " + "x" * 19 + "…"
    assert table_lines([["only"]], 80) == ["only"]


def test_a_sentence_in_the_last_column_is_wrapped_and_never_cut() -> None:
    sentence = "look at the device, or excuse it so that the others need not wait"
    rows = [["who", "what it means"], ["gw-east", sentence], ["gw-west", ""]]
    beside = wrapped_lines(rows, 40)
    assert beside == [
        "who      what it means",
        "gw-east  look at the device, or excuse",
        "         it so that the others need not",
        "         wait",
        "gw-west",
    ]
    below = wrapped_lines(rows, 36)  # too little room beside the name: below it, with the width that there is
    assert below[2:5] == ["gw-east", "    look at the device, or excuse it", "    so that the others need not wait"]
    for columns in (20, 36, 40, 80, 200):
        assert sentence in " ".join(" ".join(wrapped_lines(rows, columns)).split())
        assert all(len(line) <= max(columns, 24) for line in wrapped_lines(rows, columns))


def test_since_is_exact() -> None:
    assert since_ns(None, START_NS) is None
    assert since_ns("1.5s", START_NS) == START_NS - 1_500_000_000
    assert since_ns("1970-01-01T00:00:01.000000001Z", START_NS) == 1_000_000_001
    with pytest.raises(ConfigError):
        since_ns("5", START_NS)

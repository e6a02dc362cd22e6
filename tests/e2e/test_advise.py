"""`strandline advise` as people type it: the worked example, its lines pasted and replayed, answers for programs."""

from __future__ import annotations

import json
import re
import shlex
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from helpers_advice import Columns, exponential, feed, write_capture
from strandline.config import parse
from strandline.core.records import VERSION, Kind, SettingsRecord, encode_small, frame_bytes
from strandline.core.settings import Settings
from strandline.replay.capture import Capture, CaptureWriter, Meta
from strandline.replay.requests import CapturedRequests

DOCUMENT = Path(__file__).resolve().parents[2] / "deploy" / "advice.md"
FENCE = re.compile(r"^```(\w+)\n(.*?)^```", re.MULTILINE | re.DOTALL)


def run(folder: Path, *arguments: str, code: int = 0) -> str:
    """One command in a process of its own; what it wrote to stdout."""
    command = [sys.executable, "-W", "error", "-m", "strandline.cli", *arguments]
    done = subprocess.run(command, cwd=folder, capture_output=True, text=True, check=False, timeout=120)
    assert done.returncode == code, done.stderr
    return done.stdout


def asked(folder: Path, *arguments: str, code: int = 0) -> Any:
    return json.loads(run(folder, "advise", *arguments, "--json", code=code))


def words(text: str) -> list[list[str]]:
    """Lines as words, without the one that tells how fast it went."""
    return [line.split() for line in text.splitlines() if line.strip() and not line.startswith("read in")]


@pytest.fixture(scope="module")
def example(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, str]:
    """A folder in which the document's example was followed, and what it printed."""
    folder = tmp_path_factory.mktemp("advice")
    blocks = dict(FENCE.findall(DOCUMENT.read_text()))
    subprocess.run([sys.executable, "-c", blocks["python"]], cwd=folder, check=True, timeout=120)
    output = ""
    for line in blocks["sh"].splitlines():
        output = run(folder, *shlex.split(line)[1:])
    return folder, output


def test_the_documents_example_prints_what_the_document_says(example: tuple[Path, str]) -> None:
    told = dict(FENCE.findall(DOCUMENT.read_text()))["text"]
    assert words(example[1]) == words(told)


def test_what_was_lost_and_the_report_are_as_the_document_says(example: tuple[Path, str]) -> None:
    """Its excerpt is of the answer, line by line; what was lost is what the feed's maker left out."""
    blocks = dict(FENCE.findall(DOCUMENT.read_text()))
    command = shlex.split(blocks["bash"])[1:]
    output = run(example[0], *command)
    answered = words(output[output.index("lost upstream, and late") :])
    places = [answered.index(line) for line in words(blocks["console"])]
    assert places == sorted(places) and len(places) > 20
    assert all(line in words(output) for line in words(example[1]))
    found = asked(example[0], *command[1:])["sequence"]
    sure = [each for each in found["lost_ranges"] if not each["may_fill_yet"]]
    assert [(each["source"], each["first"], each["last"]) for each in sure] == [("gw-2", 5_000, 5_039)]
    page = (example[0] / "advice.html").read_text()
    assert page.startswith("<!DOCTYPE html>") and page.count("<svg") == 4 and "<script" not in page


def test_the_pasted_lines_replayed_give_the_late_events_that_were_foretold(example: tuple[Path, str]) -> None:
    folder, output = example
    lines = output[output.index("[[feed]]") :]
    more = 'time = { at = "/observed_at", unit = "ms" }\nsource = "/station"\nhold_at_most = "1h"\n'
    (folder / "new.toml").write_text(lines + more)
    feed_config = parse(lines + more, {}).feeds[0]
    replayed = json.loads(run(folder, "replay", "river.capture", "--config", "new.toml", "--json"))
    found = asked(folder, "river.capture", "--late-share", "0.005", "--at-most", "30s")
    assert found["slack_ns"] == feed_config.settings().slack_ns == replayed["slack_at_end_ns"]
    assert replayed["received"] == found["first"]["events"] + found["second"]["events"]
    assert replayed["late"] == pytest.approx(found["first"]["late"] + found["second"]["late"], abs=1)
    figure = next(each["figure"] for each in found["alternatives"] if each["slack_ns"] == found["slack_ns"])
    assert replayed["late"] == figure["late"]
    assert replayed["peak_held"] == pytest.approx(figure["held_events_peak"], rel=0.01)
    run(folder, "replay", "river.capture", "--config", "new.toml", "--expect-late-share", "0.006")


def test_the_steered_line_is_a_configuration_too(example: tuple[Path, str]) -> None:
    line = example[1].partition("kept by the service itself: ")[2].splitlines()[0]
    settings = parse(f'[[feed]]\nname = "river-gauges"\n{line}\n', {}).feeds[0].settings()
    assert (settings.late_share, settings.slack_ns) == (0.005, 30 * 10**9)


def test_quick_says_the_same_without_the_tables(example: tuple[Path, str]) -> None:
    folder, output = example
    quick = run(folder, "advise", "river.capture", "--late-share", "0.005", "--at-most", "30s", "--quick")
    assert all(row in words(output) for row in words(quick)) and "gw-4" not in quick


def test_reordering_figures(example: tuple[Path, str]) -> None:
    found = asked(example[0], "river.capture", "--late-share", "0.005", "--quick", "--reordering")["reordering"]
    rows = [json.loads(line) for line in (example[0] / "river.ndjson").read_text().splitlines()]
    newest, reordered = 0, 0
    for row in rows:
        reordered += row["observed_at"] < newest
        newest = max(newest, row["observed_at"])
    assert (found["events"], found["reordered"]) == (len(rows), reordered)
    assert found["reordered_ratio"] == reordered / len(rows)


def written(folder: Path, columns: Columns) -> str:
    write_capture(folder / "feed.capture", columns, ["gw-1"])
    return str(folder / "feed.capture")


def test_the_answer_is_no_where_it_was_missed_is_too_short_or_contradicts_itself(tmp_path: Path) -> None:
    delays = np.random.default_rng(2).exponential(1, 30_000)
    delays[20_500:] *= 2
    file = written(tmp_path, feed(50, delays, 1))
    assert asked(tmp_path, file, "--late-share", "0.01", "--clock", "arrival", code=1)["verdict"] == "missed"
    found = asked(tmp_path, file, "--late-share", "0.01", "--at-most", "2s", "--clock", "arrival", code=1)
    assert (found["verdict"], found["slack_ns"]) == ("contradiction", 2 * 10**9)
    file = written(tmp_path, exponential(50, 1.0, 900, 3))
    assert "29,956 events are needed" in run(tmp_path, "advise", file, "--late-share", "0.0001", code=1)
    file = written(tmp_path, exponential(50, 1.0, 10, 3))
    run(tmp_path, "advise", file, "--late-share", "0.01", code=1)


def test_no_lines_to_paste_where_the_verdict_does_not_support_them(tmp_path: Path) -> None:
    columns = exponential(50, 1.0, 3_000, 4)
    later = (np.arange(2_849) >= 50) * 3_600 * 10**9  # one request, an hour of quiet, the rest
    kept = columns.times[:2_849] + later, columns.arrivals[:2_849] + later, columns.sources[:2_849]
    file = written(tmp_path, Columns(*kept))
    told = run(tmp_path, "advise", file, "--late-share", "0.01", "--report", "out.html", code=1)
    assert "verdict   too short" in told and "50 of 2,849 events" in told and "--learn" in told
    assert "tried" in told and "[[feed]]" not in told and "no lines to paste" in told and "chosen  " not in told
    page = (tmp_path / "out.html").read_text()
    assert "No lines to paste" in page and "[[feed]]" not in page and "50 of 2,849 events" in page
    assert asked(tmp_path, file, "--late-share", "0.01", code=1)["configuration"] == []


WRONG = [("--late-share", "0"), ("--late-share", "1.5"), ("--late-share", "0.1", "--learn", "1")]


@pytest.mark.parametrize("wrong", WRONG)
def test_wrong_use(tmp_path: Path, wrong: tuple[str, ...]) -> None:
    run(tmp_path, "advise", written(tmp_path, exponential(50, 1.0, 900, 3)), *wrong, code=2)


def test_a_file_that_is_no_capture(tmp_path: Path) -> None:
    (tmp_path / "no.capture").write_bytes(b"{}\n")
    run(tmp_path, "advise", "no.capture", "--late-share", "0.1", code=3)


def test_what_the_capture_knows_of_settings_is_used_and_what_lies_ahead_is_left_out(tmp_path: Path) -> None:
    columns = exponential(50, 1.0, 2_000, 3)
    whole = tmp_path / "plain.capture"
    ahead = columns.times.copy()
    ahead[500] = columns.arrivals[500] + 11 * 10**9
    write_capture(whole, Columns(ahead, columns.arrivals, columns.sources), ["gw-1"], per_request=7)
    with (tmp_path / "set.capture").open("wb") as file, Capture(whole) as capture:
        settings = Settings("river-gauges", clock="arrival", ahead_limit_ns=10**10)
        writer = CaptureWriter(file.write, Meta("river-gauges", "journal", 1, lines=False))
        kind, body = encode_small(SettingsRecord(0, settings, {}, True))
        writer.add(kind, VERSION, 0, body)
        for block in capture.blocks():
            for record in block.records():
                if record.kind == Kind.SOURCES:
                    writer.add(record.kind, VERSION, record.lsn + frame_bytes(len(body)), record.body)
        writer.close()
    with Capture(tmp_path / "set.capture") as capture:
        found = CapturedRequests(capture)
        assert found.settings == settings and found.names == ["gw-1"]
    with Capture(whole) as capture:
        plain = CapturedRequests(capture)
        assert plain.settings is None
        every = np.concatenate([block.times for block in plain.blocks()])
        assert every.tolist() == ahead.tolist()
        plain.settings = settings
        blocks = list(plain.blocks())
        left = np.concatenate([block.times for block in blocks])
        assert left.tolist() == np.delete(ahead, 500).tolist()
        for block in blocks:
            sizes = np.diff(block.starts, append=len(block.times))
            assert sizes.min() >= 1 and len(block.instants) == len(block.starts)

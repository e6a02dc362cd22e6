"""P7 no silence: when a fault stops, all that was accepted comes out; a stall shows within seconds, with its cause.

The real process and real faults: a store that somebody has locked, one whose folder is gone, sources that fall silent,
a service that is stopped and killed while they last. Nothing is sent to wake it up.
"""

from __future__ import annotations

import json
import sqlite3
from contextlib import closing
from pathlib import Path

from helpers_load import Load, Stubborn
from helpers_service import FEED, Process, configuration, events, store_in, stored

PATH = f"/v1/feeds/{FEED}/events"


def metric(process: Process, name: str) -> float:
    """The value of one sample line of /metrics."""
    lines = process.ask("/metrics").content.decode().splitlines()
    (found,) = [line for line in lines if line.startswith(name)]
    return float(found.rsplit(" ", 1)[1])


def test_a_locked_store_shows_at_once_and_gets_all_once_it_is_free(tmp_path: Path) -> None:
    load = Load.of("jitter", 5_000, 100)
    with Process(tmp_path, configuration(tmp_path, slack="2s")) as process:
        assert process.ask(PATH, events([-1000], "gauge-00")).status == 200
        process.until(lambda: store_in(tmp_path).exists(), "the store is there")
        with closing(sqlite3.connect(store_in(tmp_path), isolation_level=None)) as locker:
            locker.execute("BEGIN EXCLUSIVE")
            with Stubborn(process, load):
                pass
            process.until(lambda: process.document()["sinks"]["sqlite"]["failing_since"] is not None, "it shows")
            found = process.document()
            assert "locked by another program" in found["sinks"]["sqlite"]["last_error"]
            assert found["sinks"]["sqlite"]["lanes"]["ordered"]["waiting_events"] > 0
            assert found["hops"]["sinks"]["waiting"] > 0 and found["hops"]["sinks"]["oldest_age_s"] >= 0
            assert metric(process, f'strandline_sink_failing{{feed="{FEED}",sink="sqlite"}}') == 1
            assert metric(process, f'strandline_hop_waiting{{feed="{FEED}",hop="sinks"}}') > 0
            locker.execute("ROLLBACK")
        process.drain()
        ledger = process.document()["ledger"]
        assert ledger["released"] == len(stored(tmp_path)) and ledger["late"] == len(stored(tmp_path, "late"))
        assert ledger["received"] == ledger["released"] + ledger["late"] == 5_001
        assert metric(process, f'strandline_sink_failing{{feed="{FEED}",sink="sqlite"}}') == 0


def test_a_store_that_is_out_of_reach_holds_up_no_other(tmp_path: Path) -> None:
    away = tmp_path / "away" / "river.db"
    sinks = "\n".join(
        f'[[feed.sink]]\nkind = "sqlite"\nname = "{name}"\npath = {json.dumps(str(path))}'
        for name, path in (("near", store_in(tmp_path)), ("far", away))
    )
    away.parent.mkdir()
    with Process(tmp_path, configuration(tmp_path, sinks=sinks)) as process:
        assert process.terminate() == 0  # both stores are known now
        away.parent.rename(tmp_path / "moved")
        process.start()
        assert process.ask(PATH, events(range(10))).status == 200
        process.until(lambda: stored(tmp_path) == list(range(10)), "the other one gets its events")
        process.until(lambda: process.document()["sinks"]["far"]["last_error"] is not None, "it shows")
        assert "its folder must exist" in process.document()["sinks"]["far"]["last_error"]
        process.kill()  # and nothing is lost by that
        (tmp_path / "moved").rename(away.parent)
        process.start()
        process.until(process.delivered, "what waited comes out")
    with closing(sqlite3.connect(away)) as connection:
        assert connection.execute("SELECT count(*) FROM events").fetchone() == (10,)


def test_a_feed_that_falls_silent_lets_go_what_it_holds(tmp_path: Path) -> None:
    """Nobody sends any more, and no source is waited for beyond `idle_after`, no event held beyond `hold_at_most`."""
    keys = {"slack": "1s", "idle_after": "500ms", "hold_at_most": "1500ms"}
    with Process(tmp_path, configuration(tmp_path, **keys)) as process:
        assert process.ask(PATH, events([0.5], "gw-2")).status == 200
        assert process.ask(PATH, events([0, 1, 2, 3], "gw-1")).status == 200
        found = process.document()
        assert found["hold"]["source"] == "gw-2" and found["held"]["events"] > 0
        process.until(lambda: stored(tmp_path) == [0, 0, 1, 2, 3], "all comes out by itself")
        assert process.document()["ledger"]["late"] == 0
        marks = process.document()["marks"]
        assert marks["hold_at_most"] >= 1, marks


def test_who_holds_the_feed_is_named_and_can_be_excused(tmp_path: Path) -> None:
    with Process(tmp_path, configuration(tmp_path, idle_after="2s")) as process:
        assert process.ask(PATH, events([0], "gw-9")).status == 200
        assert process.ask(PATH, events(range(1, 50), "gw-1")).status == 200

        def held_by_the_silent_one() -> bool:
            hold = process.document()["hold"]
            return bool(hold["source"] == "gw-9" and hold["why"] == "silent_source" and hold["explanation"])

        process.until(held_by_the_silent_one, "its silence is named")
        body = json.dumps({"source": "gw-9", "reason": "its battery is being changed"}).encode()
        assert process.ask(f"/v1/feeds/{FEED}/excuse", body).status == 204
        process.until(lambda: stored(tmp_path) == list(range(50)), "what it held comes out")


def test_what_is_held_at_a_stop_comes_out_after_the_next_start(tmp_path: Path) -> None:
    keys = {"slack": "1h", "hold_at_most": "1h", "idle_after": "1h"}
    with Process(tmp_path, configuration(tmp_path, **keys)) as process:
        assert process.ask(PATH, events([3, 1, 2])).status == 200
        assert process.terminate() == 0
        assert stored(tmp_path) == []
        process.file.write_text(configuration(tmp_path, **{**keys, "slack": "1s", "hold_at_most": "1s"}))
        process.start()
        process.until(lambda: stored(tmp_path) == [1, 2, 3], "the bound on holding holds for them too")


def test_a_sigterm_under_load_loses_nothing_that_was_answered(tmp_path: Path) -> None:
    load = Load.of("exponential", 10_000, 50, seed=4)
    with Process(tmp_path, configuration(tmp_path, slack="5s", id="/id")) as process:
        with Stubborn(process, load) as senders:
            for share in (0.25, 0.5, 0.75):
                senders.until(share)
                assert process.terminate() == 0
                process.start()
        process.drain()
        ledger = process.document()["ledger"]
        assert ledger["released"] + ledger["late"] == 10_000, "each event once, whatever was sent again"
        assert process.terminate() == 0
    assert len(stored(tmp_path)) + len(stored(tmp_path, "late")) == 10_000

"""P1 nothing lost: what was answered with success is in the store, whatever the process died of.

The real process, killed with SIGKILL again and again while four senders send. Nothing is kept for it but its folder.
"""

from __future__ import annotations

from pathlib import Path

from helpers_load import kill_rounds
from helpers_service import FEED, Process, body_of, configuration, event_line, events, stored

KILLS = 20  # tests/kill.py does as many as you like


def test_what_was_answered_is_stored_however_often_the_process_is_killed(tmp_path: Path) -> None:
    """Senders without keys, a feed without ids: a body that was killed after it was durable and before it was answered
    is sent again, and is then there twice, for nothing tells the second from the first. So a body that needed one try
    is in the store exactly once, and one that needed n tries once at least and n times at most."""
    found = kill_rounds(tmp_path, KILLS, events=24_000)
    assert found.lost == 0, f"{found.lost} events are lost"
    assert found.surplus == 0, "an event is there more often than it was sent"
    assert found.met > 0, "no kill met a request"
    assert found.in_order and found.balanced


def test_what_is_held_survives_kills_in_every_state_of_a_start(tmp_path: Path) -> None:
    """Killed right after it was told to start, as soon as it listens, and once it is ready: all is still there."""
    path = f"/v1/feeds/{FEED}/events"
    with Process(tmp_path, configuration(tmp_path, slack="1h")) as process:
        assert process.ask(path, events(range(100))).json["accepted"] == 100
        assert process.ask(path, body_of(b"{", event_line(7))).json["quarantined"] == 1
        process.kill()
        for _ in range(3):
            process.begin()
            process.kill()
            process.begin()
            process.listens()
            process.kill()
            process.start()
            found = process.document()["ledger"]
            assert (found["received"], found["buffered"], found["quarantined"]) == (102, 101, 1)
            process.kill()
        process.start()
        process.drain()
        assert process.terminate() == 0
    assert stored(tmp_path) == sorted([*range(100), 7])

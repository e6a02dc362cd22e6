"""P1 nothing lost: what was answered with success is in the store, whatever the process died of.

The real process, killed with SIGKILL again and again while four senders send. Nothing is kept for it but its folder.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
from helpers_load import Load, Stubborn, stored_rows
from helpers_service import FEED, Process, body_of, configuration, event_line, events, stored

KILLS = 5


def test_what_was_answered_is_stored_however_often_the_process_is_killed(tmp_path: Path) -> None:
    """Senders without keys, a feed without ids: a body that was killed after it was durable and before it was answered
    is sent again, and is then there twice, for nothing tells the second from the first. So a body that needed one try
    is in the store exactly once, and one that needed n tries once at least and n times at most."""
    load = Load.of("bursty_gateways", 24_000, 100)
    with Process(tmp_path, configuration(tmp_path, slack="30s")) as process:
        with Stubborn(process, load) as senders:
            for kill in range(1, KILLS + 1):
                senders.until(kill / (KILLS + 1))
                process.kill()
                process.start()
        assert senders.answered.all()
        process.drain()
        ledger = process.document()["ledger"]
        assert process.terminate() == 0
    ordered, late = stored_rows(load, tmp_path, "ordered"), stored_rows(load, tmp_path, "late")
    tries = np.repeat(senders.tries, np.diff(load.bounds))
    first = int(load.trace.ids.min())
    copies = np.bincount(np.concatenate([ordered.ids, late.ids]) - first, minlength=len(tries))
    order = np.argsort(load.trace.ids)
    copies = copies[load.trace.ids[order] - first]
    assert (copies >= 1).all(), f"{int((copies < 1).sum())} events are lost"
    assert (copies <= tries[order]).all(), "an event is there more often than it was sent"
    assert (senders.tries > 1).any(), "no kill met a request"
    assert bool(np.all(np.diff(ordered.times) >= 0))
    assert ledger["balanced"] and ledger["received"] == len(ordered) + len(late) == copies.sum()


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

"""P9 the books balance: received = released + late + duplicate + quarantined + buffered, at every moment, per feed.

Random histories with stops and crashes, the books counted again from what really left and what is held; and a running
service that shows them and stops by itself when they do not balance (unit/test_runtime.py has that).
"""

from __future__ import annotations

import asyncio
import random
from pathlib import Path

from helpers_history import History, Player, histories, some_settings
from helpers_service import FEED, body_of, config_of, configuration, event_line, eventually, running
from hypothesis import given, settings
from strandline.core.settings import Settings

COLUMNS = ("released", "late", "duplicate", "quarantined", "buffered")


@settings(max_examples=300)
@given(some_settings, histories)
def test_they_balance_after_every_step_and_agree_with_what_left(chosen: Settings, history: History) -> None:
    player = Player(chosen)
    for step, passed in history:
        player.now_ns += passed
        player.step(step)
        player.look()
        ledger = player.feed.state.ledger
        assert ledger.received == sum(getattr(ledger, column) for column in COLUMNS)
        assert ledger.buffered == player.feed.state.runs.held
        if player.feed.durable_lsn == player.feed.next_lsn:  # else something that is counted waits for its sync
            assert ledger.released == len(player.times("ordered"))
            assert ledger.late == len(player.times("late"))
            assert ledger.quarantined == len(player.lines("quarantine"))
    view = player.feed.snapshot(player.now_ns)
    assert view.balance == 0


@settings(max_examples=200)
@given(some_settings, histories)
def test_answers_add_up_to_the_books(chosen: Settings, history: History) -> None:
    """Without a crash: what the answers say is what the books say."""
    calm = [(step, passed) for step, passed in history if step[0] != "restart"]
    player = Player(chosen).play(calm).end()
    outcomes = [outcome for outcome in player.shell.answers.values() if outcome is not None]
    ledger = player.feed.state.ledger
    assert sum(outcome.received for outcome in outcomes) == ledger.received
    assert sum(outcome.accepted for outcome in outcomes) == ledger.released + ledger.buffered
    assert sum(outcome.late for outcome in outcomes) == ledger.late
    assert sum(outcome.duplicate for outcome in outcomes) == ledger.duplicate
    assert sum(outcome.quarantined for outcome in outcomes) == ledger.quarantined
    for outcome in outcomes:
        assert outcome.received == outcome.accepted + outcome.late + outcome.duplicate + outcome.quarantined


async def test_a_running_service_shows_books_that_balance_under_load_and_over_restarts(tmp_path: Path) -> None:
    """Four senders with repeats, late events and faults; somebody looks all the while."""
    text = configuration(tmp_path, slack="3s", id="/id")
    assert config_of(text).feeds[0].name == FEED
    dice, received = random.Random(9), 0
    for _ in range(2):
        async with running(text) as service:
            looks = 0

            async def send(service=service) -> int:  # type: ignore[no-untyped-def]
                count = 0
                for _ in range(25):
                    seconds = [dice.uniform(0, 60) for _ in range(20)]
                    lines = [
                        event_line(second, f"gw-{dice.randrange(3)}", id=dice.randrange(500)) for second in seconds
                    ]
                    answer = await service.post("events", body_of(*lines, b"{"))
                    count += answer.json["received"]
                return count

            sending = [asyncio.create_task(send()) for _ in range(4)]
            while not all(task.done() for task in sending):
                ledger = (await service.document())["ledger"]
                assert ledger["balanced"] is True
                assert ledger["received"] == sum(ledger[column] for column in COLUMNS)
                looks += 1
            received += sum([await task for task in sending])
            assert (await service.document())["ledger"]["received"] == received and looks > 3
    async with running(text) as service:
        ledger = (await service.document())["ledger"]
        assert ledger["received"] == received and ledger["duplicate"] > 0 and ledger["late"] > 0
        assert (await service.post("drain")).status == 204
        await eventually(lambda: service.runtime.feed.state.outbox.undelivered_events == 0)
        assert (await service.document())["ledger"]["buffered"] == 0

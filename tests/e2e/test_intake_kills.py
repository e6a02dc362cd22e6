"""Kills in the middle of taking from a broker: every message that was published is stored exactly once, in the end.

From JetStream without any help; from MQTT with `id`, since nothing in MQTT tells a repeat.
"""

from __future__ import annotations

import asyncio
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest
from helpers_brokers import Mosquitto, Nats, jetstream_intake, mqtt_intake
from helpers_service import FEED, Process, configuration, event_line, stored

KILLS = 3
EVENTS_A_MESSAGE = 3
PATIENT = {"slack": "1h"}  # so that nothing is late, and everything comes in order


@contextmanager
def meanwhile(work: Callable[[], object]) -> Iterator[None]:
    """Do it in a thread while the block runs, and see it through."""
    failed: list[BaseException] = []

    def run() -> None:
        try:
            work()
        except BaseException as error:
            failed.append(error)

    thread = threading.Thread(target=run)
    thread.start()
    try:
        yield
    finally:
        thread.join()
    assert not failed, failed


def bodies(events: int) -> list[bytes]:
    lines = [event_line(number, id=number) + b"\n" for number in range(events)]
    return [b"".join(lines[start : start + EVENTS_A_MESSAGE]) for start in range(0, events, EVENTS_A_MESSAGE)]


def received(process: Process) -> int:
    return int(process.document()["ledger"]["received"])


def kill_again_and_again(process: Process, events: int) -> None:
    for kill in range(1, KILLS + 1):
        bound = events * kill // (KILLS + 1)
        process.until(lambda bound=bound: received(process) >= bound, "nothing is taken")
        process.kill()
        process.start()


def test_jetstream_under_kills(tmp_path: Path) -> None:
    events = 6_000
    messages = bodies(events)
    with Nats(tmp_path, synced=False) as server:
        asyncio.run(server.make_stream())
        text = configuration(tmp_path, more=jetstream_intake(server, ack_wait="1s", in_flight_at_most=64), **PATIENT)
        with Process(tmp_path, text) as process:
            with meanwhile(lambda: asyncio.run(server.publish(messages))):
                kill_again_and_again(process, events)
            asyncio.run(server.settled(f"strandline-{FEED}", len(messages)))
            repeats = asyncio.run(server.consumer(f"strandline-{FEED}")).delivered
            process.drain()
            ledger = process.document()["ledger"]
            assert process.terminate() == 0
    assert repeats is not None and repeats.consumer_seq > len(messages), "the kills came while messages were in flight"
    assert stored(tmp_path) == [*range(events)], "each once, in order"
    assert stored(tmp_path, "late") == []
    assert ledger["balanced"] and ledger["received"] == events and ledger["duplicate"] == 0


@pytest.mark.parametrize("version", ["5", "3.1.1"])
def test_mqtt_under_kills(tmp_path: Path, version: str) -> None:
    events = 4_500
    with Mosquitto(tmp_path) as server:
        text = configuration(tmp_path, more=mqtt_intake(server, version=version), id="/id", **PATIENT)
        with Process(tmp_path, text) as process:
            process.until(lambda: process.document()["intake"]["mqtt"]["connected"], "it does not subscribe")
            messages = [("river/gw-1/level", body) for body in bodies(events)]
            with meanwhile(lambda: server.publish(messages)):
                kill_again_and_again(process, events)
            process.until(
                lambda: received(process) - process.document()["ledger"]["duplicate"] == events, "not everything came"
            )
            process.drain()
            assert process.document()["ledger"]["balanced"]
            assert process.terminate() == 0
    assert stored(tmp_path) == [*range(events)] and stored(tmp_path, "late") == []

"""An intake at work on a broker that breaks the rules of its port: it says so, goes on, and can be stopped."""

from __future__ import annotations

import asyncio
import logging
import random
from pathlib import Path

import pytest
from helpers_service import configuration, eventually, running
from strandline.config_intakes import IntakeConfig
from strandline.ingest.offload import Aside
from strandline.intake.broker import Message
from strandline.intake.taking import Intake


class Unruly:
    """Raises what no port allows, once for each thing that is asked beside the messages."""

    takes_back = True
    remind_every_s: float | None = None

    def __init__(self) -> None:
        self.asked = 0

    async def connect(self) -> str:
        return ""

    def check(self) -> None: ...

    async def fetch(self, at_most: int, bytes_at_most: int) -> list[Message]:
        await asyncio.sleep(0)
        return []

    async def settle(self, message: Message) -> None: ...

    async def put_back(self, message: Message, after_s: float) -> None: ...

    async def remind(self, message: Message) -> None: ...

    def holds(self, message: Message) -> bool:
        return True

    async def waiting(self) -> int | None:
        self.asked += 1
        if self.asked == 1:
            raise KeyError("num_pending")
        return 7

    async def close(self) -> None: ...


async def test_an_unforeseen_error_beside_the_messages_is_logged_and_ends_nothing(
    tmp_path: Path, caplog: pytest.LogCaptureFixture
) -> None:
    aside, broker = Aside(), Unruly()

    async def sleep(seconds: float) -> None:
        await asyncio.sleep(0)

    async with running(configuration(tmp_path)) as service:
        intake = Intake(
            IntakeConfig(name="odd"), service.runtime, broker, aside, random_source=random.Random(1), sleep=sleep
        )
        with caplog.at_level(logging.ERROR):
            intake.start()
            await eventually(lambda: intake.counts.waiting == 7)
        assert "an unforeseen error in intake odd" in caplog.text
        await intake.stop(1.0)
        assert intake.counts.words == "it was stopped"
    aside.close()

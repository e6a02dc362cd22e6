"""Messages in portions: the order of arrivals is theirs, and nothing is settled before the journal's sync covers it."""

from __future__ import annotations

import asyncio
import gc
import random
from collections import Counter
from collections.abc import AsyncIterator, Sequence
from contextlib import asynccontextmanager
from pathlib import Path

import pytest
from helpers_service import configuration, event_line, eventually, running
from hypothesis import given
from hypothesis import strategies as st
from strandline.config_intakes import IntakeConfig
from strandline.core.records import Kind, decode_arrival
from strandline.ingest.offload import Aside
from strandline.intake.broker import Message
from strandline.intake.handing import PORTION_BYTES, PORTION_MESSAGES, portions
from strandline.intake.taking import Intake
from strandline.runtime import FeedRuntime

GOOD, FAULTY, REFUSED = event_line(1) + b"\n", b'{"station":"gw-1"}\n', b"no media type fits"


class Handed:
    """A broker that has these messages, once; it writes down what is said of each and what was durable then."""

    takes_back = True
    remind_every_s: float | None = None

    def __init__(self, messages: Sequence[Message], runtime: FeedRuntime, failing: Sequence[Message] = ()) -> None:
        self.left, self._runtime, self._failing = list(messages), runtime, list(failing)
        self.settled: list[Message] = []
        self.back: list[Message] = []
        self.durable: list[int] = []  # arrivals that were durable when a message was settled

    async def connect(self) -> str:
        return ""

    def check(self) -> None: ...

    async def fetch(self, at_most: int, bytes_at_most: int) -> list[Message]:
        await asyncio.sleep(0)
        some, self.left = self.left[:at_most], self.left[at_most:]
        return some

    async def settle(self, message: Message) -> None:
        if message in self._failing:
            raise KeyError("no such subject")
        self.durable.append(len(arrivals(self._runtime)))
        self.settled.append(message)

    async def put_back(self, message: Message, after_s: float) -> None:
        self.back.append(message)

    async def remind(self, message: Message) -> None: ...

    def holds(self, message: Message) -> bool:
        return True

    async def waiting(self) -> int | None:
        return len(self.left)

    async def close(self) -> None: ...


def arrivals(runtime: FeedRuntime) -> list[int]:
    """Of each arrival that is durable how many events it has; -1 where all of it is a faulty line."""
    records = [frame for frame in runtime.journal.frames(0) if frame.kind == Kind.ARRIVAL]
    bodies = [decode_arrival(frame.body, frame.lsn) for frame in records]
    return [-1 if body.faults else len(body.times) for body in bodies]


@asynccontextmanager
async def taking(runtime: FeedRuntime, broker: Handed) -> AsyncIterator[Intake]:
    aside = Aside()
    intake = Intake(IntakeConfig(name="portions"), runtime, broker, aside, random_source=random.Random(1))
    intake.start()
    try:
        yield intake
    finally:
        await intake.stop(5.0)
        intake.check()
        aside.close()


def message(body: bytes, number: int, content_type: str | None = None) -> Message:
    return Message(body, f"message {number}", ["river"], f"at:{number}", is_numbered=True, content_type=content_type)


async def test_arrivals_come_in_the_order_of_messages_and_are_durable_before_they_are_settled(tmp_path: Path) -> None:
    kinds = random.Random(7).choices(("good", "faulty", "refused", "large"), (80, 10, 10, 5), k=300)
    made, wanted = [], []
    for number, kind in enumerate(kinds):
        events = 1 + number % 5
        match kind:
            case "good":
                made.append(message(GOOD * events, number))
                wanted.append(events)
            case "faulty":
                made.append(message(FAULTY, number))
                wanted.append(-1)
            case "refused":
                made.append(message(REFUSED, number, content_type="text/plain"))
                wanted.append(-1)
            case _:  # so many faulty lines are read in a thread of its own
                made.append(message(GOOD * 3 + FAULTY * 2_500, number))
                wanted.append(-1)
    async with running(configuration(tmp_path, faults_at_most=3_000)) as service:
        broker = Handed(made, service.runtime)
        async with taking(service.runtime, broker) as intake:
            await eventually(lambda: len(broker.settled) == len(made))
            aside = kinds.count("refused")
            assert intake.counts.outcomes == {"taken": 300 - aside, "quarantined": aside, "put_back": 0}
        assert arrivals(service.runtime) == wanted
        place = {each: number for number, each in enumerate(made)}
        assert all(durable > place[each] for each, durable in zip(broker.settled, broker.durable, strict=True))
        service.runtime.feed.check()


async def test_what_cannot_be_settled_is_put_back_and_hinders_no_other(tmp_path: Path) -> None:
    made = [message(GOOD, number) for number in range(100)]
    async with running(configuration(tmp_path)) as service:
        broker = Handed(made, service.runtime, failing=made[3:5])
        async with taking(service.runtime, broker) as intake:
            await eventually(lambda: len(broker.settled) == 98 and len(broker.back) == 2)
            await eventually(lambda: intake.counts.in_flight == 0)
            assert broker.back == made[3:5] and "unforeseen error" in str(intake.counts.last_error)
        assert len(arrivals(service.runtime)) == 100


class Silent(Handed):
    """Takes no word on its first message, and never answers the one on its second."""

    def __init__(self, messages: Sequence[Message], runtime: FeedRuntime) -> None:
        super().__init__(messages, runtime, failing=messages[:1])
        self._second, self.asked = messages[1], asyncio.Event()

    async def settle(self, message: Message) -> None:
        if message is self._second:
            self.asked.set()
            await asyncio.Event().wait()
        await super().settle(message)


async def test_a_stop_leaves_no_message_begun(tmp_path: Path, recwarn: pytest.WarningsRecorder) -> None:
    """One that is to be taken by itself waits for the others of its portion; the stop comes first."""
    async with running(configuration(tmp_path)) as service:
        broker = Silent([message(GOOD, number) for number in range(3)], service.runtime)
        async with taking(service.runtime, broker) as intake:
            await broker.asked.wait()
            await intake.stop(0.0)
            gc.collect()
            assert (intake.counts.in_flight, broker.settled) == (0, [])
        assert [str(each.message) for each in recwarn] == []


async def test_repeats_in_one_portion_are_taken_once(tmp_path: Path) -> None:
    """The second comes while the first is not durable yet: it is put back, and comes again."""
    made = [message(GOOD, 1), message(GOOD, 1), message(GOOD, 2)]
    async with running(configuration(tmp_path)) as service:
        broker = Handed(made, service.runtime)
        async with taking(service.runtime, broker):
            await eventually(lambda: len(broker.settled) + len(broker.back) == 3)
            assert Counter(each.key for each in broker.settled) == {"at:1": 1, "at:2": 1}
            broker.left = list(broker.back)
            await eventually(lambda: len(broker.settled) == 3)
        assert arrivals(service.runtime) == [1, 1]


async def test_a_mark_follows_the_portion(tmp_path: Path) -> None:
    made = [message(event_line(number) + b"\n", number) for number in range(50)]
    async with running(configuration(tmp_path, slack="0s")) as service:
        broker = Handed(made, service.runtime)
        async with taking(service.runtime, broker):
            await eventually(lambda: len(broker.settled) == 50)
            await eventually(lambda: service.runtime.feed.state.ledger.released == 50)
            assert service.runtime.feed.state.figures.marks < 25, "not one for each message"


@given(st.lists(st.sampled_from((1, 100, PORTION_BYTES // 3, PORTION_BYTES, 2 * PORTION_BYTES)), max_size=200))
def test_portions_are_all_messages_in_order_and_small(sizes: list[int]) -> None:
    body = bytes(2 * PORTION_BYTES)
    made = [Message(body[:size], "", []) for size in sizes]
    found = list(portions(made))
    assert [each for portion in found for each in portion] == made
    for portion in found:
        assert 1 <= len(portion) <= PORTION_MESSAGES
        assert len(portion) == 1 or sum(len(each.body) for each in portion) <= PORTION_BYTES

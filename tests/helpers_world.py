"""A cluster under load as one object: brokers, instances, PostgreSQL, and all that was sent to them so far.

Tests and `kill_cluster.py` do to it what they like and have it judged: how it is judged is told here, not what is done.
"""

from __future__ import annotations

import time
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass, field
from pathlib import Path

from helpers_broker_cluster import Brokers
from helpers_cluster import (
    Instance,
    Pause,
    Scenario,
    cluster_configuration,
    judged,
    partition_feed,
    settled,
    until_stored,
)
from helpers_gates import Gates
from helpers_postgres import ask, make_schema, shared
from helpers_producer import Message, Producer, course
from helpers_service import POLL_S

PARTITIONS = 6
SOURCES = 30
INSTANCES = 3
LEASE_S = 8
MESSAGES_PER_S = 20.0
SETTLED_S = 60.0
RAMP_MESSAGES = 60  # 3 s: until every partition releases as it goes
# Waits are short for the tests' sake: what is sent last comes out by `hold_at_most`, without any drain.
FEED_KEYS = {"slack": "1500ms", "hold_at_most": "5s", "idle_after": "3s"}
# Each COPY takes so long that whoever is stopped or killed is often in the middle of a transaction.
SLOW = """CREATE FUNCTION {schema}.doze() RETURNS trigger LANGUAGE plpgsql AS
    $$ BEGIN PERFORM pg_sleep(0.05); RETURN NULL; END $$;
CREATE TRIGGER doze AFTER INSERT ON {schema}.events FOR EACH STATEMENT EXECUTE FUNCTION {schema}.doze()"""


@dataclass
class World:
    """All that runs, and all that was sent so far."""

    brokers: Brokers
    gates: Gates  # before the last instance
    instances: list[Instance]
    dsn: str
    schema: str
    pause: Pause
    sent: list[Message] = field(default_factory=list)
    told: list[Scenario] = field(default_factory=list)

    @contextmanager
    def scenario(self, name: str) -> Iterator[Producer]:
        """What happens in the block happens under load; then all that was sent is judged, of earlier scenarios too.

        Pauses are counted from when the producer is under way until shortly after the block.
        """
        seed = len(self.told) + 1
        schedule = course(seed, SOURCES, 8_000, MESSAGES_PER_S)
        first = sum(len(message.ids) for message in self.sent)
        for message in schedule:
            message.ids += first
        with Producer(self.brokers.urls, schedule, SOURCES, f"scenario-{seed}") as producer:
            self.flow(producer, RAMP_MESSAGES)
            begun = time.monotonic()
            yield producer
            self.flow(producer, RAMP_MESSAGES // 3)
            ended = time.monotonic()
            producer.finish()
        messages, late_before = list(producer.begun), sum(each.late for each in self.told)
        self.sent += messages
        producer.begun = self.sent
        late = self.judge(producer) - late_before
        events = sum(len(message.ids) for message in messages)
        repeated = sum(message.tries - 1 for message in messages)
        pauses = self.pause.longest(begun, ended)
        self.told.append(Scenario(name, pauses, events, late, len(messages), repeated))
        print(self.told[-1], flush=True)

    def flow(self, producer: Producer, messages: int) -> None:
        """Let so many further messages be acknowledged."""
        goal, deadline = producer.acknowledged + messages, time.monotonic() + SETTLED_S
        while producer.acknowledged < goal:
            assert time.monotonic() < deadline, "the brokers take no more messages"
            time.sleep(POLL_S)

    def judge(self, producer: Producer) -> int:
        """Nothing lost, twice, out of order or in the wrong partition, and every partition's books balance.

        Returns how many events are in the late lane.
        """
        by_source = self.brokers.partitions_by_source()
        events = sum(len(message.ids) for message in self.sent)
        try:
            until_stored(events, self.dsn, self.schema)
        finally:
            verdicts = judged(producer, by_source, PARTITIONS, self.dsn, self.schema)
            wrong = {number: str(verdict) for number, verdict in verdicts.items() if not verdict.ok}
            assert not wrong, "\n".join(f"partition {number}: {words}" for number, words in wrong.items())
        assert sum(verdict.sent for verdict in verdicts.values()) == events
        assert all(verdict.ordered for verdict in verdicts.values())
        received = {number: verdict.sent for number, verdict in verdicts.items()}
        for instance in self.instances:
            for number in instance.owned_here():
                ledger = instance.ask(f"/v1/feeds/{partition_feed(number)}").json["ledger"]
                assert ledger["balanced"] and ledger["received"] == received.pop(number), (number, ledger)
        assert not received, "every partition is somebody's"
        return sum(verdict.late for verdict in verdicts.values())

    def settle(self, *, without: Instance | None = None) -> float:
        """Wait until the partitions are shared evenly among those who run; seconds that it took."""
        return settled([each for each in self.instances if each is not without], PARTITIONS, SETTLED_S)

    def busiest(self) -> Instance:
        """The instance with most partitions, not the one behind the gates."""
        return max(self.instances[:-1], key=lambda instance: len(instance.owned_here()))


@contextmanager
def cluster_world(folder: Path, dsn: str = "") -> Iterator[World]:
    """A world in which every partition is owned. At its end all instances must stop in good order.

    `dsn`: a PostgreSQL that a test may end; by default the one that tests share.
    """
    dsn = dsn or shared()
    schema = make_schema(dsn, folder)
    with ExitStack() as stack:
        brokers = stack.enter_context(Brokers(folder, PARTITIONS))
        brokers.make_stream()
        gates = stack.enter_context(Gates([node.port for node in brokers.nodes]))
        pause = Pause(dsn, schema, [partition_feed(number) for number in range(PARTITIONS)])
        instances = []
        for number in range(INSTANCES):
            own = folder / f"strandline-{number}"
            urls = gates.urls if number == INSTANCES - 1 else brokers.urls
            text = cluster_configuration(
                own, urls, dsn, schema, number=number, partitions=PARTITIONS, lease=f"{LEASE_S}s", **FEED_KEYS
            )
            instances.append(stack.enter_context(Instance(own, text)))
        stack.enter_context(pause)
        world = World(brokers, gates, instances, dsn, schema, pause)
        world.settle()
        ask(dsn, SLOW.format(schema=schema))
        yield world
        for instance in world.instances:
            assert instance.terminate() == 0

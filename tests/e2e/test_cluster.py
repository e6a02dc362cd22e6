"""Three instances, three brokers, one PostgreSQL, a producer that never waits, and faults one after the other.

After each scenario the judge reads what PostgreSQL holds of every partition: nothing lost, nothing twice, nothing out
of order (P1, P3, P5 per partition). How long no partition was released is printed as a table at the end.
"""

from __future__ import annotations

import time
from collections.abc import Iterator

import pytest
from helpers_cluster import partition_feed
from helpers_service import POLL_S
from helpers_world import INSTANCES, LEASE_S, PARTITIONS, World, cluster_world


@pytest.fixture(scope="module")
def world(tmp_path_factory: pytest.TempPathFactory, request: pytest.FixtureRequest) -> Iterator[World]:
    with cluster_world(tmp_path_factory.mktemp("cluster")) as world:
        yield world
    told = [f"lease {LEASE_S} s, {PARTITIONS} partitions, {INSTANCES} instances", *map(str, world.told)]
    shown = request.config.pluginmanager.getplugin("capturemanager")
    with shown.global_and_fixture_disabled():
        print("", *told, sep="\n", flush=True)


def test_all_is_well(world: World) -> None:
    with world.scenario("nothing happens") as producer:
        world.flow(producer, 40)


def test_an_instance_is_killed(world: World) -> None:
    with world.scenario("kill -9 of an instance"):
        victim = world.busiest()
        owned = victim.owned_here()
        assert owned, "it has partitions"
        victim.kill()
        world.settle()
        victim.start()
        world.settle()


def test_the_broker_that_leads_the_stream_is_killed(world: World) -> None:
    with world.scenario("kill -9 of the broker that leads the stream") as producer:
        leader = world.brokers.leader()
        leader.kill()
        assert world.brokers.leader() is not leader
        world.flow(producer, 60)
        leader.start()
        world.brokers.whole()
        world.settle()


def test_an_instance_stands_still_and_wakes(world: World) -> None:
    """A former owner that knows nothing of it: what it had under way must not be written twice."""
    with world.scenario("an instance stopped for longer than its lease") as producer:
        victim = world.busiest()
        owned = victim.owned_here()
        assert owned, "it has partitions"
        victim.stop()
        world.settle()
        world.flow(producer, 40)
        victim.go_on()
        world.settle()


def test_the_brokers_have_no_majority(world: World) -> None:
    with world.scenario("two of three brokers stopped for longer than a lease"):
        leader = world.brokers.leader()
        others = [node for node in world.brokers.nodes if node is not leader]
        for node in others:
            node.stop()
        ends = time.monotonic() + LEASE_S + 2
        while time.monotonic() < ends:
            assert all(instance.status("/health/live") == 200 for instance in world.instances)
            time.sleep(10 * POLL_S)
        for node in others:
            node.go_on()
        world.brokers.whole()
        world.settle()


def test_an_instance_is_cut_off_from_the_brokers(world: World) -> None:
    """It lives, and PostgreSQL answers it; what it had sent to the brokers arrives late, all at once."""
    with world.scenario("an instance cut off from the brokers") as producer:
        cut_off = world.instances[-1]
        owned = cut_off.owned_here()
        assert owned, "it has partitions"
        world.gates.shut()
        world.settle(without=cut_off)
        rows = cut_off.cluster()["partitions"]  # it answers; `owned_here` is empty for one that does not
        assert not any(row["here"] and row["state"] == "owned" for row in rows), "it knows that it may not go on"
        world.flow(producer, 40)
        world.gates.open()
        world.settle()


def test_one_after_the_other_is_restarted(world: World) -> None:
    with world.scenario("a rolling restart"):
        for instance in world.instances:
            assert instance.terminate() == 0
            world.settle()
            instance.start()
            world.settle()


def test_the_folders_hold_nothing_that_grows(world: World) -> None:
    """Scratch files are of partitions only, however often these moved."""
    for instance in world.instances:
        scratch = instance.folder / "data" / "scratch" / "feeds"
        here = {path.name for path in scratch.iterdir()}
        owned = {partition_feed(number) for number in instance.owned_here()}
        assert owned, "each instance has some"
        assert owned <= here <= {partition_feed(number) for number in range(PARTITIONS)}, f"{scratch}: {here}"

"""Leases on a real server: one winner, an end after the time to live, fences that ascend, and answers that are lost."""

from __future__ import annotations

import asyncio
import time
from collections.abc import AsyncIterator, Iterator
from pathlib import Path

import pytest
from helpers_broker_proxy import BrokerProxy
from helpers_brokers import Nats
from helpers_service import DEADLINE_S, POLL_S
from nats.aio.client import Client
from strandline.cluster.balance import Partition
from strandline.cluster.leases import (
    MARGIN_SHARE,
    VALUE_BYTES_AT_MOST,
    Held,
    LeaseLost,
    Leases,
    instance_key,
    owner_key,
)
from strandline.cluster.link import Away
from strandline.errors import StrandlineError

NAME = "river"
LONG_S, SHORT_S = 60.0, 1.0  # leases that do not end within a test, and those that do
ACKNOWLEDGED = b'"seq":'  # stands in the server's answer to every write
PARTITION = Partition("river-gauges", 0)
KEY = owner_key(PARTITION)


class Watch:
    """A monotonic clock that goes on when a test says so."""

    def __init__(self) -> None:
        self.now_s = 1000.0

    def __call__(self) -> float:
        return self.now_s


@pytest.fixture(name="server")
def _server(tmp_path: Path) -> Iterator[Nats]:
    with Nats(tmp_path, synced=False) as server:
        yield server


@pytest.fixture(name="client")
async def _client(server: Nats) -> AsyncIterator[Client]:
    client = await server.client()
    yield client
    await client.close()


async def taken(leases: Leases, value: bytes, key: str = KEY) -> Held:
    """Take it as soon as that can be done."""
    deadline = time.monotonic() + DEADLINE_S
    while (held := await leases.take(key, value)) is None:
        assert time.monotonic() < deadline
        await asyncio.sleep(POLL_S)
    return held


async def test_two_race_for_one_key_and_one_wins(client: Client, server: Nats) -> None:
    other = await server.client()
    both = await asyncio.gather(*(Leases.open(each, NAME, LONG_S, 1) for each in (client, other)))
    for number in range(20):
        key = owner_key(Partition("river-gauges", number))
        found = await asyncio.gather(*(each.take(key, b"%d" % who) for who, each in enumerate(both)))
        assert sorted(held is None for held in found) == [False, True]
        seen = (await both[0].look()).owners[Partition("river-gauges", number)]
        (held,) = (each for each in found if each)
        assert (seen.revision, seen.value) == (held.fence, b"%d" % found.index(held))
    await other.close()


async def test_a_lease_that_is_not_renewed_is_taken_by_another_whose_fence_is_greater(client: Client) -> None:
    leases = await Leases.open(client, NAME, SHORT_S, 1)
    asked_s = time.monotonic()
    zombie = await taken(leases, b"zombie")
    held = await taken(leases, b"heir")
    assert time.monotonic() >= asked_s + SHORT_S
    assert held.fence > zombie.fence
    assert not zombie.valid(time.monotonic())
    with pytest.raises(LeaseLost, match="in time"):
        await leases.renew(zombie, b"zombie")
    await leases.give_back(zombie)
    assert (await leases.look()).owners[PARTITION].value == b"heir"


async def test_a_zombie_whose_clock_stood_still_cannot_renew_either(client: Client) -> None:
    watch = Watch()
    leases = await Leases.open(client, NAME, SHORT_S, 1, clock=watch)
    heirs = await Leases.open(client, NAME, SHORT_S, 1)
    zombie = await taken(leases, b"zombie")
    heir = await taken(heirs, b"heir")
    assert zombie.valid(watch())  # as it thinks
    with pytest.raises(LeaseLost, match="somebody else"):
        await leases.renew(zombie, b"zombie")
    assert not zombie.valid(watch())
    await heirs.renew(heir, b"heir")


async def test_renewing_keeps_a_lease_beyond_its_time_and_the_fence(client: Client) -> None:
    leases = await Leases.open(client, NAME, SHORT_S, 1)
    held = await taken(leases, b"mine")
    fence, until_s = held.fence, time.monotonic() + 2.5 * SHORT_S
    while time.monotonic() < until_s:
        await leases.renew(held, b"mine")
        assert held.valid(time.monotonic())
        assert await leases.take(KEY, b"other") is None
        await asyncio.sleep(SHORT_S / 10)
    assert held.fence == fence < held.revision


async def test_validity_counts_from_before_the_request_and_ends_before_the_entry(client: Client) -> None:
    watch = Watch()
    leases = await Leases.open(client, NAME, LONG_S, 1, clock=watch)
    held = await taken(leases, b"mine")
    assert held.valid_until_s == pytest.approx(1000.0 + LONG_S * (1 - MARGIN_SHARE))
    watch.now_s += 10
    await leases.renew(held, b"mine")
    assert held.valid_until_s == pytest.approx(1010.0 + LONG_S * (1 - MARGIN_SHARE))
    watch.now_s = held.valid_until_s
    assert not held.valid(watch())
    with pytest.raises(LeaseLost):
        await leases.renew(held, b"mine")


async def test_one_that_is_given_back_is_taken_at_once_and_again_and_again(client: Client) -> None:
    leases = await Leases.open(client, NAME, LONG_S, 1)
    fences = []
    for number in range(5):
        held = await leases.take(KEY, b"%d" % number)  # over the mark that deleting leaves
        assert held is not None
        await leases.renew(held, b"%d" % number)
        await leases.give_back(held)
        assert not held.valid(time.monotonic())
        assert (await leases.look()).owners == {}
        fences.append(held.fence)
    assert fences == sorted(set(fences))


async def test_giving_back_with_an_old_revision_does_nothing(client: Client) -> None:
    leases = await Leases.open(client, NAME, LONG_S, 1)
    first = await taken(leases, b"first")
    stale = Held(first.key, first.fence, first.revision, first.valid_until_s, {b"first"})
    await leases.give_back(first)
    second = await taken(leases, b"second")
    await leases.give_back(stale)
    assert (await leases.look()).owners[PARTITION].revision == second.revision
    await leases.renew(second, b"second")


async def test_a_look_shows_instances_and_owners_and_for_how_long_each_stood(client: Client) -> None:
    watch = Watch()
    leases = await Leases.open(client, NAME, LONG_S, 1, clock=watch)
    north, south = instance_key("strandline-0.north"), instance_key("strandline-1")
    first, second = await taken(leases, b"up", north), await taken(leases, b"up", south)
    owner = await taken(leases, b"mine")
    await leases.look()
    watch.now_s += 5
    await leases.renew(first, b"busy")
    watch.now_s += 1
    look = await leases.look()
    assert {name: (seen.value, seen.revision) for name, seen in look.instances.items()} == {
        "strandline-0.north": (b"busy", first.revision),
        "strandline-1": (b"up", second.revision),
    }
    assert look.owners[PARTITION].revision == owner.revision
    assert [look.instances[name].age_s for name in sorted(look.instances)] == [0, 6]
    watch.now_s += 2
    assert (await leases.look()).instances["strandline-0.north"].age_s == 2


async def test_a_look_is_whole_with_many_owners_and_says_so_where_they_are_too_many(client: Client) -> None:
    leases = await Leases.open(client, NAME, LONG_S, 1)
    partitions = [Partition("river-gauges", number) for number in range(1025)]
    await asyncio.gather(*(leases.take(owner_key(each), b"x" * 100) for each in partitions[:1024]))
    assert set((await leases.look()).owners) == set(partitions[:1024])
    await leases.take(owner_key(partitions[1024]), b"x")
    with pytest.raises(StrandlineError, match=r"more than 1,024 leases owner\.\*"):
        await leases.look()


async def test_a_renewal_whose_answer_was_lost_is_found_out(server: Nats) -> None:
    async with BrokerProxy(server.port) as proxy:
        client = await server_through(proxy)
        leases = await Leases.open(client, NAME, SHORT_S * 3, 1)
        held = await taken(leases, b"0")
        before, proxy.swallow = held.revision, ACKNOWLEDGED
        await leases.renew(held, b"1")
        assert proxy.swallow is None
        assert held.revision == before + 2  # the one whose answer was lost, and the one after it
        seen = (await leases.look()).owners[PARTITION]
        assert (seen.value, seen.revision) == (b"1", held.revision)
        await leases.renew(held, b"2")
        await client.close()


async def test_a_taking_and_a_giving_back_whose_answers_were_lost_are_found_out(server: Nats) -> None:
    async with BrokerProxy(server.port) as proxy:
        client = await server_through(proxy)
        leases = await Leases.open(client, NAME, SHORT_S * 3, 1)
        proxy.swallow = ACKNOWLEDGED
        held = await leases.take(KEY, b"mine")
        assert proxy.swallow is None
        assert held is not None
        assert held.fence == (await leases.look()).owners[PARTITION].revision
        await leases.renew(held, b"mine")
        proxy.swallow = ACKNOWLEDGED
        await leases.give_back(held)
        assert proxy.swallow is None
        assert (await leases.look()).owners == {}
        await client.close()


async def test_while_the_brokers_are_away_a_lease_stays_valid_and_then_ends(server: Nats) -> None:
    watch = Watch()
    async with BrokerProxy(server.port) as proxy:
        client = await server_through(proxy)
        leases = await Leases.open(client, NAME, LONG_S, 1, clock=watch)
        held = await taken(leases, b"mine")
        proxy.away = True
        await proxy.cut()
        for call in (leases.renew(held, b"mine"), leases.take(KEY, b"more"), leases.look()):
            with pytest.raises(Away):
                await call
        assert held.valid(watch())
        proxy.away = False
        again = await server_through(proxy)
        await (await Leases.open(again, NAME, LONG_S, 1, clock=watch)).renew(held, b"mine")
        watch.now_s += LONG_S
        with pytest.raises(LeaseLost):
            await leases.renew(held, b"mine")
        await client.close()
        await again.close()


@pytest.mark.parametrize(
    ("lease_s", "replicas", "words"),
    [(30.0, 1, r"keeps entries for 60 s, and cluster\.lease is 30 s"), (LONG_S, 3, r"1 replicas.*replicas is 3")],
)
async def test_a_bucket_made_otherwise_is_refused_with_what_to_do(
    client: Client, lease_s: float, replicas: int, words: str
) -> None:
    await Leases.open(client, NAME, LONG_S, 1)
    with pytest.raises(StrandlineError, match=words) as caught:
        await Leases.open(client, NAME, lease_s, replicas)
    assert "delete the stream KV_river-leases" in str(caught.value)
    await Leases.open(client, NAME, LONG_S, 1)


async def test_more_replicas_than_servers_are_refused_in_words(client: Client) -> None:
    with pytest.raises(StrandlineError, match="cannot be made"):
        await Leases.open(client, NAME, LONG_S, 3)


async def test_the_bucket_and_its_fences_outlive_the_server(server: Nats) -> None:
    client = await server.client()
    leases = await Leases.open(client, NAME, LONG_S, 1)
    first = await taken(leases, b"first")
    await leases.give_back(first)
    await client.close()
    server.end()
    server.start()
    client = await server.client()
    second = await taken(await Leases.open(client, NAME, LONG_S, 1), b"second")
    assert second.fence > first.fence
    await client.close()


async def test_a_value_that_is_too_large_and_a_name_that_no_key_may_have_are_refused(client: Client) -> None:
    leases = await Leases.open(client, NAME, LONG_S, 1)
    with pytest.raises(StrandlineError, match="larger than"):
        await leases.take(KEY, b"x" * (VALUE_BYTES_AT_MOST + 1))
    for name in ("", "a b", "a..b", ".a", "a.", "a>", "ä"):
        with pytest.raises(StrandlineError, match="cannot be a lease's name"):
            instance_key(name)


async def server_through(proxy: BrokerProxy) -> Client:
    """A connection that leads through the proxy."""
    client = Client()
    await client.connect(proxy.url, allow_reconnect=False, error_cb=_told)
    return client


async def _told(error: Exception) -> None:
    """What the client says when it is cut off: the tests look at what comes of it."""
    assert error

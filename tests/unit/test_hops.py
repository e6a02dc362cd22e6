"""The hops of a feed: bodies that wait at the shell's own hops, and all six as a running service shows them."""

from __future__ import annotations

import asyncio
from pathlib import Path

from helpers_faulty import FaultyDisk, planted, scripted
from helpers_service import body_of, configuration, event_line, events, eventually, running
from strandline.hops import HOPS, Bodies, Hop


def test_bodies_wait_from_when_they_began_until_they_end() -> None:
    bodies = Bodies()
    assert bodies.hop() == Hop(0, None, None)
    first, second = bodies.begin(10), bodies.begin(20)
    assert bodies.hop() == Hop(2, 10, None)
    bodies.end(first, 30, advanced=True)
    assert bodies.hop() == Hop(1, 20, 30)
    bodies.end(second, 40, advanced=False)
    assert bodies.hop() == Hop(0, None, 30), "what was given up did not advance"


async def test_each_hop_shows_what_waits_there(tmp_path: Path) -> None:
    disk = FaultyDisk(tmp_path / "data")
    toml, sinks = scripted("a")
    taking = asyncio.Event()
    sinks["a"].script.extend(["ok", taking])
    text = configuration(tmp_path, sinks=toml, slack="5s")
    async with running(text, disk=disk, make=planted(**sinks)) as service:
        hops = service.runtime.hops
        assert tuple(hops()) == HOPS
        await service.send(range(20))  # 15 are released, and the sink stands
        await eventually(lambda: sinks["a"].busy)
        assert (hops()["runs"].waiting, hops()["sinks"].waiting, hops()["release"].waiting) == (5, 15, 0)
        disk.syncing.clear()
        sending = asyncio.create_task(service.post("events", events([30, 31])))
        await eventually(lambda: hops()["journal"].waiting == 2)
        assert hops()["release"].waiting == 5 and hops()["journal"].oldest_ns is not None
        body = body_of(event_line(40))
        head = "POST /v1/feeds/river-gauges/events HTTP/1.1\r\nHost: [::1]\r\nContent-Type: application/x-ndjson\r\n"
        _, writer = await asyncio.open_connection(service.service.address.host, service.service.address.port)
        writer.write(head.encode() + f"Content-Length: {len(body)}\r\n\r\n".encode() + body[:9])
        await eventually(lambda: hops()["ingest"].waiting == 1)
        document = await service.document()
        assert document["hops"]["ingest"]["waiting"] == 1 and document["hops"]["ingest"]["oldest_age_s"] >= 0
        writer.close()
        await eventually(lambda: hops()["ingest"].waiting == 0)
        disk.syncing.set()
        assert (await sending).status == 200
        taking.set()
        await eventually(lambda: hops()["sinks"].waiting == 0)
        document = await service.document()
        assert set(document["hops"]) == set(HOPS)
        assert all(document["hops"][name]["last_advanced"] for name in HOPS)

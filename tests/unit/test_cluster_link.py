"""One partition's connection to the brokers where one of them freezes: nothing is refused, and nothing is answered."""

from __future__ import annotations

import asyncio
from pathlib import Path

from helpers_brokers import STREAM, SUBJECT, Nats
from helpers_gates import Gates
from helpers_partition import until
from strandline.broker_access import BrokerAccess
from strandline.cluster.entries import Whole
from strandline.cluster.link import ANSWER_WITHIN_S, Link, Reader, everything
from strandline.cluster.log import PartitionLog, Place, make_stream
from strandline.core.records import VERSION, Kind
from strandline.nats_client import CONNECT_WITHIN_S

PLACE = Place.of("river", "gauges", 0)


async def test_a_server_that_freezes_is_left_for_another_before_its_pings_would_tell(tmp_path: Path) -> None:
    """Pings tell it after 20 s and more; a publish without an answer does at once, and a connect to it once more."""
    with Nats(tmp_path) as server, Gates([server.port]) as one, Gates([server.port]) as other:
        by_url = {one.urls[0]: one, other.urls[0]: other}
        link = Link(list(by_url), BrokerAccess(), "a")
        try:
            await make_stream(link, "river", 1, 1 << 26)
            log = PartitionLog(link, PLACE, 1)
            lsn = (await log.take_over()).end_lsn
            used = (await link.client()).connected_url
            assert used is not None
            by_url[f"nats://{used.netloc}"].shut()
            async with asyncio.timeout(ANSWER_WITHIN_S + CONNECT_WITHIN_S + 5.0):
                await log.append(lsn, [Whole(Kind.ACT, VERSION, b"x" * 16)])
            now = (await link.client()).connected_url
            assert now is not None and now.netloc != used.netloc
        finally:
            await link.close()
        again = Link([f"nats://{now.netloc}"], BrokerAccess(), "b")
        try:
            contents = await PartitionLog(again, PLACE, 2).take_over()
        finally:
            await again.close()
        kept = [each for group in contents.groups for each in group.entries if isinstance(each, Whole)]
        assert [entry.body for entry in kept if entry.kind == Kind.ACT] == [b"x" * 16], "once, whatever was sent twice"


async def test_what_came_while_others_were_worked_on_is_not_passed_over(tmp_path: Path) -> None:
    """The next fetch ends, and knows that nothing is left, before those of the last one are all handed out."""
    with Nats(tmp_path) as server:
        await server.make_stream()
        await server.publish([b"%d" % number for number in range(5)])
        link = Link([server.url], BrokerAccess(), "a")
        try:
            reader, found = Reader(link, STREAM, SUBJECT), list[bytes]()
            async for message in everything(reader, 1, at_once=3):
                await until(lambda: reader.pending == 0, "the rest")
                found.append(message.data)
        finally:
            await link.close()
    assert found == [b"0", b"1", b"2", b"3", b"4"]

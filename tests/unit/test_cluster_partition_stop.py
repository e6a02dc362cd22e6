"""What a partition leaves behind and holds up: a stop that goes wrong, a decoder that takes long; a real broker."""

from __future__ import annotations

import threading
from pathlib import Path

import pytest
from helpers_brokers import Nats
from helpers_partition import Instance, make_river
from strandline.cluster import rebuilding
from strandline.config import Feed
from strandline.ingest.decode import Decoder
from strandline.runtime import FeedRuntime


@pytest.mark.parametrize("drain", [False, True])
async def test_a_stop_in_which_something_unforeseen_goes_wrong_lets_the_connection_go(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, drain: bool
) -> None:
    with Nats(tmp_path) as server:
        await make_river(server)
        async with Instance(tmp_path, server, "a") as a:
            partition, close = await a.own(1), FeedRuntime.close

            async def closed_with_a_fault(runtime: FeedRuntime, limit_s: float) -> None:
                await close(runtime, limit_s)
                raise RuntimeError("nobody foresaw this")

            with monkeypatch.context() as patch:
                patch.setattr(FeedRuntime, "close", closed_with_a_fault)
                for _ in range(2):
                    with pytest.raises(RuntimeError, match="nobody foresaw this"):
                        await partition.stop(drain=drain)
                    assert not partition._link.is_there
            a.owned.remove(partition)


async def test_the_decoder_of_a_takeover_is_not_made_on_the_loop(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """It may compile for seconds, and leases wait for the loop."""
    made, made_in = rebuilding.decoder_of, list[threading.Thread]()

    def noted(config: Feed) -> Decoder:
        made_in.append(threading.current_thread())
        return made(config)

    monkeypatch.setattr(rebuilding, "decoder_of", noted)
    with Nats(tmp_path) as server:
        await make_river(server)
        async with Instance(tmp_path, server, "a") as a:
            await a.own(1)
    assert len(made_in) == 1 and made_in[0] is not threading.current_thread()

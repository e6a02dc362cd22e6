"""A partition that is stopped while something goes wrong that nobody foresaw; a real broker."""

from __future__ import annotations

from pathlib import Path

import pytest
from helpers_brokers import Nats
from helpers_partition import Instance, make_river
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

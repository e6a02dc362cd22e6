"""A feed with partitions takes no events over HTTP, and says where they are to be published."""

from __future__ import annotations

import json
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from pathlib import Path

import pytest
from aiohttp.test_utils import TestClient, TestServer
from helpers_service import PROBLEM, configuration, running
from strandline.access import Doors
from strandline.access_gate import Gate, Standing
from strandline.app import make_app
from strandline.clock import SystemClock
from strandline.config import parse
from strandline.runtime import FeedRuntime

TEXT = """
[cluster]
name = "river"
urls = ["nats://127.0.0.1:4222"]
[[feed]]
name = "river-gauges"
partitions = { stream = "RIVER", subject = "part.{partition}.>", count = 4 }
[[feed]]
name = "radio-5"
"""


@asynccontextmanager
async def serving(feeds: dict[str, FeedRuntime]) -> AsyncIterator[TestClient]:
    gate = Gate(Standing(Doors("http", None), None, None), SystemClock())
    async with TestClient(TestServer(make_app(parse(TEXT, {}), feeds, gate))) as client:
        yield client


@pytest.mark.parametrize("name", ["river-gauges", "river-gauges-0", "river-gauges-3"])
async def test_events_are_refused_wherever_the_partition_is(name: str) -> None:
    async with serving({}) as client, client.post(f"/v1/feeds/{name}/events", data=b"{}\n") as answer:
        assert (answer.status, answer.headers["Content-Type"]) == (422, PROBLEM)
        members = json.loads(await answer.read())
        assert members["type"] == "urn:strandline:problem:stream_only"
        assert members["detail"] == (
            "feed river-gauges takes no events by HTTP: publish them by way of stream RIVER (as its producers do: "
            "deploy/cluster.md), not here"
        )
        assert "Retry-After" not in answer.headers, "coming again never helps"


async def test_what_is_in_quarantine_is_published_again_and_not_readmitted(tmp_path: Path) -> None:
    """An arrival that came from no message could not be read again by whoever takes the partition over."""
    async with running(configuration(tmp_path)) as service, serving({"river-gauges-2": service.runtime}) as client:
        async with client.post("/v1/feeds/river-gauges-2/quarantine/readmit", json={}) as answer:
            assert answer.status == 422
            members = json.loads(await answer.read())
        assert members["type"] == "urn:strandline:problem:stream_only"
        assert members["detail"] == (
            "feed river-gauges readmits nothing, for all its events come by stream RIVER: mend, export (`strandline "
            "quarantine export`), and publish again (deploy/cluster.md)"
        )


@pytest.mark.parametrize("name", ["river-gauges-4", "river-gauges-00", "radio-5", "radio"])
async def test_what_is_no_partition_is_not_taken_for_one(name: str) -> None:
    async with serving({}) as client, client.post(f"/v1/feeds/{name}/events", data=b"{}\n") as answer:
        assert answer.status == 404


async def test_a_refusal_is_counted_where_the_partition_is(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service:
        feeds = {"river-gauges-2": service.runtime}
        async with serving(feeds) as client:
            for name in ("river-gauges-2", "river-gauges-1"):
                async with client.post(f"/v1/feeds/{name}/events", data=b"{}\n") as answer:
                    assert answer.status == 422
        assert service.runtime.feed.refusals == {"stream_only": 1}

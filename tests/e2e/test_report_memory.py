"""From when on a report knows, read from a service: its memory's begin, and whether the feed is a partition."""

from __future__ import annotations

from pathlib import Path

import msgspec
import pytest
from helpers_service import BEGIN_S, Running, configuration, running
from helpers_sinks import VirtualTime
from helpers_watches import memory_of
from strandline.config_cluster import Partitions
from strandline.reporting.gathering import facts_of, look
from strandline.runtime import FeedRuntime
from strandline.tracing.http import Traces
from strandline.tracing.question import Question

SECOND = 10**9


def as_partition(service: Running) -> None:
    """Its feed is one of a cluster's, as far as whoever looks at its configuration can tell."""
    parts = Partitions(stream="RIVER", subject="part.{partition}.>", count=1)
    service.runtime.config = msgspec.structs.replace(service.runtime.config, partitions=parts)


async def test_a_coarse_step_does_not_make_the_memory_older_than_it_is(tmp_path: Path) -> None:
    """After 15 minutes steps are of 10 s: the first one begins before the service did."""
    begun_ns = (BEGIN_S + 7) * SECOND
    clock = VirtualTime(begun_ns)
    async with running(configuration(tmp_path), clock=clock) as service:
        memory = memory_of(service)
        for _ in range(1000):
            clock.now += SECOND
            memory.sample()
        facts = facts_of(look(memory, BEGIN_S * SECOND - 3600 * SECOND, clock.now))
        assert facts.series.step_ns == 10 * SECOND and facts.series.t_ns[0] < begun_ns
        assert facts.series.since_ns == begun_ns
        later = facts_of(look(memory, begun_ns + 600 * SECOND, clock.now))
        assert later.series.since_ns is not None and later.series.since_ns <= later.from_ns
        before = facts_of(look(memory, BEGIN_S * SECOND, begun_ns - SECOND))
        assert before.series.since_ns is None and before.books.end is None, "that step's beginning was not seen"


async def test_a_report_knows_that_the_feed_is_a_partition(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service:
        query = {"format": "markdown", "from": "2023-11-14T00:00:00Z", "to": "2023-11-14T01:00:00Z"}
        other_owners = "in that one's late lane"
        assert other_owners not in (await service.get("report", params=query)).content.decode()
        as_partition(service)
        assert other_owners in (await service.get("report", params=query)).content.decode()


async def test_a_trace_knows_that_the_feed_is_a_partition(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    asked, answered = list[bool](), Traces.answer

    async def noted(traces: Traces, runtime: FeedRuntime, question: Question) -> bytes:
        asked.append(question.partition)
        return await answered(traces, runtime, question)

    monkeypatch.setattr(Traces, "answer", noted)
    async with running(configuration(tmp_path, id="/id")) as service:
        await service.get("trace", params={"id": "a"})
        as_partition(service)
        await service.get("trace", params={"id": "a"})
    assert asked == [False, True]

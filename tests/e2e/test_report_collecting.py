"""A file that stays open until its `roll_every` is no sink that was waited for: the report does not say so."""

from __future__ import annotations

import json
from pathlib import Path

import msgspec
import pytest
from helpers_service import BEGIN_S, configuration, eventually, running
from helpers_sinks import VirtualTime
from helpers_watches import memory_of
from strandline.reporting.facts import Facts
from strandline.reporting.sentences import summary
from strandline.reporting.words import plain

SECOND = 10**9


@pytest.mark.parametrize(("minutes", "told"), [(9, False), (12, True)])
async def test_what_a_sink_collects_as_configured_is_no_waiting(tmp_path: Path, minutes: int, told: bool) -> None:
    clock = VirtualTime()
    clock.now = BEGIN_S * SECOND
    folder = json.dumps(str(tmp_path / "out"))
    sinks = f'[[feed.sink]]\nkind = "ndjson"\ndirectory = {folder}\nroll_every = "10m"\n'
    async with running(configuration(tmp_path, sinks=sinks), clock=clock) as service:
        memory = memory_of(service)
        await service.send([0])
        delivery = service.runtime.deliveries["ndjson"]
        await eventually(lambda: delivery.state().lanes["ordered"].batches == 1)
        for _ in range(6 * minutes):
            clock.now += 10 * SECOND
            memory.sample()
        clock.now += SECOND  # a report is of what was before it is asked for
        query = {"format": "json", "from": "2023-11-14T22:13:20Z"}
        answer = await service.get("report", params=query)
        facts = msgspec.json.decode(answer.content, type=Facts)
    longest_ns = max(facts.series.undelivered_ns)
    assert longest_ns == (120 * SECOND if told else 0)
    assert ("for a sink" in "\n".join(plain(words) for words in summary(facts))) == told

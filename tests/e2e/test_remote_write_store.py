"""A real Prometheus as the store: what it loses of a feed that arrives out of order, and what it has with us in front.

The feed and the store's losses were measured before this program was written (Prometheus 2.42 as a receiver of remote
writes 1.0): 20 series x 10 samples/s x 100 s, each arriving after an exponential delay of mean 2 s. The numbers below
that are not named otherwise are those.
"""

from __future__ import annotations

import asyncio
import json
import random
import time
from collections.abc import AsyncIterator, Iterator, Sequence
from contextlib import asynccontextmanager
from pathlib import Path
from typing import Any

import pytest
from helpers_prometheus import Receiver, Series, prometheus
from helpers_remote_write import Arriving, Labels, Model, measured_feed, request
from helpers_service import FEED, Process, config_of, eventually
from simdisk import SimDisk
from strandline.app import Service
from strandline.runtime import FeedRuntime
from strandline.sinks.lanes import refused_rows

SAMPLES = 20_000
BEHIND = 14_831  # of them arrive behind a later one of their own series
WINDOW_LOSS = {1: 10_957, 2: 6_550, 5: 1_434, 10: 96, 20: 1}  # by the store's own window in s, one a request
MS = 1_000_000


@pytest.fixture(scope="module")
def feed() -> list[Arriving]:
    return measured_feed()


@pytest.fixture(scope="module")
def base_ms() -> int:
    """When the feed began: its samples lie in the last minutes, as those of a live feed do."""
    return int(time.time() * 1000) - 300_000


@pytest.fixture
def store(tmp_path: Path) -> Iterator[Receiver]:
    with prometheus(tmp_path / "prometheus") as receiver:
        yield receiver


def labels_of(sample: Arriving) -> dict[str, str]:
    return {"__name__": "water_level_meters", "station": f"gauge-{sample.series:02d}"}


def body_of(samples: Sequence[Arriving], base_ms: int) -> bytes:
    """These samples in one request, each series' in the order given."""
    series: dict[int, list[Arriving]] = {}
    for sample in samples:
        series.setdefault(sample.series, []).append(sample)
    return request(
        *((labels_of(each[0]), [(base_ms + one.time_ms, one.value) for one in each]) for each in series.values())
    )


def bodies(samples: Sequence[Arriving], size: int, base_ms: int) -> list[bytes]:
    return [body_of(samples[start : start + size], base_ms) for start in range(0, len(samples), size)]


def by_series(samples: Sequence[Arriving], base_ms: int) -> Series:
    found: Series = {}
    for sample in samples:
        key: Labels = tuple(sorted(labels_of(sample).items()))
        found.setdefault(key, {})[base_ms + sample.time_ms] = sample.value
    return found


# ---- straight into the store ----------------------------------------------------------------------------------------


def test_the_feed_is_the_one_that_was_measured(feed: list[Arriving]) -> None:
    newest: dict[int, int] = {}
    behind = 0
    for sample in feed:
        behind += sample.time_ms < newest.get(sample.series, -1)
        newest[sample.series] = max(newest.get(sample.series, -1), sample.time_ms)
    assert (len(feed), behind) == (SAMPLES, BEHIND)


@pytest.mark.parametrize(
    ("size", "lost"), [(1, BEHIND), (20, 19_407), (100, 19_364), (500, 18_924), (2_000, 17_867)]
)  # 74.15, 97.04, 96.82, 94.62 and 89.33 %
async def test_in_order_of_arrival_the_store_loses_most(
    store: Receiver, feed: list[Arriving], base_ms: int, size: int, lost: int
) -> None:
    answers = await store.pipelined(bodies(feed, size, base_ms))
    assert {status for status, _ in answers} == {204, 400}
    assert {text for status, text in answers if status == 400} == {"out of order sample\n"}
    assert SAMPLES - store.count() == lost


@pytest.mark.parametrize(("size", "lost"), [(500, 16_500), (2_000, 12_000)])  # 82.50 and 60.00 %
async def test_sorted_only_inside_each_request_it_loses_most_still(
    store: Receiver, feed: list[Arriving], base_ms: int, size: int, lost: int
) -> None:
    parts = [sorted(feed[start : start + size], key=lambda each: each.time_ms) for start in range(0, SAMPLES, size)]
    await store.pipelined([body_of(part, base_ms) for part in parts])
    assert SAMPLES - store.count() == lost


# ---- our late rule and the store's own window -----------------------------------------------------------------------


def late_by_rule(feed: Sequence[Arriving], window_s: int) -> tuple[set[Arriving], set[Arriving]]:
    """Samples that are late by our rule, and those among them that the store's own window refuses.

    Ours: before the newest time seen so far over all series, minus the window. The store's: that, and behind the newest
    of their own series too; for a sample that is the newest of its series the store takes at any age (within an hour).
    """
    ours, stores = set(), set()
    newest, newest_of = -1, dict.fromkeys(range(20), -1)
    for sample in feed:
        if sample.time_ms < newest - window_s * 1000:
            ours.add(sample)
            if sample.time_ms < newest_of[sample.series]:
                stores.add(sample)
        newest = max(newest, sample.time_ms)
        newest_of[sample.series] = max(newest_of[sample.series], sample.time_ms)
    return ours, stores


@pytest.mark.parametrize("window_s", WINDOW_LOSS)
async def test_the_stores_own_window_refuses_what_the_rule_says(
    tmp_path: Path, feed: list[Arriving], base_ms: int, window_s: int
) -> None:
    with prometheus(tmp_path, window=f"{window_s}s") as store:
        answers = await store.pipelined(bodies(feed, 1, base_ms))
    refused = {sample for sample, answer in zip(feed, answers, strict=True) if answer != (204, "")}
    assert {answer for answer in answers if answer != (204, "")} == {(500, "too old sample\n")}
    assert len(refused) == WINDOW_LOSS[window_s]
    assert refused == late_by_rule(feed, window_s)[1]


# ---- through Strandline ---------------------------------------------------------------------------------------------


class FeedClock:
    """The arrival clock of a feed that is played through: it stands where the sample that arrives stands."""

    def __init__(self, now_ns: int) -> None:
        self.now = now_ns

    def now_ns(self) -> int:
        return self.now


def line_of(sample: Arriving, base_ms: int) -> bytes:
    """The sample as an event of the feed."""
    event = {"t": base_ms + sample.time_ms, "station": f"gauge-{sample.series:02d}", "level": sample.value}
    return json.dumps(event).encode() + b"\n"


def configuration(folder: Path, store: Receiver, slack: str, *, source: str = "", sink: str = "") -> str:
    """One feed, one clock for all its series unless `source` names them; nothing but the slack makes it release."""
    return f"""
        listen = "127.0.0.1:0"
        data_dir = {json.dumps(str(folder / "data"))}
        [[feed]]
        name = "{FEED}"
        time = {{ at = "/t", unit = "ms" }}
        {source}
        slack = "{slack}"
        idle_after = "1h"
        hold_at_most = "1h"
        ahead_limit = "10s"
        [[feed.sink]]
        kind = "remote_write"
        url = "{store.write_url}"
        series = [ {{ name = "water_level_meters", value = "/level", labels = {{ station = "/station" }} }} ]
        {sink}
        """


@asynccontextmanager
async def played(text: str, feed: Sequence[Arriving], base_ms: int) -> AsyncIterator[FeedRuntime]:
    """A service in this process that has received the feed, one request a sample, and delivered all of it.

    Its journal lies in memory: what is asked here is order, not what a disk keeps.
    """
    clock = FeedClock(base_ms * MS)
    service = Service(config_of(text), clock=clock, disk=SimDisk())
    await service.start()
    try:
        runtime = service.feeds[FEED]
        numbers = runtime.feed.state.sources.numbers

        async def arrive(sample: Arriving) -> None:  # runs up to the wait for its sync before the next one begins
            clock.now = round((base_ms + sample.arrives_ms) * MS)
            await runtime.arrive(runtime.decoder.decode(line_of(sample, base_ms), "application/x-ndjson", numbers))

        for start in range(0, len(feed), 200):
            await asyncio.gather(*(arrive(sample) for sample in feed[start : start + 200]))
        await runtime.act(runtime.feed.drain)
        await eventually(lambda: delivered(runtime), "the feed is not delivered")
        yield runtime
    finally:
        await service.stop()


def delivered(runtime: FeedRuntime) -> bool:
    lanes = [lane for delivery in runtime.deliveries.values() for lane in delivery.state().lanes.values()]
    return not runtime.feed.state.runs.held and not any(lane.batches for lane in lanes)


def refused_by(runtime: FeedRuntime) -> int:
    """Events and samples that the sink has told as refused, and calls that it had to repeat."""
    state = runtime.deliveries["remote_write"].state()
    return sum(lane.refused_events for lane in state.lanes.values()) + sum(state.counts.values()) + state.retries


async def test_with_a_slack_above_the_largest_lateness_the_store_has_everything(
    tmp_path: Path, store: Receiver, feed: list[Arriving], base_ms: int
) -> None:
    async with played(configuration(tmp_path, store, "30s"), feed, base_ms) as runtime:
        ledger = runtime.view().ledger
        assert (ledger["received"], ledger["late"], ledger["released"]) == (SAMPLES, 0, SAMPLES)
        assert refused_by(runtime) == 0
        assert store.stored() == by_series(feed, base_ms)
        assert store.counter("prometheus_tsdb_out_of_order_samples_total") == 0


@pytest.mark.parametrize("slack_s", [1, 2, 5, 10])
async def test_late_is_what_the_rule_says_and_the_rest_is_stored(
    tmp_path: Path, store: Receiver, feed: list[Arriving], base_ms: int, slack_s: int
) -> None:
    """Ours are the store's and those that are the newest of their own series: 30 more at 1 s, none from 2 s on."""
    ours, stores = late_by_rule(feed, slack_s)
    assert stores <= ours and len(stores) == WINDOW_LOSS[slack_s]
    assert len(ours - stores) == (30 if slack_s == 1 else 0)
    async with played(configuration(tmp_path, store, f"{slack_s}s"), feed, base_ms) as runtime:
        assert runtime.view().ledger["late"] == len(ours)
        assert refused_by(runtime) == 0
        in_time = [sample for sample in feed if sample not in ours]
        assert store.stored() == by_series(in_time, base_ms)


async def test_what_the_store_never_takes_is_kept_and_all_else_is_stored(
    tmp_path: Path, store: Receiver, feed: list[Arriving], base_ms: int
) -> None:
    """The store has a later sample of one series already, of before: what lies in front of it is out of order."""
    before = Arriving(0.0, 5_000, 7, -1.0)
    assert store.write(body_of([before], base_ms)) == (204, "")
    behind = [sample for sample in feed if sample.series == 7 and sample.time_ms < 5_000]
    equal = [sample for sample in feed if sample.series == 7 and sample.time_ms == 5_000]
    rest = [sample for sample in feed if sample not in behind and sample not in equal]
    async with played(configuration(tmp_path, store, "30s"), feed, base_ms) as runtime:
        counts = runtime.deliveries["remote_write"].state().counts
        assert (counts["out_of_order"], counts["duplicate_timestamp"]) == (len(behind), 1) == (50, len(equal))
        assert sum(counts.values()) == 51
        kept = refused_rows(runtime.lanes_file, limit=100, sink="remote_write")
        lines = [line_of(sample, base_ms).rstrip() for sample in sorted(behind, key=lambda each: each.time_ms) + equal]
        assert [row.event for row in kept] == lines
        assert all("out_of_order" in row.detail for row in kept)
        assert store.stored() == by_series([*rest, before], base_ms)


async def test_late_events_go_apart_into_a_store_with_a_window(
    tmp_path: Path, feed: list[Arriving], base_ms: int
) -> None:
    with prometheus(tmp_path / "prometheus", window="30s") as store:
        text = configuration(tmp_path, store, "5s", sink='late = { deliver = "lane" }')
        async with played(text, feed, base_ms) as runtime:
            assert runtime.view().ledger["late"] == WINDOW_LOSS[5]
            assert refused_by(runtime) == 0
            assert store.stored() == by_series(feed, base_ms)


def test_a_process_that_is_killed_again_and_again_loses_nothing(
    tmp_path: Path, store: Receiver, feed: list[Arriving], base_ms: int
) -> None:
    """A real process, stations as sources, killed while it sends; at its end the store has every sample once."""
    source = 'source = "/station"'
    text = configuration(tmp_path, store, "30s", source=source, sink="samples_at_most = 50")
    chance = random.Random(20_260_501)
    lines = [line_of(sample, base_ms) for sample in feed]
    kills = set(chance.sample(range(150, 400), 5))
    with Process(tmp_path, text) as service:
        for number, start in enumerate(range(0, SAMPLES, 50)):
            answer = service.ask(f"/v1/feeds/{FEED}/events", b"".join(lines[start : start + 50]))
            assert answer.status == 200 and answer.json["accepted"] == 50, answer
            if number in kills:  # while what the last requests released is on its way
                service.kill()
                service.start()
        service.drain()
        document = service.document()
        counts = document["sinks"]["remote_write"]["counts"]
        assert document["ledger"]["late"] == 0
        metrics = service.ask("/metrics").content.decode()
        refused = [line for line in metrics.splitlines() if line.startswith("strandline_sink_refused_samples_total{")]
        assert len(refused) == len(counts)
        assert service.ask(f"/v1/feeds/{FEED}/refused").json["refused"] == []
        assert service.terminate() == 0
    assert not any(count for reason, count in counts.items() if reason != "already_there")
    assert store.stored() == by_series(feed, base_ms)


# ---- the model that other tests use ---------------------------------------------------------------------------------


def random_requests(seed: int, one_value: bool) -> list[bytes]:
    """Requests of a few series, some late, some doubled, some with another value, some far in the past."""
    chance = random.Random(seed)
    newest, made = 0, []
    for _ in range(3_000):
        newest += chance.randrange(0, 400)
        series: list[Any] = []
        for name in chance.sample("abcd", chance.randint(1, 3)):
            back = chance.choice([0, 0, 0, 300, 2_000, 6_000, 4_000_000])
            times = [newest - chance.randint(0, back) for _ in range(chance.randint(1, 3))]
            times = times if chance.random() < 0.1 else sorted(times)
            series.append(
                (
                    {"__name__": "m", "s": name},
                    [(each, each / 2.0 if one_value else float(chance.randint(0, 1))) for each in times],
                )
            )
        made.append((series, newest))
    return [
        request(*((labels, [(time_ms + 10**12, value) for time_ms, value in samples]) for labels, samples in series))
        for series, _ in made
    ]


@pytest.mark.parametrize("window_s", [0, 5])
async def test_the_model_answers_as_the_store_does(tmp_path: Path, window_s: int) -> None:
    """Answer by answer and sample by sample, over random requests; with a window each time has one value only."""
    with prometheus(tmp_path, window=f"{window_s}s" if window_s else None) as store:
        model = Model(window_ms=window_s * 1000)
        sent = random_requests(seed=window_s, one_value=bool(window_s))
        answers = await store.pipelined(sent)
        assert answers == [model.write(body) for body in sent]
        assert len(set(answers)) == (2 if window_s else 4)  # each in which it can answer
        assert store.stored() == model.series

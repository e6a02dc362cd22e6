"""Laws of the remote-write sink over HTTP, against a receiver with the measured rules: whatever goes wrong on the way.

What is sent is stored once; what a receiver refuses for ever is told, sample by sample, and everything else is stored.
"""

from __future__ import annotations

import asyncio
import itertools
import tempfile
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path

from helpers_remote_write import Events, Labels, Model, Served, Told, request, served
from helpers_sinks import VirtualTime
from hypothesis import example, given, settings
from hypothesis import strategies as st
from strandline.core.columns import Batch, Lane
from strandline.errors import SinkRefused, SinkRetry
from strandline.sinks.remote_write import RemoteWriteSink
from strandline.sinks.remote_write_series import SeriesRule

RULES = [SeriesRule("level", "/level", (("gauge", "/g"),)), SeriesRule("flow", "/flow", (("gauge", "/g"),))]
NAMES = ["a", "b", "c"]

# Batches of events: (how far the time goes on in ms, gauge, whether it has a level, whether it has a flow).
EVENT = st.tuples(st.integers(1, 400), st.sampled_from(NAMES), st.booleans(), st.booleans())
BATCHES = st.lists(st.lists(EVENT, max_size=9), min_size=1, max_size=6)
# What happens to one request after the other. Not both in one story: a process that ends while a request is in pieces
# (413) may tell samples as refused that the receiver holds, which the sink's documentation says.
STEPS = ["ok", "ok", "lose", "lost", "drop", (503, "later"), (429, "slowly")]
FAULTS = st.one_of(
    st.lists(st.sampled_from([*STEPS, "restart"]), max_size=40), st.lists(st.sampled_from([*STEPS, (413, "large")]))
)


@dataclass
class Feed:
    """Batches, and what a store should hold of them: by series the value at each time, with its row."""

    events: Events
    batches: list[Batch] = field(default_factory=list)
    samples: dict[tuple[Labels, int], tuple[float, tuple[int, int]]] = field(default_factory=dict)


def labels_of(name: str, gauge: str) -> Labels:
    return (("__name__", name), ("gauge", gauge), ("site", "north"))


def feed_of(drawn: list[list[tuple[int, str, bool, bool]]], lane: Lane = "ordered", backwards: bool = False) -> Feed:
    """Times go on from event to event (backwards: they go back), so no series has two samples in a millisecond."""
    feed = Feed(Events())
    time_ms, value = 10_000_000 if backwards else 0, 0.0
    for number, events in enumerate(drawn, 1):
        made: list[tuple[int, object]] = []
        for row, (step, gauge, level, flow) in enumerate(events):
            time_ms += -step if backwards else step
            value += 1
            has = {name: value for name, there in (("level", level), ("flow", flow)) if there}
            made.append((time_ms * 1_000_000 + 999_999, {"g": gauge, **has}))  # a time is rounded down to its ms
            for name in has:
                feed.samples[labels_of(name, gauge), time_ms] = (value, (number, row))
        feed.batches.append(feed.events.batch(number, made, lane))
    return feed


def make(server: Served, place: Path) -> RemoteWriteSink:
    return RemoteWriteSink(
        server.url,
        "river",
        VirtualTime(),
        RULES,
        place / "progress.db",
        external_labels=(("site", "north"),),
        samples_at_most=6,
    )


async def deliver(
    server: Served, place: Path, feed: Feed, restarts: Callable[[], bool]
) -> tuple[dict[tuple[int, int], str], list[dict[str, int]]]:
    """Offer everything, as delivery does, until it is settled; refused rows, and the counts of every process.

    What was offered once is offered again at least as far. `restarts`, asked after each take, says whether the process
    ends there, whatever came of the take; then nobody has kept what was refused in it.
    """
    refused: dict[tuple[int, int], str] = {}
    counts: list[dict[str, int]] = []
    left = list(feed.batches)
    offered = 0
    sink = make(server, place)
    told = (await sink.open()).get(feed.batches[0].lane, 0)
    for group_size in itertools.cycle([3, 1, 2]):
        left = [batch for batch in left if batch.number > told]
        if not left:
            break
        offered = max(offered, left[:group_size][-1].number)
        ended = False
        try:
            answer = await sink.take([batch for batch in left if batch.number <= offered], feed.events)
            assert answer[left[0].lane] >= told
            told = answer[left[0].lane]
        except SinkRetry:
            pass
        except SinkRefused as refusal:
            assert set(refusal.numbers) == set(refusal.rows)
            ended = restarts()
            if not ended:
                left = [batch for batch in left if batch.number not in refusal.numbers]
            for number, rows in refusal.rows.items():
                refused |= {(number, row): str(refusal) for row in rows}
        sink.check()
        if ended or restarts():
            counts.append(sink.counts())
            await sink.close()
            sink = make(server, place)
            position = (await sink.open()).get(feed.batches[0].lane)
            assert position is None or position >= told
    counts.append(sink.counts())
    await sink.close()
    return refused, counts


def fault_script(faults: list[str | Told]) -> tuple[Callable[[bytes], str | Told | None], Callable[[], bool]]:
    """Requests use up the faults; a restart that was met is carried out after the take."""
    left: Iterator[str | Told] = iter(faults)
    due = [False]

    def script(body: bytes) -> str | Told | None:
        step = next(left, "ok")
        if step == "restart":
            due[0] = True
        return "lose" if step == "restart" else step

    def restarts() -> bool:
        was, due[0] = due[0], False
        return was

    return script, restarts


def stored(model: Model) -> dict[tuple[Labels, int], float]:
    return {(labels, time): value for labels, samples in model.series.items() for time, value in samples.items()}


# An answer is lost, and what is asked then, whether the last samples are there, is too large.
TAILS_TOO_LARGE = [[(1, "a", False, True), (1, "b", False, True), (1, "a", False, True), (1, "b", False, True)]] * 2

# Two pieces of one request are lost one after the other.
TWO_PIECES = [[(1, "a", False, True), (1, "a", True, True), (1, "a", False, True)]]


@settings(max_examples=80)
@given(BATCHES, FAULTS)
@example(TWO_PIECES, [(413, "large")] * 2 + ["lose", "ok", "ok", "lose", (413, "large")])
@example(TAILS_TOO_LARGE, ["ok", "lose", "ok", (413, "large"), "lose"])
@example(TAILS_TOO_LARGE, ["ok", "restart", "lose", "restart"])
def test_whatever_goes_wrong_every_sample_is_stored_and_none_refused(
    drawn: list[list[tuple[int, str, bool, bool]]], faults: list[str | Told]
) -> None:
    """Lost answers, broken connections, refusals for now, and processes that end while a request is on its way."""

    async def law(place: Path) -> None:
        async with served() as server:
            feed = feed_of(drawn)
            server.script, restarts = fault_script(faults)
            refused, counts = await deliver(server, place, feed, restarts)
            assert refused == {}
            assert stored(server.model) == {key: value for key, (value, _) in feed.samples.items()}
            for count in counts:
                assert not any(count[reason] for reason in ("out_of_order", "duplicate_timestamp", "equal_time"))

    with tempfile.TemporaryDirectory() as place:
        asyncio.run(law(Path(place)))


@settings(max_examples=80)
@given(
    BATCHES,
    st.dictionaries(st.tuples(st.sampled_from(["level", "flow"]), st.sampled_from(NAMES)), st.integers(0, 6_000)),
    st.lists(st.booleans(), max_size=12),
)
def test_what_is_refused_is_told_and_all_else_is_stored(
    drawn: list[list[tuple[int, str, bool, bool]]], there: dict[tuple[str, str], int], stops: list[bool]
) -> None:
    """Series hold later samples already, from before: exactly those that stand behind them are refused."""

    async def law(place: Path) -> None:
        async with served() as server:
            feed = feed_of(drawn)
            for (name, gauge), time_ms in there.items():
                server.model.write(request((dict(labels_of(name, gauge)), [(time_ms, -1.0)])))
            behind = {
                key
                for key in feed.samples
                if key[1] <= there.get((dict(key[0])["__name__"], dict(key[0])["gauge"]), -1)
            }
            before = stored(server.model)
            left = iter(stops)
            refused, counts = await deliver(server, place, feed, lambda: next(left, False))
            expected = {key: value for key, (value, _) in feed.samples.items() if key not in behind}
            assert stored(server.model) == before | expected
            assert set(refused) == {feed.samples[key][1] for key in behind}
            told = sum(count["out_of_order"] + count["duplicate_timestamp"] for count in counts)
            assert told == len(behind)
            assert not any(count["already_there"] for count in counts)

    with tempfile.TemporaryDirectory() as place:
        asyncio.run(law(Path(place)))


@settings(max_examples=40)
@given(BATCHES, st.integers(1, 3_000), FAULTS)
def test_late_samples_go_where_a_window_takes_them(
    drawn: list[list[tuple[int, str, bool, bool]]], window_ms: int, faults: list[str | Told]
) -> None:
    """Sent apart, sorted in each request; what lies before the receiver's window is refused, and told."""

    async def law(place: Path) -> None:
        async with served(Model(window_ms)) as server:
            server.model.write(request((dict(labels_of("level", "a")), [(10_000_000, -1.0)])))
            newest_there = {labels_of("level", "a"): 10_000_000}
            feed = feed_of(drawn, "late", backwards=True)
            server.script, restarts = fault_script(faults)
            refused, _ = await deliver(server, place, feed, restarts)
            held = stored(server.model)
            for key, (value, row) in feed.samples.items():
                assert held.get(key) == value or row in refused
                if key[1] >= 10_000_000 - window_ms:
                    assert held[key] == value
            assert newest_there.keys() <= server.model.series.keys()

    with tempfile.TemporaryDirectory() as place:
        asyncio.run(law(Path(place)))

"""What tests of remote writes share: an outside decoder, a receiver with the rules of a real one, events to send.

The decoder is google.protobuf over a description of the messages that is written down here again, from the published
specification, so that it shares nothing with the encoder under test. The rules of the receiver are those that were
measured on a real Prometheus 2.42; tests/e2e/test_remote_write_store.py holds the two together.
"""

from __future__ import annotations

import asyncio
import json
import random
from collections.abc import AsyncIterator, Callable, Iterable, Sequence
from contextlib import asynccontextmanager
from dataclasses import dataclass, field
from typing import Any

import cramjam
import numpy as np
from aiohttp import web
from google.protobuf import descriptor_pb2, descriptor_pool, message_factory
from strandline.core.columns import REF, Batch, Lane
from strandline.sinks.remote_write_wire import labels_bytes, request_body, series_bytes

BOUNDS_MS = 3_600_000  # half a block of 2 h behind the newest sample, measured
Labels = tuple[tuple[str, str], ...]
Told = tuple[int, str]
OK: Told = (204, "")
OUT_OF_ORDER: Told = (400, "out of order sample\n")
DUPLICATE: Told = (400, "duplicate sample for timestamp\n")
OUT_OF_BOUNDS: Told = (400, "out of bounds\n")
TOO_OLD: Told = (500, "too old sample\n")

_FIELDS = {
    "WriteRequest": [("timeseries", 1, "TimeSeries", True)],
    "TimeSeries": [("labels", 1, "Label", True), ("samples", 2, "Sample", True)],
    "Label": [("name", 1, "string", False), ("value", 2, "string", False)],
    "Sample": [("value", 1, "double", False), ("timestamp", 2, "int64", False)],
}


def _message() -> Any:
    file = descriptor_pb2.FileDescriptorProto(name="remote.proto", package="test", syntax="proto3")
    kinds = descriptor_pb2.FieldDescriptorProto
    plain = {"string": kinds.TYPE_STRING, "double": kinds.TYPE_DOUBLE, "int64": kinds.TYPE_INT64}
    for name, fields in _FIELDS.items():
        message = file.message_type.add(name=name)
        for field_name, number, kind, repeated in fields:
            label = kinds.LABEL_REPEATED if repeated else kinds.LABEL_OPTIONAL
            made = message.field.add(name=field_name, number=number, label=label, type=plain.get(kind))
            if kind not in plain:
                made.type, made.type_name = kinds.TYPE_MESSAGE, f".test.{kind}"
    pool = descriptor_pool.DescriptorPool()
    pool.Add(file)
    return message_factory.GetMessageClass(pool.FindMessageTypeByName("test.WriteRequest"))


WriteRequest = _message()


def decoded(body: bytes) -> list[tuple[Labels, list[tuple[int, float]]]]:
    """A request's series in their order: labels in their order, (time in ms, value) in their order."""
    message = WriteRequest.FromString(bytes(cramjam.snappy.decompress_raw(body)))
    return [
        (tuple((label.name, label.value) for label in series.labels), [(s.timestamp, s.value) for s in series.samples])
        for series in message.timeseries
    ]


def request(*series: tuple[dict[str, str], Sequence[tuple[int, float]]]) -> bytes:
    """A body with these series and samples, in the order given."""
    return request_body(
        series_bytes(labels_bytes(labels.items()), [time for time, _ in samples], [value for _, value in samples])
        for labels, samples in series
    )


# ---- a receiver -----------------------------------------------------------------------------------------------------


@dataclass(slots=True)
class Model:
    """The head of a store: what it takes, and in which words it refuses. `window_ms`: its own out-of-order window.

    With a window, the store answers two values at one time of a series without a word, and what it then shows at that
    time is not modelled.
    """

    window_ms: int = 0
    series: dict[Labels, dict[int, float]] = field(default_factory=dict)  # all that is stored
    last: dict[Labels, tuple[int, float]] = field(default_factory=dict)  # the latest in order, by series
    newest_ms: int | None = None
    requests: list[bytes] = field(default_factory=list)

    def write(self, body: bytes) -> Told:
        """One request: all of it or nothing."""
        self.requests.append(body)
        found = decoded(body)
        first = next((time_ms for _, samples in found for time_ms, _ in samples), 0)
        newest = first if self.newest_ms is None else self.newest_ms  # before this request
        for labels, samples in found:
            for time_ms, value in samples:
                refusal = self._refusal(labels, time_ms, value, newest)
                if refusal is not None:
                    return refusal
        for labels, samples in found:
            for time_ms, value in samples:
                self._store(labels, time_ms, value, newest)
        return OK

    def _refusal(self, labels: Labels, time_ms: int, value: float, newest: int) -> Told | None:
        if time_ms >= newest - BOUNDS_MS:
            last = self.last.get(labels)
            if last is None or time_ms > last[0]:
                return None
            if time_ms == last[0]:
                return None if value == last[1] else DUPLICATE
        if self.window_ms:
            return None if time_ms >= newest - self.window_ms else TOO_OLD
        return OUT_OF_BOUNDS if time_ms < newest - BOUNDS_MS else OUT_OF_ORDER

    def _store(self, labels: Labels, time_ms: int, value: float, newest: int) -> None:
        last = self.last.get(labels)
        if last is None or time_ms > last[0]:
            self.last[labels] = (time_ms, value)
        elif not self.window_ms or time_ms < newest - self.window_ms:
            return  # disorder inside one request is dropped without a word
        self.series.setdefault(labels, {}).setdefault(time_ms, value)
        self.newest_ms = time_ms if self.newest_ms is None else max(self.newest_ms, time_ms)

    @property
    def count(self) -> int:
        return sum(map(len, self.series.values()))


Script = Callable[[bytes], str | Told | None]


@dataclass(slots=True)
class Served:
    """A model behind HTTP.

    `script` is asked before each request: None, "ok": answer as the model does; "lose": store it and close the
    connection; "lost": store it and answer 500; "hang": store it and never answer; "drop": close the connection and
    store nothing; (status, text): answer that and store nothing. `headers` are sent with each answer, `seen` are the
    requests' own.
    """

    model: Model
    url: str = ""
    script: Script = lambda body: None
    headers: dict[str, str] = field(default_factory=dict)
    seen: list[dict[str, str]] = field(default_factory=list)

    async def handle(self, request: web.Request) -> web.StreamResponse:
        body = await request.read()
        self.seen.append(dict(request.headers))
        step = self.script(body)
        if step == "drop":
            assert request.transport is not None
            request.transport.abort()
            return web.Response()
        status, text = step if isinstance(step, tuple) else self.model.write(body)
        if step == "lost":
            status, text = 500, "the answer was lost\n"
        if step == "lose":
            assert request.transport is not None
            request.transport.abort()
        if step == "hang":
            await asyncio.Event().wait()  # the handler is cancelled when the client has gone
        return web.Response(status=status, text=text, headers=self.headers)


@asynccontextmanager
async def served(model: Model | None = None) -> AsyncIterator[Served]:
    """A model on a free port of this machine, on the test's own loop."""
    server = Served(model or Model())
    app = web.Application(client_max_size=2**28)
    app.router.add_post("/api/v1/write", server.handle)
    runner = web.AppRunner(app, access_log=None, shutdown_timeout=0.1, handler_cancellation=True)
    await runner.setup()
    await web.TCPSite(runner, "127.0.0.1", 0).start()
    server.url = f"http://127.0.0.1:{runner.addresses[0][1]}/api/v1/write"
    try:
        yield server
    finally:
        await runner.cleanup()


# ---- events ---------------------------------------------------------------------------------------------------------


class Events:
    """`Lines` over events in memory, and batches of them."""

    def __init__(self) -> None:
        self.held: list[bytes] = []

    def batch(self, number: int, events: Iterable[tuple[int, object]], lane: Lane = "ordered") -> Batch:
        """A batch of (time in ns, event); an event that is bytes is its own line."""
        times, places, lengths = [], [], []
        for time_ns, event in events:
            line = event if isinstance(event, bytes) else json.dumps(event).encode()
            times.append(time_ns)
            places.append(len(self.held))
            lengths.append(len(line))
            self.held.append(line)
        refs = np.zeros(len(times), dtype=REF)
        refs["place"], refs["length"] = places, lengths
        return Batch(lane, number, np.array(times, dtype=np.int64), refs, number, number)

    def lines(self, batch: Batch) -> list[bytes]:
        return [self.held[place] for place in batch.refs["place"].tolist()]

    def ndjson(self, batch: Batch) -> bytes:
        return b"".join(line + b"\n" for line in self.lines(batch))

    def source_names(self) -> Sequence[str]:
        return ["gauge"]


@dataclass(frozen=True, slots=True)
class Arriving:
    """One sample of the measured feed. Times in ms since the feed's begin; `value` tells it from every other."""

    arrives_ms: float
    time_ms: int
    series: int
    value: float


def measured_feed() -> list[Arriving]:
    """The feed of which it was measured what stores make of it, in order of arrival.

    20 series x 10 samples/s x 100 s, each arriving at its time + Exp(mean 2 s), `random.Random(1)`, drawn time by time
    and, within a time, series by series: 14,831 of the 20,000 arrive behind a later one of their own series.
    """
    chance = random.Random(1)
    feed = []
    for step in range(1_000):
        for series in range(20):
            feed.append(Arriving(step * 100 + chance.expovariate(0.5) * 1000, step * 100, series, series + step / 1024))
    return sorted(feed, key=lambda sample: sample.arrives_ms)

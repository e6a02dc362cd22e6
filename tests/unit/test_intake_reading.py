"""What an intake makes of a message, without any broker: sources, keys, counts of delays, and the quarantine."""

from __future__ import annotations

from pathlib import Path

import pytest
from helpers_service import FEED, configuration, event_line, running
from hypothesis import given
from hypothesis import strategies as st
from strandline.config import parse
from strandline.errors import BodyError
from strandline.ingest.decode import Decoder
from strandline.ingest.formats import NDJSON
from strandline.ingest.offload import Aside
from strandline.intake.broker import Message
from strandline.intake.counts import DELAY_BOUNDS_S, Counts, Delays
from strandline.intake.reading import Reader, key_in_quarantine, key_of

SOURCES = st.text(min_size=1, max_size=20)


@given(SOURCES, st.lists(st.integers(0, 3), min_size=1, max_size=5))
def test_a_decoder_of_a_source_decodes_as_one_that_was_made_for_it(name: str, ids: list[int]) -> None:
    body = b"".join(event_line(number, id=number) + b"\n" for number in ids)
    one = Decoder("feed", "/observed_at", "rfc3339", id="/id")
    made = Decoder(name, "/observed_at", "rfc3339", id="/id")
    for table in ({}, {"other": 0}, {name: 0}):
        found, wanted = (each.decode(body, NDJSON, table) for each in (one.of_source(name), made))
        assert found.new_sources == wanted.new_sources and found.payload == wanted.payload
        assert found.identities is not None and wanted.identities is not None
        assert (found.identities == wanted.identities).all() and (found.sources == wanted.sources).all()
    assert one.decode(body, NDJSON, {}).new_sources == ["feed"], "the first one stays as it was"


@given(st.text(max_size=2000), st.binary(max_size=20), st.binary(max_size=20))
def test_a_key_is_short_and_its_fingerprint_tells_bodies_apart(key: str, one: bytes, other: bytes) -> None:
    first, second = (key_of(Message(body, "here", [], key), NDJSON) for body in (one, other))
    assert first is not None and second is not None
    assert first.text == second.text and first.text.isascii() and len(first.text) <= 1024
    assert (first.fingerprint == second.fingerprint) == (one == other)
    aside = key_in_quarantine(Message(one, "here", [], key))
    assert aside is not None and aside.text != first.text and len(aside.text) <= 1024


def test_without_a_key_nothing_tells_a_repeat() -> None:
    message = Message(b"", "here", [])
    assert key_of(message, NDJSON) is None and key_in_quarantine(message) is None


@given(st.lists(st.floats(-10, 1e6)))
def test_delays_are_counted_once_each_in_the_bucket_that_holds_them(delays: list[float]) -> None:
    found = Delays()
    for delay in delays:
        found.note(delay)
    assert sum(found.counts) == len(delays)
    for number, bound in enumerate(DELAY_BOUNDS_S):  # a bucket holds its upper bound (OpenMetrics 1.0, histograms)
        assert sum(found.counts[: number + 1]) == sum(delay <= bound for delay in delays)
    assert found.total_s == pytest.approx(sum(max(0.0, delay) for delay in delays))


def test_counts_that_contradict_themselves_are_found_out() -> None:
    counts = Counts("a", "mqtt", 0)
    counts.check()
    counts.in_flight = -1
    with pytest.raises(AssertionError):
        counts.check()


MQTT = '[[feed.intake]]\nkind = "mqtt"\nurl = "mqtt://h"\ntopics = ["#"]\n'


async def test_a_message_is_read_within_the_limits_of_its_feed(tmp_path: Path) -> None:
    limits = {"body_bytes_at_most": "1KiB", "event_bytes_at_most": "1KiB"}
    texts = [configuration(tmp_path, more=MQTT + more) for more in ("", "source = { topic_level = 2 }\n")]
    plain, by_topic = (
        parse(text.replace('source = "/station"\n', "", 1), {}).feeds[0].intakes[0] for text in texts
    )
    without = configuration(tmp_path, **limits).replace('source = "/station"\n', "", 1)
    async with running(without) as service:
        reader, aside = Reader(plain, service.runtime, Aside()), Reader(by_topic, service.runtime, Aside())
        arrival, key = await reader.arrival(Message(event_line(1), "here", ["river", "gw-7"]))
        assert list(arrival.new_sources) == [FEED] and key is None
        arrival, _ = await aside.arrival(Message(event_line(1), "here", ["river", "gw-7"]))
        assert list(arrival.new_sources) == ["gw-7"]
        for message, status in (
            (Message(b"x" * 2000, "here", []), 413),
            (Message(b"", "here", [], content_type="text/plain"), 415),
            (Message(b"", "here", [], content_encoding="br"), 415),
            (Message(b"x", "here", [], content_encoding="zstd"), 422),
        ):
            with pytest.raises(BodyError) as caught:
                await reader.arrival(message)
            assert caught.value.status == status
        for address in (["river"], ["river", ""], ["river", "x" * 257], ["river", "a\0"]):
            with pytest.raises(BodyError, match="level 2 of the address"):
                await aside.arrival(Message(event_line(1), "here", address))
        large = reader.refused(Message(b"x" * 5000, "a message", []), "too large")
        assert large.received == 1 and large.faults[0].raw == b"x" * 1024
        assert large.faults[0].detail.endswith("the first 1,024 of its 5,000 bytes are kept here (event_bytes_at_most)")

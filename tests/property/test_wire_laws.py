"""However a body comes over the wire, it is one arrival (DESIGN section 6): real HTTP, cut into pieces anywhere."""

from __future__ import annotations

import asyncio
import gzip
import json
from collections.abc import Iterator
from itertools import pairwise

import pytest
import zstandard
from helpers_raw import LAST, chunked, exchange, post, replies
from helpers_service import Running, body_of, configuration, event_line, running
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from strandline.core.records import Kind, decode_arrival

CODINGS = {"": bytes, "gzip": gzip.compress, "zstd": zstandard.compress}
JSON = "application/json"


@pytest.fixture(scope="module")
def service(tmp_path_factory: pytest.TempPathFactory) -> Iterator[tuple[asyncio.Runner, Running]]:
    """A service on a loop that the test turns."""
    with asyncio.Runner() as runner:
        opened = running(configuration(tmp_path_factory.mktemp("wire"), id="/id"))
        yield runner, runner.run(opened.__aenter__())
        runner.run(opened.__aexit__(None, None, None))


lines = st.builds(
    lambda second, station, id: event_line(second, station, id=id),
    st.integers(0, 1000),
    st.sampled_from(["gw-1", "gw-2", "ö", "weir\n3"]),
    st.integers(0, 5) | st.text(max_size=3),
) | st.sampled_from([b"odd", b"", b"{}", b'{"station":5}', b"\xff"])


@st.composite
def requests(draw):
    """A body, and the same body on its way: coded, chunked, cut."""
    chosen = draw(st.lists(lines, max_size=30))
    body, media_type = body_of(*chosen), "application/x-ndjson"
    if all(line[:1] == b"{" for line in chosen) and draw(st.booleans()):
        body, media_type = b"[" + b",".join(chosen) + b"]", JSON
    coding = draw(st.sampled_from(list(CODINGS)))
    content = CODINGS[coding](body)
    if draw(st.booleans()):
        head = {"content_type": media_type, "content_encoding": coding, "content_length": ""}
        request = post(b"", **head, transfer_encoding="chunked") + chunked(cut(draw, content))
    else:
        request = post(content, content_type=media_type, content_encoding=coding)
    return body, media_type, cut(draw, request + LAST)


def cut(draw, data):
    """The data in pieces, cut anywhere; now and then every byte is one."""
    if len(data) < 400 and draw(st.integers(0, 9)) == 0:
        return [data[at : at + 1] for at in range(len(data))]
    places = sorted({0, len(data), *draw(st.lists(st.integers(0, len(data)), max_size=6))})
    return [data[start:end] for start, end in pairwise(places)]


def last_arrival(service: Running):
    """What the journal holds of the last request: all that was decided of it before the core saw it."""
    found = [frame for frame in service.runtime.journal.frames() if frame.kind == Kind.ARRIVAL][-1]
    body = decode_arrival(found.body, found.lsn)
    names = service.runtime.feed.state.sources.names
    start = body.payload_place - found.lsn - 16
    return (
        body.times.tolist(),
        [names[number] for number in body.sources.tolist()],
        body.lengths.tolist(),
        None if body.identities is None else body.identities.tolist(),
        None if body.line_numbers is None else body.line_numbers.tolist(),
        body.faults,
        bytes(found.body)[start:],
    )


@settings(max_examples=150, suppress_health_check=[HealthCheck.function_scoped_fixture, HealthCheck.too_slow])
@given(requests())
def test_pieces_and_codings_change_nothing(service: tuple[asyncio.Runner, Running], request_) -> None:
    runner, running_service = service
    body, media_type, pieces = request_
    address = running_service.service.address
    (plainly, _) = replies(
        runner.run(exchange(address.host, address.port, [post(body, content_type=media_type) + LAST]))
    )
    assert plainly.status == 200
    expected = last_arrival(running_service) if json.loads(plainly.content)["received"] else None
    answer, live = replies(runner.run(exchange(address.host, address.port, pieces)))
    assert (answer.status, live.status) == (200, 200)
    for name in ("received", "quarantined", "faults"):
        assert json.loads(answer.content)[name] == json.loads(plainly.content)[name]
    if expected:
        assert last_arrival(running_service) == expected
    running_service.runtime.feed.check()

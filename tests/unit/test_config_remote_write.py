"""The remote-write sink in the configuration: the series, their labels, what a fault says."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest
from strandline.clock import SystemClock
from strandline.config import parse
from strandline.errors import ConfigError
from strandline.sinks import make_sink
from strandline.sinks.remote_write import RemoteWriteSink
from strandline.sinks.remote_write_series import REASONS, SeriesRule

ROOT = Path(__file__).resolve().parents[2]
SINK = '[[feed]]\nname = "river-gauges"\n[[feed.sink]]\nkind = "remote_write"\n'
URL = 'url = "http://127.0.0.1:9090/api/v1/write"\n'
SERIES = 'series = [ { name = "water_level_meters", value = "/level", labels = { station = "/station" } } ]\n'


def sink_of(text: str, **environ: str) -> Any:
    """The one sink of a text without faults."""
    (sink,) = parse(text, environ).feeds[0].sinks
    return sink


def only_fault(text: str, **environ: str) -> str:
    """The one fault of a text."""
    with pytest.raises(ConfigError) as caught:
        parse(text, environ, "s.toml")
    (fault,) = caught.value.faults
    return fault


async def test_what_the_design_writes_is_a_sink() -> None:
    sink = sink_of(SINK + URL + SERIES)
    assert (sink.name, sink.late.deliver) == ("remote_write", "keep")
    assert sink.options() == {
        "url": "http://127.0.0.1:9090/api/v1/write",
        "series": (SeriesRule("water_level_meters", "/level", (("station", "/station"),)),),
        "external_labels": (),
        "samples_at_most": 2_000,
        "ahead_at_most_s": 300.0,
        "token": None,
        "token_file": None,
        "timeout_s": 30.0,
        "path": Path("strandline-data/river-gauges-remote-write.db"),
    }
    made = make_sink(sink.kind, "river-gauges", SystemClock(), **sink.options())
    assert isinstance(made, RemoteWriteSink)
    await made.close()


def test_everything_said() -> None:
    text = """
        external_labels = { network = "north", zone = "ü" }
        late = { deliver = "repair", every = "10m" }
        samples_at_most = 500
        ahead_at_most = "0s"
        token_file = "/run/token"
        timeout = "2s"
        path = "/var/lib/p.db"
        [[feed.sink.series]]
        name = "level:mean"
        value = "/m/0"
        [[feed.sink.series]]
        name = "flow"
        value = "/flow"
        labels = { a = "/a", _b1 = "/b~1c" }
        """
    sink = sink_of(SINK + URL + text)
    options = sink.options()
    assert options["series"] == (
        SeriesRule("level:mean", "/m/0"),
        SeriesRule("flow", "/flow", (("a", "/a"), ("_b1", "/b~1c"))),
    )
    assert options["external_labels"] == (("network", "north"), ("zone", "ü"))
    assert (options["samples_at_most"], options["ahead_at_most_s"], options["timeout_s"]) == (500, 0.0, 2.0)
    assert (sink.late.deliver, sink.late.every_ns) == ("repair", 600 * 10**9)


def test_variables_override_single_values() -> None:
    prefix = "STRANDLINE_FEED__RIVER_GAUGES__SINK__REMOTE_WRITE__"
    sink = sink_of(SINK + URL + SERIES, **{f"{prefix}URL": "http://b/w", f"{prefix}LATE__DELIVER": "lane"})
    assert (sink.url, sink.late.deliver) == ("http://b/w", "lane")


@pytest.mark.parametrize(
    ("text", "fault"),
    [
        (SERIES, 'feed[1].sink[1].url of "river-gauges" is missing'),
        (URL, 'series of "river-gauges" is missing: write series = ['),
        (URL + "series = []", 'series of "river-gauges" is missing'),
        (URL + "series = [ { name = 'a' } ]", "series[1].value"),
        (URL + "series = [ { name = '1a', value = '/a' } ]", '"1a" is no series name'),
        (URL + "series = [ { name = 'a b', value = '/a' } ]", '"a b" is no series name'),
        (URL + "series = [ { name = 'a', value = 'level' } ]", "is no JSON Pointer"),
        (URL + "series = [ { name = 'a', value = '' } ]", "points at the whole event"),
        (URL + "series = [ { name = 'a', value = '/a', labels = { a = 'b' } } ]", 'holds a = "b", which is no JSON'),
        (URL + "series = [ { name = 'a', value = '/a', labels = { a-b = '/b' } } ]", 'holds "a-b", which is no label'),
        (URL + "series = [ { name = 'a', value = '/a', labels = { __name__ = '/b' } } ]", 'holds "__name__", which'),
        (URL + "series = [ { name = 'a', value = '/a', labels = [] } ]", "is no table: write { station"),
        (URL + "series = [ { name = 'a', value = '/a', label = {} } ]", "did you mean `labels`?"),
        (URL + "series = [ " + "{ name = 'a', value = '/a' }," * 101 + " ]", "has more than 100 entries"),
        (URL + SERIES + "external_labels = { station = 'x' }", 'labels of "river-gauges" holds station, which is'),
        (URL + SERIES + "external_labels = { a = '' }", 'holds a = "", which is no text of 1 to 1,024 bytes'),
        (URL + SERIES + "external_labels = { a = 1 }", "holds a = 1, which is no text: put it in quotes"),
        (URL + SERIES + "samples_at_most = 0", "is outside of 1 to 100,000"),
        (URL + SERIES + "late = 'send'", "is no table: write late = { ... }"),
        (URL + SERIES + "late = { deliver = 'send' }", '"send" is none of keep, lane, repair'),
        (URL + SERIES + "token = 'a'\ntoken_file = 'b'", 'token_file of "river-gauges" and `token` both say what'),
    ],
)
def test_one_fault_is_named_with_its_place_and_advice(text: str, fault: str) -> None:
    assert fault in only_fault(SINK + text)


def test_a_second_sink_of_a_feed_needs_a_file_of_its_own() -> None:
    """Its position would be taken for the first one's."""
    second = f"[[feed.sink]]\nkind = 'remote_write'\nname = 'again'\n{URL}{SERIES}"
    assert 'sink[2].path of "river-gauges"' in only_fault(SINK + URL + SERIES + second)
    assert len(parse(SINK + URL + SERIES + second + "path = 'again.db'", {}).feeds[0].sinks) == 2
    other = (SINK + URL + SERIES + "path = 'p.db'").replace("river-gauges", "radio")
    assert len(parse(SINK + URL + SERIES + "path = 'p.db'\n" + other, {}).feeds) == 2


def test_every_reason_is_in_the_document() -> None:
    rows = (ROOT / "deploy" / "configuration.md").read_text().splitlines()
    for reason, meaning in REASONS.items():
        assert f"| `{reason}` | {meaning} |" in rows

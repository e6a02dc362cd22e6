"""Environment variables that override the configuration: which there are, and what is at fault with the others."""

from __future__ import annotations

from pathlib import Path

import pytest
from strandline.config import Address, Config, SqliteConfig, parse
from strandline.errors import ConfigError

FEED = '[[feed]]\nname = "river-gauges"\n'


def _overridden(**environ: str) -> Config:
    text = "listen = '[::1]:1'\n[[feed]]\nname = 'other'\n" + FEED + "slack = 'broken'\nsource = '/s'\n"
    return parse(text + "time = { at = '/t' }\n", {"STRANDLINE_FEED__RIVER_GAUGES__SLACK": "7s", **environ})


def test_variables_override_the_file_before_it_is_judged() -> None:
    config = _overridden(
        HOME="/root",
        STRANDLINE_LISTEN="0.0.0.0:80",
        STRANDLINE_DATA_DIR="/data",
        STRANDLINE_LIMITS__BODIES_AT_MOST="3",
        STRANDLINE_FEED__RIVER_GAUGES__TIME__UNIT="ms",
        STRANDLINE_FEED__RIVER_GAUGES__EXPECT_SOURCES="weir-1, weir-2",
        STRANDLINE_FEED__RIVER_GAUGES__JOURNAL__AT_MOST="1GiB",
        STRANDLINE_FEED__RIVER_GAUGES__EVENTS_AT_MOST="1_000",
        STRANDLINE_FEED__RIVER_GAUGES__SINK__SQLITE__PATH="/srv/river.db",
    )
    other, feed = config.feeds
    assert (config.listen, config.data_dir, config.limits.bodies_at_most) == (Address("0.0.0.0", 80), Path("/data"), 3)
    assert (feed.slack_ns, feed.time.at, feed.time.unit) == (7 * 10**9, "/t", "ms")
    assert (feed.expect_sources, feed.events_at_most) == (("weir-1", "weir-2"), 1_000)
    assert feed.journal.at_most_bytes == 2**30
    assert feed.sinks == (SqliteConfig(name="sqlite", path=Path("/srv/river.db")),)
    assert other.slack_ns == 5 * 10**9


def test_an_ipv6_address_comes_back_as_it_was() -> None:
    assert str(_overridden().listen) == "[::1]:1"
    assert _overridden().listen.host == "::1"


@pytest.mark.parametrize(
    ("name", "value", "fault"),
    [
        (
            "STRANDLINE_FEED__RIVER_GAUGES__SLAK",
            "5s",
            "overrides no key; did you mean STRANDLINE_FEED__RIVER_GAUGES__SLACK?",
        ),
        ("STRANDLINE_FEED__RIVER_GAUGES__NAME", "x", "overrides no key"),
        ("STRANDLINE_FEED__OTHER__SLACK", "5s", "overrides no key"),
        ("STRANDLINE_", "x", "overrides no key"),
        ("STRANDLINE_LISTEN", "", 'variable STRANDLINE_LISTEN = "" is no address'),
        ("STRANDLINE_LISTEN", "a\nb", "holds characters that cannot be printed"),
        ("STRANDLINE_LISTEN", "\udcff", "holds characters that cannot be printed, or is not UTF-8"),
        ("STRANDLINE_FEED__RIVER_GAUGES__EVENTS_AT_MOST", "many", 'EVENTS_AT_MOST = "many" is no whole number'),
        (
            "STRANDLINE_FEED__RIVER_GAUGES__SLACK",
            "2m",
            'variable STRANDLINE_FEED__RIVER_GAUGES__HOLD_AT_MOST = "70s" is shorter',
        ),
    ],
)
def test_a_variable_at_fault_is_named(name: str, value: str, fault: str) -> None:
    environ = {"STRANDLINE_FEED__RIVER_GAUGES__HOLD_AT_MOST": "70s", name: value}
    with pytest.raises(ConfigError) as caught:
        parse(FEED, environ, "s.toml")
    (found,) = caught.value.faults
    assert fault in found
    assert found.startswith("variable STRANDLINE_")


def test_variables_that_a_cluster_sets_are_passed_over() -> None:
    environ = {
        "STRANDLINE_SERVICE_HOST": "10.0.0.11",
        "STRANDLINE_SERVICE_PORT": "8600",
        "STRANDLINE_SERVICE_PORT_HTTP": "8600",
        "STRANDLINE_PORT": "tcp://10.0.0.11:8600",
        "STRANDLINE_PORT_8600_TCP_ADDR": "10.0.0.11",
        "STRANDLINE_EDGE_SERVICE_HOST": "10.0.0.12",
    }
    assert parse(FEED, environ) == parse(FEED, {})

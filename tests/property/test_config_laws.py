"""Laws of the configuration: units are exact, and whatever the text, either it loads or its faults are named."""

from __future__ import annotations

import re
import tomllib
from decimal import Decimal
from fractions import Fraction
from pathlib import Path

import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st
from strandline.config import Config, parse
from strandline.config_kinds import Kind, quoted, shown
from strandline.config_overrides import variables
from strandline.config_read import Key, declared, tables_of
from strandline.config_units import (
    DURATION_UNITS,
    SIZE_UNITS,
    WHOLE_AT_MOST,
    duration_ns,
    duration_text,
    size_bytes,
    size_text,
)
from strandline.errors import ConfigError

FULL = (Path(__file__).resolve().parents[2] / "deploy" / "strandline.toml").read_text()
LINES = FULL.splitlines()
WHOLE = st.integers(0, WHOLE_AT_MOST)
AMOUNT = st.from_regex(r"[0-9]{1,19}(\.[0-9]{1,12})?", fullmatch=True)
# What a hand at three in the morning may leave in a file, and what no hand would.
SCRAPS = r"""

[[feed]]
[feed]
[[feed.sink]]
[limits.x]
slack = 5
slack = { late_share = nan }
slack = { at_most = inf }
feed = 3
feed = [1, []]
sink = []
kind = []
name = "a"
name = '{feed}{x}'
directory = '{feed}/{'
limits = 1
journal = []
time = {}
x = 1979-05-27
source = "/a\nb"
listen = '::1:80'
listen = ':'
data_dir = ''
data_dir = "\u0000"
expect_sources = [1, [], '']
expect_sources = ['a', 'a']
=
""".splitlines()
SCRAP = st.sampled_from(
    [*SCRAPS, "a." * 900 + "b = 1", "id = '" + "/a" * 511 + "'", "events_at_most = " + "9" * 5000, "\0"]
) | st.text(max_size=20)


@given(WHOLE)
def test_durations_and_sizes_come_back(amount: int) -> None:
    assert duration_ns(duration_text(amount)) == amount
    assert size_bytes(size_text(amount)) == amount


@given(AMOUNT, st.sampled_from([*DURATION_UNITS, *SIZE_UNITS]))
@example("0.000000001", "s")
@example("9223372036.854775807", "s")
@example("9223372036.854775808", "s")
def test_an_amount_is_exact_or_refused(amount: str, unit: str) -> None:
    units, parse_amount = (DURATION_UNITS, duration_ns) if unit in DURATION_UNITS else (SIZE_UNITS, size_bytes)
    exact = Fraction(Decimal(amount)) * units[unit]
    if exact.denominator == 1 and exact <= WHOLE_AT_MOST:
        assert parse_amount(amount + unit) == exact
    else:
        with pytest.raises(ValueError, match=r"whole number|too large"):
            parse_amount(amount + unit)


@given(st.text(max_size=12))
@example("5 s")
@example("-5s")
@example("+5s")
@example("5.s")
@example(".5s")
@example("1e3s")
@example("1_000s")
@example("٣s")
@example("5s\n")
@example("1m30s")
def test_other_text_is_neither_duration_nor_size(text: str) -> None:
    for parse_amount, units in ((duration_ns, DURATION_UNITS), (size_bytes, SIZE_UNITS)):
        if re.fullmatch(rf"[0-9]+(\.[0-9]+)?({'|'.join(units)})", text) is None:
            with pytest.raises(ValueError, match=r"is no|has "):
                parse_amount(text)


@given(st.text(max_size=80))
def test_text_is_quoted_as_toml_and_shown_on_one_line(text: str) -> None:
    assert tomllib.loads(f"x = {quoted(text)}")["x"] == text
    assert shown(text).isprintable()
    assert len(shown(text)) < 700


def _loads_or_names_its_faults(text: str, environ: dict[str, str]) -> Config | None:
    try:
        return parse(text, environ, "mutated.toml")
    except ConfigError as error:
        assert error.faults
        for fault in error.faults:
            assert fault.startswith(("mutated.toml: ", "variable STRANDLINE_")), fault
            assert fault.isprintable(), fault
            assert len(fault) < 2_000
        assert len(set(error.faults)) == len(error.faults), "the same fault twice"
        return None


@settings(max_examples=300)
@given(st.data())
def test_a_file_with_lines_changed_loads_or_names_its_faults(data: st.DataObject) -> None:
    lines = list(LINES)
    for _ in range(data.draw(st.integers(1, 4))):
        at = data.draw(st.integers(0, len(lines) - 1))
        change = data.draw(st.sampled_from(["drop", "double", "swap", "insert", "replace", "value"]))
        other = data.draw(st.integers(0, len(lines) - 1))
        if change == "drop" and len(lines) > 1:
            del lines[at]
        elif change == "double":
            lines.insert(other, lines[at])
        elif change == "swap":
            lines[at], lines[other] = lines[other], lines[at]
        elif change == "value" and "=" in lines[at] and "=" in lines[other]:
            lines[at] = lines[at].split("=")[0] + "=" + lines[other].split("=", 1)[1]
        elif change == "insert":
            lines.insert(at, data.draw(SCRAP))
        else:
            lines[at] = data.draw(SCRAP)
    _loads_or_names_its_faults("\n".join(lines), {})


@settings(max_examples=200)
@given(st.integers(0, len(FULL) - 1), st.integers(0, 3), st.text(max_size=3))
def test_a_file_with_characters_changed_loads_or_names_its_faults(at: int, dropped: int, put: str) -> None:
    _loads_or_names_its_faults(FULL[:at] + put + FULL[at + dropped :], {})


@given(
    st.sampled_from(sorted(variables({"feed": [{"name": "river-gauges", "sink": [{"kind": "sqlite"}]}]}))), st.text()
)
@example("STRANDLINE_LISTEN", "\udcff")
@example("STRANDLINE_FEED__RIVER_GAUGES__EXPECT_SOURCES", "a,,b")
def test_a_variable_loads_or_is_named(name: str, text: str) -> None:
    _loads_or_names_its_faults(FULL, {name: text})


def _defaults() -> list[tuple[str, Kind, object]]:
    return [
        (f"{title}.{key}", item.mark.kind, item.default)
        for title, struct in tables_of(Config)
        for key, item in declared(struct).items()
        if isinstance(item.mark, Key)
        and not item.required
        and item.default is not None
        and "{" not in str(item.default)
    ]


@pytest.mark.parametrize(("key", "kind", "default"), _defaults(), ids=[key for key, _, _ in _defaults()])
def test_each_default_can_be_written(key: str, kind: Kind, default: object) -> None:
    assert kind.read(tomllib.loads(f"x = {kind.show(default)}")["x"]) == default

"""`strandline check` tells all that can be judged at once, and what was likely meant."""

from __future__ import annotations

import json
from pathlib import Path

import pytest
from strandline.cli import main
from strandline.config import parse
from strandline.errors import ConfigError

FEED = '[[feed]]\nname = "river-gauges"\n'


def test_rules_between_keys_and_who_can_reach_it_are_told_with_all_else(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    file = tmp_path / "s.toml"
    more = 'slak = "5s"\nslack = "50s"\nhold_at_most = "5s"\n'
    file.write_text(f'listen = "0.0.0.0:8600"\n{FEED}{more}')
    assert main(["check", str(file), "--json"]) == 2
    found = json.loads(capsys.readouterr().out)["faults"]
    for part in ("slak", "hold_at_most", "can be reached from other machines"):
        assert sum(part in fault for fault in found) == 1, (part, found)
    assert len(found) == 3 and all(fault.startswith(f"{file}: ") for fault in found)


def test_an_address_that_could_not_be_read_is_not_judged_twice(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    file = tmp_path / "s.toml"
    file.write_text(f'listen = "0.0.0.0"\n{FEED}')
    assert main(["check", str(file)]) == 2
    assert "reached from other machines" not in capsys.readouterr().err


@pytest.mark.parametrize(
    ("line", "meant"),
    [
        ('time = { unit = "seconds" }', "did you mean s?"),
        ('time = { unit = "RFC3339" }', "did you mean rfc3339?"),
        ('time = { unit = "millis" }', "did you mean ms?"),
        ('clock = "arival"', "did you mean arrival?"),
        ('slack = "5 s"', 'did you mean "5s"?'),
    ],
)
def test_near_misses_of_values(line: str, meant: str) -> None:
    with pytest.raises(ConfigError) as caught:
        parse(f"{FEED}{line}\n", {})
    assert meant in str(caught.value)


@pytest.mark.parametrize("line", ['time = { unit = "m" }', 'clock = "wall"', 'slack = "5 parsecs"', 'slack = "5 5s"'])
def test_what_could_mean_anything_is_not_guessed(line: str) -> None:
    with pytest.raises(ConfigError) as caught:
        parse(f"{FEED}{line}\n", {})
    assert "did you mean" not in str(caught.value)

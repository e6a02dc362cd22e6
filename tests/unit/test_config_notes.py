"""Notes of `strandline check`: what runs, but hardly as it was meant. None of them refuses anything."""

from __future__ import annotations

import json
from pathlib import Path

import pytest
from strandline.cli import main
from strandline.config import parse
from strandline.config_notes import notes

ROOT = Path(__file__).resolve().parents[2]


def text(*, cluster: str = "", feed: str = "", subject: str = "part.{partition}.>", token: int | None = None) -> str:
    source = "" if token is None else f", source = {{ subject_token = {token} }}"
    return (
        f'[cluster]\nname = "river"\ninstance = "strandline-0"\nurls = ["nats://127.0.0.1:4222"]\n{cluster}\n'
        f'[[feed]]\nname = "river-gauges"\n{feed}\n'
        f'partitions = {{ stream = "RIVER", subject = "{subject}", count = 4{source} }}\n'
    )


def noted(**given: object) -> list[str]:
    return notes(parse(text(**given), {}))  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("given", "words"),
    [
        ({"feed": 'slack = "1s"\nhold_at_most = "15s"'}, 'feed[1].hold_at_most of "river-gauges" = 15s is not longer'),
        ({"cluster": 'lease = "2m"'}, "cluster.lease = 2m: whenever an instance is killed"),
        ({"cluster": 'lease = "14s"'}, "cluster.lease = 14s is shorter than brokers with replicas = 3"),
        ({"cluster": 'lease = "10s"\nreplicas = 5'}, "replicas = 5"),
        ({"token": 4}, 'subject_token = 4 lies behind the 3 tokens that each subject of "part.{partition}.>" has'),
        ({"token": 1}, 'subject_token = 1 is "part" in every subject'),
    ],
)
def test_what_is_noted(given: dict[str, object], words: str) -> None:
    (note,) = noted(**given)
    assert words in note


@pytest.mark.parametrize(
    "given",
    [
        {},
        {"feed": 'slack = "1s"\nhold_at_most = "16s"'},
        {"cluster": 'lease = "2s"\nreplicas = 1'},  # one broker has no leader to lose
        {"token": 3},
        {"token": 1, "subject": "*.{partition}"},
    ],
)
def test_what_is_not(given: dict[str, object]) -> None:
    assert noted(**given) == []


def test_without_a_cluster_nothing_is_noted() -> None:
    assert notes(parse('[[feed]]\nname = "radio"\nslack = "1s"\nhold_at_most = "1s"\n', {})) == []


def test_the_command_tells_them_and_ends_well(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    file = tmp_path / "s.toml"
    file.write_text(text(cluster='lease = "14s"', token=4))
    assert main(["check", str(file)]) == 0
    told = capsys.readouterr().out.splitlines()
    assert [line.partition(": ")[0] for line in told[-2:]] == ["note", "note"]
    assert "has no fault" in told[0] and not any("note:" in line for line in told[:-2])
    assert main(["check", str(file), "--json"]) == 0
    answer = json.loads(capsys.readouterr().out)
    assert answer["ok"] and [f"note: {note}." for note in answer["notes"]] == told[-2:]


def test_what_is_delivered_has_nothing_to_note(capsys: pytest.CaptureFixture[str]) -> None:
    for name in ("strandline.toml", "minimal.toml"):
        assert main(["check", "--json", str(ROOT / "deploy" / name)]) == 0
        assert json.loads(capsys.readouterr().out)["notes"] == []

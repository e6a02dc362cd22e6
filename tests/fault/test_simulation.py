"""Promises P1 to P9 in simulated worlds: the real runtime on a simulated disk and clock, dying again and again.

What a world is, what befalls it and who judges is told in `sim_world`. More seeds by hand: python tests/simulate.py.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, field

import pytest
from sim_scenario import PATTERNS, scenario_of
from sim_world import Tally
from simulate import Violation, command, main, play

SEEDS = 400  # some 10 crashes each; 0.1 to 0.15 s a seed
SEEDS_AT_LEAST, CRASHES_AT_LEAST = 300, 3000

# What must have happened somewhere, or the worlds have become too mild to show anything.
MET = {
    "killed": 1000, "power cut": 1000, "died while starting": 200, "did not start": 50, "failed": 10, "stopped": 500,
    "died in: write": 50, "died in: sync": 50, "died in: rename": 10, "died in: create": 30, "died in: remove": 5,
    "died in: sync_directory": 20, "died in: a": 100, "records cut": 500, "batches again": 200, "receiver repeats": 50,
    "store refuses": 100, "store refuses for good": 100, "store hangs": 100, "store hangs late": 100,
    "store loses answers": 100, "store fails within": 100, "event released": 3000, "event late": 3000,
    "event quarantined": 300, "event duplicate": 100, "request lost": 200, "request refused held_full": 200,
    "request refused journal_full": 200, "request refused disk_full": 20, "request refused lanes_full": 200,
    "request refused sources_full": 200,
}  # fmt: skip


@dataclass
class Played:
    """All worlds of this run."""

    total: Tally = field(default_factory=Tally)
    patterns: Counter[str] = field(default_factory=Counter)
    violations: list[str] = field(default_factory=list)


@pytest.fixture(scope="module")
def played() -> Played:
    found = Played()
    for seed in range(SEEDS):
        found.patterns[scenario_of(seed).pattern] += 1
        try:
            found.total.add(play(seed))
        except Violation as violation:
            found.violations.append(str(violation))
    return found


def test_no_world_breaks_a_promise(played: Played) -> None:
    assert not played.violations, "\n".join(played.violations)


def test_there_were_enough_worlds_and_enough_crashes(played: Played) -> None:
    total = played.total
    print(f"\nseeds {SEEDS}, crashes {total.crashes}, events {total.events}, steps {total.steps}")
    assert SEEDS >= SEEDS_AT_LEAST and total.crashes >= CRASHES_AT_LEAST
    assert set(played.patterns) == set(PATTERNS)


def test_what_is_rare_elsewhere_was_common(played: Played) -> None:
    counts = played.total.counts
    assert {name: counts[name] for name, number in MET.items() if counts[name] < number} == {}


@pytest.mark.parametrize("pattern", sorted(PATTERNS))
def test_a_world_can_be_repeated(pattern: str) -> None:
    """The same seed gives the same world, to the last count, whatever ran before it."""
    assert play(7, pattern) == play(7, pattern)


def test_a_violation_names_the_command_that_repeats_it(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    def broken(self: object) -> None:
        raise AssertionError("the books do not balance")

    monkeypatch.setattr("strandline.core.feed.Feed.check", broken)
    with pytest.raises(Violation, match="the books do not balance") as caught:
        play(3, "ties")
    assert command(3, "ties") in str(caught.value)
    arguments = command(3, "ties").split()[2:]
    assert main(arguments) == 1
    told = capsys.readouterr()
    assert "violations 1" in told.out and command(3, "ties") in told.err

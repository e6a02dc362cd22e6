"""Deterministic simulation by hand: python tests/simulate.py --seeds N [--first K] [--pattern NAME]

Plays seeds one after the other, shows progress on stderr and totals at the end, and for each seed that fails the one
command that repeats it. The same seed and pattern give the same world, whatever ran before it.
"""

from __future__ import annotations

import argparse
import sys
import time
import traceback

from helpers_strands import NEAR, near_at_most
from sim_process import seams
from sim_scenario import PATTERNS, scenario_of
from sim_stores import a_folder
from sim_world import Tally, World


class Violation(AssertionError):
    """A world in which a promise was broken. The text names the seed, what was broken, and how to see it again."""


def command(seed: int, pattern: str | None) -> str:
    """What repeats a seed."""
    return f"python tests/simulate.py --seeds 1 --first {seed}" + (f" --pattern {pattern}" if pattern else "")


def play(seed: int, pattern: str | None = None) -> Tally:
    """One world from beginning to end. Raises Violation."""
    scenario = scenario_of(seed, pattern)
    near = NEAR[seed % len(NEAR)]
    small = near_at_most(near, LOT_EVENTS=near, WARM_UP_EVENTS=20)
    with a_folder() as folder, seams(f"{seed}"), small:
        world = World(scenario, folder)
        try:
            return world.run()
        except Exception as error:
            world.abandon()
            raise Violation(
                f"seed {seed} ({scenario.pattern}), step {world.tally.steps}: {type(error).__name__}: {error}\n"
                f"repeat: {command(seed, pattern)}"
            ) from error


def main(arguments: list[str] | None = None) -> int:
    """Exit code 1 where a seed fails."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--seeds", type=int, default=100, help="how many seeds (default: %(default)s)")
    parser.add_argument("--first", type=int, default=0, help="the first of them (default: %(default)s)")
    parser.add_argument("--pattern", choices=sorted(PATTERNS), help="only this kind of trouble")
    given = parser.parse_args(arguments)
    total, violations, begun = Tally(), 0, time.monotonic()
    for index in range(given.seeds):
        seed = given.first + index
        try:
            total.add(play(seed, given.pattern))
        except Violation as violation:
            violations += 1
            print(f"\n{violation}", file=sys.stderr)
            if given.seeds == 1:
                traceback.print_exception(violation.__cause__)
        passed = time.monotonic() - begun
        print(
            f"\r{index + 1} of {given.seeds} seeds, {total.crashes} crashes, {violations} violations, {passed:.0f} s",
            end="", file=sys.stderr, flush=True,
        )  # fmt: skip
    print(file=sys.stderr)
    print(f"seeds {given.seeds}  crashes {total.crashes}  events {total.events}  violations {violations}")
    print(f"steps {total.steps}  disk operations {total.operations}  seconds {time.monotonic() - begun:.1f}")
    for name, number in sorted(total.counts.items()):
        print(f"  {name:<40}{number:>10}")
    return 1 if violations else 0


if __name__ == "__main__":
    sys.exit(main())

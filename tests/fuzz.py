"""The fuzz lane: many small inputs, each drawn from a number, and a law for each of them (`fuzz_targets`).

    python tests/fuzz.py --inputs 1000000                        in the proportions of CI's 100,000
    python tests/fuzz.py --target bodies --from 4711 --inputs 1  one input again; a finding prints this command
    python tests/fuzz.py --target bodies --guided                by coverage, with atheris (pip install atheris)

A property test per input would be the house's way, but an example of hypothesis costs 1 to 3 ms, an input here 50 µs.
Its laws: no exception but the named ones, no growth, and every outcome that must come up does.
"""

from __future__ import annotations

import argparse
import gc
import sys
import time
import tracemalloc
from collections import Counter
from collections.abc import Iterator, Sequence
from pathlib import Path
from random import Random
from tempfile import TemporaryDirectory
from types import FunctionType

import fuzz_targets
import fuzz_targets_arrow
import fuzz_targets_journal
from fuzz_targets import Target

TARGETS: dict[str, Target] = {**fuzz_targets.TARGETS, **fuzz_targets_arrow.TARGETS, **fuzz_targets_journal.TARGETS}
CI_INPUTS = sum(target.inputs for target in TARGETS.values())
SEEDS = 500
GROWTH_BYTES_AT_MOST = 100_000  # left behind by some hundred inputs: caches of the standard library, at most


class Finding(Exception):
    """An input that broke its law."""


def drawn(target: Target, number: int) -> object:
    """The input of this number: the same in every process."""
    return target.make(Random(number))


def fuzz(name: str, first: int, count: int) -> Counter[str]:
    """Outcomes of the inputs numbered from `first`. Raises Finding at the first that breaks its law."""
    target, outcomes = TARGETS[name], Counter[str]()
    for number in range(first, first + count):
        given = drawn(target, number)
        try:
            outcomes[target.run(given)] += 1
        except Exception as error:
            again = f"python tests/fuzz.py --target {name} --from {number} --inputs 1"
            raise Finding(f"{type(error).__name__}: {error}\n{again}\n{given!r}"[:8000]) from error
    return outcomes


def growth(name: str, first: int, count: int) -> tuple[int, int]:
    """Bytes that stay behind after `count` inputs, and the most that one of them took at a time."""
    target, most = TARGETS[name], 0
    fuzz(name, first, count)  # whatever is made once
    tracemalloc.start()
    try:
        gc.collect()
        before, _ = tracemalloc.get_traced_memory()
        for number in range(first, first + count):
            given = drawn(target, number)
            tracemalloc.reset_peak()
            start, _ = tracemalloc.get_traced_memory()
            target.run(given)
            most = max(most, tracemalloc.get_traced_memory()[1] - start)
        del given
        gc.collect()
        after, _ = tracemalloc.get_traced_memory()
    finally:
        tracemalloc.stop()
    return after - before, most


def _shares(inputs: int, name: str | None) -> Iterator[tuple[str, int]]:
    for each, target in TARGETS.items():
        if name in (None, each):
            yield each, inputs if name else max(1, inputs * target.inputs // CI_INPUTS)


def _guided(target: Target) -> None:
    """By coverage, beginning with inputs as they are drawn here. Ends at a finding, which atheris writes to a file."""
    import atheris  # noqa: PLC0415 - only this way of running needs it

    for function in _own_functions():
        atheris.instrument_func(function)
    with TemporaryDirectory() as folder:
        for number in range(SEEDS):
            Path(folder, str(number)).write_bytes(target.make(Random(number)))
        atheris.Setup([sys.argv[0], folder], target.run)
        atheris.Fuzz()


def _own_functions() -> Iterator[FunctionType]:
    """The functions and methods of the package, as far as it was imported."""
    modules = [module for name, module in sys.modules.items() if name.startswith("strandline.")]
    holders = [*modules, *(each for module in modules for each in vars(module).values() if isinstance(each, type))]
    for holder in holders:
        found = [each for each in vars(holder).values() if isinstance(each, FunctionType)]
        yield from (each for each in found if each.__module__.startswith("strandline."))


def main(arguments: Sequence[str] | None = None) -> int:
    """The command; 1 where something was found."""
    parser = argparse.ArgumentParser(description="Fuzz what reads what others wrote.")
    parser.add_argument("--inputs", type=int, default=CI_INPUTS)
    parser.add_argument("--from", type=int, default=0, dest="first", help="number of the first input")
    parser.add_argument("--target", choices=sorted(TARGETS))
    parser.add_argument("--guided", action="store_true", help="by coverage, without end; needs --target and atheris")
    given = parser.parse_args(arguments)
    if given.guided:
        target = TARGETS[given.target or "bodies"]
        if not isinstance(drawn(target, 0), bytes):
            parser.error("inputs of this target are no bytes")
        _guided(target)
    for name, count in _shares(given.inputs, given.target):
        start = time.perf_counter()
        try:
            outcomes = fuzz(name, given.first, count)
        except Finding as finding:
            print(f"{name}: {finding}", file=sys.stderr)
            return 1
        seconds = time.perf_counter() - start
        told = ", ".join(f"{outcome} {times}" for outcome, times in outcomes.most_common())
        print(f"{name}: {count:,} inputs in {seconds:.1f} s ({seconds / count * 1e6:.0f} µs each): {told}")
    return 0


if __name__ == "__main__":
    sys.exit(main())

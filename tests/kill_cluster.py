"""Faults by chance in a whole cluster, judged after each round: python tests/kill_cluster.py --rounds 20 --seed 7

Instances and brokers are killed, stopped and restarted, the network is cut, PostgreSQL ends, one or two at a time, for
as long as chance has it: shorter or longer than a lease. tests/e2e/test_cluster.py does the same one by one. Exit code
1 when something was lost, doubled, out of order, or when the books do not balance.
"""

from __future__ import annotations

import argparse
import random
import sys
import tempfile
import time
from collections.abc import Callable, Mapping
from concurrent.futures import ThreadPoolExecutor
from functools import partial
from pathlib import Path
from subprocess import TimeoutExpired

sys.path.insert(0, str(Path(__file__).parent))

from helpers_postgres import END_AT_ONCE, Server
from helpers_world import LEASE_S, World, cluster_world

Undo = Callable[[], object]
Fault = Callable[[World, random.Random], Undo]
LONGEST_S = LEASE_S * 1.8


def kill_instance(world: World, chance: random.Random) -> Undo:
    """One that runs, at once."""
    victim = chance.choice([each for each in world.instances if each.running])
    victim.kill()
    return victim.start


def end_instance(world: World, chance: random.Random) -> Undo:
    """One that runs, in good order, which may take a while."""
    victim = chance.choice([each for each in world.instances if each.running])
    victim.begin_to_end()

    def back() -> None:
        assert victim.wait() == 0
        victim.start()

    return back


def stop_instance(world: World, chance: random.Random) -> Undo:
    """One that runs stands still."""
    victim = chance.choice([each for each in world.instances if each.running])
    victim.stop()
    return victim.go_on


def cut_network(world: World, chance: random.Random) -> Undo:
    """Between the last instance and the brokers."""
    del chance
    world.gates.shut()
    return world.gates.open


def kill_broker(world: World, chance: random.Random) -> Undo:
    """One that runs, at once."""
    victim = chance.choice([node for node in world.brokers.nodes if node.running])
    victim.kill()
    return victim.start


def stop_broker(world: World, chance: random.Random) -> Undo:
    """One that runs stands still."""
    victim = chance.choice([node for node in world.brokers.nodes if node.running])
    victim.stop()
    return victim.go_on


def end_postgres(server: Server, world: World, chance: random.Random) -> Undo:
    """At once, as in a crash."""
    del world, chance
    server.end(END_AT_ONCE)
    return server.start


FAULTS: Mapping[str, Fault] = {
    "an instance is killed": kill_instance,
    "an instance ends": end_instance,
    "an instance stands still": stop_instance,
    "an instance is cut off": cut_network,
    "a broker is killed": kill_broker,
    "a broker stands still": stop_broker,
}


def play(world: World, chance: random.Random, faults: Mapping[str, Fault]) -> None:
    """One round: up to two different faults, each undone after a while, whatever becomes of the other."""
    names = chance.sample(sorted(faults), chance.choice([1, 2]))
    with world.scenario(", ".join(names)):
        with ThreadPoolExecutor() as threads:
            undone = []
            for name in names:
                undo, lasts_s = faults[name](world, chance), chance.choice([0.3, 1.0, chance.uniform(0.0, LONGEST_S)])
                print(f"  {name} for {lasts_s:.1f} s", flush=True)
                undone.append(threads.submit(after, lasts_s, undo))
                time.sleep(chance.uniform(0.0, 2.0))
            for each in undone:
                each.result()
        world.brokers.whole()
        world.settle()


def after(seconds: float, undo: Undo) -> None:
    """Undo it then."""
    time.sleep(seconds)
    undo()


def play_rounds(folder: Path, rounds: int, seed: int, server: Server) -> int:
    """The exit code. The first round that finds a fault ends it."""
    chance, faults = random.Random(seed), {**FAULTS, "PostgreSQL ends": partial(end_postgres, server)}
    with cluster_world(folder, server.dsn) as world:
        for number in range(1, rounds + 1):
            try:
                play(world, chance, faults)
            except (AssertionError, TimeoutExpired) as error:
                print(f"round {number} of seed {seed}: {error}")
                return 1
        print(f"{rounds} rounds, {sum(len(each.ids) for each in world.sent):,} events: all is well")
    return 0


def main() -> int:
    """Play the rounds and say what was found."""
    options = argparse.ArgumentParser(description=__doc__)
    options.add_argument("--rounds", type=int, default=20, help="default: 20")
    options.add_argument("--seed", type=int, default=1, help="default: 1")
    options.add_argument("--keep", type=Path, help="an empty folder for everything, kept afterwards")
    given = options.parse_args()
    server = Server()
    try:
        with tempfile.TemporaryDirectory() as passing:
            return play_rounds(given.keep or Path(passing), given.rounds, given.seed, server)
    finally:
        server.remove()


if __name__ == "__main__":
    sys.exit(main())

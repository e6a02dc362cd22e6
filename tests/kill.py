"""Kills a real service under load as often as you like, and looks into its store: python tests/kill.py --rounds 100

CI does 20 rounds of the same in tests/e2e/test_p1_nothing_lost.py. Exit code 1 when something was lost, invented,
doubled beyond its tries, out of order, or when the books do not balance.
"""

from __future__ import annotations

import argparse
import sys
import tempfile
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent))

from helpers_load import kill_rounds

EVENTS_A_ROUND = 1_200


def main() -> int:
    """Run the rounds and say what was found."""
    options = argparse.ArgumentParser(description=__doc__)
    options.add_argument("--rounds", type=int, default=100, help="kills (default: 100)")
    rounds = options.parse_args().rounds
    with tempfile.TemporaryDirectory() as folder:
        found = kill_rounds(Path(folder), rounds, events=EVENTS_A_ROUND * (rounds + 1))
    print(
        f"{rounds} kills under load, {found.events:,} events, {found.met} bodies sent more than once: "
        f"{found.lost} lost, {found.surplus} too many, "
        f"{'in order' if found.in_order else 'NOT IN ORDER'}, books {'balanced' if found.balanced else 'NOT BALANCED'}"
    )
    return int(bool(found.lost or found.surplus or not found.in_order or not found.balanced))


if __name__ == "__main__":
    sys.exit(main())

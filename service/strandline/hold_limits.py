"""How many holds one answer has, known to the service that answers and to the command that asks.

Numbers only, and nothing is imported: a command's `--help` needs them.
"""

from __future__ import annotations

HOLDS_AT_MOST = 2_000  # of one answer: some 10 ms
HOLDS_UNASKED = 500  # where nothing is said

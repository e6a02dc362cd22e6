"""How long to wait before the next try, for sinks, repairs and intakes alike. Numbers in, seconds out.

Full jitter: a uniform draw below a bound that doubles (M. Brooker, "Exponential Backoff And Jitter", 2015).
"""

from __future__ import annotations

import random

BASE_S = 0.1
AT_MOST_S = 30.0
RETRY_AFTER_AT_MOST_S = 3600.0  # a store that asks for more is asked again after this
DOUBLINGS_AT_MOST = 30


def backoff_s(
    chance: random.Random,
    attempts: int,
    retry_after_s: float | None = None,
    *,
    base_s: float = BASE_S,
    at_most_s: float = AT_MOST_S,
) -> float:
    """Seconds, after so many tries that failed before this one; at least as long as the other side asked for."""
    bound_s = min(at_most_s, base_s * 2.0 ** min(attempts, DOUBLINGS_AT_MOST))
    return max(chance.uniform(0.0, bound_s), min(retry_after_s or 0.0, RETRY_AFTER_AT_MOST_S))

"""How sure a share or a quantile is that was found among n events: intervals and sample sizes.

Plain numbers in, plain numbers out. All of it presumes that events are drawn independently of each other. Those of a
feed are not (a link that drops makes many late at once), so an interval is the least doubt there is, not all of it.
"""

from __future__ import annotations

import math
from statistics import NormalDist

import numpy as np
from numpy.typing import NDArray

EVENTS_AT_MOST = 10**12  # beyond it sums over the tail of a binomial take seconds


def wilson(successes: int, trials: int, confidence: float = 0.95, *, corrected: bool = False) -> tuple[float, float]:
    """Wilson's score interval for a share (Wilson 1927); `corrected`: with continuity correction (Newcombe 1998).

    Of no trials nothing is known: (0, 1).
    """
    if not 0 <= successes <= trials <= EVENTS_AT_MOST:
        raise ValueError(f"{successes} of {trials} is no share")
    if not trials:
        return 0.0, 1.0
    z = _two_sided(confidence)
    p = successes / trials
    middle, width = 2 * successes + z * z, 2 * (trials + z * z)
    if not corrected:
        half = z * math.sqrt(z * z + 4 * successes * (1 - p))
        low, high = (middle - half) / width, (middle + half) / width
    else:
        spread = z * z - 1 / trials + 4 * successes * (1 - p)
        low = (middle - 1 - z * math.sqrt(max(0.0, spread + (4 * p - 2)))) / width
        high = (middle + 1 + z * math.sqrt(max(0.0, spread - (4 * p - 2)))) / width
    return (
        0.0 if successes == 0 else max(0.0, low),
        1.0 if successes == trials else min(1.0, high),
    )


def wilson_columns(
    successes: NDArray[np.int64], trials: NDArray[np.int64], confidence: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """`wilson` for columns."""
    z = _two_sided(confidence)
    shares = successes / np.maximum(trials, 1)
    half = z * np.sqrt(z * z + 4 * successes * (1 - shares))
    middle, width = 2 * successes + z * z, 2 * (trials + z * z)
    low = np.where(successes == 0, 0.0, np.maximum(0.0, (middle - half) / width))
    return low, np.where(successes == trials, 1.0, np.minimum(1.0, (middle + half) / width))


def wilks(coverage: float, confidence: float, rank: int = 1) -> int:
    """The least n of which the `rank`-th largest value is above a share `coverage` of all, with this confidence (Wilks
    1941).

    That is the smallest n with P(Binomial(n, 1 - coverage) >= rank) >= confidence. Between the smallest and the
    largest of n values a share `coverage` lies with the n of rank 2.
    """
    if not (0 < coverage < 1 and 0 < confidence < 1 and rank >= 1):
        raise ValueError("coverage and confidence lie between 0 and 1, a rank is at least 1")
    least, enough = rank - 1, rank
    while 1 - binomial_cdf(rank - 1, enough, 1 - coverage) < confidence:
        least, enough = enough, 2 * enough
        if enough > EVENTS_AT_MOST:
            raise ValueError(f"a coverage of {coverage} would need more than {EVENTS_AT_MOST} events")
    while enough - least > 1:
        middle = (least + enough) // 2
        if 1 - binomial_cdf(rank - 1, middle, 1 - coverage) < confidence:
            least = middle
        else:
            enough = middle
    return enough


def order_statistics(n: int, q: float, confidence: float = 0.95) -> tuple[int, int, float] | None:
    """Ranks (from 1) of two order statistics of n values that the quantile q lies between, and how surely it does.

    The lower rank is the greatest, the upper the least, that leave at most half of the doubt on their side; so their
    coverage is at least the confidence. None where n values are too few for that.
    """
    if not (0 < q < 1 and 0 < confidence < 1 and 0 <= n <= EVENTS_AT_MOST):
        raise ValueError("q and confidence lie between 0 and 1")
    doubt = (1 - confidence) / 2
    lower = _binomial_rank(n, q, doubt)  # least k with F(k) > doubt
    upper = _binomial_rank(n, q, 1 - doubt, reaching=True) + 1  # least k with F(k) >= 1 - doubt
    if lower < 1 or upper > n:
        return None
    return lower, upper, binomial_cdf(upper - 1, n, q) - binomial_cdf(lower - 1, n, q)


def binomial_cdf(k: int, n: int, p: float) -> float:
    """P(Binomial(n, p) <= k), summed outwards from the term of k so that small ones keep their relative precision."""
    if k < 0:
        return 0.0
    if k >= n:
        return 1.0
    # The lower tail as it is; where it is the greater part, one minus the upper one.
    if k <= n * p:
        return min(1.0, _tail(k, n, p))
    return max(0.0, 1 - _tail(n - k - 1, n, 1 - p))


def _tail(k: int, n: int, p: float) -> float:
    """P(X <= k) for k at or below the mean: the term of k times 1 + r1 + r1 r2 + ..., until a term adds nothing."""
    total, factor, at = 0.0, 1.0, k
    odds = (1 - p) / p
    while at >= 0 and factor > 1e-18:
        steps = np.arange(at, max(-1, at - 4096), -1, dtype=np.float64)
        # From the term of j to that of j - 1: j / (n - j + 1) times the odds.
        factors = factor * np.cumprod(steps / (n - steps + 1) * odds)
        total += factor + float(factors[:-1].sum())
        factor = float(factors[-1])
        at -= len(steps)
    return math.exp(_log_term(k, n, p)) * total


def _log_term(k: int, n: int, p: float) -> float:
    """ln P(X = k), by Loader's saddle-point expansion (2000): differences of lgamma lose all digits for great n."""
    if k in (0, n):
        return n * (math.log1p(-p) if k == 0 else math.log(p))
    missing = _stirling_error(n) - _stirling_error(k) - _stirling_error(n - k)
    deviance = _deviance(k, n * p) + _deviance(n - k, n * (1 - p))
    return missing - deviance + 0.5 * math.log(n / (2 * math.pi * k * (n - k)))


def _stirling_error(n: int) -> float:
    """ln n! less Stirling's formula for it."""
    if n < 16:
        return math.lgamma(n + 1) - (n + 0.5) * math.log(n) + n - 0.5 * math.log(2 * math.pi)
    square = float(n) * n
    return (1 / 12 - (1 / 360 - (1 / 1260 - 1 / 1680 / square) / square) / square) / n


def _deviance(x: int, mean: float) -> float:
    """x ln(x / mean) + mean - x; by its series where the terms would cancel."""
    apart = (x - mean) / (x + mean)
    if abs(apart) >= 0.1:
        return x * math.log(x / mean) + mean - x
    total, power, at = (x - mean) * apart, 2 * x * apart, 1
    while True:
        power *= apart * apart
        more = total + power / (2 * at + 1)
        if more == total:
            return total
        total, at = more, at + 1


def _binomial_rank(n: int, p: float, level: float, *, reaching: bool = False) -> int:
    """The least k with F(k) > level, or with F(k) >= level if `reaching`; by bisection."""
    least, enough = -1, n
    while enough - least > 1:
        middle = (least + enough) // 2
        found = binomial_cdf(middle, n, p)
        if found > level or (reaching and found == level):
            enough = middle
        else:
            least = middle
    return enough


def _two_sided(confidence: float) -> float:
    if not 0 < confidence < 1:
        raise ValueError(f"a confidence lies between 0 and 1, not at {confidence}")
    return NormalDist().inv_cdf((1 + confidence) / 2)

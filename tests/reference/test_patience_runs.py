"""Open runs against published run vectors, exact totals and means of random permutations (check-values, 6.2 and 7).

Sources: Chandramouli & Goldstein, SIGMOD 2014 (patience runs; ties append); RFC 4737 (its tables as arrival orders);
Logan & Shepp and Vershik & Kerov 1977, Baik, Deift & Johansson 1999 (longest monotone subsequences of permutations);
means of runs and records as in Knuth, The Art of Computer Programming vol. 3 and vol. 1 (from memory). The measured
means were simulated outside this project.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterable

import numpy as np
import pytest
from helpers_feed import arrival, patient
from helpers_strands import held_rows, strand
from strandline.core.feed import Feed
from strandline.core.runs import OpenRuns, Strand, stretches

RFC_4737_TABLES = {
    1: [1, 2, 3, 5, 6, 7, 8, 4, 9, 10],
    3: [1, 2, 3, 7, 8, 9, 10, 4, 5, 6, 11],
    4: [1, 2, 3, 6, 7, 4, 5, 8, 9, 10, 12, 13, 11, 14, 15, 16],
}
VECTORS = [
    ([2, 6, 5, 1, 4, 3, 7, 8], [[2, 6, 7, 8], [5], [1, 4], [3]]),
    (RFC_4737_TABLES[1], [[1, 2, 3, 5, 6, 7, 8, 9, 10], [4]]),
    (RFC_4737_TABLES[3], [[1, 2, 3, 7, 8, 9, 10, 11], [4, 5, 6]]),
    (RFC_4737_TABLES[4], [[1, 2, 3, 6, 7, 8, 9, 10, 12, 13, 14, 15, 16], [4, 5, 11]]),
    ([1, 4, 2, 5, 3, 6, 7, 8], [[1, 4, 5, 6, 7, 8], [2, 3]]),
    ([5, 4, 3, 2, 1], [[5], [4], [3], [2], [1]]),
    ([3, 3, 3, 1, 1, 2], [[3, 3, 3], [1, 1, 2]]),
]


def dealt(times: Iterable[int]) -> OpenRuns:
    """Open runs after each time came by itself."""
    open_runs = OpenRuns()
    rows = strand(list(times))
    for row in range(len(rows.times)):
        open_runs.deal(Strand(rows.times[row : row + 1], rows.refs[row : row + 1]))
    return open_runs


@pytest.mark.parametrize(("times", "runs"), VECTORS)
def test_run_vectors(times: list[int], runs: list[list[int]]) -> None:
    open_runs = dealt(times)
    open_runs.check()
    assert held_rows(open_runs) == runs


# Sum over all permutations of n of the length of the longest increasing subsequence: 1, 3, 12, 58, ... Reversing every
# permutation turns rises into falls, so the number of open runs (the longest fall) has the same sum.
TOTALS = {1: 1, 2: 3, 3: 12, 4: 58, 5: 335, 6: 2261, 7: 17465, 8: 152020}


@pytest.mark.parametrize(("size", "total"), list(TOTALS.items()))
def test_exact_totals_over_all_permutations(size: int, total: int) -> None:
    """Every permutation, 40,320 of them for n = 8."""
    found = 0
    column = np.arange(size, dtype=np.int64)
    refs = strand(range(size)).refs
    singles = [Strand(column[value : value + 1], refs[value : value + 1]) for value in range(size)]
    for permutation in itertools.permutations(range(size)):
        open_runs = OpenRuns()
        for value in permutation:
            open_runs.deal(singles[value])
        found += len(open_runs.runs)
    assert found == total


def within_three_standard_errors(samples: list[float], expected: float) -> bool:
    values = np.array(samples)
    error = values.std(ddof=1) / math.sqrt(len(values))
    return abs(values.mean() - expected) <= 3 * error


# n, repetitions, mean number of runs: measured outside with 40,000 and 8,000 repetitions (s.e. 0.0082 and 0.0298).
OPEN_RUNS = [(100, 2000, 16.7455), (1000, 200, 58.1481)]


@pytest.mark.parametrize(("size", "repetitions", "expected"), OPEN_RUNS)
def test_open_runs_of_random_permutations(size: int, repetitions: int, expected: float) -> None:
    generator = np.random.default_rng(size)
    samples = [float(len(dealt(generator.permutation(size)).runs)) for _ in range(repetitions)]
    assert within_three_standard_errors(samples, expected)
    # Baik, Deift & Johansson 1999 with the next term, + 1/2 (Bornemann 2022/23, from memory).
    theory = 2 * math.sqrt(size) - 1.7710868 * size ** (1 / 6) + 0.5
    assert expected == pytest.approx(theory, abs=0.07)


def monotone(times: np.ndarray) -> tuple[int, int]:
    """(stretches that rise or fall by turns, natural ascending runs) as the run detection finds them."""
    found = stretches(times, 1)
    # A stretch begins with the row behind the last one of the stretch before: as many rows as it has steps.
    falls = sum(part.stop - part.start - (part.start == 0) for part in found if part.order == "descending")
    return len(found), 1 + falls


@pytest.mark.parametrize(("size", "repetitions"), [(100, 4000), (1000, 1000)])
def test_natural_runs_of_random_permutations(size: int, repetitions: int) -> None:
    generator = np.random.default_rng(size + 1)
    found = [monotone(generator.permutation(size)) for _ in range(repetitions)]
    alternating, ascending = ([float(pair[which]) for pair in found] for which in (0, 1))
    assert within_three_standard_errors(ascending, (size + 1) / 2)
    assert within_three_standard_errors(alternating, (2 * size - 1) / 3)  # Knuth vol. 3, 5.1.3 (from memory)
    # The variance is (n + 1) / 12; that of a sample variance of normal values is 2 / (N - 1) of it, squared.
    spread = 3 * math.sqrt(2 / (repetitions - 1))
    assert np.var(ascending, ddof=1) == pytest.approx((size + 1) / 12, rel=spread)


@pytest.mark.parametrize("size", [2, 3, 4, 5, 6])
def test_the_mean_number_of_alternating_runs_is_exact_for_small_n(size: int) -> None:
    found = [monotone(np.array(order)) for order in itertools.permutations(range(size))]
    assert sum(runs for runs, _ in found) * 3 == len(found) * (2 * size - 1)
    assert sum(runs for _, runs in found) * 2 == len(found) * (size + 1)


@pytest.mark.parametrize(("size", "repetitions"), [(100, 400), (1000, 40)])
def test_records_of_random_permutations(size: int, repetitions: int) -> None:
    """Events in order (lateness 0: RFC 4737's in-order packets) are the records, H_n of them on average."""
    generator, samples = np.random.default_rng(size + 2), []
    for _ in range(repetitions):
        feed = Feed(patient(slack_ns=size))
        feed.start(0, {})
        for now_ns, time in enumerate(generator.permutation(size).tolist()):
            feed.arrive(arrival([time], new_sources=() if now_ns else ["all"]), now_ns, now_ns)
        samples.append(float(feed.state.figures.lateness.counts[0]))
    assert within_three_standard_errors(samples, sum(1 / number for number in range(1, size + 1)))

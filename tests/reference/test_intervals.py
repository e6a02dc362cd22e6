"""Intervals and sample sizes against printed tables and scipy (check-values, section 10)."""

from __future__ import annotations

import random

import pytest
import scipy.stats
from strandline.replay.intervals import binomial_cdf, order_statistics, wilks, wilson

# Score, then continuity-corrected. The first four are the check rows of Newcombe 1998 (attribution from memory).
WILSON = {
    (81, 263): (0.2553, 0.3662, 0.2535, 0.3682),
    (15, 148): (0.0624, 0.1605, 0.0598, 0.1644),
    (0, 20): (0.0, 0.1611, 0.0, 0.2005),
    (1, 29): (0.0061, 0.1718, 0.0018, 0.1963),
    (0, 10): (0.0, 0.2775),
    (10, 10): (0.7225, 1.0),
    (1, 10): (0.0179, 0.4042),
    (5, 10): (0.2366, 0.7634),
    (3, 100): (0.0103, 0.0845),
    (50, 100): (0.4038, 0.5962),
    (1, 1000): (0.0002, 0.0056),
}


@pytest.mark.parametrize("row", WILSON)
def test_wilson_as_printed(row: tuple[int, int]) -> None:
    found = wilson(*row) + wilson(*row, corrected=True)
    assert [round(bound, 4) for bound in found[: len(WILSON[row])]] == list(WILSON[row])


def test_nothing_late_among_n_says_at_most_this_much() -> None:
    z2 = 1.959963984540054**2
    for n in (1, 10, 1000, 10**6):
        assert wilson(0, n) == (0.0, pytest.approx(z2 / (n + z2), rel=1e-12))


@pytest.mark.parametrize("corrected", [False, True])
@pytest.mark.parametrize("confidence", [0.5, 0.9, 0.95, 0.999])
def test_wilson_as_scipy_has_it(confidence: float, corrected: bool) -> None:
    method = "wilsoncc" if corrected else "wilson"
    for successes, trials in ((0, 1), (1, 1), (1, 2), (7, 9), (20, 1000), (999, 1000), (123_456, 10**7)):
        theirs = scipy.stats.binomtest(successes, trials).proportion_ci(confidence, method=method)
        found = wilson(successes, trials, confidence, corrected=corrected)
        assert found == pytest.approx((theirs.low, theirs.high), rel=1e-9, abs=1e-12)


# coverage: one-sided, then two-sided, for a confidence of .90, .95, .99
WILKS = {
    0.90: ((22, 29, 44), (38, 46, 64)),
    0.95: ((45, 59, 90), (77, 93, 130)),
    0.99: ((230, 299, 459), (388, 473, 662)),
    0.999: ((2302, 2995, 4603), (3889, 4742, 6636)),
}


@pytest.mark.parametrize("coverage", WILKS)
def test_wilks_as_printed(coverage: float) -> None:
    """Wilks 1941. Between the smallest and the greatest of n needs as many as the second greatest does."""
    one_sided, two_sided = WILKS[coverage]
    assert tuple(wilks(coverage, confidence) for confidence in (0.90, 0.95, 0.99)) == one_sided
    assert tuple(wilks(coverage, confidence, 2) for confidence in (0.90, 0.95, 0.99)) == two_sided


def test_wilks_with_a_lower_rank() -> None:
    assert [wilks(0.95, 0.95, rank) for rank in range(1, 6)] == [59, 93, 124, 153, 181]
    assert [wilks(0.99, 0.95, rank) for rank in range(1, 4)] == [299, 473, 628]


@pytest.mark.parametrize("coverage", [0.5, 0.9, 0.999, 0.999999])
def test_wilks_by_its_own_inequalities(coverage: float) -> None:
    for confidence in (0.5, 0.95, 0.9999):
        n = wilks(coverage, confidence)
        assert 1 - coverage**n >= confidence > 1 - coverage ** (n - 1)
        n = wilks(coverage, confidence, 2)
        two_sided = [1 - m * coverage ** (m - 1) + (m - 1) * coverage**m for m in (n - 1, n)]
        assert two_sided[1] >= confidence * (1 - 1e-9) and two_sided[0] < confidence * (1 + 1e-9)


ORDER = {
    (100, 0.5): (40, 61, 0.964800),
    (100, 0.9): (84, 96, 0.955690),
    (1000, 0.5): (469, 532, 0.953709),
    (1000, 0.9): (881, 919, 0.954907),
    (1000, 0.99): (983, 997, 0.976095),
    (10000, 0.99): (9880, 9920, 0.955755),
    (10000, 0.999): (9983, 9997, 0.975457),
}


@pytest.mark.parametrize("row", ORDER)
def test_order_statistics_as_printed(row: tuple[int, float]) -> None:
    found = order_statistics(*row)
    assert found is not None
    assert found[:2] == ORDER[row][:2] and found[2] == pytest.approx(ORDER[row][2], abs=5e-7)


def test_too_few_values_have_no_interval() -> None:
    """The greatest of n is above the quantile q with 1 - q^n, which must be .975 here."""
    assert order_statistics(100, 0.999) is None and order_statistics(0, 0.5) is None
    assert order_statistics(3_687, 0.999) is None and order_statistics(3_688, 0.999) is not None
    assert 1 - 0.999**3_687 < 0.975 <= 1 - 0.999**3_688


def test_the_binomial_distribution_as_scipy_has_it() -> None:
    draw = random.Random(12)
    for _ in range(2_000):
        n = draw.choice([1, 2, 5, 14, 17, 1000, 10**5, 10**7, 10**9])
        p = draw.choice([1e-9, 0.001, 0.01, 0.5, 0.9, 0.999, draw.random()])
        k = min(n, max(0, round(draw.gauss(n * p, 4 * (n * p * (1 - p)) ** 0.5 + 1))))
        assert binomial_cdf(k, n, p) == pytest.approx(scipy.stats.binom.cdf(k, n, p), rel=1e-8, abs=1e-290)


def test_what_cannot_be_is_refused() -> None:
    for call in (
        lambda: wilson(2, 1),
        lambda: wilson(-1, 1),
        lambda: wilson(1, 2, 1.0),
        lambda: wilks(1.0, 0.95),
        lambda: wilks(0.9, 0.95, 0),
        lambda: wilks(1 - 1e-14, 0.95),
        lambda: order_statistics(10, 1.0),
    ):
        with pytest.raises(ValueError):
            call()
    assert wilson(0, 0) == (0.0, 1.0)

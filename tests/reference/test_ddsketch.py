"""The buckets of lateness against values computed outside this project (check-values, section 10).

Source of the method: DDSketch, Masson, Rim, Lee, PVLDB 12(12), 2019.
"""

from __future__ import annotations

import numpy as np
import pytest
from strandline.core.sketch import Buckets, Sketch

# relative error: values -> bucket and what it answers with
PRINTED = {
    0.01: {10: (116, 10.074697), 100: (231, 100.494568), 1000: (346, 1002.428009), 1: (0, 0.99)},
    0.02: {10: (58, 9.975247), 100: (116, 101.536273), 1000: (173, 992.98959)},
}


@pytest.mark.parametrize("error", PRINTED)
def test_buckets_and_their_values(error: float) -> None:
    buckets = Buckets(error)
    for value, (bucket, answer) in PRINTED[error].items():
        place = buckets.place(value)
        assert place - 1 == bucket  # place 0 is for zero
        assert int(buckets.places(np.array([value]))[0]) == place
        assert buckets.values[place] == pytest.approx(answer, rel=1e-6)


def test_a_bucket_of_a_value_that_is_no_integer() -> None:
    """1.5 lies in bucket 21 (1 %) and 11 (2 %): those reach from below it to above it. Lateness is in whole ns."""
    for error, bucket, answer in ((0.01, 21, 1.506763), (0.02, 11, 1.521742)):
        buckets = Buckets(error)
        assert buckets.gamma ** (bucket - 1) < 1.5 <= buckets.gamma**bucket
        assert buckets.values[bucket + 1] == pytest.approx(answer, rel=1e-6)


def test_gamma() -> None:
    assert Buckets(0.01).gamma == pytest.approx(1.0202020, abs=5e-8)


@pytest.mark.parametrize(
    ("error", "ms_to_a_day", "us_to_a_year"), [(0.01, 914, 1555), (0.02, 457, 777), (0.05, 183, 311)]
)
def test_how_many_buckets_a_range_takes(error: float, ms_to_a_day: int, us_to_a_year: int) -> None:
    buckets = Buckets(error)
    for least, greatest, printed in ((10**6, 86_400 * 10**9, ms_to_a_day), (10**3, 31_536_000 * 10**9, us_to_a_year)):
        # Whether both ends count is not printed: one more or less.
        assert abs(buckets.place(greatest) - buckets.place(least) - printed) <= 1


def test_the_greatest_relative_error_over_a_million_values() -> None:
    values = np.exp(np.random.default_rng(10).uniform(np.log(1e3), np.log(1e17), 10**6)).astype(np.int64)
    buckets = Buckets(0.01)
    answers = buckets.values[buckets.places(values)]
    worst = float(np.max(np.abs(answers - values) / values))
    assert 0.0099 < worst <= 0.01 * (1 + 1e-9)  # printed: .0099999745


def test_quantiles_of_a_million_values_against_numpy() -> None:
    values = (np.random.default_rng(11).lognormal(20, 3, 10**6)).astype(np.int64)
    sketch = Sketch(Buckets())
    sketch.add(values)
    for q in (0.001, 0.5, 0.9, 0.99, 0.999):
        assert sketch.quantile(q) == pytest.approx(np.quantile(values, q, method="lower"), rel=0.01 * (1 + 1e-9))

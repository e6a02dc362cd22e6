"""Cases that seeds of the simulation have found; the stories stand in `sim_cases`."""

from __future__ import annotations

from collections.abc import Callable

import pytest
from sim_cases import CASES


@pytest.mark.parametrize("case", CASES, ids=lambda case: case.__name__)
def test_what_a_seed_has_found_stays_mended(case: Callable[[], None]) -> None:
    case()

"""The test of the tests: faults that somebody could make are planted in the real code, and each must be found.

The table stands in `planted_faults` and `planted_acts`. Without the fault the same harness finds nothing there. A fault
that no harness found would mean that a promise is not tested.
"""

from __future__ import annotations

import re
import traceback
from collections.abc import Callable
from functools import cache, partial

import pytest
from planted_acts import ACT_FAULTS
from planted_faults import FAULTS as OTHER_FAULTS
from planted_faults import SEEDS_AT_MOST, Fault, Worlds
from planted_orders import ORDER_FAULTS
from planting import planted

FAULTS = [*OTHER_FAULTS, *ACT_FAULTS, *ORDER_FAULTS]


def complaint(look: Callable[[], object]) -> str | None:
    """What a harness says, with all that led to it; None where it finds nothing."""
    try:
        look()
    except Exception as error:
        return "".join(traceback.format_exception(error))
    return None


@cache
def complaint_without(look: Callable[[], object]) -> str | None:
    """The same without a fault, once for all faults that are looked for in this way."""
    return complaint(look)


def found_by(fault: Fault) -> tuple[str | None, Callable[[], object]]:
    """What is said while the fault is planted, and how to look at the same place again."""
    with planted(*fault.changes):
        if not isinstance(fault.harness, Worlds):
            return complaint(fault.harness), fault.harness
        worlds = fault.harness
        for number in range(worlds.first, worlds.first + SEEDS_AT_MOST):
            said = complaint(partial(worlds.look, number))
            if said is not None:
                return said, partial(worlds.look, number)
    return None, worlds


def test_the_table_is_long_enough() -> None:
    assert len({fault.name for fault in FAULTS}) == len(FAULTS) >= 12


@pytest.mark.parametrize("fault", FAULTS, ids=lambda fault: fault.name)
def test_a_planted_fault_is_found_and_nothing_without_it(fault: Fault) -> None:
    said, again = found_by(fault)
    assert said is not None, f"no harness found: {fault.name}"
    assert re.search(fault.says, said), said[-2000:]
    assert complaint_without(again) is None

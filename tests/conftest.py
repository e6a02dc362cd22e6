"""What holds for every test: no silent skip in CI, and property tests without a clock.

With STRANDLINE_TESTS_NO_SKIP=1 (.ci/run sets it) a skipped test is a failed one: what a test needs must be there. The
variable is taken out of the environment, so that services which tests start do not take it for an override.
"""

from __future__ import annotations

import os
from collections.abc import Generator
from typing import Any

import pytest
from hypothesis import HealthCheck, settings

NO_SKIP = os.environ.pop("STRANDLINE_TESTS_NO_SKIP", "") == "1"

# Machines are shared: how long an example takes says nothing about the code, so no deadline and no "too slow" judge it.
settings.register_profile("strandline", deadline=None, print_blob=True, suppress_health_check=[HealthCheck.too_slow])
settings.load_profile("strandline")


def _reason(longrepr: Any) -> str:
    """Why a test was skipped: the last of (file, line, reason), or whatever stands there."""
    return str(longrepr[-1] if isinstance(longrepr, tuple) else longrepr)


@pytest.hookimpl(wrapper=True, tryfirst=True)
def pytest_runtest_makereport() -> Generator[None, pytest.TestReport, pytest.TestReport]:
    """Turn a skipped test into a failed one, except an expected failure, which pytest reports as skipped too."""
    report = yield
    if NO_SKIP and report.skipped and not hasattr(report, "wasxfail"):
        report.outcome = "failed"
        report.longrepr = f"skipped where no test may be: {_reason(report.longrepr)}"
    return report


@pytest.hookimpl(wrapper=True, tryfirst=True)
def pytest_make_collect_report() -> Generator[None, pytest.CollectReport, pytest.CollectReport]:
    """The same for a module that skips itself as a whole."""
    report = yield
    if NO_SKIP and report.skipped:
        report.outcome = "failed"
        report.longrepr = f"skipped where no test may be: {_reason(report.longrepr)}"
    return report

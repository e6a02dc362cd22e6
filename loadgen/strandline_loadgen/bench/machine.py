"""What a measurement ran on: processor, cores, memory, system, interpreter, versions. Nothing is measured here."""

from __future__ import annotations

import os
import platform
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any

PACKAGES = (
    "strandline", "numpy", "msgspec", "aiohttp", "uvloop", "google-crc32c", "sortedcontainers", "polars", "asyncpg",
)  # fmt: skip
ABSENT = "not installed"


def machine() -> dict[str, Any]:
    """What this ran on, and how busy it was when it was asked."""
    return {
        "processor": _processor(),
        "cores": len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count(),
        "memory_gib": _memory_gib(),
        "system": f"{platform.system()} {platform.release()} {platform.machine()}",
        "python": f"{platform.python_implementation()} {platform.python_version()}",
        "packages": {name: package_version(name) for name in PACKAGES},
    }


def load() -> float | None:
    """Processes that wanted to run, on average over the last minute: well above 1 before a run, it was not quiet."""
    try:
        return round(os.getloadavg()[0], 2)
    except (OSError, AttributeError):
        return None


def _processor() -> str:
    cpuinfo = Path("/proc/cpuinfo")
    if cpuinfo.exists():
        for line in cpuinfo.read_text(errors="replace").splitlines():
            if line.startswith("model name"):
                return line.partition(":")[2].strip()
    return platform.processor() or platform.machine()


def _memory_gib() -> float | None:
    try:
        return round(os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES") / 2**30, 1)
    except (ValueError, OSError, AttributeError):
        return None


def package_version(name: str) -> str:
    """A package's version, or that it is not installed."""
    try:
        return version(name)
    except PackageNotFoundError:
        return ABSENT

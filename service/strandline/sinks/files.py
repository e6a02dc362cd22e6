"""Files and folders that are still there after a crash: what the system keeps only once it was asked to.

Blocking calls for a sink's own thread. No names and no formats live here.
"""

from __future__ import annotations

import os
from pathlib import Path


def sync_data(descriptor: int) -> None:
    """Make a file's bytes and its size durable. Raises OSError; then its bytes must not be trusted."""
    if hasattr(os, "fdatasync"):
        os.fdatasync(descriptor)
    else:  # macOS
        os.fsync(descriptor)


def sync_directory(directory: Path) -> None:
    """Make creations, renames and removals in it durable. Raises OSError."""
    descriptor = os.open(directory, os.O_RDONLY | os.O_DIRECTORY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def write_all(descriptor: int, block: bytes | memoryview) -> None:
    """Write a block to its end. Raises OSError."""
    rest = memoryview(block)
    while rest:
        rest = rest[os.write(descriptor, rest) :]


def make_directory(directory: Path) -> None:
    """Make a folder and those above it that are absent, durably. Raises OSError (a file in its place too)."""
    absent = [each for each in (directory, *directory.parents) if not each.exists()]
    directory.mkdir(parents=True, exist_ok=True)
    for made in absent:
        sync_directory(made.parent)
